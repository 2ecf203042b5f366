"""The lot file: which boards, of which stage."""

from __future__ import annotations

import re
from collections import Counter
from typing import Annotated

from pydantic import Field, field_validator

from benchkit.files.loading import FileModel

SERIAL = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,63}")


def check_serial(serial: str) -> str:
    """Return a serial that is safe as a folder name, or raise ValueError saying what would be."""
    if not SERIAL.fullmatch(serial) or ".." in serial:
        raise ValueError(
            f"{serial!r} cannot be a serial: use letters, digits, '.', '_' and '-', starting with "
            "a letter or digit, at most 64 characters"
        )
    return serial


class Lot(FileModel):
    """[lot]: the boards, in the order in which they are to be measured."""

    name: Annotated[str, Field(min_length=1, max_length=120)]
    stage: Annotated[str, Field(min_length=1)]
    """The stage file, relative to the lot file."""
    serials: Annotated[list[str], Field(min_length=1, max_length=10000)]

    @field_validator("serials")
    @classmethod
    def _usable(cls, serials: list[str]) -> list[str]:
        for serial in serials:
            check_serial(serial)
        twice = [serial for serial, count in Counter(serials).items() if count > 1]
        if twice:
            raise ValueError(f"{', '.join(twice)} stands there more than once")
        folded: dict[str, str] = {}
        for serial in serials:
            other = folded.setdefault(serial.lower(), serial)
            if other != serial:
                raise ValueError(
                    f"{other} and {serial} differ in capitals only: some computers would put them "
                    "into one folder"
                )
        return serials


class LotFile(FileModel):
    """A whole lot file."""

    lot: Lot
