"""The resistor across the guarded port, on the simulated bench: what it shows of a leaky diode."""

from __future__ import annotations

from pathlib import Path

import pytest

from benchkit.errors import Tripped
from tests.procedures.test_reverse import shop, tried

DROP = "[limits]\ndrop = [{ current_A = 2, max_V = 2 }]\n"


def schottky(folder: Path, *board: str, bleeder: bool = True) -> Path:
    """A workshop for a Schottky diode in series, with a limit, or nothing passes."""
    shop(folder, "series-diode", *board)
    with (folder / "mine.toml").open("a", encoding="utf-8") as file:
        file.write(DROP)
    bench = folder / "bench.toml"
    told = bench.read_text("utf-8")
    assert "\nbleeder_ohm = 1000.0\n" in told
    if not bleeder:
        bench.write_text(told.replace("\nbleeder_ohm = 1000.0\n", "\n"), "utf-8")
    return folder


def test_a_good_diode_passes(tmp_path: Path) -> None:
    done, record = tried(schottky(tmp_path / "w"))
    assert done.error is None
    assert done.evaluation.result.verdict == "pass", done.evaluation.result.why
    # Its sheet: at most 200 uA, into 1 kohm.
    for reading in record.at("reverse/dwell", "guarded_voltage"):
        assert -0.2 < reading.value < 0.005


def test_a_hundred_ohms_across_it_trip_at_the_first_rung(tmp_path: Path) -> None:
    done, record = tried(schottky(tmp_path / "w", "leaky=100"))
    assert isinstance(done.error, Tripped)
    assert done.evaluation.result.verdict == "fail"
    assert "the stage does not block in reverse" in "; ".join(done.evaluation.result.why)
    assert "reverse/10.0" not in record.steps("reverse/")
    # 5 V, divided by 100 ohm and 1 kohm.
    assert record.at("reverse/5.0", "guarded_voltage")[-1].value == pytest.approx(-4.545, abs=0.05)


@pytest.mark.parametrize("board", [(), ("leaky=100",)])
def test_without_it_neither_passes(board: tuple[str, ...], tmp_path: Path) -> None:
    done, _ = tried(schottky(tmp_path / "w", *board, bleeder=False))
    assert done.evaluation.result.verdict == "undecided"
    assert "declare bench.bleeder_ohm" in "; ".join(done.evaluation.result.why)
