"""What can be wrong with a board itself, by name, and what each fault does to its circuit."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable, Mapping, Sequence

import numpy as np

from benchkit.circuit.elements import Resistor
from benchkit.circuit.network import GROUND, Element
from benchkit.errors import InputError
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.fuse import FuseLaw
from benchkit.parts.mosfet import MosfetLaws
from benchkit.placing import Law
from benchkit.stage import Stage
from benchkit.topologies.base import Wiring

SHORT_OHM, OPEN_OHM = 4e-3, 1e8
PIN, PIN_OHM = "pin", 1e6
"""Node of a gate that nothing drives, and what holds it at the source."""
JOINT = "joint"
"""The exposed terminal of the broken lead, where a dry joint is between it and the rest."""

BOARD_FAULTS = {
    "gate-open": "the gate is not driven: the channel stays off and the body diode carries all",
    "gate-shorted": "gate and source are shorted through a few milliohms",
    "rds-on-scale": "the channel's on-resistance is this many times the typical one",
    "drop-shift": "the junction drops this many volts more than it should at every current",
    "dry-joint": "this many ohms stand in the current's way inside the stage",
    "short": "the part is shorted through a few milliohms",
    "open": "the part is open",
    "leaky": "this many ohms lie across the part: it leaks backwards",
    "wrong-way-round": "the part is fitted the other way: its first and last terminals are swapped",
    "wrong-part": "another part is fitted: a MOSFET whose threshold is this many volts higher, or "
    "a diode that drops 2 to this power as much at every current and temperature",
    "heat-scale": "case-to-ambient thermal resistance is this many times the typical one",
    "fuse-missing": "no fuse is fitted",
    "fuse-blown": "the fuse that is fitted has melted already",
    "fuse-too-large": "a fuse of this many times the rated current is fitted: its opening current "
    "is that much higher, its I2t with the square, its resistance that much lower",
    "fuse-bridged": "a few milliohms are fitted in place of the fuse",
    "zener-open": "the gate's Zener is open",
    "zener-short": "the gate's Zener is shorted through a few milliohms",
    "sense-open": "the sensing transistor is open",
    "sense-short": "the sensing transistor is shorted from collector to emitter",
    "base-open": "the sensing transistor's base resistor is open",
    "hold-open": "the resistor that holds the gate at the source is open",
}
"""What can be wrong with a board itself, by name."""
OF_ROLE = {
    "zener-open": "zener", "zener-short": "zener", "sense-open": "sense", "sense-short": "sense",
    "base-open": "base", "hold-open": "hold",
}  # fmt: skip
OF_MOSFET = ("gate-open", "gate-shorted", "rds-on-scale")
NO_FUSE = ("fuse-missing", "fuse-blown")
FUSES = (*NO_FUSE, "fuse-too-large", "fuse-bridged")
POSITIVE = ("rds-on-scale", "dry-joint", "leaky", "heat-scale", "fuse-too-large")


def parse_faults(spelled: Sequence[str]) -> dict[str, float]:
    """Turn ["dry-joint=0.02", "gate-open"] into values by name; ValueError for an unknown one."""
    faults = {}
    for text in spelled:
        name, _, value = text.partition("=")
        if name not in BOARD_FAULTS:
            raise ValueError(
                f"{name!r} is not a fault of a board; they are {', '.join(BOARD_FAULTS)}"
            )
        try:
            faults[name] = float(value) if value else 1.0
        except ValueError:
            raise ValueError(f"{text!r}: {value!r} is not a number") from None
    return faults


def check_faults(stage: Stage, faults: Mapping[str, float], name: str) -> None:
    """InputError, naming the stage file, for a fault of a part that the stage does not have."""
    topology, main = stage.file.stage.topology, stage.typical().laws[stage.main]
    for fault, value in faults.items():
        lacks = None
        if fault in OF_ROLE and OF_ROLE[fault] not in stage.names:
            lacks = f"no part in the role {OF_ROLE[fault]!r}"
        elif fault in FUSES and not fuses_of(stage):
            lacks = "no fuse"
        elif fault in OF_MOSFET and not isinstance(main, MosfetLaws):
            lacks = "no MOSFET as its main part"
        elif fault == "drop-shift" and not isinstance(main, DiodeLaw):
            lacks = "no diode as its main part"
        if lacks is not None:
            raise InputError(
                f"{name}: the fault {fault!r} cannot be given to this board: its stage "
                f"({topology}) has {lacks}"
            )
        if fault in POSITIVE and value <= 0:
            raise InputError(
                f"{name}: the fault {fault}={value:g} cannot be: its value must be above 0"
            )


def fuses_of(stage: Stage) -> list[str]:
    """The references of its fuses."""
    return [name for name, part in stage.file.parts.items() if part.kind == "fuse"]


def faulty_laws(
    stage: Stage, laws: Mapping[str, Law], faults: Mapping[str, float]
) -> dict[str, Law]:
    """The laws of the parts that are really fitted."""
    changed = dict(laws)
    changed[stage.main] = _main(stage, laws[stage.main], faults)
    larger = faults.get("fuse-too-large")
    for reference in fuses_of(stage) if larger is not None else ():
        law = laws[reference]
        assert isinstance(law, FuseLaw)
        assert larger is not None
        changed[reference] = dataclasses.replace(
            law, cold_ohm=law.cold_ohm / larger, fusing_A=law.fusing_A * larger,
            arcing_A2s=law.arcing_A2s * larger**2,
        )  # fmt: skip
    return changed


def _main(stage: Stage, law: Law, faults: Mapping[str, float]) -> Law:
    other = faults.get("wrong-part")
    if isinstance(law, MosfetLaws):
        channel = law.channel
        if "rds-on-scale" in faults:
            typical = stage.typical().laws[stage.main]
            assert isinstance(typical, MosfetLaws)
            channel = dataclasses.replace(
                channel,
                gain_A_per_V2=typical.channel.gain_A_per_V2 / faults["rds-on-scale"],
                threshold_V=typical.channel.threshold_V,
                series_ohm=typical.channel.series_ohm * faults["rds-on-scale"],
            )
        if other is not None:
            channel = dataclasses.replace(channel, threshold_V=channel.threshold_V + other)
        return MosfetLaws(channel, law.body)
    if isinstance(law, DiodeLaw):
        if "drop-shift" in faults:
            scale = float(law.ideality) * 0.02569
            law = dataclasses.replace(
                law, saturation_A=law.saturation_A * np.exp(-faults["drop-shift"] / scale)
            )
        if other is not None:
            # As so many in series: every voltage of the forward law, its temperature's too.
            times = 2.0**other
            law = dataclasses.replace(
                law, ideality=law.ideality * times, series_ohm=law.series_ohm * times,
                bandgap_V=law.bandgap_V * times, exponent=law.exponent * times,
            )  # fmt: skip
    return law


def faulty_wiring(stage: Stage, faults: Mapping[str, float]) -> tuple[Stage, str]:
    """The stage with the nodes of a faulty board, and the node behind a dry joint."""
    parts, ports = dict(stage.wiring.parts), stage.ports
    first, *gate, last = parts[stage.main]
    if "wrong-way-round" in faults:
        first, last = last, first
    if gate and "gate-open" in faults and "open" not in faults:
        gate = [PIN]
    parts[stage.main] = (first, *gate, last)
    at = "exposed_plus" if _breaks_plus(stage) else "exposed_minus"
    behind = str(getattr(ports, at))
    if "dry-joint" in faults:
        ports = dataclasses.replace(ports, **{at: JOINT})
    return dataclasses.replace(stage, wiring=Wiring(parts, ports)), behind


def faulty_parts(
    stage: Stage, faults: Mapping[str, float], behind_joint: str
) -> tuple[frozenset[str], tuple[Element, ...]]:
    """The parts that are not there, and what is there beside the rest or instead; ``stage`` is
    wired as the board is. Those of the main part are named as its own elements."""
    without: set[str] = set()
    beside: list[Element] = []

    def ends(reference: str) -> tuple[str, str]:
        nodes = stage.wiring.parts[reference]
        return nodes[0], nodes[-1]

    def instead(reference: str, what: str, ohms: float) -> None:
        without.add(reference)
        beside.append(Resistor(f"{reference}.{what}", ends(reference), ohms))

    main, gate = stage.main, stage.gate_nodes
    if "open" in faults:
        instead(main, "open", OPEN_OHM)
    elif "gate-open" in faults and gate is not None:
        beside.append(Resistor(f"{main}.pin", gate, PIN_OHM))
    if "gate-shorted" in faults and gate is not None:
        beside.append(Resistor(f"{main}.gate-source", gate, SHORT_OHM))
    if "short" in faults:
        beside.append(Resistor(f"{main}.short", ends(main), SHORT_OHM))
    if "leaky" in faults:
        beside.append(Resistor(f"{main}.leak", ends(main), faults["leaky"]))
    for fault in sorted(OF_ROLE.keys() & faults.keys()):
        reference = stage.names[OF_ROLE[fault]]
        if fault.endswith("open"):
            instead(reference, "open", OPEN_OHM)
        else:
            beside.append(Resistor(f"{reference}.short", ends(reference), SHORT_OHM))
    for reference in fuses_of(stage) if "fuse-bridged" in faults else ():
        instead(reference, "bridge", SHORT_OHM)
    if "dry-joint" in faults:
        beside.append(Resistor(JOINT, (JOINT, behind_joint), faults["dry-joint"]))
    return frozenset(without), tuple(beside)


def left(elements: Iterable[Element], without: Iterable[str]) -> list[Element]:
    """The elements of all parts but these."""
    gone = tuple(without)
    own = tuple(f"{reference}." for reference in gone)
    return [e for e in elements if e.name not in gone and not e.name.startswith(own)]


def _breaks_plus(stage: Stage) -> bool:
    """Whether the stage sits in the plus lead; where it breaks none, whether that is not ground."""
    ports = stage.ports
    if ports.exposed_plus != ports.guarded_plus:
        return True
    return ports.exposed_minus == ports.guarded_minus and ports.exposed_plus != GROUND
