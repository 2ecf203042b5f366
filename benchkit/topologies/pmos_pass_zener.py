"""``pmos-pass-zener``: a P-channel pass switch whose gate is limited, for high supply voltages.

    exposed+ --(fuse)--(lead)-- drain [P-channel] source --+-- guarded+
                                       gate                |
                                        +----|<|-----------+     Zener: anode to gate, cathode
                                        |                        to source
                                   gate resistor
                                        |
    exposed- ---------------------------+--------------------- guarded-

As ``pmos-pass``, but the gate falls no further below the source than the Zener voltage; the rest
of the supply voltage stands across the gate resistor, and Zener and resistor burn power.
"""

from benchkit.circuit.network import GROUND
from benchkit.topologies.base import Role, Topology
from benchkit.topologies.pmos_pass import PMOS_PASS

PMOS_PASS_ZENER = Topology(
    "pmos-pass-zener",
    {
        **PMOS_PASS.roles,
        "gate": Role(("resistor",), ("gate", GROUND)),
        "zener": Role(("zener",), ("gate", "guarded+")),
    },
    main="pass", guards="load", conducts="channel",
)  # fmt: skip
