"""From a fuse's sheet to its law: melting I2t, time-current points, and its standard's gates.

tau I0^2 is the printed melting I2t exactly, so one parameter is left for the rest: I0 comes from
the printed points by least squares in the logarithm of time, within the gates of the standard.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchkit.errors import InputError
from benchkit.files.parts.passives import Fuse, MeltingPoint
from benchkit.parts.fuse import FuseLaw
from benchkit.parts.tolerance import between

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Standard:
    """What a standard promises of a rating, and how fuses of it are worked.

    carries, opens: multiples of the rated current with the seconds for which it must hold, or
    within which it must open. worked_at: the largest working current over the rated one.
    """

    name: str
    carries: tuple[float, float]
    opens: tuple[tuple[float, float], ...]
    worked_at: float

    @property
    def surely_opens(self) -> float:
        """The smallest multiple of the rated current at which it must open."""
        return min(multiple for multiple, _ in self.opens)


STANDARDS = {
    "ul-248-14": Standard("UL 248-14", (1.0, 4 * 3600.0), ((1.35, 3600.0), (2.0, 120.0)), 0.75),
    "iec-60127-2": Standard("IEC 60127-2", (1.5, 3600.0), ((2.1, 1800.0),), 1.0),
}
"""Gates from memory, common catalogue knowledge (the 2 min of UL 248-14 up to 30 A); worked_at:
common practice, no source."""
SECOND_GATE_MAX_A = 30.0
CLEARING_OVER_MELTING = 2.0
"""Where the sheet gives melting I2t only (common practice, no source)."""
SPREAD = 0.3
"""Of the melting I2t, where the sheet gives none (common practice, no source)."""
HOT_OVER_COLD = 1.5
"""Resistance at the rated current, where the sheet gives no drop (common practice, no source)."""
BELOW_ADIABATIC, REMARKABLE, CONTRADICTS = 2.0, 2.0, 100.0
"""A point whose I2t is less than the melting I2t by more than the first factor, or whose time is
off the law's by more than the last one, is a mistake; by more than the second it is remarked."""
ANCHOR = 10.0
"""Melting I2t is mostly printed for this multiple of the rated current."""


@dataclass(frozen=True)
class FuseModel:
    """The typical law, its spread, and how much later than the law the printed points melt.

    points_A and later: currents and natural logarithms of printed time over the law's time,
    at least 0; the last entry, at ANCHOR times the rated current, is 0.
    """

    part: Fuse
    typical: FuseLaw
    cold_tolerance: float
    spread: float
    points_A: tuple[float, ...]
    later: tuple[float, ...]
    notes: tuple[str, ...]

    @property
    def standard(self) -> Standard:
        """What its rating means."""
        return STANDARDS[self.part.standard]

    @property
    def surely_opens_A(self) -> float:
        """The smallest current at which its standard has it open."""
        return self.standard.surely_opens * self.part.rated_current_A

    def sample(self, a: Floats, b: Floats, c: Floats) -> FuseLaw:  # noqa: ARG002  as every model
        """Sampled parts from standard scores: a cold resistance, b melting I2t (+3: slowest)."""
        typ = self.typical
        slower = between(b, 1 - self.spread, 1.0, 1 + self.spread)
        return FuseLaw(
            typ.cold_ohm * between(a, 1 - self.cold_tolerance, 1.0, 1 + self.cold_tolerance),
            typ.hot_ratio, typ.fusing_A * np.ones_like(slower), typ.melting_s * slower,
            typ.arcing_A2s * slower,
        )  # fmt: skip

    @property
    def slowest(self) -> FuseLaw:
        """The law with the largest melting I2t that the tolerance allows."""
        return self._scaled(1 + self.spread)

    @property
    def fastest(self) -> FuseLaw:
        """The law with the smallest."""
        return self._scaled(1 - self.spread)

    def _scaled(self, share: float) -> FuseLaw:
        typ = self.typical
        return replace(typ, melting_s=typ.melting_s * share, arcing_A2s=typ.arcing_A2s * share)

    def slowest_melt_s(self, current_A: Floats | float) -> Floats:
        """Time until the slowest fuse has melted, from cold; not below what the points say.

        Below the first printed point (ANCHOR times the rated current, without points) its standard
        promises no more than its gates: their times, and a straight line in logarithms from the
        last gate on.
        """
        amps = np.asarray(current_A, dtype=float)
        reach = self.points_A[0]
        gated = np.where(amps < reach, self._gated_s(amps), 0.0)
        return np.asarray(np.maximum(self._melt_s(amps), gated))

    def _melt_s(self, amps: Floats) -> Floats:
        later = np.interp(np.log(amps), np.log(self.points_A), self.later)
        seconds: Floats = self.slowest.time_to_melt_s(amps) * np.exp(later)
        return seconds

    def _gated_s(self, amps: Floats) -> Floats:
        """What the standard's gates allow, up to the first printed point."""
        gates = [(m * self.part.rated_current_A, s) for m, s in _gates(self.part, self.standard)]
        reach = self.points_A[0]
        last_A, last_s = gates[-1]
        end = np.log(max(float(self._melt_s(np.array(reach))), 1e-12))
        seconds = np.full(amps.shape, np.inf)
        for gate, within in gates:
            seconds = np.where(amps >= gate, within, seconds)
        line = np.interp(np.log(amps), np.log([last_A, reach]), [np.log(last_s), end])
        return np.where(amps > last_A, np.exp(line), seconds)

    def slowest_clearing_A2s(self, current_A: Floats | float) -> Floats:
        """The most I2t that it lets through at a constant current, arcing included."""
        melting = np.square(current_A) * self.slowest_melt_s(current_A)
        return np.asarray(melting + self.slowest.arcing_A2s)

    def slowest_clearing_s(self, current_A: Floats | float) -> Floats:
        """Time until the slowest fuse has cleared; its arcing I2t at the same current."""
        return self.slowest_clearing_A2s(current_A) / np.square(current_A)


def fuse_model(reference: str, part: Fuse) -> FuseModel:
    """Fit a fuse's law to its sheet.

    Raises InputError naming ``parts.<reference>`` where its figures contradict each other or the
    gates of its standard.
    """
    standard, rated = STANDARDS[part.standard], part.rated_current_A
    _check_points(f"parts.{reference}.points", part, standard)
    notes: list[str] = []
    fusing = _fusing_A(part, standard)
    if not part.points:
        notes.append(
            f"{reference}: no points of its time-current curve are given; it is taken to open "
            f"above {fusing:.3g} A, between what {standard.name} has it carry and open at"
        )
    tau = part.melting_A2s / fusing**2
    _check_gates(reference, part, standard, fusing, tau)
    clearing = part.clearing_A2s
    if clearing is None:
        clearing = CLEARING_OVER_MELTING * part.melting_A2s
        notes.append(
            f"{reference}: no clearing I2t is printed; {CLEARING_OVER_MELTING:g} times its melting "
            "I2t is taken"
        )
    law = FuseLaw(
        part.cold_ohm, _hot_ratio(reference, part, fusing, notes), fusing, tau,
        clearing - part.melting_A2s,
    )  # fmt: skip
    spread = SPREAD
    if part.spread_percent is not None:
        spread = part.spread_percent / 100
    else:
        notes.append(
            f"{reference}: the spread of its melting I2t is not printed; {100 * SPREAD:g} % either "
            "way is taken"
        )
    amps, later = _later(reference, part.points, law, notes)
    amps.append(max(ANCHOR * rated, 1.001 * max(amps, default=0.0)))
    return FuseModel(
        part, law, part.cold_tolerance_percent / 100, spread, tuple(amps), (*later, 0.0),
        tuple(notes),
    )  # fmt: skip


def _fusing_A(part: Fuse, standard: Standard) -> float:
    """I0 within the gates: the middle of them, or what fits the points."""
    from scipy.optimize import minimize_scalar

    rated = part.rated_current_A
    low, high = (np.log(rated * m) for m in (standard.carries[0], standard.surely_opens))
    melts = [p for p in part.points if p.current_A > rated * standard.carries[0]]
    if not melts:
        return float(np.exp(0.5 * (low + high)))
    # A fuse that just opened at a printed current would take for ever there.
    high = min(high, np.log(min(p.current_A for p in melts)))
    amps = np.array([p.current_A for p in melts])
    printed = np.log([p.time_s for p in melts])

    def off(log_fusing: float) -> float:
        fusing = float(np.exp(log_fusing))
        law = FuseLaw(1.0, 0.0, fusing, part.melting_A2s / fusing**2, 0.0)
        return float(np.square(np.log(law.time_to_melt_s(amps)) - printed).sum())

    # Not to the very gate: there the time to melt is infinite.
    edge = 1e-3 * (high - low)
    found = minimize_scalar(
        off, bounds=(low, high - edge), method="bounded", options={"xatol": 1e-10}
    )
    return float(np.exp(found.x))


def _check_points(name: str, part: Fuse, standard: Standard) -> None:
    """Each point against the gates and the melting I2t."""
    rated = part.rated_current_A
    carries, holds_s = standard.carries
    for point in part.points:
        multiple = point.current_A / rated
        if multiple <= carries and point.time_s < holds_s:
            raise InputError(
                f"{name} has {point.time_s:g} s at {point.current_A:g} A: a fuse of "
                f"{standard.name} rated {rated:g} A must carry {carries:g} times that for "
                f"{holds_s / 3600:g} h; check the current, or standard"
            )
        for gate, within_s in _gates(part, standard):
            if multiple >= gate and point.time_s > within_s:
                raise InputError(
                    f"{name} has {point.time_s:g} s at {point.current_A:g} A: a fuse of "
                    f"{standard.name} rated {rated:g} A must open within {within_s:g} s at "
                    f"{gate:g} times that; check the time, or standard"
                )
        let_through = point.current_A**2 * point.time_s
        if let_through < part.melting_A2s / BELOW_ADIABATIC:
            raise InputError(
                f"{name} contradicts melting_A2s {part.melting_A2s:g}: {point.time_s:g} s at "
                f"{point.current_A:g} A are {let_through:.3g} A2s only, and no current melts a "
                "fuse with less than its melting I2t"
            )


def _gates(part: Fuse, standard: Standard) -> Sequence[tuple[float, float]]:
    large = part.rated_current_A > SECOND_GATE_MAX_A
    return standard.opens[:1] if large else standard.opens


def _check_gates(reference: str, part: Fuse, standard: Standard, fusing: float, tau: float) -> None:
    law = FuseLaw(1.0, 0.0, fusing, tau, 0.0)
    for gate, within_s in _gates(part, standard):
        seconds = float(law.time_to_melt_s(gate * part.rated_current_A))
        if seconds > within_s:
            raise InputError(
                f"parts.{reference}.melting_A2s is {part.melting_A2s:g}: at {gate:g} times its "
                f"rated current such a fuse would take {seconds:.3g} s, and {standard.name} has it "
                f"open within {within_s:g} s; check melting_A2s, rated_current_A and standard"
            )


def _hot_ratio(reference: str, part: Fuse, fusing: float, notes: list[str]) -> float:
    """How much its resistance has risen where it melts, from its drop at the rated current."""
    warmth = (part.rated_current_A / fusing) ** 2
    cold_V = part.cold_ohm * part.rated_current_A
    if part.drop_V is None:
        notes.append(
            f"{reference}: no drop at the rated current is printed; its resistance is taken to be "
            f"{HOT_OVER_COLD:g} times the cold one there"
        )
        return (HOT_OVER_COLD - 1) / warmth
    if part.drop_V < cold_V * (1 - part.cold_tolerance_percent / 100):
        raise InputError(
            f"parts.{reference}.drop_V is {part.drop_V:g}: its cold_ohm alone drops {cold_V:.3g} V "
            "at the rated current, and a warm fuse drops more"
        )
    return max(part.drop_V / cold_V - 1, 0.0) / warmth


def _later(
    reference: str, points: Sequence[MeltingPoint], law: FuseLaw, notes: list[str]
) -> tuple[list[float], list[float]]:
    """Currents of the points, and by how much (logarithm) they melt later than the law."""
    amps, later = [], []
    for point in points:
        seconds = float(law.time_to_melt_s(point.current_A))
        if not np.isfinite(seconds):
            continue
        ratio = point.time_s / seconds
        if not 1 / CONTRADICTS <= ratio <= CONTRADICTS:
            raise InputError(
                f"parts.{reference}.points contradicts melting_A2s {law.melting_A2s:.4g}: "
                f"{point.time_s:g} s at {point.current_A:g} A, where a fuse of that I2t takes "
                f"about {seconds:.2g} s; seconds, not milliseconds"
            )
        if ratio > REMARKABLE or ratio < 1 / REMARKABLE:
            notes.append(
                f"{reference}: its point at {point.current_A:g} A melts in {point.time_s:g} s and "
                f"the law in {seconds:.2g} s; the later of the two is taken where it must clear"
            )
        amps.append(point.current_A)
        later.append(max(float(np.log(ratio)), 0.0))
    return amps, later
