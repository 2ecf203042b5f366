"""The errors that a bench's declared accuracy allows, as budget components with one name each.

An error of gain or offset is one error for a whole sweep: it carries one name, and wherever two
results share it (the drop and the shunt read by one meter on one range) it adds with its sign.
"""

from __future__ import annotations

import math

from benchkit.files import StageFile
from benchkit.files.bench import BenchFile, PointName
from benchkit.metrology import Accuracy, Component
from benchkit.topologies import TOPOLOGIES

ROOT3 = math.sqrt(3.0)


def accuracy_of(bench: BenchFile, point: PointName, range_V: float) -> Accuracy:
    """Declared accuracy of the range a point was read on."""
    declared = bench.instruments[bench.points[point].instrument].voltage
    row = next(a for a in declared if a.range_V == range_V)
    return Accuracy(row.range_V, row.reading_percent, row.range_percent)


def gain(bench: BenchFile, point: PointName, range_V: float, effect: float) -> Component:
    """Gain error of the range; ``effect`` is the result's change for a relative gain of one."""
    name = f"{bench.points[point].instrument} gain on its {range_V:g} V range"
    limit = accuracy_of(bench, point, range_V).gain_limit()
    return Component(name, effect * limit / ROOT3, "rectangular")


def rectangular(name: str, limit: float) -> Component:
    """A declared limit of error, already multiplied by its sensitivity."""
    return Component(name, limit / ROOT3, "rectangular")


def flow_of(stage: StageFile) -> int:
    """Sign of exposed current and drop while the stage is driven the right way round: a stage that
    guards a supply is fed at its guarded port."""
    topology = TOPOLOGIES.get(stage.stage.topology)
    usual = topology.guards if topology is not None else "load"
    return 1 if (stage.stage.guards or usual) == "load" else -1
