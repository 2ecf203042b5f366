"""``series-diode``: a Schottky or rectifier in the plus lead.

    exposed+ ---(fuse)---(lead)---|>|--- guarded+        anode to the exposed side
    exposed- --------------------------- guarded-        the minus lead runs straight through

Right way round the whole working current flows through the diode, and its drop is lost all the
time. The wrong way round it blocks: it must stand the reversed voltage, plus whatever the guarded
side still holds.
"""

from benchkit.topologies.base import INNER, Role, Topology, in_lead

SERIES_DIODE = Topology(
    "series-diode",
    {"diode": Role(("diode",), (INNER, "guarded+")), **in_lead()},
    main="diode", guards="load", conducts="junction",
)  # fmt: skip
