"""Where a stage's fuse has to open, and whether it does in time."""

from __future__ import annotations

import numpy as np

from benchkit.circuit import Emf, LimitedSource
from benchkit.circuit.network import Element
from benchkit.files.parts import Diode, Fuse, Tvs
from benchkit.parts.fuse_points import FuseModel
from benchkit.prediction.connections import Connection
from benchkit.prediction.coordination import Coordination, coordinate
from benchkit.prediction.operating_point import OperatingPoint
from benchkit.stage import Stage


def fuse_of(stage: Stage) -> str | None:
    """Reference of the stage's fuse, the first if there are several."""
    return next((ref for ref, part in stage.file.parts.items() if isinstance(part, Fuse)), None)


def opening(stage: Stage, name: str, point: OperatingPoint) -> Coordination | None:
    """The fuse's coordination in a reversed scenario that drives more than its rating through it.

    None where there is no fuse, or nothing that it would have to open for.
    """
    reference = fuse_of(stage)
    if reference is None or not name.startswith("reversed"):
        return None
    model = stage.models[reference]
    assert isinstance(model, FuseModel)
    amps = np.abs(point.part(reference).current_A)
    if amps.max() <= model.part.rated_current_A:
        return None
    main, working = stage.main_part, stage.file.stage
    asked = amps[amps > model.part.rated_current_A]
    volts = _driving_V(point.connection)
    return coordinate(
        model,
        clamp_A2s=main.surge_A2s if isinstance(main, Diode | Tvs) else None,
        current_A=float(asked.min()),
        prospective_A=max(_prospective_A(point.connection), float(amps.max())),
        voltage_V=volts,
        working_A=working.current_max_A,
        ambient_C=working.ambient_max_C,
        name=reference,
        clamp=stage.main,
    )


def _driving_V(connection: Connection) -> float:
    """What the fuse stands once it is open: the sum of what both sides hold."""
    return sum(_volts(element) for element in (*connection.exposed, *connection.guarded))


def _prospective_A(connection: Connection) -> float:
    """What flows into a dead short in the fuse's place, stage and fuse left out."""
    limits = [float(np.max(e.limit_A)) for e in connection.exposed if isinstance(e, LimitedSource)]
    stiff = [e for e in (*connection.exposed, *connection.guarded) if isinstance(e, Emf)]
    alone = [_volts(e) / float(np.min(e.ohms)) for e in connection.exposed if isinstance(e, Emf)]
    # What holds the guarded side also drives a supply in its limit, through its output diode.
    both = sum(map(_volts, stiff)) / sum(float(np.min(e.ohms)) for e in stiff) if stiff else 0.0
    return max([*limits, *alone, both])


def _volts(element: Element) -> float:
    return float(np.max(element.emf_V)) if isinstance(element, Emf | LimitedSource) else 0.0
