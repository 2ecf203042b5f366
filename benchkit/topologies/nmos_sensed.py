"""``nmos-sensed``: an N-channel switch in the minus lead of a charger, with a PNP that senses.

    exposed+ ------------------------------+---------------------- guarded+
                                           |
                                       emitter
               +-------- base ------- base [PNP]
               |                       collector
               |                           |
               |                        (pull)
               |                           |
               |                           +---- hold ---------+
               |                          gate                 |
    exposed- --+--(fuse)--(lead)-- drain [N-channel] source ---+-- guarded-

The mirror of ``pmos-sensed``: the gate is held at the source, and the PNP pulls it up once the
battery is there the right way round.
"""

from benchkit.topologies.base import mirrored
from benchkit.topologies.pmos_sensed import PMOS_SENSED

NMOS_SENSED = mirrored(PMOS_SENSED, "nmos-sensed")
