"""Faults of the link while a board is measured: never a wrong reading, always off, its own error.

The simulated bench is deterministic, so a run with a link fault must have recorded exactly what a
run without one did, up to the fault: anything else would be a wrong reading.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from benchkit.errors import LinkError, NotConfirmedOff
from instruments.errors import (
    BadAnswer,
    ConnectionRefused,
    ExchangeError,
    InstrumentError,
    NoAnswer,
    OutOfStep,
    PeerClosed,
    WrongInstrument,
)
from instruments.simulated.child import start_child
from procedures.commands import batch_lot, verify_board
from procedures.verify import Done
from tests.simulated_bench import failure, measure, workshop

AT_S = 3.3
"""In the middle of the forward sweep, with 12 V and amperes on."""

FAULTS: dict[str, tuple[type[LinkError], ...]] = {
    "late-answer": (NoAnswer,),
    "lost-answer": (NoAnswer,),
    "garbage": (BadAnswer,),
    "truncated": (BadAnswer, NoAnswer),
    "dropped-peer": (PeerClosed,),
    "queue-error": (InstrumentError,),
}


@pytest.fixture(scope="module")
def clean(tmp_path_factory: pytest.TempPathFactory) -> list[str]:
    done, _ = measure(workshop(tmp_path_factory.mktemp("clean") / "w"))
    assert done.error is None
    return rows(done)


def rows(done: Done) -> list[str]:
    return (done.folder / "readings.csv").read_text("utf-8").splitlines()


def kinds(done: Done) -> list[str]:
    import json

    lines = (done.folder / "events.jsonl").read_text("utf-8").splitlines()
    return [json.loads(line)["kind"] for line in lines]


@pytest.mark.parametrize("instrument", ["supply", "meter", "load", "thermometer"])
@pytest.mark.parametrize("fault", sorted(FAULTS))
def test_no_wrong_reading_and_off(
    fault: str, instrument: str, clean: list[str], tmp_path: Path
) -> None:
    value = "=1.5" if fault == "late-answer" else ""
    folder = workshop(tmp_path / "w", faults=[f"{fault}:{instrument}{value}@{AT_S}"])
    done, _ = measure(folder)
    error = failure(done)
    assert isinstance(error, FAULTS[fault]), error
    assert isinstance(error, ExchangeError)
    assert instrument in str(error)
    assert error.exit_code == 3

    taken = rows(done)
    same = next(i for i, row in enumerate(taken) if i >= len(clean) or row != clean[i])
    rest = [row.split(",") for row in taken[same:]]
    # After the fault there is nothing but the meter's confirmation that the output is off.
    assert {row[2] for row in rest} <= {"exposed_voltage", "exposed_current"}, rest
    assert same > 70
    assert kinds(done)[-1] == "off"
    assert done.status == "stopped"
    assert done.evaluation.result.verdict == "undecided"


@pytest.mark.parametrize("instrument", ["supply", "meter"])
def test_a_refused_port_in_mid_run(instrument: str, tmp_path: Path) -> None:
    """Nothing can be confirmed through a port that stays shut: that is exit 4, never 'off'."""
    done, _ = measure(workshop(tmp_path / "w", faults=[f"refused-port:{instrument}@{AT_S}"]))
    error = failure(done)
    assert isinstance(error, NotConfirmedOff)
    assert error.exit_code == 4
    assert instrument in str(error)
    assert "off" not in kinds(done)[-2:]
    assert done.status == "not-confirmed-off"


@pytest.mark.parametrize("instrument", ["load", "thermometer"])
def test_a_refused_port_of_what_cannot_energise(instrument: str, tmp_path: Path) -> None:
    done, _ = measure(workshop(tmp_path / "w", faults=[f"refused-port:{instrument}@{AT_S}"]))
    error = failure(done)
    assert isinstance(error, PeerClosed | ConnectionRefused | OutOfStep)
    assert error.exit_code == 3
    assert "off" in kinds(done)


def test_a_wrong_identity_is_refused_before_anything_is_on(tmp_path: Path) -> None:
    folder = workshop(tmp_path / "w")
    bench = folder / "bench.toml"
    text = bench.read_text("utf-8").replace('"Murrelet,SM-6"', '"Murrelet,SM-7"')
    other = folder / "other.toml"
    other.write_text(text, "utf-8")
    # The child serves what the bench file says, so serve one file and expect another.
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("instruments.bench.start_child", lambda _: start_child(other))
        with pytest.raises(WrongInstrument, match="meter"):
            measure(folder)
    assert not (folder / "run").exists()


@pytest.mark.parametrize(
    ("fault", "words"),
    [
        ("stuck-output:supply", "reads back"),
        ("lying-output:supply", "exposed_voltage is still"),
    ],
)
def test_an_output_that_stays_on_is_exit_4(fault: str, words: str, tmp_path: Path) -> None:
    done, _ = measure(workshop(tmp_path / "w", faults=[f"{fault}@{AT_S}"]))
    error = failure(done)
    assert isinstance(error, NotConfirmedOff)
    assert words in str(error)
    assert "by hand" in str(error)
    assert "off" not in kinds(done)[kinds(done).index("not-confirmed-off") :]


def test_exit_4_comes_before_anything_that_could_hide_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def no_report(*_: object) -> None:
        raise RuntimeError("the report cannot be drawn")

    monkeypatch.setattr("procedures.commands.write_report", no_report)
    folder = workshop(tmp_path / "w", faults=[f"stuck-output:supply@{AT_S}"])
    with pytest.raises(NotConfirmedOff):
        verify_board(
            folder / "stage.toml",
            folder / "bench.toml",
            "TG-0101",
            folder / "o",
            dry_run=False,
            as_json=False,
        )
    with pytest.raises(NotConfirmedOff):
        batch_lot(
            folder / "lot.toml",
            folder / "bench.toml",
            folder / "lot",
            resume=False,
            dry_run=False,
            as_json=True,
        )


def test_a_lost_sensor_trips(tmp_path: Path) -> None:
    done, _ = measure(workshop(tmp_path / "w", faults=[f"sensor-open:case@{AT_S}"]))
    assert "case gives no usable reading" in str(failure(done))
    assert done.status == "tripped"
    assert kinds(done)[-1] == "off"


def test_a_lead_that_is_off_is_refused(tmp_path: Path) -> None:
    done, _ = measure(workshop(tmp_path / "w", faults=["lead-off:exposed_voltage@0"]))
    assert "exposed_voltage reads" in str(failure(done))
    assert done.evaluation.result.verdict == "undecided"
