"""``fused-clamp``: a diode across the guarded terminals, behind a fuse in the plus lead.

    exposed+ ---fuse---(lead)---+--- guarded+
                                |
                              -----  cathode
                               / \\
                              -----  anode
                                |
    exposed- -------------------+--- guarded-

The wrong way round the diode conducts and the fuse must open before the diode's surge rating is
spent; and it must be able to break whatever the source can drive. The working current flows
through the fuse, which must carry it for ever.
"""

from benchkit.circuit.network import GROUND
from benchkit.topologies.base import Role, Topology

FUSED_CLAMP = Topology(
    "fused-clamp",
    {
        "clamp": Role(("diode", "tvs"), (GROUND, "guarded+")),
        "fuse": Role(("fuse",), ("exposed+", "fused")),
        "lead": Role(("lead",), ("fused", "guarded+"), "short"),
    },
    main="clamp", guards="supply", conducts="lead",
)  # fmt: skip
