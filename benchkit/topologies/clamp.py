"""``clamp``: a diode across the terminals, cathode to plus.

    exposed+ ---(lead)---+--- guarded+
                         |
                       -----  cathode
                        / \\
                       -----  anode
                         |
    exposed- ------------+--- guarded-

Right way round it only leaks. The wrong way round it conducts, so that the guarded side never sees
more than its forward drop in reverse; but nothing ends that current save the source itself. A
source that can give more than the diode stands destroys it, mostly into a short.
"""

from benchkit.circuit.network import GROUND
from benchkit.topologies.base import Role, Topology

CLAMP = Topology(
    "clamp",
    {
        "clamp": Role(("diode", "tvs"), (GROUND, "guarded+")),
        "lead": Role(("lead",), ("exposed+", "guarded+"), "short"),
    },
    main="clamp", guards="supply", conducts="lead",
)  # fmt: skip
