"""What the supply sweep will do: its voltages, an envelope each, and how far down it may go."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from benchkit.errors import InputError
from benchkit.files import BenchFile
from benchkit.files.bench import PointName
from benchkit.files.trials import SupplySweep
from benchkit.guard import Ceilings, Drive, Envelope
from benchkit.prediction.connections import surroundings
from benchkit.prediction.forward import forward
from benchkit.prediction.scenarios import scenario
from benchkit.stage import Stage
from procedures.cooling import longest_cool_s
from procedures.trial import KICK_S

READINGS = 2
FEWEST = 3
"""Voltages that are left, or there is nothing to plot."""
LOAD_ROOM_V = 0.8
"""What an electronic load needs across itself to draw amperes: below it the load is fully open and
draws what it can (common practice, no source)."""
BEYOND = 1.3
"""The drop's range holds this many times the worst part's."""
LONGEST_S = 60.0
CAUTION = (
    "about to switch on {top:g} V and lower supply voltages down to {low:g} V, one after the "
    "other, at {amps:g} A. Low down the stage is not fully on, and its part burns more than it "
    "ever does in use: it may be hot enough to burn. Capacitors hold their charge after switching "
    "off; keep hands off the board, and a hand on the supply's own switch. Local codes and "
    "licensed practice come first."
)


@dataclass(frozen=True)
class Rung:
    """One supply voltage. largest_drop_V: what the drop's range is chosen for."""

    envelope: Envelope
    largest_drop_V: float

    @property
    def voltage_V(self) -> float:
        """As programmed."""
        return self.envelope.voltage_V


@dataclass(frozen=True)
class SupplySweepPlan:
    """The sweep of one board. rungs: falling in voltage, one energised step each.

    left_out_V: listed voltages below those, at which a part at its sheet's limit could not feed the
    load.
    """

    rungs: tuple[Rung, ...]
    left_out_V: tuple[float, ...]
    current_A: float
    fed: PointName
    """The voltage of the port that feeds the stage."""
    reads_gate: bool
    caution: str
    cool_s: float
    rungs_s: float

    @property
    def left_out(self) -> str:
        """In words; "" where nothing is."""
        if not self.left_out_V:
            return ""
        volts = ", ".join(f"{v:g}" for v in self.left_out_V)
        return (
            f"{volts} V left out: a part at its sheet's limit would not leave the load the "
            f"{LOAD_ROOM_V:g} V that it needs to draw {self.current_A:g} A, or would burn too much"
        )

    def text(self) -> str:
        """For the plan."""
        volts = ", ".join(f"{rung.voltage_V:g}" for rung in self.rungs)
        told = (
            f"{self.current_A:g} A at {volts} V, downwards, off between them; ended where the load "
            "cannot draw its current or the stage burns more than the guard allows"
        )
        if self.left_out_V:
            told += f"; {self.left_out}"
        return f"{told}. First step: {self.rungs[0].envelope.sentence()}"


def plan_supply_sweep(
    stage: Stage, bench: BenchFile, sweep: Envelope, aperture_s: float
) -> SupplySweepPlan | None:
    """The sweep that the stage file asks for, if any.

    sweep: the envelope of the forward sweep, whose limits of case and loss hold here too.
    aperture_s: how long one drop and current take. InputError when it would pass a ceiling of the
    bench or, by prediction, the voltage rating of a part, when next to nothing of it would be left,
    or when a limit asks for what it cannot measure.
    """
    file = stage.file
    settings = file.supply_sweep
    if settings is None:
        return None
    _check_limits(stage, bench, settings)
    _check_ratings(stage, settings.voltages_V[-1])
    amps = settings.current_A or file.stage.current_nominal_A
    volts = np.array(settings.voltages_V)
    worst = forward(stage, stage.corner(1), amps, volts, file.stage.ambient_nominal_C)
    drops = np.where(worst.carried[0], worst.drop_V[0], np.inf)
    fine = (volts - drops >= LOAD_ROOM_V) & (drops * amps <= sweep.loss_max_W)
    first = int(np.max(np.nonzero(~fine)[0], initial=-1)) + 1
    if volts.size - first < FEWEST:
        raise InputError(
            f"supply_sweep.voltages_V ends at {volts[-1]:g}: at {amps:g} A only "
            f"{volts.size - first} of its voltages leave the load the {LOAD_ROOM_V:g} V that it "
            f"needs, with a part at its sheet's limit; give {FEWEST} or more higher ones"
        )
    ceilings = Ceilings.of(bench)
    rungs = tuple(
        Rung(
            Envelope.around(
                f"supply sweep {v:g} V", v, amps, ceilings, case_max_C=sweep.case_max_C,
                loss_max_W=sweep.loss_max_W, longest_s=LONGEST_S,
                beside=_kick(sweep.beside, v, file.stage.supply_nominal_V),
            ),
            BEYOND * float(drop),
        )
        for v, drop in zip(settings.voltages_V[first:][::-1], drops[first:][::-1], strict=True)
    )  # fmt: skip
    reads_gate = stage.gate_nodes is not None and "gate_voltage" in bench.points
    settles = 2 + 2 * (sweep.beside is not None)
    rung_s = settles * bench.bench.settle_s + KICK_S * (sweep.beside is not None)
    rung_s += READINGS * (2 + reads_gate) * aperture_s
    return SupplySweepPlan(
        rungs, tuple(settings.voltages_V[:first]), amps,
        "exposed_voltage" if stage.guards == "load" else "guarded_voltage", reads_gate,
        CAUTION.format(top=volts[-1], low=volts[first], amps=amps),
        longest_cool_s(file.heat.time_constant_s), len(rungs) * rung_s,
    )  # fmt: skip


def _kick(nominal: Drive | None, volts: float, supply_V: float) -> Drive | None:
    """A battery's stand-in at the same share of the supply's voltage as in the forward sweep."""
    if nominal is None:
        return None
    return replace(
        nominal, voltage_V=nominal.voltage_V * volts / supply_V, over_voltage_V=1.1 * volts + 0.5
    )


def _check_limits(stage: Stage, bench: BenchFile, settings: SupplySweep) -> None:
    """InputError for a limit that this sweep of this stage on this bench does not measure."""
    limits, gated = stage.file.limits, stage.gate_nodes is not None
    for key in ("on_from_max_V", "gate_margin_min_V"):
        if getattr(limits, key) is not None and not gated:
            raise InputError(
                f"limits.{key} is given, but the main part {stage.main} has no gate: "
                f"{stage.file.stage.topology} is never off, so leave that limit out"
            )
    if limits.gate_margin_min_V is not None and "gate_voltage" not in bench.points:
        raise InputError(
            "limits.gate_margin_min_V is given, but the bench file has no [points.gate_voltage] "
            "that reads the gate against the source: add that point, or leave the limit out"
        )
    for key in ("on_from_max_V", "useful_from_max_V"):
        most = getattr(limits, key)
        if most is not None and most <= settings.voltages_V[0]:
            raise InputError(
                f"limits.{key} is {most:g}: supply_sweep.voltages_V must begin below it, or it "
                f"cannot be shown to be met; it begins at {settings.voltages_V[0]:g}"
            )


def _check_ratings(stage: Stage, volts: float) -> None:
    """InputError when the highest voltage would take a part beyond a voltage rating: nothing is
    energised that is predicted to break what is being measured."""
    file = stage.file
    working = file.stage.model_copy(update={"supply_max_V": volts, "supply_nominal_V": volts,
                                            "supply_min_V": volts})  # fmt: skip
    trial = replace(stage, file=file.model_copy(update={"stage": working}))
    found = scenario(trial, trial.corner(1), "right-way", surroundings(file))
    for one in found.ratings:
        if one.unit == "V" and not one.holds:
            raise InputError(
                f"supply_sweep.voltages_V ends at {volts:g}: {one.sentence()}. Nothing is "
                "energised that is predicted to break a part: end at a lower voltage"
            )
