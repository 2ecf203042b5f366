"""The simulated bench: SCPI instruments on loopback TCP in front of a world of circuit and heat.

``server.serve`` offers them in this process, ``child.start_child`` in another one. Little is
imported here, so that a child process starts quickly.
"""

from instruments.simulated.link_faults import INSTRUMENT_FAULTS

__all__ = ["INSTRUMENT_FAULTS"]
