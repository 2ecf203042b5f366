"""The circuits a stage can be, each in the file of its own name."""

from collections.abc import Mapping

from benchkit.topologies.base import Ports, Topology, Wiring, wire, wire_network
from benchkit.topologies.clamp import CLAMP
from benchkit.topologies.fused_clamp import FUSED_CLAMP
from benchkit.topologies.nmos_pass import NMOS_PASS
from benchkit.topologies.nmos_pass_zener import NMOS_PASS_ZENER
from benchkit.topologies.nmos_sensed import NMOS_SENSED
from benchkit.topologies.pmos_pass import PMOS_PASS
from benchkit.topologies.pmos_pass_zener import PMOS_PASS_ZENER
from benchkit.topologies.pmos_sensed import PMOS_SENSED
from benchkit.topologies.series_diode import SERIES_DIODE

TOPOLOGIES: Mapping[str, Topology] = {
    topology.name: topology
    for topology in (
        CLAMP, FUSED_CLAMP, SERIES_DIODE, PMOS_PASS, PMOS_PASS_ZENER, PMOS_SENSED, NMOS_PASS,
        NMOS_PASS_ZENER, NMOS_SENSED,
    )
}  # fmt: skip
"""Every topology by its name in a stage file."""

__all__ = ["TOPOLOGIES", "Ports", "Topology", "Wiring", "wire", "wire_network"]
