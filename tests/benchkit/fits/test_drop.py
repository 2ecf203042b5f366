import math

import numpy as np
import pytest
from numpy.typing import NDArray

from benchkit.fits.drop import (
    Topology,
    channel_conditions,
    diagnose,
    diode_conditions,
    fit_channel,
    fit_diode,
)
from benchkit.fits.drop_laws import K_OVER_Q, diode_law
from benchkit.metrology import Accuracy

Array = NDArray[np.float64]

UP = np.geomspace(0.05, 5.0, 10)
SWEEP = np.concatenate([UP, UP[::-1]])
RISING = np.arange(20) < 10


def noise(seed: int, sd: float) -> Array:
    return sd * np.random.default_rng(seed).standard_normal(SWEEP.size)


def silicon(current: Array, celsius: float = 25.0) -> Array:
    """1N-like junction: about 0.75 V at 1 A."""
    return diode_law(diode_conditions(current, celsius, 1.11), np.array([-20.0, 1.4, 0.02]))


def test_diode_law_is_that_of_an_independent_solver() -> None:
    # pvlib 0.11+ (BSD-3), single-diode model in the dark by Lambert's W; its sign is negative in
    # forward conduction. Inverse: the voltage that carries a current.
    from pvlib.pvsystem import v_from_i

    thermal = 1.05 * K_OVER_Q * 298.15
    ours = diode_law(
        diode_conditions(np.array([0.01, 1.0, 10.0]), 25.0), np.array([math.log(1e-6), 1.05, 0.05])
    )
    theirs = v_from_i(-np.array([0.01, 1.0, 10.0]), 0.0, 1e-6, 0.05, np.inf, thermal)
    assert ours == pytest.approx(theirs, rel=1e-9)
    # The value of one ampere, for nNsVth = 0.026977208077140147, as pvlib 0.16 prints it.
    assert thermal == pytest.approx(0.026977208077140147, rel=1e-6)
    assert ours[1] == pytest.approx(0.4227039299913234, rel=1e-6)


def test_channel_resistance_with_self_heating_and_honest_meters() -> None:
    celsius = 25.0 + 0.8 * SWEEP**2
    r25, alpha = 0.018, 0.005
    drop = SWEEP * r25 * (1.0 + alpha * (celsius - 25.0)) + noise(1, 2e-5)
    found = fit_channel(
        SWEEP,
        drop,
        celsius,
        alpha_per_K=alpha,
        u_noise_V=2e-5,
        u_alpha_per_K=5e-4,
        u_temperature_K=1.0,
        drop_accuracy=Accuracy(0.1, reading_percent=0.05, range_percent=0.02),
        current_accuracy=Accuracy(5.0, reading_percent=0.2, offset=1e-3),
    )
    assert found.describes, found.why
    budget = found.budget("R25_ohm")
    assert abs(found["R25_ohm"] - r25) < budget.expanded().U
    names = {c.name: c for c in budget.components}
    # A gain error goes whole into a resistance: 0.2 % of the current is 0.2 % of the ohms.
    assert names["current meter gain"].u == pytest.approx(-r25 * 0.002 / math.sqrt(3.0), rel=0.02)
    assert names["drop meter gain"].u == pytest.approx(r25 * 0.0005 / math.sqrt(3.0), rel=0.02)
    # One kelvin too warm is alpha too little resistance.
    assert names["temperature"].u == pytest.approx(-r25 * alpha, rel=0.1)
    assert abs(names["temperature coefficient"].u) > 0.0
    # A drop meter's offset is an intercept and hardly a resistance.
    assert found.contributions["drop meter offset"][1] == pytest.approx(
        2e-5 / math.sqrt(3.0), rel=1e-3
    )
    warm = channel_conditions(3.0, 60.0, alpha)
    assert found.predict(warm) == pytest.approx(3.0 * r25 * (1.0 + alpha * 35.0), abs=2e-4)
    assert found.budget_at(warm).u > 0.0


def test_diode_parameters_over_temperature() -> None:
    celsius = 25.0 + 4.0 * SWEEP
    truth = np.array([-15.0, 1.08, 0.03])
    x = diode_conditions(SWEEP, celsius, 0.69, 2.0)
    drop = diode_law(x, truth) + noise(2, 1e-4)
    found = fit_diode(
        SWEEP,
        drop,
        celsius,
        u_noise_V=1e-4,
        gap_eV=0.69,
        xti=2.0,
        u_temperature_K=0.5,
        drop_accuracy=Accuracy(1.0, reading_percent=0.02),
    )
    assert found.describes, found.why
    for name, value in zip(found.names, truth, strict=True):
        assert abs(found[name] - value) < found.budget(name).expanded().U
    # A junction falls with heat: a thermometer that reads too warm looks like too high a drop.
    assert found.budget_at(diode_conditions(1.0, 29.0, 0.69, 2.0)).u > 2e-4
    isothermal = fit_diode(SWEEP, drop, celsius, u_noise_V=1e-4)
    # Heat that grows with current looks like a negative resistance: without the gap Rs is wrong,
    # and nothing in the residuals can tell.
    wrong = abs(isothermal["Rs_ohm"] - 0.03)
    assert wrong > 5.0 * isothermal.budget("Rs_ohm").expanded().U


def test_a_short_sweep_leaves_the_curve_known_though_not_the_parameters() -> None:
    current = np.linspace(1.0, 2.0, 12)
    drop = silicon(current) + 1e-4 * np.random.default_rng(5).standard_normal(12)
    found = fit_diode(current, drop, 25.0, u_noise_V=1e-4)
    assert found.budget("n").u > 0.05
    assert found.budget_at(diode_conditions(1.5, 25.0)).u < 1e-4


def test_diode_intervals_hold_the_truth() -> None:
    held = 0
    for seed in range(120):
        drop = silicon(SWEEP) + noise(seed, 2e-4)
        found = fit_diode(SWEEP, drop, 25.0, u_noise_V=1.0, scale_noise=True)
        held += abs(found["n"] - 1.4) <= found.budget("n").expanded().U
    assert held / 120 == pytest.approx(0.95, abs=4.0 * math.sqrt(0.95 * 0.05 / 120))


def kinds(topology: Topology, drop: Array, accuracy: Accuracy | None = None) -> list[str]:
    found = diagnose(
        topology,
        SWEEP,
        drop,
        25.0,
        u_noise_V=2e-5,
        rising=RISING,
        drop_accuracy=accuracy,
        compliance_V=12.0,
    )
    return [f.kind for f in found]


# What each sweep means is common practice of the trade, no source.


def test_healthy_parts_raise_nothing() -> None:
    assert kinds("channel", 0.02 * SWEEP + noise(3, 2e-5)) == []
    assert kinds("junction", silicon(SWEEP) + noise(3, 2e-5)) == []


def test_healthy_sweeps_are_seldom_accused() -> None:
    accused = sum(bool(kinds("channel", 0.02 * SWEEP + noise(s, 2e-5))) for s in range(100))
    assert accused <= 1


def test_a_channel_that_drops_like_a_diode_has_no_gate_drive() -> None:
    assert kinds("channel", silicon(SWEEP)) == ["gate-not-driven"]


def test_an_intercept_is_a_lead_or_contact_unless_the_meter_explains_it() -> None:
    drop = 0.02 * SWEEP + 2e-4 + noise(4, 2e-5)
    assert kinds("channel", drop) == ["lead-or-contact"]
    assert kinds("channel", drop, Accuracy(0.1, offset=5e-4)) == []


def test_a_sweep_that_comes_back_different_is_heat_or_drift() -> None:
    back = np.where(RISING, 0.0, 1.0)
    warm = 0.02 * SWEEP * (1.0 + 0.03 * back) + noise(5, 2e-5)
    assert "heat" in kinds("channel", warm)
    assert "drift" in kinds("channel", 0.02 * SWEEP * (1.0 - 0.03 * back) + noise(5, 2e-5))
    assert kinds("junction", silicon(SWEEP) - 2e-3 * back + noise(5, 2e-5)) == ["heat"]
    assert kinds("junction", silicon(SWEEP) + 2e-3 * back + noise(5, 2e-5)) == ["drift"]


def test_a_junction_without_a_knee_is_shorted() -> None:
    assert kinds("junction", 0.02 * SWEEP) == ["shorted"]
    assert kinds("junction", 0.004 * SWEEP) == ["shorted"]


def test_a_part_that_does_not_conduct_is_open() -> None:
    assert kinds("junction", np.full(20, 11.9)) == ["open"]
    assert kinds("channel", np.full(20, 11.9)) == ["open"]


def test_too_few_points_are_said_to_be_too_few() -> None:
    found = diagnose("channel", [1.0, 1.0, math.nan], [0.1, 0.1, 0.1], 25.0, u_noise_V=1e-5)
    assert [f.kind for f in found] == ["too-few"]
    assert "three different currents" in found[0].text


def test_data_that_do_not_fit_the_law_are_refused_in_words() -> None:
    with pytest.raises(ValueError, match="above zero"):
        fit_diode([0.0, 1.0, 2.0, 3.0], [0.1, 0.5, 0.6, 0.7], 25.0, u_noise_V=1e-4)
    with pytest.raises(ValueError, match="do not belong together"):
        fit_channel([1.0, 2.0], [0.1], 25.0, alpha_per_K=0.004, u_noise_V=1e-5)
    with pytest.raises(ValueError, match="topology"):
        diagnose("resistor", [1.0], [1.0], 25.0, u_noise_V=1e-5)  # type: ignore[arg-type]
