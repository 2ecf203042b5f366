"""The simulated bench: SCPI instruments on loopback TCP in front of a world of circuit and heat.

``server.serve`` offers them in this process, ``child.start_child`` in another one. Little is
imported here, so that a child process starts quickly.
"""

from instruments.simulated import link_faults

INSTRUMENT_FAULTS = {
    **link_faults.INSTRUMENT_FAULTS,
    "relay-stuck:*": "switch: relays stay where they are, and the read-back says so; value = the "
    "route of the one that does, all if not given",
    "relay-lying:*": "switch: relays stay where they are, and the read-back says what was asked "
    "for; value = the route of the one that does, all if not given",
}
"""Pattern -> what it does; the star stands for the instrument's name in the bench file."""

__all__ = ["INSTRUMENT_FAULTS"]
