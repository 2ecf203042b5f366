"""A network of parts and the one solver that finds its operating point."""

from benchkit.circuit.elements import (
    Bipolar,
    Channel,
    CurrentLoad,
    Emf,
    FuseLink,
    Junction,
    LimitedSource,
    Resistor,
)
from benchkit.circuit.network import GROUND, Network, network
from benchkit.circuit.solver import Solution, solve

__all__ = [
    "GROUND", "Bipolar", "Channel", "CurrentLoad", "Emf", "FuseLink", "Junction", "LimitedSource",
    "Network", "Resistor", "Solution", "network", "solve",
]  # fmt: skip
