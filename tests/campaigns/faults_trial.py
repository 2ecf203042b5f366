"""One trial of the fault campaign: its bench opened, its board measured, and what came of it."""

from __future__ import annotations

import importlib
import shutil
import signal
import time
import traceback
from collections.abc import Iterator, Mapping, Sequence
from contextlib import AbstractContextManager, contextmanager, suppress
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from types import FrameType

from benchkit.errors import BenchkitError, InputError, NotConfirmedOff
from benchkit.guard import Envelope, Guard, Live
from benchkit.harness import Harness
from benchkit.records.record import Record, read_record
from instruments.fixture import Fixture
from procedures.commands import opened
from procedures.screen import Screen
from procedures.verify import Done, run_board
from tests.campaigns.faults_draw import Trial, draw_trial
from tests.campaigns.faults_pass import falsified, wrong_pass
from tests.campaigns.faults_shop import COMMAND_S, FITTINGS, Shop, World, served
from tests.campaigns.faults_truth import Seen, false_off, react

LONGEST_WALL_S = 120
SETTLE_S = 0.5
SOUND = "B-sound"


@dataclass
class Outcome:
    """What is kept of a trial."""

    number: int
    about: str
    families: tuple[str, ...]
    verdict: str = "none"
    exit_code: int = 0
    error: str = ""
    why: str = ""
    on_at_end: bool = False
    energised: bool = False
    falsified: bool = False
    worst_s: float = 0.0
    worst_of: str = ""
    allowed_s: float = 0.0
    seconds: float = 0.0
    """Of the wall."""
    reactions: dict[str, float] = field(default_factory=dict)
    wrong: list[tuple[str, str]] = field(default_factory=list)

    def sentence(self) -> str:
        """What it was, and how it ended."""
        return f"{self.about}; {self.verdict}, exit {self.exit_code}: {self.error or self.why}"

    def told(self) -> Iterator[str]:
        """Everything else."""
        yield from (f"{what}: ended after {took:.3f} s" for what, took in self.reactions.items())
        yield f"allowed: {self.allowed_s:.3f} s; on at the end: {self.on_at_end}"
        yield from (f"WRONG {key}: {text}" for key, text in self.wrong)


class Hang(BaseException):
    """A trial that takes too long."""


@dataclass
class Watched:
    """What is learned of a run from beside it."""

    steps: list[tuple[float, Envelope]] = field(default_factory=list)
    guard: Guard | None = None

    def watch(self, guard: Guard) -> None:
        """Write down every energised step of a guard."""
        self.guard, real = guard, guard.energised

        def energised(
            envelope: Envelope, caution: str | None = None
        ) -> AbstractContextManager[Live]:
            self.steps.append((guard._start_s + guard.now(), envelope))
            return real(envelope, caution)

        guard.energised = energised  # type: ignore[method-assign, assignment]


@dataclass
class Arming:
    """A fixture that arms a trial's faults as soon as its board is in."""

    inner: Fixture
    world: World
    faults: Sequence[tuple[str, float, float]]

    def place(self, serial: str, stage_path: Path, harness: Harness) -> None:
        """See Fixture."""
        self.inner.place(serial, stage_path, harness)
        for name, at_s, value in self.faults:
            self.world.arm(name, at_s, value)

    def arrange(self, harness: Harness) -> None:
        """See Fixture."""
        self.inner.arrange(harness)

    def refit_fuse(self, name: str) -> None:
        """See Fixture."""
        self.inner.refit_fuse(name)


def durations(folder: Path, stages: Sequence[str]) -> dict[str, float]:
    """How old a sound board is at the end of its run, by stage: what moments are drawn from."""
    _keep_more_bands()
    shop, found, screen = Shop(folder / "sound", FITTINGS[2], {}), {}, _Silent(quiet=True)
    with served(shop) as world:
        for stage in stages:
            world.clear()
            found[stage] = 0.0
            with suppress(BenchkitError):
                inputs = shop.inputs(stage)
                with opened(inputs, screen) as bench:
                    run_board(bench, inputs.job, SOUND, shop.folder / stage, screen)
                found[stage] = float(world.witnessed()["age_s"][-1])
    return found


def run_chunk(
    seed: int,
    folder: Path,
    takes_s: Mapping[str, float],
    numbers: Sequence[int],
    *,
    keep: bool = False,
) -> list[Outcome]:
    """Trials on one simulated bench, as their numbers draw them from the stages of ``takes_s``."""
    trials = [draw_trial(seed, number, list(takes_s)) for number in numbers]
    return run_trials(folder, takes_s, trials, keep=keep)


def run_trials(
    folder: Path, takes_s: Mapping[str, float], trials: Sequence[Trial], *, keep: bool = False
) -> list[Outcome]:
    """These trials, all of one fitting, on one simulated bench.

    keep: the run folders; those of trials with nothing wrong go otherwise.
    """
    _keep_more_bands()
    boards = {t.serial: [fault.spelled() for fault in t.of("board")] for t in trials}
    shop = Shop(folder / f"chunk-{trials[0].number}", trials[0].fitting, boards)
    with served(shop) as world:
        # Side by side, so that what is known of a stage is not worked out again.
        found = []
        for trial in sorted(trials, key=lambda trial: trial.stage):
            outcome = _one(shop, world, trial, takes_s[trial.stage])
            found.append(outcome)
            if not (keep or outcome.wrong):
                shutil.rmtree(shop.folder / trial.serial, ignore_errors=True)
    return sorted(found, key=lambda outcome: outcome.number)


def _keep_more_bands() -> None:
    """The suite keeps the predictions of a few stages only."""
    for place in ("promised._promised",):
        name, _, function = place.partition(".")
        module = importlib.import_module(f"benchkit.evaluation.{name}")
        kept = getattr(module, function)
        if kept.cache_parameters()["maxsize"] < 32:
            setattr(module, function, lru_cache(maxsize=32)(kept.__wrapped__))


def _one(shop: Shop, world: World, trial: Trial, takes_s: float) -> Outcome:
    outcome = Outcome(trial.number, trial.sentence(), tuple(f.family for f in trial.faults))
    began = time.monotonic()
    armed = [
        (fault.name, -1.0 if trial.at_opening else fault.share * takes_s, fault.value)
        for fault in trial.faults if fault.kind != "board"
    ]  # fmt: skip
    world.clear()
    world.advance(SETTLE_S)  # contacts that were held let go
    before = _moved(world, trial)
    if trial.at_opening:
        for name, at_s, value in armed:
            world.arm(name, at_s, value)
    folder, watched = shop.folder / trial.serial, Watched()
    done = _measured(shop, world, trial, armed, folder, watched, outcome)
    world.advance(SETTLE_S)
    outcome.on_at_end = world.truth("outputs_on") > 0
    after = _moved(world, trial)
    if outcome.on_at_end and outcome.exit_code != NotConfirmedOff.exit_code:
        outcome.wrong.append(("left_on_unreported", outcome.error or outcome.why))
    if after != before:
        text = f"rewired hot, and relays shorted, {before} times before and {after} after"
        outcome.wrong.append(("hot_rewirings", text))
    if watched.guard is not None and watched.guard.begun:
        ages = {name: at_s for name, at_s, _ in armed if not trial.at_opening}
        seen = Seen(
            trial, world.witnessed(), watched.steps, watched.guard._start_s, _record(folder),
            ages, outcome.exit_code == NotConfirmedOff.exit_code, outcome.on_at_end,
        )  # fmt: skip
        _hold(seen, done, outcome, watched.guard.blind_s + COMMAND_S)
    outcome.seconds = round(time.monotonic() - began, 3)
    return outcome


def _moved(world: World, trial: Trial) -> tuple[float, float]:
    """How often leads or relays were moved hot, and relays shorted what is between them.

    A relay that stays closed and says that it is open shorts the pair, with nothing on: that no
    read-back can tell. Nor can anything at the terminals tell an output that lies at next to no
    volts from one that is off.
    """
    families = {fault.family for fault in trial.faults}
    hot = 0.0 if "lying-output" in families else world.truth("hot_rewirings")
    return hot, 0.0 if "relay-lying" in families else world.truth("relay_shorts")


def _measured(
    shop: Shop, world: World, trial: Trial, armed: Sequence[tuple[str, float, float]],
    folder: Path, watched: Watched, outcome: Outcome,
) -> Done | None:  # fmt: skip
    """Measure it, and fill in how that ended."""
    screen, done = _Silent(quiet=True), None
    try:
        inputs = shop.inputs(trial.stage)
        with _in_time(), opened(inputs, screen) as bench:
            watched.watch(bench.guard)
            late = [] if trial.at_opening else armed
            bench.fixture = Arming(bench.fixture, world, late)
            done = run_board(bench, inputs.job, trial.serial, folder, screen)
        error: BaseException | None = done.error
    except Hang:
        outcome.wrong.append(("hangs", traceback.format_exc(limit=-6)))
        return None
    except BaseException as fault:  # noqa: BLE001  what a user would see as a traceback
        error = fault
    if done is not None:
        outcome.verdict = done.evaluation.result.verdict
        outcome.why = "; ".join(done.evaluation.result.why[:2])
        if error is None and outcome.verdict != "pass":
            outcome.exit_code = 1
    if error is not None:
        outcome.error = f"{type(error).__name__}: {error}"
        outcome.exit_code = error.exit_code if isinstance(error, BenchkitError) else 3
        if not isinstance(error, BenchkitError):
            text = "".join(traceback.format_exception(error, limit=-6))
            outcome.wrong.append(("tracebacks", text))
    return done


def _record(folder: Path) -> Record | None:
    try:
        return read_record(folder)
    except InputError:
        return None


def _hold(seen: Seen, done: Done | None, outcome: Outcome, allowed_s: float) -> None:
    """Hold what was said against what was so."""
    outcome.wrong += [("false_off", text) for text in false_off(seen)]
    outcome.energised = bool(seen.on.any())
    outcome.allowed_s = allowed_s
    react(seen)
    outcome.reactions = seen.reactions
    told = seen.told_on and (seen.held or seen.on_at_end)
    if seen.reactions and not told:
        outcome.worst_of, outcome.worst_s = max(seen.reactions.items(), key=lambda pair: pair[1])
    if outcome.worst_s > allowed_s:
        outcome.wrong.append(
            ("over_rating", f"{outcome.worst_of} for {outcome.worst_s:.2f} s of {allowed_s:.2f} s")
        )
    if seen.record is not None:
        outcome.falsified = any(True for _ in falsified(seen.record, seen))
    if done is not None:
        outcome.wrong += [("wrong_pass", text) for text in wrong_pass(seen, done.evaluation)]


class _Silent(Screen):
    """Says nothing: thousands of cautions help nobody."""

    def caution(self, text: str) -> None:
        """Not even this."""


@contextmanager
def _in_time() -> Iterator[None]:
    """Hang after LONGEST_WALL_S."""

    def ring(number: int, frame: FrameType | None) -> None:
        del number, frame
        raise Hang

    before = signal.signal(signal.SIGALRM, ring)
    signal.alarm(LONGEST_WALL_S)
    try:
        yield
    finally:
        signal.alarm(0)
        signal.signal(signal.SIGALRM, before)
