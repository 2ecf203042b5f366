"""``pmos-pass``: a P-channel MOSFET in the plus lead, gate tied to the minus lead.

    exposed+ --(fuse)--(lead)-- drain [P-channel] source --- guarded+    body diode: drain to source
                                       gate
                                        |
                                   (gate resistor)
                                        |
    exposed- ---------------------------+------------------- guarded-

Right way round the body diode conducts first; the source rises to the supply voltage less its
drop, which drives the gate by that much, and the channel shorts the body diode out. The wrong way
round the gate is above the source and the body diode blocks. The gate sees the whole supply
voltage, so its rating bounds the supply. While the guarded side holds a voltage of its own the
channel stays on, whatever the exposed side does.
"""

from benchkit.circuit.network import GROUND
from benchkit.topologies.base import INNER, Role, Topology, in_lead

PMOS_PASS = Topology(
    "pmos-pass",
    {
        "pass": Role(("p-mosfet",), (INNER, "gate", "guarded+")),
        "gate": Role(("resistor",), ("gate", GROUND), "short"),
        **in_lead(),
    },
    main="pass", guards="load", conducts="channel",
)  # fmt: skip
