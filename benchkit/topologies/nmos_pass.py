"""``nmos-pass``: an N-channel MOSFET in the minus lead, gate tied to the plus lead.

    exposed+ ---------------------------+------------------- guarded+
                                        |
                                   (gate resistor)
                                        |
                                       gate
    exposed- --(fuse)--(lead)-- drain [N-channel] source --- guarded-    body diode: source to drain

The mirror of ``pmos-pass``: the same, with every voltage and current turned round. Fuse and lead
are drawn in the minus lead; the loop is the same wherever they are.
"""

from benchkit.topologies.base import mirrored
from benchkit.topologies.pmos_pass import PMOS_PASS

NMOS_PASS = mirrored(PMOS_PASS, "nmos-pass")
