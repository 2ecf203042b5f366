"""How a prediction's figures, parts and scenarios are spelled."""

from __future__ import annotations

import math
import re

from benchkit.files.parts import (
    Bipolar,
    Diode,
    Fuse,
    Lead,
    NMosfet,
    Part,
    PMosfet,
    Resistor,
    Tvs,
    Zener,
)
from benchkit.reports.words import NONE, degrees, sentence

SCENARIOS = {
    "right-way": "right way round, at the highest current",
    "reversed-source": "source reversed, load holds no voltage",
    "reversed-source-charged": "source reversed, load holds a charge",
    "reversed-battery-off": "battery reversed, equipment off",
    "reversed-battery-on": "battery reversed, equipment on",
    "back-feed": "battery right way round, equipment off",
    "flat-battery": "flat battery right way round, equipment on",
    "open": "nothing connected, equipment on",
}
TOPOLOGIES = {
    "clamp": "clamp diode across the terminals",
    "fused-clamp": "fuse in the plus lead, clamp diode across the terminals behind it",
    "series-diode": "diode in series in the plus lead",
    "pmos-pass": "P-channel MOSFET in the plus lead, gate at minus",
    "pmos-pass-zener": "P-channel MOSFET in the plus lead, its gate limited by a Zener",
    "pmos-sensed": "P-channel MOSFET in the plus lead, switched on by a transistor that senses "
    "the battery's polarity",
    "nmos-pass": "N-channel MOSFET in the minus lead, gate at plus",
    "nmos-pass-zener": "N-channel MOSFET in the minus lead, its gate limited by a Zener",
    "nmos-sensed": "N-channel MOSFET in the minus lead, switched on by a transistor that senses "
    "the battery's polarity",
    "network": "a circuit of one's own",
}
GUARDS = {"load": "a load from its source", "supply": "a supply or charger from its battery"}
ROLES = {
    "clamp": "clamp", "diode": "series diode", "pass": "pass switch", "gate": "gate resistor",
    "zener": "gate Zener", "hold": "holds the gate off", "sense": "senses polarity",
    "pull": "in the collector lead", "base": "base resistor", "protect": "saves the base",
    "bleed": "base to emitter", "fuse": "fuse", "lead": "wiring",
}  # fmt: skip

NOTHING = {"V": 1e-6, "A": 1e-12, "W": 1e-12}
"""Less than this is what a solver leaves over."""
PREFIXES = ((1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"),
            (1e-12, "p"))  # fmt: skip
SPACE = "\u00a0"
_MINUS = re.compile(r"(?<![\w)])-(?=\d)")
_SQUARED = re.compile(r"\b([AI])2(s|t)\b")
_OHM = re.compile(r"(?<=\d) ohm\b")


def quantity(value: float, unit: str, *, whole: bool = False) -> str:
    """Three digits and a prefix; unit as in ratings (``C`` and ``A2s`` among them).

    whole: keep zeros at the end, as figures that are compared with each other should.
    """
    if math.isnan(value):
        return NONE
    if math.isinf(value):
        return "without end" if value > 0 else "none left"
    if unit in ("C", "K"):
        shown = f"{value:.0f}" if abs(value) >= 9.95 else f"{value:.1f}"
        shown = shown if float(shown) else "0"
        return _signed(float(shown), shown) + SPACE + {"C": "°C"}.get(unit, unit)
    if unit == "A2s":
        return _signed(value, _three(value, whole=whole)) + SPACE + "A²s"
    if abs(value) < NOTHING.get(unit, 0.0) or value == 0:
        return f"0{SPACE}{unit}"
    rounded = float(f"{value:.3g}")
    factor, prefix = next(
        ((f, p) for f, p in PREFIXES if abs(rounded) >= f * (1 - 1e-9)), PREFIXES[-1]
    )
    return _signed(value, _three(value / factor, whole=whole)) + SPACE + prefix + unit


def _three(value: float, *, whole: bool) -> str:
    """Three digits without an exponent, the zeros at their end only where ``whole``."""
    if value == 0:
        return "0"
    places = 2 - math.floor(math.log10(abs(float(f"{value:.3g}"))))
    text = f"{round(value, places):.{max(places, 0)}f}"
    return text.rstrip("0").rstrip(".") if "." in text and not whole else text


def _signed(value: float, text: str) -> str:
    return "−" + text.lstrip("-") if value < 0 else text


def margin(value: float, unit: str) -> str:
    """What is left to a rating, in its own unit."""
    return quantity(value, "K" if unit == "C" else unit)


def said(text: str) -> str:
    """A sentence of the prediction in the page's own spelling of units and of minus."""
    return sentence(spelled(text))


def spelled(text: str) -> str:
    """Units and minus as the page spells them."""
    return degrees(_OHM.sub(" Ω", _SQUARED.sub(r"\1²\2", _MINUS.sub("−", text))))


def label(part: Part) -> str:
    """A part's value, short enough to stand beside its symbol."""
    match part:
        case Resistor() | Lead():
            return quantity(part.value_ohm, "Ω")
        case Diode():
            return f"{part.technology.capitalize()} {quantity(part.reverse_voltage_max_V, 'V')}"
        case Tvs():
            return quantity(part.stand_off_V, "V")
        case Zener():
            return quantity(part.voltage.middle_V, "V")
        case PMosfet() | NMosfet():
            channel = "P" if isinstance(part, PMosfet) else "N"
            return f"{channel}-channel {quantity(part.drain_source_max_V, 'V')}"
        case Bipolar():
            return f"{part.kind.upper()} {quantity(part.collector_emitter_max_V, 'V')}"
        case Fuse():
            return f"{quantity(part.rated_current_A, 'A')} {standard(part)}"


def in_words(part: Part) -> str:
    """A part by what its sheet promises."""
    match part:
        case Resistor():
            ohms, watts = quantity(part.value_ohm, "Ω"), quantity(part.power_max_W, "W")
            return f"resistor, {ohms} ± {part.tolerance_percent:g} %, {watts}"
        case Lead():
            ohms = quantity(part.value_ohm, "Ω")
            return f"resistance of the wiring, {ohms} ± {part.tolerance_percent:g} %"
        case Diode():
            volts = quantity(part.reverse_voltage_max_V, "V")
            amps = quantity(part.average_current_max_A, "A")
            return f"{part.technology.capitalize()} diode, {volts}, {amps}{_surge(part)}"
        case Tvs():
            volts = quantity(part.stand_off_V, "V")
            amps = quantity(part.average_current_max_A, "A")
            return f"transient suppressor, stand-off {volts}, {amps} forward{_surge(part)}"
        case Zener():
            low, high = part.voltage.min_V, part.voltage.max_V
            at, watts = quantity(part.voltage.current_A, "A"), quantity(part.power_max_W, "W")
            return f"Zener diode, {low:g} to {quantity(high, 'V')} at {at}, {watts}"
        case PMosfet() | NMosfet():
            best = min(part.on_resistance, key=lambda point: point.typ_ohm)
            on = f"{quantity(best.typ_ohm, 'Ω')} at {quantity(best.gate_V, 'V')}"
            return (
                f"{'P' if isinstance(part, PMosfet) else 'N'}-channel MOSFET, "
                f"{quantity(part.drain_source_max_V, 'V')}, "
                f"{quantity(part.drain_current_max_A, 'A')}, gate "
                f"{quantity(part.gate_source_max_V, 'V')}, typically {on}"
            )
        case Bipolar():
            volts = quantity(part.collector_emitter_max_V, "V")
            amps = quantity(part.collector_current_max_A, "A")
            gain = f"{part.gain.min:g} to {part.gain.max:g}"
            return f"{part.kind.upper()} transistor, {volts}, {amps}, gain {gain}"
        case Fuse():
            amps, volts = quantity(part.rated_current_A, "A"), quantity(part.rated_voltage_V, "V")
            breaks = quantity(part.breaking_A, "A")
            melts = quantity(part.melting_A2s, "A2s")
            return (
                f"fuse to {standard(part)}, {amps}, {volts}, breaks {breaks}, melting I²t {melts}"
            )


def standard(fuse: Fuse) -> str:
    """``UL 248-14`` for ``ul-248-14``."""
    return fuse.standard.replace("-", " ", 1).upper()


def _surge(part: Diode | Tvs) -> str:
    stands = part.surge_A2s
    return "" if stands is None else f", surge {quantity(stands, 'A2s')}"
