"""The circuits a stage can be, each in the file of its own name."""

from collections.abc import Mapping

from benchkit.topologies.base import Topology
from benchkit.topologies.pmos_pass import PmosPass
from benchkit.topologies.series_diode import SeriesDiode

TOPOLOGIES: Mapping[str, Topology] = {t.name: t for t in (SeriesDiode(), PmosPass())}
"""Every topology by its name in a stage file."""

__all__ = ["TOPOLOGIES", "Topology"]
