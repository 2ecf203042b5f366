"""Attempts to break the guard from outside: signals at every line, disks that fill, outputs found
on, processes with nobody to read what they say."""

from __future__ import annotations

import errno
import gc
import os
import signal
import socket
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from types import FrameType
from typing import Any

import pytest
import typer

import instruments.bench as bench_module
import instruments.clock
import instruments.simulated.child
import procedures.verify as verify_module
from benchkit.errors import (
    InputError,
    LinkError,
    NotConfirmedOff,
    OperatorStopped,
    Refused,
    Stopped,
    Tripped,
)
from benchkit.guard import Guard
from benchkit.harness import Harness
from benchkit.protocols import SupplyState
from benchkit.records.record import read_record
from benchkit.records.run_folder import RunFolder
from instruments.dialects import load_dialect
from instruments.dialects.tables import Dialect
from instruments.errors import WrongInstrument
from instruments.traffic import Traffic
from instruments.waits import longest_waits_s
from procedures.commands import opened
from procedures.exits import leaving, report_error
from procedures.interrupts import REPEAT_S, Interrupts
from procedures.operators import ConsoleOperator
from procedures.screen import Screen
from procedures.verify import run_board
from tests.benchkit.test_guard import STEP
from tests.simulated_bench import GOOD, inputs_of, measure, workshop
from tests.stand_in import World, guard_of

FULL = OSError(errno.ENOSPC, "No space left on device")

# signals


def press(name: str = "SIGINT") -> None:
    os.kill(os.getpid(), getattr(signal, name))


@contextmanager
def pressing_at(line: int) -> Iterator[list[int]]:
    """Ctrl-C, twice, at the so-many-th line of Python that runs in here."""
    count = [0]

    def trace(frame: FrameType, event: str, arg: object) -> Any:
        del arg
        if frame.f_code.co_filename.endswith("stand_in.py"):
            return None
        if event == "line":
            count[0] += 1
            if count[0] in (line, line + 1):
                press()
        return trace

    gc.disable()  # a signal in a callback of the collector, which others hang there, is lost
    sys.settrace(trace)
    try:
        yield count
    finally:
        sys.settrace(None)
        gc.enable()


def step(guard: Guard) -> None:
    """A step, and what stands around one in ``run_board`` and ``open_bench``."""
    try:
        try:
            with guard.energised(STEP) as live:
                live.draw(3.0)
                live.wait(0.5)
        except BaseException as stopped:
            verify_module._secured(guard, stopped)
            raise
    except BaseException as stopped:
        if not guard.confirmed_off:
            guard.make_safe(str(stopped))
        raise


def test_two_signals_at_any_line_at_all_end_off() -> None:
    line = pressed = 0
    while pressed == line:
        line += 1
        world, interrupts = World(), Interrupts()
        guard = guard_of(world, shield=interrupts.shield)
        with suppress(OperatorStopped), interrupts.listening(), pressing_at(line) as count:
            step(guard)
        assert not world.on, f"line {line}"
        assert guard.confirmed_off or "on" not in world.said, f"line {line}"
        pressed = min(line, count[0])
    assert line > 100


def test_a_signal_is_no_fault_of_the_link() -> None:
    """What catches every Exception, to make a LinkError of it, must not swallow a Ctrl-C."""
    with pytest.raises(OperatorStopped, match="SIGTERM"), Interrupts().listening():
        try:
            press("SIGTERM")
        except Exception as fault:
            raise LinkError("the link failed") from fault


@pytest.mark.parametrize("name", ["SIGTSTP", "SIGQUIT"])
def test_what_would_suspend_or_dump_the_process_ends_off(name: str) -> None:
    with pytest.raises(OperatorStopped, match=name), Interrupts().listening():
        press(name)


def test_a_signal_after_the_repetitions_counts_again(monkeypatch: pytest.MonkeyPatch) -> None:
    interrupts = Interrupts()
    with interrupts.listening():
        with pytest.raises(KeyboardInterrupt):
            press()
        press()
        monkeypatch.setattr(interrupts, "_raised_s", interrupts._raised_s - REPEAT_S)
        with pytest.raises(KeyboardInterrupt):
            press()


# a whole board, over sockets


def test_a_signal_within_an_exchange_with_the_clock(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The simulated bench's clock is behind a link of its own: it must not be lost half way."""
    folder, sent = workshop(tmp_path / "w"), [0]
    honest = instruments.clock.SimulatedClock.sleep

    def sleep(clock: instruments.clock.SimulatedClock, seconds: float) -> float:
        sent[0] += 1
        if sent[0] == 40:
            press()
        return honest(clock, seconds)

    monkeypatch.setattr(instruments.clock.SimulatedClock, "sleep", sleep)
    with opened(inputs_of(folder), Screen(quiet=True)) as bench:
        done = run_board(bench, inputs_of(folder).job, GOOD, folder / "run", Screen(quiet=True))
    assert isinstance(done.error, OperatorStopped)
    assert done.error.exit_code == 3
    assert done.status == "stopped"
    kinds = [event["kind"] for event in read_record(done.folder).events]
    assert kinds[-2:] == ["stopped", "off"]


class _Steps:
    """Calls ``act`` when the sweep is at its first current."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch) -> None:
        self.patch = monkeypatch
        self.guards: list[Guard] = []

    def at_the_sweep(self, act: Any) -> None:
        honest = Guard.step

        def step(guard: Guard, name: str) -> None:
            honest(guard, name)
            if name.startswith("sweep/"):
                self.guards.append(guard)
                act()

        self.patch.setattr(Guard, "step", step)


@pytest.fixture
def steps(monkeypatch: pytest.MonkeyPatch) -> _Steps:
    return _Steps(monkeypatch)


def off_was_sent(folder: Path) -> bool:
    lines = (folder / "run" / "traffic.log").read_text("utf-8").splitlines()
    on = next(i for i, line in enumerate(lines) if ":OUTP ON" in line)
    return any(":OUTP OFF" in line for line in lines[on:])


def full(*arguments: object, **facts: object) -> None:
    del arguments, facts
    raise FULL


@pytest.mark.parametrize("writing", ["reading", "traffic"])
def test_a_disk_that_fills_in_the_sweep(
    writing: str, steps: _Steps, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = workshop(tmp_path / "w")
    if writing == "traffic":
        monkeypatch.setattr(RunFolder, "traffic", full)
    else:
        steps.at_the_sweep(lambda: monkeypatch.setattr(RunFolder, writing, full))
    with (
        pytest.raises(Stopped, match=r"run: the record .* cannot be written.*No space") as caught,
        opened(inputs_of(folder), Screen(quiet=True)) as bench,
    ):
        run_board(bench, inputs_of(folder).job, GOOD, folder / "run", Screen(quiet=True))
    assert caught.value.exit_code == 3
    assert bench.guard.confirmed_off
    assert not (folder / "run" / "manifest.json").exists()
    if writing != "traffic":
        assert off_was_sent(folder)


@pytest.mark.parametrize("fault", [ValueError("bad")])
def test_a_defect_in_the_sweep(fault: Exception, steps: _Steps, tmp_path: Path) -> None:
    folder = workshop(tmp_path / "w")

    def act() -> None:
        raise fault

    steps.at_the_sweep(act)
    with pytest.raises(type(fault)):
        measure(folder)
    assert steps.guards[0].confirmed_off
    assert off_was_sent(folder)
    assert not (folder / "run" / "manifest.json").exists()


@pytest.mark.parametrize("place", ["evaluate", "close", "traffic"])
def test_nothing_hides_an_output_that_stays_on(
    place: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Whatever the evaluation and the record then run into, it is exit code 4."""
    folder = workshop(tmp_path / "w", faults=["stuck-output:supply@3.3"])

    where: dict[str, Any] = {"evaluate": verify_module, "close": RunFolder, "traffic": RunFolder}
    monkeypatch.setattr(where[place], place, full)
    with pytest.raises(NotConfirmedOff, match="by hand") as caught:
        measure(folder)
    assert caught.value.exit_code == 4
    assert not (folder / "run" / "manifest.json").exists()


def test_a_folder_that_is_there_is_not_written_to(tmp_path: Path) -> None:
    folder = workshop(tmp_path / "w")
    (folder / "run").mkdir()
    with pytest.raises(InputError, match="is there already"):
        measure(folder)
    assert not any((folder / "run").iterdir())


@pytest.fixture
def found_on(monkeypatch: pytest.MonkeyPatch) -> None:
    """Somebody left the supply on, at 12 V."""
    honest = instruments.simulated.child.start_child

    def start(path: Path) -> Any:
        child = honest(path)
        with socket.create_connection(("127.0.0.1", child.ports["supply"]), 5) as supply:
            supply.sendall(b":SOUR:VOLT 12,(@1);:SOUR:CURR 1,(@1);:OUTP ON,(@1);:OUTP? (@1)\n")
            assert supply.recv(64).startswith(b"1")
        return child

    monkeypatch.setattr(bench_module, "start_child", start)


@pytest.mark.usefixtures("found_on")
def test_an_output_found_on_is_off_before_a_board_is_put_in(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder, found = workshop(tmp_path / "w"), list[SupplyState]()
    with opened(inputs_of(folder), Screen(quiet=True)) as bench:
        honest = bench.fixture.place

        def place(serial: str, stage_path: Path, harness: Harness) -> None:
            found.append(bench.guard._Guard__outputs.state("supply"))  # type: ignore[attr-defined]
            honest(serial, stage_path, harness)
            raise Refused("enough")

        monkeypatch.setattr(bench.fixture, "place", place)
        done = run_board(bench, inputs_of(folder).job, GOOD, folder / "run", Screen(quiet=True))
    assert not found[0].output_on
    assert done.status == "stopped"
    assert "found switched on" in read_record(done.folder).said("found-on")[0]


@pytest.mark.usefixtures("found_on")
def test_an_output_found_on_with_no_meter_to_confirm_is_exit_4(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = workshop(tmp_path / "w")
    text = (folder / "bench.toml").read_text("utf-8")
    (folder / "other.toml").write_text(text.replace("Murrelet,SM-6", "Murrelet,SM-7"), "utf-8")
    start = getattr(bench_module, "start_child")  # noqa: B009  what found_on put there
    monkeypatch.setattr(bench_module, "start_child", lambda _: start(folder / "other.toml"))
    with pytest.raises(NotConfirmedOff, match=r"found switched on.*no meter") as caught:
        measure(folder)
    assert isinstance(caught.value.__cause__, WrongInstrument)


# what the parts around the guard promise


def test_a_message_is_sent_though_the_log_is_full() -> None:
    traffic = Traffic()
    traffic.begin(full)
    traffic.of("supply")(">", ":OUTP OFF")
    with pytest.raises(OSError, match="No space"):
        traffic.end()
    traffic.begin(print)
    traffic.end()


def test_the_blind_time_is_that_of_the_dialects(tmp_path: Path) -> None:
    inputs = inputs_of(workshop(tmp_path / "w"))
    file = inputs.bench
    shipped = {
        "supply": "supply-list",
        "load": "load-plain",
        "meter": "meter-scan",
        "thermometer": "thermometer-scan",
    }
    dialects = {
        name: load_dialect("supply-plain" if item.stands_for else shipped[item.kind], Dialect)
        for name, item in file.instruments.items()
    }
    slowest = max(point.aperture_nplc for point in file.points.values())
    supplies = 1 if file.battery is None else 2
    # A burst ended (2 s), range and aperture set (2 s), reading (2 s and two apertures at 50 Hz);
    # every supply and the case looked at (2 s each) and one voltage (4 s); every supply opened
    # again twice (5 s each).
    looked = 2 * supplies + 2 + 4
    assert longest_waits_s(file, dialects) == pytest.approx(
        6 + 2 * slowest / 50 + looked + 10 * supplies
    )


@pytest.mark.parametrize(
    ("answer", "goes_on"),
    [("", True), ("done", True), ("Stop", False), ("abort", False), ("wait", False), (None, False)],
)
def test_only_a_clear_answer_goes_on(
    answer: str | None, goes_on: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    def ask() -> str:
        if answer is None:
            raise EOFError
        return answer

    monkeypatch.setattr("builtins.input", ask)
    assert ConsoleOperator(Screen(quiet=True)).instruct("turn it") is goes_on


class _Gone:
    """A terminal that is closed."""

    def write(self, text: str) -> int:
        del text
        raise OSError(errno.EIO, "Input/output error")

    def flush(self) -> None:
        raise OSError(errno.EIO, "Input/output error")

    def fileno(self) -> int:
        raise OSError(errno.EBADF, "Bad file descriptor")


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (NotConfirmedOff("on"), 4),
        (Tripped("hot"), 3),
        (InputError("bad"), 2),
        (typer.Exit(4), 4),
        (typer.Exit(0), 3),
        (BrokenPipeError(), 3),
        (FULL, 3),
        (ValueError("defect"), 3),
        (KeyboardInterrupt(), 3),
    ],
)
def test_the_exit_code_outlives_the_terminal(
    error: BaseException, code: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "stderr", _Gone())
    monkeypatch.setattr(sys, "stdout", _Gone())
    with pytest.raises(typer.Exit) as caught, leaving():
        raise error
    assert caught.value.exit_code == code


def test_a_full_disk_is_no_defect(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(typer.Exit), leaving():
        raise OSError(errno.ENOSPC, "No space left on device", "runs/x/readings.csv")
    assert capsys.readouterr().err == "benchkit: runs/x/readings.csv: No space left on device\n"


def test_the_notice_is_whole(capsys: pytest.CaptureFixture[str]) -> None:
    assert report_error(NotConfirmedOff("line one\nline two")) == 4
    assert "  line one\n  line two\n" in capsys.readouterr().err
