"""The section of a run's report on what stands for a battery at the exposed port."""

from __future__ import annotations

from collections.abc import Iterator

from benchkit.evaluation.battery_trial import Figure, Standing
from benchkit.evaluation.battery_trial_band import StateBand
from benchkit.evaluation.battery_trial_circuits import BACK, FLAT, OFF, ON, PRELOAD_A
from benchkit.evaluation.battery_trial_judged import BatteryFound, Judged
from benchkit.evaluation.evaluate import Evaluation
from benchkit.evaluation.spelled import LEAST, NONE, minus, paired
from benchkit.evaluation.verdict import Promise
from benchkit.prefixes import spoken
from benchkit.records.record import Record
from benchkit.reports.section import Section, Table

STATES = {
    OFF: "reversed, equipment off",
    ON: "reversed, equipment on",
    FLAT: "flat, equipment on",
    BACK: "right way round, equipment off",
}
KEY = (
    "Current: out of the battery, of a flat one into it. Guarded: plus against minus of the "
    "guarded port. Promised: the datasheets' band for 95 % of parts with this bench's supplies and "
    "resistors around the stage; U holds the true value in 95 % of cases."
)
CAUTION = (
    "What stood for a battery here gives no more than its current limit. A real battery gives "
    "hundreds of amperes into a short circuit, can gas and spill, and goes on until something "
    "opens: a small limit proves no fuse, no clamp's surge and no lead. Fuse it at its own "
    "terminal, wear eye protection, and keep it upright in moving air."
)


def battery_trial_section(record: Record, evaluation: Evaluation) -> Section | None:
    """None for a run whose stage file has no [battery_trial] table."""
    del record
    found = next((p.detail for p in evaluation.parts if isinstance(p.detail, BatteryFound)), None)
    if found is None:
        return None
    heads = (
        "Battery", "Set to", "Current promised", "Current ± U", "Guarded promised", "Guarded ± U",
        "Answer",
    )  # fmt: skip
    rows = [row for one in found.states for row in _rows(one)]
    return Section(
        "battery", "With a battery at the exposed port", list(_sentences(found)), "",
        [Table("", heads, rows, KEY)], CAUTION,
    )  # fmt: skip


def _sentences(found: BatteryFound) -> Iterator[str]:
    around, names = found.around, [one.state.name for one in found.states]
    yield (
        f"A supply of up to {around.emf_V:g} V with a current limit of {around.battery_A:g} A "
        f"stood for the battery. It sinks no more than its own preload (up to {1e3 * PRELOAD_A:g} "
        f"mA): what else is driven into it flows through the {around.standin_ohm:g} Ω across its "
        "terminals, and its voltage rises with that."
    )
    if ON in names or FLAT in names:
        yield (
            f"The equipment that is on was a supply of {around.set_V:g} V with a current limit of "
            f"{around.supply_A:.3g} A, less than the stand-in gives, as beside a battery."
        )
    if (OFF in names or BACK in names) and around.off_ohm is not None:
        yield f"{around.off_ohm:g} Ω across the guarded port stood for the equipment that is off."
    if ON in names or OFF in names:
        yield (
            "Reversed, the stage stands it when less than a tenth of what could flow does, less "
            f"than {1e3 * around.flows_A(OFF):.3g} mA ({1e3 * around.flows_A(ON):.3g} mA with the "
            "equipment on); and when the guarded port keeps its own voltage, or is not pulled the "
            "wrong way."
        )
    for one in found.states:
        for text in one.state.trips:
            yield f"The guard ended {one.state.name}: {text}."
        if one.state.short and not one.state.trips:
            yield f"Not whole: {one.state.name}, {one.state.short}."


def _rows(one: Judged) -> Iterator[list[str]]:
    name = STATES[one.state.name]
    if not one.pairs:
        yield [name, NONE, NONE, NONE, NONE, NONE, one.answer]
    for number, (standing, band) in enumerate(one.pairs):
        last = number == len(one.pairs) - 1
        yield [name if number == 0 else "", *_figures(standing, band), one.answer if last else ""]


def _figures(standing: Standing, band: StateBand) -> Iterator[str]:
    yield "1 V, 50 mA: a proof" if standing.proof else f"{standing.volts:g} V"
    for promise, figure, unit in (
        (band.current, standing.current, "A"), (band.guarded, standing.guarded, "V"),
    ):  # fmt: skip
        yield NONE if standing.proof else _span(promise, unit)
        yield _pair(figure, unit)


def _span(promise: Promise, unit: str) -> str:
    low, high = (
        minus(spoken(value, unit)) if abs(value) >= LEAST[unit] else f"0 {unit}"
        for value in (promise.low, promise.high)
    )
    return low if low == high else f"{low} to {high}"


def _pair(figure: Figure, unit: str) -> str:
    return paired(figure.value, figure.budget.expanded().U, unit)
