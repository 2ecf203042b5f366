"""What was predicted of the states of a battery trial, beside what was found."""

from __future__ import annotations

from benchkit.evaluation.battery_trial import Standing, State
from benchkit.evaluation.battery_trial_band import StateBand
from benchkit.evaluation.battery_trial_circuits import BACK, FLAT, Around
from benchkit.evaluation.battery_trial_words import OF_THE_BENCH, flows
from benchkit.evaluation.part import ScenarioFound
from benchkit.evaluation.spelled import paired, spanned


def agreement(around: Around, state: State, standing: Standing, band: StateBand) -> ScenarioFound:
    """Predicted and found under the trial's own conditions."""
    name = state.name
    does = {FLAT: ("charged", "not charged"), BACK: ("drains", "does not drain")}.get(
        name, ("conducts", "does not conduct")
    )
    found = flows(around, name, standing)
    if name == FLAT:
        found = standing.current.value >= around.flows_A(FLAT)
    what = f"{'into' if name == FLAT else 'out of'} a battery of {standing.volts:g} V"
    if standing.proof:
        what += ", at the proof of polarity"
    U = standing.current.budget.expanded().U
    share = f" ({100 * band.share:.0f} % of boards)" if 0 < band.share < 1 else ""
    return ScenarioFound(
        name, f"current {what}",
        f"{does[not band.conducts]}: {spanned(band.current.low, band.current.high, 'A')}{share}",
        f"{does[not found]}: {paired(standing.current.value, U, 'A')}",
        None if standing.proof else band.agrees(conducts=found),
    )  # fmt: skip


def ended(state: State, band: StateBand) -> ScenarioFound:
    """What the guard stopped, beside what was predicted: a stage that was stopped did not block."""
    text = state.trips[0]
    of_bench = OF_THE_BENCH.match(text) is not None
    return ScenarioFound(
        state.name, "as a whole", spanned(band.current.low, band.current.high, "A"),
        f"the guard ended it: {text}", None if of_bench else band.agrees(conducts=True),
    )  # fmt: skip
