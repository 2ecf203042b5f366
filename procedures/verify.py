"""One board: measure, judge from the record, report."""

from __future__ import annotations

import getpass
import platform
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

from benchkit.errors import (
    BenchkitError,
    InputError,
    LinkError,
    NotConfirmedOff,
    OperatorStopped,
    Stopped,
    Tripped,
)
from benchkit.evaluation.evaluate import Evaluation, evaluate
from benchkit.guard import Guard
from benchkit.records.record import read_json, read_record
from benchkit.records.run_folder import RunFolder, write_text
from benchkit.stage import Stage
from instruments.bench import Bench
from procedures.plan import Plan
from procedures.screen import Screen
from procedures.soak import run_soak
from procedures.sweep import read_rest, run_sweep
from procedures.trial import Run

PACKAGES = ("protection-benchkit", "numpy", "scipy", "pyvisa", "PyVISA-py", "matplotlib")


@dataclass(frozen=True)
class Done:
    """A board that was measured, or as much of it as could be."""

    folder: Path
    evaluation: Evaluation
    status: str
    """finished, tripped, stopped or not-confirmed-off."""
    error: BenchkitError | None


@dataclass(frozen=True)
class Job:
    """What a run needs to know beside the bench."""

    stage: Stage
    plan: Plan
    stage_path: Path
    inputs: Mapping[str, Path]
    """File name in ``inputs/`` and where it is copied from."""


def run_board(bench: Bench, job: Job, serial: str, folder: Path, screen: Screen) -> Done:
    """Measure one board into ``folder``, which must not exist yet. Its report is yet to be drawn.

    Does not raise for what stops a run: ``Done.error`` carries it, with the record closed. Raises
    Stopped when the record cannot be written, and whatever else is no BenchkitError; never without
    the outputs confirmed off, or NotConfirmedOff.
    """
    if folder.exists():
        raise InputError(f"{folder}: is there already; a run needs a folder of its own")
    error: BenchkitError | None = None
    try:
        with RunFolder(folder, job.inputs) as run:
            bench.traffic.begin(run.traffic)
            try:
                _measure(bench, job, serial, run, screen)
            except BaseException as stopped:  # noqa: BLE001  raised again when it is none of ours
                error = _secured(bench.guard, stopped)
            if isinstance(error, NotConfirmedOff):
                screen.caution(str(error))  # at once: the report and the exit code come later
            bench.traffic.end()
            if error is not None and str(error) not in read_record(folder).said("stopped"):
                run.event("stopped", str(error), error=type(error).__name__)
            status = "finished" if error is None else _status(error)
            evaluation = evaluate(read_record(folder), serial)
            documents = {"result.json": evaluation.result.document()}
            run.close(documents, _manifest(bench, serial, status))
    except BaseException as fault:
        # A record that cannot be closed must not hide that the outputs may be on.
        if error is not None:
            raise error from fault
        if isinstance(fault, OSError):
            raise Stopped(
                f"{folder}: the record or the screen cannot be written: {fault}"
            ) from fault
        raise
    return Done(folder, evaluation, status, error)


def _secured(guard: Guard, stopped: BaseException) -> BenchkitError:
    """What ended a run, once nothing is on any more; raises what is none of ours."""
    if not guard.confirmed_off and not isinstance(stopped, NotConfirmedOff):
        try:
            guard.make_safe(str(stopped) or type(stopped).__name__, stopped)
        except NotConfirmedOff as worse:
            return worse
    if isinstance(stopped, KeyboardInterrupt):
        return OperatorStopped(str(stopped) or "stopped by Ctrl-C")
    if isinstance(stopped, (Stopped, LinkError)):
        return stopped
    raise stopped


def _measure(bench: Bench, job: Job, serial: str, folder: RunFolder, screen: Screen) -> None:
    guard, forward = bench.guard, job.plan.forward
    guard.clear_for_hands()
    guard.begin(folder)
    if guard.harness.crossed or guard.maybe_crossed:
        guard.arrange(forward.home)  # left so by the run before
    bench.fixture.place(serial, job.stage_path, forward.home)
    guard.placed(forward.home)
    run = Run(guard, job.stage, bench.file, forward, folder, screen)
    guard.step("permissives")
    guard.permit()
    run.rest_K = read_rest(guard)
    guard.prove_polarity(forward.caution)
    run_sweep(run)
    run_soak(run, job.plan.soak, job.plan.soak_stop_C)
    for trial in job.plan.trials:
        trial.do(run)
    guard.step("end")
    guard.make_safe("end of run")


def _status(error: BenchkitError) -> str:
    if isinstance(error, NotConfirmedOff):
        return "not-confirmed-off"
    return "tripped" if isinstance(error, Tripped) else "stopped"


def _manifest(bench: Bench, serial: str, status: str) -> dict[str, object]:
    return {
        "schema": 1,
        "serial": serial,
        "status": status,
        "bench": bench.file.bench.name,
        "operator": _operator(),
        "clock": "simulated" if bench.file.is_simulated else "wall",
        "versions": {"python": platform.python_version(), **_versions()},
        "instruments": {
            name: {
                "identity": bench.identities[name],
                "dialect": table.dialect,
                "resource": table.resource,
                "calibration_due": table.calibration_due.isoformat(),
            }
            for name, table in bench.file.instruments.items()
        },
    }


def _versions() -> dict[str, str]:
    found = {}
    for package in PACKAGES:
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            found[package] = "not installed as a package"
    return found


def _operator() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError):
        return "unknown"


def write_report(folder: Path, evaluation: Evaluation | None = None) -> Path:
    """Build ``report.html`` from the record alone."""
    from benchkit.reports.board import board_report

    record, manifest = read_record(folder), read_json(folder / "manifest.json")
    if evaluation is None:
        evaluation = evaluate(record, str(manifest["serial"]))
    path = folder / "report.html"
    write_text(path, board_report(record, evaluation, manifest))
    return path


def free_folder(parent: Path, serial: str) -> Path:
    """A folder for one more run of a serial: the first, or with the number of the retest."""
    folder, number = parent / serial, 2
    while folder.exists():
        folder, number = parent / f"{serial}.retest-{number - 1}", number + 1
    return folder
