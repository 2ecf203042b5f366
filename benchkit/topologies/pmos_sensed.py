"""``pmos-sensed``: a P-channel switch in the plus lead of a charger, on only for a battery that is
connected right way round.

    exposed+ --+--(fuse)--(lead)-- drain [P-channel] source ---+-- guarded+
               |                          gate                 |
               |                           +---- hold ---------+
               |                           |
               |                        (pull)
               |                           |
               |                       collector
               +-------- base ------- base [NPN]
                                       emitter
                                           |
    exposed- ------------------------------+---------------------- guarded-

The gate is held at the source by a resistor, so the switch is off; the NPN, fed from the exposed
terminal itself through the base resistor, pulls the gate down once the battery is there, right way
round.
The working current flows from the guarded side into the battery. A reversed battery turns the
transistor's base-emitter junction off, and strains it: beyond 5 to 7 V it breaks down, unless a
diode across it (``protect``) or enough resistance keeps that harmless. Also optional: a resistor
from base to emitter (``bleed``) against leakage, and a gate-source Zener (``zener``).
"""

from benchkit.circuit.network import GROUND
from benchkit.topologies.base import INNER, Role, Topology, in_lead

PMOS_SENSED = Topology(
    "pmos-sensed",
    {
        "pass": Role(("p-mosfet",), (INNER, "gate", "guarded+")),
        "hold": Role(("resistor",), ("gate", "guarded+")),
        "pull": Role(("resistor",), ("gate", "collector"), "short"),
        "sense": Role(("npn",), ("collector", "base", GROUND)),
        "base": Role(("resistor",), ("exposed+", "base")),
        "protect": Role(("diode",), (GROUND, "base"), "open"),
        "bleed": Role(("resistor",), ("base", GROUND), "open"),
        "zener": Role(("zener",), ("gate", "guarded+"), "open"),
        **in_lead(),
    },
    main="pass", guards="supply", conducts="channel",
)  # fmt: skip
