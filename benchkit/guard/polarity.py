"""Which way round the leads are, proved at a volt and milliamperes."""

from __future__ import annotations

from benchkit.errors import Refused
from benchkit.files.guarding import Thresholds
from benchkit.guard.envelope import PROOF_A, PROOF_V, Envelope
from benchkit.guard.permissives import Read
from benchkit.harness import NAMES, Port, Source

LEVEL_ABOVE_A = 0.01
PROOF_SHARE = 0.2
"""How far the voltage that proves polarity may be off, as a share of it."""


def proof(
    case_max_C: float, thresholds: Thresholds, *, source: Source = "supply", crossed: bool = False
) -> Envelope:
    """The step that proves where one source is. With the leads crossed it may reach its limit."""
    return Envelope(
        "polarity", PROOF_V, PROOF_A, PROOF_V * 1.1 + 0.5,
        # Above the limit, where a supply has a level of its own: reaching the limit proves.
        PROOF_A + LEVEL_ABOVE_A * crossed, case_max_C, 1.0, 30.0,
        may_limit=crossed, guarded_min_V=thresholds.guarded_min_V,
        case_rise_max_K_per_s=thresholds.case_rise_max_K_per_s, source=source,
    )  # fmt: skip


def check_leads(
    read: Read, source: Source, port: Port, sign: int, thresholds: Thresholds, *, limited: bool
) -> bool:
    """See that the plus of ``source`` is where the harness says, and that the meters agree.

    sign: of its voltage at its port. limited: it limits its current. Returns whether the stage
    stands the volt. Refused when the leads are otherwise.
    """
    exposed, guarded = read("exposed_voltage"), read("guarded_voltage")
    drop = read("drop")
    # What still runs down from the proof before moves meanwhile: the mean is that of the drop's
    # own moment.
    guarded = (guarded + read("guarded_voltage")) / 2
    exposed = (exposed + read("exposed_voltage")) / 2
    if limited:
        check_direction(read("exposed_current"), PROOF_A, sign)
    else:
        volts = exposed if port == "exposed" else guarded
        check_polarity(source, port, volts, sign, thresholds)
    check_mesh(exposed, guarded, drop, thresholds)
    return not limited


def check_polarity(
    source: Source, port: Port, port_V: float, sign: int, thresholds: Thresholds
) -> None:
    """What was set arrives at the port, the way round that the harness says (``sign``)."""
    if abs(port_V - sign * PROOF_V) <= PROOF_SHARE * PROOF_V:
        return
    if -sign * port_V > thresholds.residual_V:
        hint = "the leads are crossed" if sign > 0 else "the leads are not crossed"
    else:
        hint = f"the {port} port is shorted, loaded, or not connected"
    raise Refused(
        f"with {PROOF_V:g} V set at {NAMES[source]}, {port}_voltage reads {port_V:.3g} V: {hint}; "
        "nothing larger is applied"
    )


def check_direction(exposed_A: float, limit_A: float, sign: int) -> None:
    """Where the stage conducts, so that the voltage proves nothing, the current does."""
    if not sign * exposed_A >= 0.5 * limit_A:
        raise Refused(
            f"the supply limits its current at {limit_A:g} A, but exposed_current reads "
            f"{exposed_A:.3g} A: neither voltage nor current proves which way round the leads are"
        )


def check_mesh(exposed_V: float, guarded_V: float, drop_V: float, thresholds: Thresholds) -> None:
    """Kirchhoff's voltage law holds around the three meter channels."""
    left = exposed_V - guarded_V - drop_V
    if not abs(left) <= mesh_most_V(exposed_V, thresholds):
        raise Refused(
            f"exposed {exposed_V:.4g} V less guarded {guarded_V:.4g} V less drop {drop_V:.4g} V "
            f"leaves {left:.3g} V, which must be near zero: a measuring lead is off or crossed"
        )


def mesh_most_V(exposed_V: float, thresholds: Thresholds) -> float:
    """How far the three meter channels may contradict one another."""
    return thresholds.mesh_V + thresholds.mesh_percent / 100 * abs(exposed_V)
