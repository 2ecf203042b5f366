"""Both sides of the benchmark work on the same physics; how fast they are is not tested here."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from benchkit.prediction.forward import forward
from tests.benchkit.nine_stages import made
from tests.benchkit.test_circuit_ngspice import found_ngspice
from tests.benchmarks.monte_carlo_spice import BLOCK, FORMS, MonteCarlo
from tests.benchmarks.solver import CURRENTS_A, JUNCTION_C, SUPPLY_V


@pytest.mark.parametrize("form", FORMS)
def test_drops_of_sampled_boards_agree_with_ngspice(tmp_path: Path, form: str) -> None:
    """Its square law takes n = 1 for the channel: 0.1 x drop / overdrive of a drop, below 1e-4."""
    stage = made("pmos-sensed")
    sample = stage.draw(BLOCK, 5)
    spice = MonteCarlo(found_ngspice(), tmp_path, sample, SUPPLY_V, CURRENTS_A)
    theirs, seconds = spice.drops(form)
    drops = forward(stage, sample, CURRENTS_A, SUPPLY_V, JUNCTION_C).drop_V
    assert seconds > 0
    assert drops.shape == (BLOCK, CURRENTS_A.size)
    assert np.ptp(drops[:, -1]) > 0.1 * drops[:, -1].mean(), "the boards differ"
    assert theirs == pytest.approx(drops, rel=2e-4)
