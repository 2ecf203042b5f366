"""Which way round the leads are, proved at a volt and milliamperes."""

from __future__ import annotations

from benchkit.errors import Refused
from benchkit.guard.envelope import Envelope
from benchkit.guard.permissives import RESIDUAL_V, Read

PROOF_V, PROOF_A = 1.0, 0.05
"""Polarity is proved at this voltage and current limit before anything larger."""
PROOF_SHARE = 0.2
"""How far the voltage that proves polarity may be off, as a share of it."""
MESH_V, MESH_SHARE = 0.03, 0.005
"""Exposed less guarded voltage must equal the drop within this and a share of the voltage."""


def proof(case_max_C: float, *, crossed: bool) -> Envelope:
    """The step that proves it. With the leads crossed the supply may reach its limit."""
    return Envelope(
        "polarity", PROOF_V, PROOF_A, PROOF_V * 1.1 + 0.5, PROOF_A, case_max_C, 1.0, 30.0,
        may_limit=crossed,
    )  # fmt: skip


def check_leads(read: Read, sign: int, *, limited: bool) -> bool:
    """See that plus is where the harness says, and that the meters agree.

    sign: of the exposed voltage in this harness. limited: the supply limits its current. Returns
    whether the stage stands the volt. Refused when the leads are otherwise.
    """
    exposed = read("exposed_voltage")
    if limited:
        check_direction(read("exposed_current"), PROOF_A, sign)
    else:
        check_polarity(exposed, PROOF_V, sign)
    check_mesh(exposed, read("guarded_voltage"), read("drop"))
    return not limited


def check_polarity(exposed_V: float, set_V: float, sign: int = 1) -> None:
    """What was set arrives at the exposed port, the way round that the harness says (``sign``)."""
    if abs(exposed_V - sign * set_V) <= PROOF_SHARE * set_V:
        return
    if -sign * exposed_V > RESIDUAL_V:
        hint = "the leads are crossed" if sign > 0 else "the leads are not crossed"
    else:
        hint = "the exposed port is shorted, loaded, or not connected"
    raise Refused(
        f"with {set_V:g} V set, exposed_voltage reads {exposed_V:.3g} V: {hint}; nothing "
        "larger is applied"
    )


def check_direction(exposed_A: float, limit_A: float, sign: int) -> None:
    """Where the stage conducts, so that the voltage proves nothing, the current does."""
    if not sign * exposed_A >= 0.5 * limit_A:
        raise Refused(
            f"the supply limits its current at {limit_A:g} A, but exposed_current reads "
            f"{exposed_A:.3g} A: neither voltage nor current proves which way round the leads are"
        )


def check_mesh(exposed_V: float, guarded_V: float, drop_V: float) -> None:
    """Kirchhoff's voltage law holds around the three meter channels."""
    left = exposed_V - guarded_V - drop_V
    if not abs(left) <= MESH_V + MESH_SHARE * abs(exposed_V):
        raise Refused(
            f"exposed {exposed_V:.4g} V less guarded {guarded_V:.4g} V less drop {drop_V:.4g} V "
            f"leaves {left:.3g} V, which must be near zero: a measuring lead is off or crossed"
        )
