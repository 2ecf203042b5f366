"""What the states of a battery trial mean, in sentences."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence

from benchkit.evaluation.battery_trial import Standing, State
from benchkit.evaluation.battery_trial_band import OF_NO_SHEET_A, StateBand
from benchkit.evaluation.battery_trial_circuits import BACK, FLAT, OFF, ON, Around
from benchkit.evaluation.findings import Remark, Weight
from benchkit.files.parts import NMosfet, PMosfet
from benchkit.files.trials import BATTERY_SCENARIOS, BatteryTrial
from benchkit.prefixes import spoken
from benchkit.stage import Stage

CERTAIN = 0.999
"""Coverage at which something is remarked on: several are looked at of every board."""
DAY_h = 24
Pairs = Sequence[tuple[Standing, StateBand]]

OF_THE_BENCH = re.compile(
    r"time |energy |the clock |the interlock|the (supply|battery's stand-in)'s output |"
    r"(supply|battery)_voltage |exposed less guarded|case gives|"
    r"\w+ gives no usable reading \(invalid\)"
)
_LIMITS = re.compile(r"the (supply|battery's stand-in)('s own protection| limits its current)")
WORDS = {
    OFF: "with the battery reversed and the equipment off",
    ON: "with the battery reversed and the equipment on",
    FLAT: "with a flat battery and the equipment on",
    BACK: "with the battery right way round and the equipment off",
}


def condition(around: Around, name: str, standing: Standing | None) -> str:
    """Of a row."""
    if standing is not None and standing.proof:
        return f"{name}, at the proof of polarity: 1 V at 50 mA"
    volts = around.emf_V if standing is None else standing.volts
    parts = [name, f"{volts:g} V at up to {around.battery_A:g} A"]
    if name in (ON, FLAT):
        parts.append(f"supply {around.set_V:g} V at up to {around.supply_A:.3g} A")
    else:
        parts.append(f"{around.off_ohm:g} ohm across the guarded port")
    if standing is not None:
        parts.append(f"case at {standing.case_C:.1f} C")
    return ", ".join(parts)


def flows(around: Around, name: str, standing: Standing) -> bool:
    """More than any leakage, at its worst."""
    return standing.current.worst >= around.flows_A(name)


def started_at(around: Around, pairs: Pairs) -> float | None:
    """The lowest voltage from which a flat battery was charged."""
    return next((s.volts for s, _ in pairs if s.current.value >= around.flows_A(FLAT)), None)


def remarks_of_reversed(
    stage: Stage, around: Around, state: State, pairs: Pairs, predicted: StateBand, *,
    stands: bool | None, pulled: bool,
) -> Iterator[Remark]:  # fmt: skip
    """predicted: at the battery's full voltage. pulled: it does not conduct, but the guarded port
    is not where it should be."""
    fault: Weight = "fault" if state.name in stage.must_stand else "note"
    if stage.conducts == "lead" and predicted.conducts and not pulled:
        yield from _of_clamp(stage, state, pairs)
        return
    for text in state.trips:
        yield _of_trip(stage, around, state, text, predicted, fault)
    if state.trips:
        return
    if stands is False:
        yield Remark(fault, _fails(stage, around, state, pairs, predicted, pulled=pulled))
        return
    for standing, band in pairs:
        current = standing.current
        U = current.budget.expanded(CERTAIN).U
        most = max(band.most_A, 0.0 if _prints_leakage(stage) else OF_NO_SHEET_A)
        if current.value - U > most:
            yield Remark(
                "doubt",
                f"{WORDS[state.name]} {spoken(current.value, 'A')} ± {spoken(U, 'A', 2)} flow out "
                f"of the battery, more than the most that the datasheets' tolerances allow "
                f"({spoken(most, 'A')}): suspect a part that was hurt, dirt across it, or another "
                "part",
            )
        elif not band.agrees(conducts=False):
            yield Remark(
                "doubt",
                f"{WORDS[state.name]} no current flows, but by its datasheets it should: "
                f"{spoken(band.least_A, 'A')} at least. Another part, or another circuit than the "
                "stage file says",
            )


def _of_clamp(stage: Stage, state: State, pairs: Pairs) -> Iterator[Remark]:
    """What conducts by design; its full current is another trial's business."""
    amps = f"{spoken(pairs[0][0].current.value, 'A')} flow, and " if pairs else ""
    beyond = stage.file.fused_trial is not None
    ending = (
        "what clamp and fuse do at full current is the fused trial's to show" if beyond else
        "what a clamp and its fuse do at full current is not proved here"
    )  # fmt: skip
    flowing = f"{WORDS[state.name]} {amps}it conducts, as its datasheets say it must"
    why = f" ({state.trips[0]})" if state.trips else f" ({state.short})" if state.short else ""
    yield Remark("note" if beyond and not state.short else "doubt", f"{flowing}{why}: {ending}")
    for standing, band in pairs:
        guarded = standing.guarded
        U = guarded.budget.expanded(CERTAIN).U
        if not standing.proof and guarded.worst + U < band.lowest_V:
            yield Remark(
                "fault" if state.name in stage.must_stand else "doubt",
                f"{WORDS[state.name]} the guarded port is taken to {spoken(guarded.worst, 'V')}, "
                f"further than the datasheets' tolerances allow ({spoken(band.lowest_V, 'V')})",
            )


def _of_trip(
    stage: Stage, around: Around, state: State, text: str, predicted: StateBand, fault: Weight
) -> Remark:
    if OF_THE_BENCH.match(text):
        return Remark("doubt", f"the bench, not the stage, ended {state.name}: {text}")
    said = f"{WORDS[state.name]} the stage does not stand it: the guard ended it, {text}"
    if _LIMITS.match(text):
        said = (
            f"{WORDS[state.name]} the stage conducts all that the bench gives there "
            f"({around.limit_A(state.name):.3g} A): the guard ended it, {text}"
        )
    # What was stopped was not shown to stand, whether it has to or not.
    weight: Weight = "fault" if fault == "fault" else "doubt"
    return Remark(weight, said + _cause(stage, state, predicted))


def _fails(
    stage: Stage, around: Around, state: State, pairs: Pairs, predicted: StateBand, *,
    pulled: bool,
) -> str:  # fmt: skip
    words = WORDS[state.name]
    if not pairs:
        return (
            f"{words} the stage conducts at the volt that proves polarity, and was asked for no "
            f"more{_cause(stage, state, predicted)}"
        )
    standing = pairs[0][0]
    port = f"the guarded port at {spoken(standing.guarded.worst, 'V')}"
    if state.name == ON:
        port += f", of {around.set_V:g} V"
    if pulled:
        return f"{words} next to nothing flows, but it leaves {port}"
    amps = f"{standing.current.worst:.3f} A"
    if standing.proof:
        return (
            f"{words} it conducts {amps} at the volt that proves polarity, and was asked for no "
            f"more{_cause(stage, state, predicted)}"
        )
    limiting = " (the equipment's supply limits it)" if state.name == ON else (
        " (the stand-in limits it)" if standing.current.worst > 0.5 * around.battery_A else ""
    )  # fmt: skip
    return f"{words} it conducts {amps}{limiting}, with {port}{_cause(stage, state, predicted)}"


def _cause(stage: Stage, state: State, predicted: StateBand) -> str:
    """Only what the prediction says too."""
    if not predicted.conducts:
        return (
            ". By its datasheets it should not: suspect a short in the main part, or in what "
            "switches it"
        )
    if state.name == ON and _gate_tied(stage):
        return (
            ", as predicted: the gate is tied to the other lead, so the equipment's own supply "
            "keeps it on"
        )
    return ", as predicted"


def _gate_tied(stage: Stage) -> bool:
    """Whether nothing but the equipment's own voltage switches the main part."""
    return isinstance(stage.main_part, PMosfet | NMosfet) and (
        stage.topology is not None and "sense" not in stage.names
    )


def _prints_leakage(stage: Stage) -> bool:
    return bool(getattr(stage.main_part, "leakage", None))


def remarks_of_back_feed(
    stage: Stage, around: Around, state: State, pairs: Pairs
) -> Iterator[Remark]:
    """A battery that drains breaks nothing: it is told, and judged by its limit."""
    yield from _trips_right_way(stage, state)
    for standing, band in pairs:
        current = standing.current
        U = current.budget.expanded(CERTAIN).U
        value, drains = current.value, flows(around, BACK, standing)
        flow = f"{WORDS[BACK]} {spoken(value, 'A')} drain from it"
        if value - U > band.most_A:
            fault = drains and not band.conducts and BACK in stage.must_stand
            yield Remark(
                "fault" if fault else "doubt",
                f"{flow}, more than the most that the datasheets' tolerances allow "
                f"({spoken(band.most_A, 'A')})",
            )
        elif value + U < band.least_A:
            yield Remark(
                "doubt",
                f"{flow}, less than the least that the datasheets' tolerances allow "
                f"({spoken(band.least_A, 'A')}): suspect a part that is missing or another part",
            )
        elif drains:
            yield Remark(
                "note",
                f"{flow} into the {around.off_ohm:g} ohm that stand for it, as predicted: "
                f"{spoken(value * DAY_h, 'Ah', 2)} a day",
            )


def remarks_of_flat(
    stage: Stage, around: Around, state: State, pairs: Pairs
) -> Iterator[Remark]:  # fmt: skip
    """Where charging starts, and whether the datasheets say so."""
    yield from _trips_right_way(stage, state)
    if not pairs:
        return
    apart: Weight = "fault" if FLAT in stage.must_stand else "doubt"
    for standing, band in pairs:
        charges = standing.current.value >= around.flows_A(FLAT)
        if not band.agrees(conducts=charges):
            found = "is charged" if charges else "is not charged"
            yield Remark(
                apart,
                f"a flat battery at {standing.volts:g} V {found} "
                f"({spoken(standing.current.value, 'A')}), and by the datasheets' tolerances "
                f"{'none' if charges else 'every board'} would do so: suspect what senses the "
                "battery or switches the main part",
            )
            return
    started = started_at(around, pairs)
    if started is None:
        told = f"a flat battery is not charged at any voltage up to {pairs[-1][0].volts:g} V"
    elif started == pairs[0][0].volts:
        told = f"a flat battery of {started:g} V is charged"
    else:
        told = (
            f"a battery of {pairs[0][0].volts:g} V is not charged, one of {started:g} V is, held "
            "there by a stand-in whose voltage then rises by itself"
        )
    yield Remark("note", f"{told}, as predicted")


def _trips_right_way(stage: Stage, state: State) -> Iterator[Remark]:
    for text in state.trips:
        bench = OF_THE_BENCH.match(text) or state.name not in stage.must_stand
        yield Remark("doubt" if bench else "fault", f"the guard ended {state.name}: {text}")


def untested(trial: BatteryTrial) -> Iterator[str]:
    """What a signature does not cover."""
    left = [name for name in BATTERY_SCENARIOS if name not in trial.scenarios]
    if left:
        yield f"a battery at the exposed port, in the scenarios {', '.join(left)}"
    yield (
        f"a real battery: it drives what its own resistance lets it, here {trial.current_limit_A:g}"
        " A at most flowed, which proves no fuse and no part's surge"
    )
