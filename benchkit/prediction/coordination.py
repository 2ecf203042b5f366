"""Does the fuse save the clamp? Clearing time and I2t against what the clamp stands.

Two currents matter. At the smallest that the source can drive the fuse takes longest, and lets
through most; the largest, the prospective current, is the one that it must be able to break. Both
are judged with the slowest fuse that the tolerance allows, started cold. The clamp's surge rating
is taken as an I2t whatever the time: in a pulse much longer than the rating's, heat flows away and
the clamp stands more, so the answer errs on the safe side.

Pure functions of numbers; amperes, volts, seconds, A2s, degrees Celsius.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass

import numpy as np

from benchkit.parts.fuse_points import ANCHOR, FuseModel

AMBIENT_SHARE_PER_K = 0.004
"""A fuse's working current is reduced by this share of its rating per kelvin above 25 C (common
practice, no source; the slow kinds, which need the most)."""
REFERENCE_C = 25.0
INSIDE = 0.999
"""Of what the clamp stands, a fuse of the very figures that are advised lets through no more."""


def half_sine_A2s(peak_A: float, width_s: float) -> float:
    """I2t of a half-sine: a printed surge current IFSM and its width. Its mean square is half."""
    return peak_A**2 * width_s / 2


@dataclass(frozen=True)
class Coordination:
    """What the fuse does when the clamp conducts.

    clears_in_s: the slowest fuse at the smallest current; infinite where it is not sure to open.
    let_through_A2s: the most between smallest and prospective current. nuisance_margin: allowed
    working current over the actual one. coordinated: it opens, in time, and can break what flows;
    nuisance opening is apart from that. notes: one sentence for each thing that does not hold,
    and one on what fuse would do.
    """

    clears_in_s: float
    let_through_A2s: float
    clamp_A2s: float | None
    current_A: float
    prospective_A: float
    breaking_A: float
    voltage_V: float
    rated_voltage_V: float
    surely_opens_A: float
    working_A: float
    working_allowed_A: float
    nuisance_margin: float
    coordinated: bool
    notes: tuple[str, ...]

    def document(self) -> dict[str, object]:
        """As JSON-ready values; null where it never opens."""
        values: dict[str, object] = asdict(self)
        values["notes"] = list(self.notes)
        for key in ("clears_in_s", "let_through_A2s"):
            if not np.isfinite(getattr(self, key)):
                values[key] = None
        return values


def worked_share(fuse: FuseModel, ambient_C: float) -> float:
    """The largest working current over the rated one, at an ambient temperature."""
    warm = max(ambient_C - REFERENCE_C, 0.0)
    return fuse.standard.worked_at * max(1 - AMBIENT_SHARE_PER_K * warm, 0.0)


def coordinate(
    fuse: FuseModel, *, clamp_A2s: float | None, current_A: float, prospective_A: float,
    voltage_V: float, working_A: float, ambient_C: float = REFERENCE_C, name: str = "the fuse",
    clamp: str = "the clamp",
) -> Coordination:  # fmt: skip
    """Judge a fuse against what it has to clear.

    current_A and prospective_A: smallest and largest current through fuse and clamp. voltage_V:
    what it must stand once open. working_A: the largest current of normal use. clamp_A2s: None
    where the clamp's sheet prints no surge rating; clamp: what it is called. ValueError unless
    0 < current_A <= prospective_A and working_A > 0.
    """
    if not 0 < current_A <= prospective_A or working_A <= 0:
        raise ValueError(
            f"current_A {current_A:g}, prospective_A {prospective_A:g} and working_A "
            f"{working_A:g} must be above 0, the first not above the second"
        )
    part, sure_A = fuse.part, fuse.surely_opens_A
    opens = current_A >= sure_A
    clears, through = float("inf"), float("inf")
    if opens:
        clears = float(fuse.slowest_clearing_s(current_A))
        # It need not fall with current everywhere: between two of these it has no maximum.
        gates = [np.nextafter(m * part.rated_current_A, 0.0) for m, _ in fuse.standard.opens]
        amps = np.clip([*fuse.points_A, *gates, current_A, prospective_A], current_A, prospective_A)
        through = float(fuse.slowest_clearing_A2s(amps).max())
    share = worked_share(fuse, ambient_C)
    allowed = share * part.rated_current_A
    broken = part.breaking_A >= prospective_A
    stands = part.rated_voltage_V >= voltage_V
    saved = clamp_A2s is not None and through <= clamp_A2s
    notes: list[str] = []
    if not opens:
        notes.append(_never(fuse, current_A, name, clamp))
    elif clamp_A2s is None:
        notes.append(
            f"no surge rating of {clamp} is given: whether it stands the {_three(through)} A2s "
            f"that {name} lets through cannot be said"
        )
    elif not saved:
        notes.append(
            f"{name} lets through up to {_three(through)} A2s, and the clamp stands "
            f"{_three(clamp_A2s)} A2s: at {_three(current_A)} A it takes up to {_time(clears)} to "
            f"clear{_unprinted(fuse, current_A)}"
        )
    if not broken:
        notes.append(
            f"{name} can break {_three(part.breaking_A)} A, and up to {_three(prospective_A)} A "
            "can flow: it may arc on or burst"
        )
    if not stands:
        notes.append(
            f"{name} is rated {_three(part.rated_voltage_V)} V, and {_three(voltage_V)} V stand "
            "across it once it is open"
        )
    if working_A > allowed:
        notes.append(
            f"{name} would open now and then without cause: it is worked at {_three(working_A)} A, "
            f"and at {ambient_C:g} C a {fuse.standard.name} fuse of {part.rated_current_A:g} A is "
            f"good for {_three(allowed)} A"
        )
    wanted = _Wanted(clamp_A2s, current_A, prospective_A, voltage_V, working_A, share)
    if notes and (clamp_A2s is not None or len(notes) > 1 or not opens):
        notes.append(_advice(fuse, wanted))
    return Coordination(
        clears, through, clamp_A2s, current_A, prospective_A, part.breaking_A, voltage_V,
        part.rated_voltage_V, sure_A, working_A, allowed, allowed / working_A,
        opens and saved and broken and stands, tuple(notes),
    )  # fmt: skip


def _unprinted(fuse: FuseModel, current_A: float) -> str:
    """Why it is that long, where it may be for want of a printed curve."""
    if current_A >= fuse.points_A[0]:
        return ""
    return (
        f" (no more is promised of a {fuse.standard.name} fuse without a point of its time-current "
        "curve at that current or below)"
    )


def _never(fuse: FuseModel, current_A: float, name: str, clamp: str) -> str:
    """Why it is not sure to open."""
    rated, fusing = fuse.part.rated_current_A, float(fuse.typical.fusing_A)
    standard, sure = fuse.standard, fuse.surely_opens_A
    promise = (
        f"a {standard.name} fuse of {rated:g} A is sure to open from {_three(sure)} A on only "
        f"({standard.surely_opens:g} times its rating)"
    )
    if current_A <= fusing:
        return (
            f"the source drives {_three(current_A)} A at least, and {name} does not open at that: "
            f"{promise}; {clamp} goes on conducting"
        )
    typical = float(fuse.typical.time_to_melt_s(current_A))
    return (
        f"the source drives {_three(current_A)} A at least, and at that {name} may stay whole: "
        f"{promise}, though a typical one melts in about {_time(typical)}"
    )


@dataclass(frozen=True)
class _Wanted:
    """What a fuse has to do here."""

    clamp_A2s: float | None
    current_A: float
    prospective_A: float
    voltage_V: float
    working_A: float
    share: float


def _advice(fuse: FuseModel, wanted: _Wanted) -> str:
    """What fuse of the same standard would do, in numbers."""
    standard = fuse.standard
    most = wanted.current_A / standard.surely_opens
    least = wanted.working_A / wanted.share if wanted.share > 0 else float("inf")
    if least > most:
        return (
            f"no {standard.name} fuse does both: to carry {_three(wanted.working_A)} A it has to "
            f"be rated {_up(least)} A or more, and to open at {_three(wanted.current_A)} A "
            f"{_down(most)} A or less; a stage that blocks instead of clamping needs no fuse for "
            "this"
        )
    asked = wanted.current_A < ANCHOR * max(least, fuse.part.rated_current_A)
    if wanted.clamp_A2s is not None and not asked:
        most = wanted.current_A / ANCHOR
    needs = [f"rated between {_up(least)} and {_down(most)} A"]
    if wanted.clamp_A2s is not None:
        needs += _quick(fuse, wanted.clamp_A2s, wanted.current_A, most, asked=asked)
    needs.append(f"with a breaking capacity of at least {_up(wanted.prospective_A)} A")
    return (
        f"a {standard.name} fuse {', '.join(needs)} at {_three(wanted.voltage_V)} V, which still "
        f"carries {_three(wanted.working_A)} A, would do"
    )


def _quick(
    fuse: FuseModel, clamp_A2s: float, current_A: float, most_A: float, *, asked: bool
) -> list[str]:
    """The melting I2t with which no fuse rated up to ``most_A`` lets through what is too much.

    asked: the time to melt that its printed curve must have besides, as nearer to the rating than
    ANCHOR times the gates of its standard promise less. Spread and the share of arcing are this
    fuse's.
    """
    melted_A2s = INSIDE * clamp_A2s / (1 + fuse.spread)
    arcing = float(fuse.typical.arcing_A2s / fuse.typical.melting_A2s)
    # With a point in print the law is fitted to it, and is at least that of a fuse that just
    # carries what it must; without one it is at most that of one that just opens where it must.
    multiple = fuse.standard.carries[0] if asked else fuse.standard.surely_opens
    share = (multiple * most_A / current_A) ** 2
    adiabatic = float(-np.log1p(-share)) / share
    melting = _down(melted_A2s / (adiabatic + arcing))
    needs = [f"with a melting I2t below {melting} A2s"]
    if asked:
        seconds = (melted_A2s - arcing * float(melting)) / current_A**2
        needs.append(
            f"whose printed curve has it melt within {_time(seconds, np.floor)} at "
            f"{_three(current_A)} A"
        )
    return needs


def _down(value: float) -> str:
    """Three figures, never above the value."""
    return _three(value, np.floor)


def _up(value: float) -> str:
    """Three figures, never below the value."""
    return _three(value, np.ceil)


def _three(value: float, whole: np.ufunc = np.rint) -> str:
    """Three figures without an exponent below a million."""
    if not np.isfinite(value) or value == 0:
        return f"{value:g}"
    unit = 10.0 ** (np.floor(np.log10(value)) - 2)
    return f"{float(whole(np.round(value / unit, 6))) * unit:g}"


def _time(seconds: float, whole: np.ufunc = np.rint) -> str:
    if seconds < 1:
        return f"{_three(1000 * seconds, whole)} ms"
    if seconds < 600:
        return f"{_three(seconds, whole)} s"
    return f"{_three(seconds / 60, whole)} min"
