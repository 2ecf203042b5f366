from __future__ import annotations

import pytest

from benchkit.errors import InputError
from benchkit.files.loading import parse
from benchkit.files.lot import LotFile, check_serial


def lot(serials: str) -> LotFile:
    text = f'[lot]\nname = "Spring refit"\nstage = "stage.toml"\nserials = {serials}\n'
    return parse(LotFile, text, "lot.toml")


def test_order_is_kept() -> None:
    assert lot('["B-2", "A.1", "C_3"]').lot.serials == ["B-2", "A.1", "C_3"]


@pytest.mark.parametrize("serial", ["", ".hidden", "../up", "a/b", "a..b", "x" * 65, "spa ce", "ä"])
def test_a_serial_must_be_safe_as_a_folder(serial: str) -> None:
    with pytest.raises(ValueError, match="cannot be a serial: use letters, digits"):
        check_serial(serial)
    with pytest.raises(InputError, match=r"^lot\.toml: lot\.serials: .* cannot be a serial"):
        lot(f'["{serial}"]')


def test_a_serial_stands_there_once() -> None:
    with pytest.raises(InputError) as caught:
        lot('["A1", "B1", "A1"]')
    assert str(caught.value) == "lot.toml: lot.serials: A1 stands there more than once"


def test_no_boards() -> None:
    with pytest.raises(InputError, match=r"lot\.serials is too short"):
        lot("[]")
