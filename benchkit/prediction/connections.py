"""Every way somebody can connect a stage, as the circuit around its two ports.

Which of several operating points a circuit is in depends on what was there before. So each
scenario is a sequence of circuits, each reached from the one before it; the first begins with
everything at zero volts.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import CurrentLoad, Emf, LimitedSource, Resistor
from benchkit.circuit.network import Element
from benchkit.files.stage import StageFile
from benchkit.stage import Stage

Floats = NDArray[np.float64]

STIFF_OHM = 1e-3
"""Behind the voltage that drives a stage in normal use."""
OPEN_OHM = 1e7
"""Across an exposed port with nothing on it: somebody's voltmeter."""
SOURCE, BATTERY, OPEN = "exposed.source", "exposed.battery", "exposed.meter"
SUPPLY, BLEEDER, HOLD, LOAD = "guarded.supply", "guarded.bleeder", "guarded.hold", "guarded.load"
CHARGING = "exposed.charging"


@dataclass(frozen=True)
class Surroundings:
    """What is on both ports, from the stage file; ``assumed`` says what it does not give."""

    source_ohm: float
    source_limit_A: float | None
    battery_V: float
    battery_ohm: float
    flat_V: float
    set_V: float
    limit_A: float
    off_ohm: float
    passive_ohm: float
    hold_V: float
    hold_ohm: float
    assumed: tuple[str, ...]


def surroundings(file: StageFile) -> Surroundings:
    """Fill in what a stage file leaves open."""
    working, battery, equipment = file.stage, file.battery, file.equipment
    filled = {
        "battery.emf_max_V": (battery.emf_max_V, working.supply_max_V, "V"),
        "equipment.set_V": (equipment.set_V, working.supply_nominal_V, "V"),
        "equipment.limit_A": (equipment.limit_A, working.current_max_A, "A"),
        "equipment.passive_ohm": (
            equipment.passive_ohm, working.supply_nominal_V / working.current_nominal_A, "ohm",
        ),
        "equipment.hold_V": (equipment.hold_V, working.supply_nominal_V, "V"),
    }  # fmt: skip
    value = {key: usual if given is None else given for key, (given, usual, _) in filled.items()}
    open_keys = [
        f"{key} = {usual:.4g} {unit}" for key, (given, usual, unit) in filled.items() if not given
    ]
    open_keys += [
        f"{table}.{key} = {default:g} ohm"
        for table, key, default in (
            ("source", "resistance_ohm", file.source.resistance_ohm),
            ("battery", "resistance_ohm", battery.resistance_ohm),
            ("equipment", "off_ohm", equipment.off_ohm),
            ("equipment", "hold_ohm", equipment.hold_ohm),
        )
        if key not in getattr(file, table).model_fields_set
    ]
    assumed = (f"taken for the scenarios, where the file gives none: {', '.join(open_keys)}",)
    return Surroundings(
        file.source.resistance_ohm, file.source.current_limit_A, value["battery.emf_max_V"],
        battery.resistance_ohm, battery.flat_V, value["equipment.set_V"],
        value["equipment.limit_A"], equipment.off_ohm, value["equipment.passive_ohm"],
        value["equipment.hold_V"], equipment.hold_ohm, assumed if open_keys else (),
    )  # fmt: skip


@dataclass(frozen=True)
class Connection:
    """One circuit around the stage: what is on the exposed port, and on the guarded one."""

    exposed: tuple[Element, ...]
    guarded: tuple[Element, ...]


@dataclass(frozen=True)
class Conditions:
    """Arrays of shape (batch,): the voltage that drives the scenario, and the working current."""

    volts: Floats
    amps: Floats


Steps = Callable[[Stage, Surroundings, Conditions], list[Connection]]


def _right_way(stage: Stage, around: Surroundings, at: Conditions) -> list[Connection]:
    if stage.guards == "load":
        fed = (Emf(SOURCE, _exposed(stage), at.volts, STIFF_OHM),)
        return [
            Connection(fed, (_bleeder(stage, around),)),
            Connection(fed, (CurrentLoad(LOAD, _guarded(stage), at.amps),)),
        ]
    driven = (Emf(SUPPLY, _guarded(stage), at.volts, STIFF_OHM),)
    return [
        Connection((Emf(BATTERY, _exposed(stage), at.volts, STIFF_OHM),), driven),
        Connection((CurrentLoad(CHARGING, _exposed(stage), at.amps),), driven),
    ]


def _reversed_source(stage: Stage, around: Surroundings, at: Conditions) -> list[Connection]:
    return [Connection((_source(stage, around, at),), (_passive(stage, around),))]


def _reversed_source_charged(
    stage: Stage, around: Surroundings, at: Conditions
) -> list[Connection]:
    held = (Emf(HOLD, _guarded(stage), around.hold_V, around.hold_ohm), _passive(stage, around))
    return [Connection((_open(stage),), held), Connection((_source(stage, around, at),), held)]


def _reversed_battery_off(stage: Stage, around: Surroundings, at: Conditions) -> list[Connection]:
    battery = _battery(stage, around, at.volts, reverse=True)
    return [Connection((battery,), (_bleeder(stage, around),))]


def _reversed_battery_on(stage: Stage, around: Surroundings, at: Conditions) -> list[Connection]:
    battery = _battery(stage, around, at.volts, reverse=True)
    return [_open_on(stage, around), Connection((battery,), _on(stage, around))]


def _back_feed(stage: Stage, around: Surroundings, at: Conditions) -> list[Connection]:
    battery = _battery(stage, around, at.volts, reverse=False)
    return [Connection((battery,), (_bleeder(stage, around),))]


def _flat_battery(stage: Stage, around: Surroundings, at: Conditions) -> list[Connection]:
    battery = _battery(stage, around, at.volts, reverse=False)
    return [_open_on(stage, around), Connection((battery,), _on(stage, around))]


def _open_only(stage: Stage, around: Surroundings, _at: Conditions) -> list[Connection]:
    return [_open_on(stage, around)]


SCENARIOS: Mapping[str, Steps] = {
    "right-way": _right_way,
    "reversed-source": _reversed_source,
    "reversed-source-charged": _reversed_source_charged,
    "reversed-battery-off": _reversed_battery_off,
    "reversed-battery-on": _reversed_battery_on,
    "back-feed": _back_feed,
    "flat-battery": _flat_battery,
    "open": _open_only,
}
"""Each scenario's circuits in order, by its name."""


FLAT_LADDER_V = (0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0)
"""How far a flat battery recovers while it is looked at: a switch that is half on burns most."""


def levels(stage: Stage, around: Surroundings, name: str) -> tuple[float, ...]:
    """The voltages that drive a scenario, rising: its lowest and highest, or a flat battery's."""
    working = stage.file.stage
    if name == "flat-battery":
        higher = [v for v in FLAT_LADDER_V if around.flat_V < v < 0.5 * around.set_V]
        return (around.flat_V, *higher)
    if name in ("right-way", "reversed-source", "reversed-source-charged"):
        return working.supply_min_V, working.supply_max_V
    return min(working.supply_min_V, around.battery_V), around.battery_V


def _exposed(stage: Stage) -> tuple[str, str]:
    return stage.ports.exposed_plus, stage.ports.exposed_minus


def _guarded(stage: Stage) -> tuple[str, str]:
    return stage.ports.guarded_plus, stage.ports.guarded_minus


def _open(stage: Stage) -> Element:
    return Resistor(OPEN, _exposed(stage), OPEN_OHM)


def _bleeder(stage: Stage, around: Surroundings) -> Element:
    return Resistor(BLEEDER, _guarded(stage), around.off_ohm)


def _passive(stage: Stage, around: Surroundings) -> Element:
    return Resistor(LOAD, _guarded(stage), around.passive_ohm)


def _on(stage: Stage, around: Surroundings) -> tuple[Element, ...]:
    supply = LimitedSource(SUPPLY, _guarded(stage), around.set_V, around.limit_A)
    return supply, _bleeder(stage, around)


def _open_on(stage: Stage, around: Surroundings) -> Connection:
    return Connection((_open(stage),), _on(stage, around))


def _source(stage: Stage, around: Surroundings, at: Conditions) -> Element:
    """The source the wrong way round: its plus on the minus terminal."""
    plus, minus = _exposed(stage)
    if around.source_limit_A is None:
        return Emf(SOURCE, (minus, plus), at.volts, around.source_ohm)
    return LimitedSource(SOURCE, (minus, plus), at.volts, around.source_limit_A, around.source_ohm)


def _battery(stage: Stage, around: Surroundings, volts: Floats, *, reverse: bool) -> Element:
    plus, minus = _exposed(stage)
    return Emf(BATTERY, (minus, plus) if reverse else (plus, minus), volts, around.battery_ohm)
