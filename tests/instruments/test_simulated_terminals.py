"""The simulated load and supply as elements: what they let through, and that the slopes fit."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from instruments.simulated.terminals import BLEED_S, LoadInput, SupplyOutput

Floats = NDArray[np.float64]
VOLTS = np.linspace(-3, 5, 4001)


def through(element: LoadInput | SupplyOutput, volts: Floats) -> tuple[Floats, Floats]:
    """Current into the first terminal, and its slope."""
    (branch,) = element.branches(np.stack([volts, np.zeros(volts.size)]))
    return np.asarray(branch.amps), np.asarray(branch.slopes[0][2])


def check_slope(element: LoadInput | SupplyOutput, atol: float) -> None:
    higher, lower = through(element, VOLTS + 1e-6)[0], through(element, VOLTS - 1e-6)[0]
    assert np.allclose((higher - lower) / 2e-6, through(element, VOLTS)[1], rtol=1e-4, atol=atol)


@pytest.mark.parametrize("mode", ["CURR", "RES", "VOLT"])
@pytest.mark.parametrize("back", [False, True])
def test_a_load_only_sinks(mode: str, back: bool) -> None:
    load = LoadInput("load", ("a", "b"), mode, 2.0, back)
    check_slope(load, 1e-3)
    amps, _ = through(load, VOLTS)
    assert (np.diff(amps) > 0).all()
    backwards = VOLTS < -1.0
    if back:
        assert (amps[backwards] < -1).all()
    else:
        assert np.allclose(amps[backwards], BLEED_S * VOLTS[backwards], atol=1e-9)
    full = {"CURR": 2.0, "RES": 2.5, "VOLT": 60.0}  # at 5 V: 2 A, 2 ohm, 2 V behind 0.05 ohm
    assert amps[-1] == pytest.approx(full[mode], rel=1e-3)


def test_a_supply_holds_its_voltage_up_to_its_limit() -> None:
    supply = SupplyOutput("supply", ("a", "b"), 3.0, 1.0, 0.05)
    check_slope(supply, 1e-3)
    given = -through(supply, VOLTS)[0]
    assert given[0] == pytest.approx(1.0, abs=1e-6)
    assert given[np.searchsorted(VOLTS, 2.975)] == pytest.approx(0.5, abs=0.05)
    assert given[-1] == pytest.approx(-0.05, abs=1e-6)  # its preload
