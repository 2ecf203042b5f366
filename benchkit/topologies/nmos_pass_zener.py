"""``nmos-pass-zener``: an N-channel pass switch in the minus lead whose gate is limited.

    exposed+ ---------------------------+--------------------- guarded+
                                        |
                                   gate resistor
                                        |
                                        +----|<|-----------+     Zener: cathode to gate, anode
                                       gate                |     to source
    exposed- --(fuse)--(lead)-- drain [N-channel] source --+-- guarded-

The mirror of ``pmos-pass-zener``.
"""

from benchkit.topologies.base import mirrored
from benchkit.topologies.pmos_pass_zener import PMOS_PASS_ZENER

NMOS_PASS_ZENER = mirrored(PMOS_PASS_ZENER, "nmos-pass-zener")
