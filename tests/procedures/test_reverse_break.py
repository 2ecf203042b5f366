"""Attacks on the reverse trial. A strict xfail is a way through, and says which."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from types import SimpleNamespace

import pytest

import procedures.reverse as reverse_module
from benchkit.errors import InputError, OperatorStopped, Refused, Stopped, Tripped
from benchkit.files import BenchFile, load
from benchkit.guard import Guard
from benchkit.harness import DRAWING, Harness, reversed_from
from benchkit.reading import Reading
from procedures.commands import opened
from procedures.inputs import read_board
from procedures.plan import plan_board
from procedures.reverse_plan import ReversePlan
from procedures.verify import _measure, run_board
from tests.benchkit.nine_stages import made
from tests.procedures.test_reverse import BOARD, QUIET, REVERSE, shop, tried, tries
from tests.procedures.test_reverse_plan import trial_of
from tests.simulated_bench import workshop
from tests.stand_in import Notes, StandInPoints, StandInWiring, World, guard_of

REVERSED = reversed_from(DRAWING, 1000.0)


DROP = "[limits]\ndrop = [{ current_A = 2, max_V = 2 }]\n"


def limited(folder: Path, limits: str) -> Path:
    """Limits in the stage file: without any, nothing passes."""
    with (folder / "mine.toml").open("a", encoding="utf-8") as file:
        file.write(limits)
    return folder


class StickingCrossed(StandInWiring):
    """A relay that goes over, and not back."""

    def arrange(self, harness: Harness) -> None:
        super().arrange(REVERSED)
        self.world.wired[-1] = harness


# a board that does not block


def test_a_guarded_lead_that_comes_off_in_the_ladder_hides_no_short(tmp_path: Path) -> None:
    class Floating(StandInPoints):
        def read(self, point: str, time_s: float, *, quick: bool = False) -> Reading:
            true = super().read(point, time_s, quick=quick)
            off = point == "guarded_voltage" and self.world.on and self.world.volts > 1
            return replace(true, value=0.0137) if off and self.world.polarity < 0 else true

    class Shorted(World):
        def guarded_V(self) -> float:
            return self.port_V() - 0.02 * self.load_A

    world = Shorted()
    guard = guard_of(world)
    guard._points = Floating(world)
    with pytest.raises(Tripped):
        tries(tmp_path / "w", world, Notes(), guard)


def test_a_leaky_board_with_the_guarded_lead_off_is_not_passed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = limited(shop(tmp_path / "w", "pmos-pass", "leaky=1000"), DROP)
    honest = reverse_module._climb
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    with opened(inputs, QUIET) as bench:
        control = bench.control
        assert control is not None

        def climb(*given: object) -> None:
            control.set(':SIM:FAUL "lead-off:guarded_voltage",0', "slow")
            honest(*given)  # type: ignore[arg-type]
            control.set(":SIM:FAUL:CLE", "slow")

        monkeypatch.setattr(reverse_module, "_climb", climb)
        done = run_board(bench, inputs.job, BOARD, folder / "run", QUIET)
    assert done.evaluation.result.verdict != "pass", done.evaluation.result.why


def test_a_sound_board_passes_with_these_limits(tmp_path: Path) -> None:
    """Or what follows proves nothing."""
    done, _ = tried(limited(shop(tmp_path / "w", "series-diode"), DROP))
    assert done.evaluation.result.verdict == "pass", done.evaluation.result.why


def test_a_diode_with_a_hundred_ohms_across_it_is_not_passed(tmp_path: Path) -> None:
    folder = limited(shop(tmp_path / "w", "series-diode", "leaky=100"), DROP)
    done, _ = tried(folder)
    assert done.evaluation.result.verdict != "pass"


def test_a_board_that_gives_way_for_a_moment_of_the_dwell_trips(tmp_path: Path) -> None:
    class Flashing(StandInPoints):
        done = False

        def read(self, point: str, time_s: float, *, quick: bool = False) -> Reading:
            true = super().read(point, time_s, quick=quick)
            at = guard._step == "reverse/dwell" and not quick and point == "guarded_voltage"
            if at and not self.done:
                self.done = True
                return replace(true, value=-self.world.volts)
            return true

    world = World()
    guard = guard_of(world)
    guard._points = Flashing(world)
    with pytest.raises(Tripped):
        tries(tmp_path / "w", world, Notes(), guard)


def test_a_trip_stays_a_trip_when_the_leads_are_not_put_back(tmp_path: Path) -> None:
    """Only runs that finished or tripped stand; --resume measures the others anew."""

    class Declining(StandInWiring):
        def arrange(self, harness: Harness) -> None:
            if harness == DRAWING:
                raise OperatorStopped("the leads were not moved")
            super().arrange(harness)

    class Breaking(World):
        def guarded_V(self) -> float:
            return self.port_V() if self.volts > 9 else super().guarded_V()

    world = Breaking()
    guard = guard_of(world)
    guard._leads.wiring = Declining(world)
    with pytest.raises(Stopped) as caught:
        tries(tmp_path / "w", world, Notes(), guard)
    assert isinstance(caught.value, Tripped)


# leads that stay crossed


@pytest.mark.parametrize("conducts", [False, True])
def test_leads_stuck_crossed_are_said_to_be_crossed(conducts: bool, tmp_path: Path) -> None:
    world, notes = World(conducts_reversed=conducts), Notes()
    guard = guard_of(world, notes)
    guard._leads.wiring = StickingCrossed(world)
    with pytest.raises((Refused, Tripped)):
        tries(tmp_path / "w", world, notes, guard)
    assert "left-reversed" in notes.kinds()


def test_leads_stuck_crossed_are_the_benchs_fault(tmp_path: Path) -> None:
    world = World(conducts_reversed=True)
    guard = guard_of(world)
    guard._leads.wiring = StickingCrossed(world)
    with pytest.raises(Refused):
        tries(tmp_path / "w", world, Notes(), guard)


@dataclass
class Hands:
    """A fixture that writes down what the ports held when hands reached in."""

    world: World
    found_V: list[float]

    def place(self, serial: str, stage_path: Path, harness: Harness) -> None:
        del serial, stage_path, harness
        self.found_V.append(max(abs(self.world.guarded_V()), abs(self.world.port_V())))
        raise OperatorStopped("far enough")


def measured(guard: Guard, fixture: Hands) -> None:
    bench = SimpleNamespace(guard=guard, file=None, fixture=fixture)
    plan = SimpleNamespace(forward=SimpleNamespace(home=DRAWING))
    job = SimpleNamespace(stage_path=Path("mine.toml"), plan=plan)
    _measure(bench, job, BOARD, Notes(), QUIET)  # type: ignore[arg-type]


def test_a_refused_putting_back_is_tried_again_for_the_next_board() -> None:
    world = World()
    guard, hands = guard_of(world), Hands(world, [])
    guard.begin(Notes())
    guard.make_safe("at the start")
    guard.arrange(REVERSED)
    world.residual_V = 0.8
    with pytest.raises(Refused):
        measured(guard, hands)
    world.residual_V = 0.0
    with pytest.raises(Stopped):
        measured(guard, hands)
    assert world.wired == [REVERSED, DRAWING]


def test_no_board_is_changed_while_the_guarded_port_holds_its_charge() -> None:
    """A stage that blocks keeps the charge of the equipment: that is what it is for."""

    class Charged(World):
        def guarded_V(self) -> float:
            return 12.0

    world = Charged()
    guard, hands = guard_of(world), Hands(world, [])
    guard.begin(Notes())
    guard.placed(DRAWING)
    guard.make_safe("the board before")
    with pytest.raises(Stopped):
        measured(guard, hands)
    assert not hands.found_V or max(hands.found_V) < 0.5


# stage files with odd values


def planned(folder: Path, tables: str) -> ReversePlan:
    return trial_of(
        plan_board(made("pmos-pass", tables=tables), load(BenchFile, folder / "bench.toml"))
    )


def test_the_last_rung_is_the_full_voltage_and_lasts_its_dwell(tmp_path: Path) -> None:
    folder = workshop(tmp_path / "w", trial=True)
    odd = next(v / 100 for v in range(1200, 1500) if v / 100 * 3 / 3 != v / 100)
    plan = planned(folder, f"[reverse]\nvoltage_V = {odd}\nsteps = 3\ndwell_s = 600\n")
    last = plan.rungs[-1]
    assert last.longest_s > 600
    assert last.voltage_V == odd


def test_a_guarded_limit_beyond_the_voltage_applied_is_refused(tmp_path: Path) -> None:
    folder = workshop(tmp_path / "w", trial=True)
    with pytest.raises(InputError):
        planned(folder, f"{REVERSE}[limits]\nguarded_reverse_max_V = 300\n")


def test_the_smallest_trial_does_not_exceed_what_is_harmless(tmp_path: Path) -> None:
    folder = workshop(tmp_path / "w", trial=True)
    plan = planned(folder, "[reverse]\nvoltage_V = 0.001\nsteps = 20\ncurrent_limit_A = 1e-6\n")
    rungs = plan.rungs
    assert max(rung.voltage_V for rung in rungs) <= 0.001
    assert max(rung.over_current_A for rung in rungs) <= 1e-6


def test_a_supply_that_trips_in_the_ladder_ends_off_and_put_back(tmp_path: Path) -> None:
    class Giving(World):
        def pass_time(self, seconds: float) -> None:
            super().pass_time(seconds)
            self.conducts_reversed = self.volts > 9

    world, notes = Giving(trips_at_limit=True), Notes()
    with pytest.raises(Tripped, match="own protection"):
        tries(tmp_path / "w", world, notes)
    assert world.wired == [REVERSED, DRAWING]
    assert "left-reversed" not in notes.kinds()
    assert not world.on
    assert not any(said.startswith("program 15") for said in world.said)
