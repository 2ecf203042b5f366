"""What a diode leaks: a junction that warms itself, and a battery that drains through one.

Where no source is named, the expectation is common practice, no source.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import lambertw

from benchkit.files.loading import parse
from benchkit.files.stage import StageFile
from benchkit.prediction.scenarios import Scenario
from benchkit.stage import Stage, build_stage
from tests.benchkit.nine_stages import made, text
from tests.benchkit.scenario_answers import answer, broken, says, stage

RTH = 35.0 + 6.0
DOUBLES_K = 75.0 / np.log2(3e-3 / 20e-6)
"""From the sheet's two leakage points, 20 uA at 25 C and 3 mA at 100 C, both at 40 V."""
STEEPNESS = np.log(2.0) / DOUBLES_K


def hot_schottky(ambient_C: float) -> Scenario:
    of = stage(
        "series-diode",
        ("supply_max_V = 15.0", "supply_max_V = 40.0"),
        ("ambient_max_C = 50.0", f"ambient_max_C = {ambient_C:.4f}"),
        tables="[source]\nresistance_ohm = 0.001\n[equipment]\npassive_ohm = 0.1\n",
    )
    return answer(of, "reversed-source", of.typical())


def watts(junction_C: float) -> float:
    return float(40.0 * 20e-6 * np.exp(STEEPNESS * (junction_C - 25.0)))


@pytest.mark.parametrize("below_K", [1.0, 8.0, 25.0])
def test_a_hot_schottky_settles_at_lamberts_solution_below_its_critical_ambient(
    below_K: float,
) -> None:
    """rise = Rth P(Ta) exp(k rise), so k rise = -W(-k Rth P(Ta)) as long as e k Rth P(Ta) < 1."""
    ambient = critical_C() - below_K
    found = hot_schottky(ambient)
    rise = -lambertw(-STEEPNESS * RTH * watts(ambient)).real / STEEPNESS
    assert found.junction_C == pytest.approx(ambient + rise, abs=0.05)
    assert not says(found, "no steady temperature")
    assert found.exposed_current_A == pytest.approx(-watts(ambient + rise) / 40.0, rel=0.01)


@pytest.mark.parametrize("above_K", [1.0, 8.0, 25.0])
def test_a_hot_schottky_runs_away_above_it(above_K: float) -> None:
    found = hot_schottky(critical_C() + above_K)
    assert found.junction_C == np.inf
    assert says(found, "D1 has no steady temperature below 250 °C")
    assert ("D1", "junction temperature") in broken(found)
    assert ("D1", "reverse voltage") not in broken(found)  # 40 V are its very rating


def critical_C() -> float:
    """Where e k Rth P(Ta) = 1: some 102 degrees, 48 K below what its junction may have."""
    return float(25.0 + np.log(1 / (np.e * STEEPNESS * RTH * watts(25.0))) / STEEPNESS)


def test_a_battery_drains_into_equipment_that_is_off() -> None:
    """15 V across 1 kohm are 15 mA, 0.36 Ah a day; a diode in the way leaves its leakage."""
    for topology in ("clamp", "pmos-pass", "nmos-sensed"):
        found = answer(made(topology), "back-feed")
        assert found.exposed_current_A == pytest.approx(15e-3, rel=0.04)
        assert found.guarded_V == pytest.approx(15.0, abs=0.02)
        assert says(found, r"drains into the equipment by 15(\.\d)? mA, 0\.3[67] Ah a day")
    blocked = answer(charging_diode(), "back-feed")
    # 20 uA at 25 C, up to ten times that, and 2^(25/10.4) times at 50 C.
    assert 0 < blocked.exposed_current_A < 200e-6 * 2 ** (25 / DOUBLES_K)
    assert blocked.guarded_V < 1.1
    assert says(blocked, "battery drains ")


def charging_diode() -> Stage:
    """A diode from the charger to the battery: the oldest guard against back-feed."""
    body = text("series-diode", stage='guards = "supply"\nmain = "D1"').replace(
        'topology = "series-diode"', 'topology = "network"'
    )
    wired = '[[network]]\npart = "D1"\nanode = "guarded+"\ncathode = "exposed+"\n[heat]'
    return build_stage(parse(StageFile, body.replace("[heat]", wired), "stage.toml"), "stage.toml")
