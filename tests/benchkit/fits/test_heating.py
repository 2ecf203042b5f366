import math

import numpy as np
import pytest
from numpy.typing import NDArray

from benchkit.fits.exponentials import fit_settling
from benchkit.fits.heating import fit_heating

Array = NDArray[np.float64]

MODES_S = np.array([0.05, 8.0, 70.0])
SHARES = np.array([0.1, 0.35, 0.55])


def rise(t: Array, final: float, start: float, taus: Array, shares: Array, lag: float) -> Array:
    """Foster network through a first-order sensor lag, from a rise spread over all modes alike."""
    step = final - start
    gain = taus / (taus - lag)
    modes = (shares * gain) * np.exp(-t[:, None] / taus)
    return np.asarray(
        final - step * modes.sum(axis=1) + step * np.sum(shares * (gain - 1.0)) * np.exp(-t / lag)
    )


def test_one_exponential_is_found_exactly() -> None:
    t = np.linspace(0.0, 200.0, 60)
    found = fit_settling(t, 30.0 - 22.0 * np.exp(-t / 45.0), 1, 2.0, 600.0)
    assert found is not None
    assert found.final == pytest.approx(30.0, abs=1e-5)
    assert found.taus == pytest.approx([45.0], rel=1e-5)
    assert found.curve(np.array([0.0])) == pytest.approx([8.0], abs=1e-5)


def test_two_exponentials_agree_with_the_general_fit() -> None:
    from benchkit.fits.least_squares import fit

    t = np.linspace(1.0, 240.0, 120)
    y = rise(t, 30.0, 0.0, np.array([8.0, 70.0]), np.array([0.4, 0.6]), 1e-6)
    y = y + 0.02 * np.random.default_rng(0).standard_normal(t.size)
    quick = fit_settling(t, y, 2, 1.0, 700.0)
    slow = fit(
        lambda x, p: p[0] + p[1] * np.exp(-x / np.exp(p[3])) + p[2] * np.exp(-x / np.exp(p[4])),
        t,
        y,
        [30.0, -10.0, -20.0, math.log(8.0), math.log(70.0)],
        0.02,
    )
    assert quick is not None
    assert quick.final == pytest.approx(slow.parameters[0], abs=1e-3)
    assert np.log(quick.taus) == pytest.approx(slow.parameters[3:], abs=1e-3)
    assert np.sqrt(quick.covariance.diagonal()) * 0.02 == pytest.approx(
        np.sqrt(slow.covariance.diagonal()), rel=0.02
    )


def test_intervals_hold_the_truth_of_networks_richer_than_the_fit() -> None:
    rng = np.random.default_rng(12)
    trials, held, error, U = 250, 0, [], []
    for _ in range(trials):
        slow = rng.uniform(40.0, 120.0)
        taus = np.array([0.05, slow * rng.uniform(0.06, 0.4), slow])
        shares = rng.dirichlet(np.ones(3)) * 0.85 + 0.05
        final, start = rng.uniform(10.0, 50.0), rng.choice([0.0, 4.0])
        n = int(rng.choice([15, 40, 120, 400]))
        run = slow * rng.uniform(2.0, 4.0)
        t = np.linspace(run / n, run, n)
        noise = float(rng.choice([0.02, 0.05, 0.1, 0.2]))
        ambient = 24.0 + rng.uniform(-1.0, 1.0) * 0.5 * t / 600.0
        case = ambient + rise(t, final, start, taus, shares, rng.uniform(0.5, 3.0))
        found = fit_heating(
            t,
            case + noise * rng.standard_normal(n),
            ambient + 0.5 * noise * rng.standard_normal(n),
            noise,
        )
        U.append(found.final_rise_budget.expanded().U)
        error.append(abs(found.final_rise_K - final))
        held += error[-1] <= U[-1]
    assert held / trials >= 0.93
    # Not silly wide: the whole lot's errors and uncertainties are of one size, and the typical
    # uncertainty is small against rises of 10 to 50 K.
    rms = math.sqrt(float(np.mean(np.square(error))))
    assert math.sqrt(float(np.mean(np.square(U)))) < 2.0 * 2.5 * rms
    assert np.median(U) < 1.0


def test_a_soak_that_ends_itself_ends_with_the_truth_inside() -> None:
    rng = np.random.default_rng(7)
    trials, within, lengths = 40, 0, []
    for _ in range(trials):
        slow = rng.uniform(50.0, 90.0)
        taus = np.array([0.05, rng.uniform(4.0, 15.0), slow])
        shares = rng.dirichlet(np.ones(3)) * 0.7 + 0.1
        final = rng.uniform(10.0, 50.0)
        t = np.arange(5.0, 8.0 * slow, 5.0)
        case = 25.0 + rise(t, final, 0.0, taus, shares, 2.0) + 0.05 * rng.standard_normal(t.size)
        for m in range(12, t.size, 4):
            found = fit_heating(t[:m], case[:m], 25.0, 0.05)
            if found.known_within(1.0):
                break
        within += abs(found.final_rise_K - final) <= 1.0
        lengths.append(float(t[m - 1]) / slow)
    assert within >= 0.93 * trials
    # Well before the five time constants that waiting for it would take (1 % of 50 K is 0.5 K).
    assert np.median(lengths) < 4.0


def test_a_soak_is_not_ended_before_slow_modes_can_show() -> None:
    t = np.arange(2.0, 100.0, 2.0)
    case = 25.0 + rise(t, 20.0, 0.0, np.array([8.0, 1.0]), np.array([0.9, 0.1]), 0.5)
    assert not fit_heating(t, case, 25.0, 0.05).known_within(2.0)
    assert fit_heating(t, case, 25.0, 0.05, slowest_tau_s=20.0).known_within(2.0)


def test_curve_residuals_and_time_constants() -> None:
    t = np.linspace(1.0, 280.0, 280)
    clean = rise(t, 30.0, 0.0, MODES_S, SHARES, 2.0)
    found = fit_heating(
        t, 25.0 + clean + 0.02 * np.random.default_rng(1).standard_normal(280), 25.0, 0.02
    )
    assert found.usable, found.why
    assert float(np.std(found.residuals)) == pytest.approx(0.02, rel=0.2)
    assert found.curve(t) == pytest.approx(clean, abs=0.05)
    assert len(found.taus) == 2
    assert found.taus[1] == pytest.approx(70.0, rel=0.1)
    assert found.covariance.shape == (5, 5)
    assert found.one_and_two_agree
    # The band widens beyond the data and ends at that of the final rise.
    band = found.curve_u([280.0, 600.0, 1e5])
    assert band[0] < band[1] <= band[2] * 1.001
    name = "soak: noise and unresolved time constants"
    u = {c.name: c.u for c in found.final_rise_budget.components}
    assert band[2] == pytest.approx(u[name], rel=1e-3)


def test_ambient_drift_is_taken_out_and_its_lag_is_in_the_budget() -> None:
    t = np.linspace(2.0, 280.0, 140)
    drift = 23.0 + 2.0 * t / 280.0
    noise = 0.03 * np.random.default_rng(3).standard_normal(140)
    found = fit_heating(t, drift + rise(t, 20.0, 0.0, MODES_S, SHARES, 2.0) + noise, drift, 0.03)
    budget = found.final_rise_budget
    assert abs(found.final_rise_K - 20.0) < budget.expanded().U
    u = {c.name: c.u for c in budget.components}
    # 2 K in 280 s, times a mean time constant of 41 s: 0.3 K, of which half is the limit.
    assert u["soak: lag behind ambient drift"] == pytest.approx(0.147 / math.sqrt(3.0), rel=0.15)
    assert found.ambient_C == pytest.approx(25.0, abs=1e-6)
    still = fit_heating(t, 25.0 + rise(t, 20.0, 0.0, MODES_S, SHARES, 2.0) + noise, 25.0, 0.03)
    assert "soak: lag behind ambient drift" in {c.name for c in still.final_rise_budget.components}
    assert still.final_rise_budget.u < budget.u


def test_thermometer_errors_go_straight_into_the_final_rise() -> None:
    t = np.linspace(2.0, 280.0, 140)
    case = 25.0 + rise(t, 20.0, 0.0, MODES_S, SHARES, 2.0)
    found = fit_heating(
        t,
        case,
        25.0,
        0.05,
        common={"case sensor": 0.6},
        distributions={"case sensor": "rectangular"},
    )
    assert {c.name: c.u for c in found.final_rise_budget.components}["case sensor"] == 0.6
    with pytest.raises(ValueError, match="no entry"):
        fit_heating(t, case, 25.0, 0.05, common={"case sensor": 0.6})


def test_cooling_is_a_heating_curve_too() -> None:
    t = np.linspace(2.0, 280.0, 140)
    case = 25.0 + rise(t, 5.0, 30.0, MODES_S, SHARES, 2.0)
    found = fit_heating(t, case + 0.05 * np.random.default_rng(2).standard_normal(140), 25.0, 0.05)
    assert abs(found.final_rise_K - 5.0) < found.final_rise_budget.expanded().U < 1.5


def test_more_noise_than_declared_is_noticed() -> None:
    t = np.linspace(2.0, 280.0, 140)
    case = 25.0 + rise(t, 20.0, 0.0, MODES_S, SHARES, 2.0)
    noisy = case + 0.5 * np.random.default_rng(2).standard_normal(140)
    assert fit_heating(t, noisy, 25.0, 0.05).noise_K == pytest.approx(0.5, rel=0.2)


def test_data_that_cannot_tell_are_said_not_to() -> None:
    t = np.linspace(1.0, 20.0, 20)
    noise = 0.05 * np.random.default_rng(1).standard_normal(20)
    few = fit_heating(t[:5], 25.0 + t[:5], 25.0, 0.05)
    assert not few.usable
    assert "too few" in few.why
    assert math.isnan(few.final_rise_K)
    assert math.isinf(few.final_rise_budget.expanded().U)
    assert not few.known_within(1e9)
    assert few.taus == ()
    assert not few.one_and_two_agree
    flat = fit_heating(t, 25.0 + noise, 25.0, 0.05)
    assert not flat.usable
    assert "not warmer than ambient" in flat.why
    straight = fit_heating(t, 25.0 + 0.3 * t + noise, 25.0, 0.05)
    assert not straight.usable
    assert "still rises" in straight.why


def test_lost_readings_are_left_out_and_bad_input_is_refused() -> None:
    t = np.linspace(2.0, 280.0, 140)
    case = 25.0 + rise(t, 20.0, 0.0, MODES_S, SHARES, 2.0)
    case[7] = math.nan
    assert fit_heating(t, case, 25.0, 0.05).time_s.size == 139
    with pytest.raises(ValueError, match="must rise"):
        fit_heating(t[::-1], case, 25.0, 0.05)
    with pytest.raises(ValueError, match="u_case"):
        fit_heating(t, case, 25.0, 0.0)
