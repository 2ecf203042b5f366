"""A network of parts and the one solver that finds its operating point."""

from benchkit.circuit.elements import (
    Channel,
    CurrentLoad,
    Junction,
    LimitedSource,
    Resistor,
)
from benchkit.circuit.network import GROUND, Network, network
from benchkit.circuit.solver import Solution, solve

__all__ = [
    "GROUND", "Channel", "CurrentLoad", "Junction", "LimitedSource", "Network", "Resistor",
    "Solution", "network", "solve",
]  # fmt: skip
