import math
import re
from collections.abc import Callable
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from benchkit.fits.goodness import runs_p
from benchkit.fits.least_squares import fit
from benchkit.metrology import Budget, covariance

Array = NDArray[np.float64]
STRD = Path(__file__).parents[2] / "data" / "nist_strd"


def exp(x: Array) -> Array:
    return np.asarray(np.exp(x))


def rational(x: Array, b: Array) -> Array:
    top = b[0] + b[1] * x + b[2] * x**2 + b[3] * x**3
    return np.asarray(top / (1.0 + b[4] * x + b[5] * x**2 + b[6] * x**3))


LAWS: dict[str, Callable[[Array, Array], Array]] = {
    "Misra1a": lambda x, b: b[0] * (1.0 - exp(-b[1] * x)),
    "BoxBOD": lambda x, b: b[0] * (1.0 - exp(-b[1] * x)),
    "Thurber": rational,
    "Hahn1": rational,
    "MGH17": lambda x, b: b[0] + b[1] * exp(-x * b[3]) + b[2] * exp(-x * b[4]),
    "Chwirut2": lambda x, b: exp(-b[0] * x) / (b[1] + b[2] * x),
    "Lanczos3": lambda x, b: b[0] * exp(-b[1] * x) + b[2] * exp(-b[3] * x) + b[4] * exp(-b[5] * x),
    "Eckerle4": lambda x, b: b[0] / b[1] * exp(-0.5 * ((x - b[2]) / b[1]) ** 2),
    "DanWood": lambda x, b: b[0] * x ** b[1],
    "MGH10": lambda x, b: b[0] * exp(b[1] / (x + b[2])),
    "Bennett5": lambda x, b: b[0] * (b[1] + x) ** (-1.0 / b[2]),
    "Rat43": lambda x, b: b[0] / (1.0 + exp(b[1] - b[2] * x)) ** (1.0 / b[3]),
}


@pytest.mark.parametrize("start", [0, 1])
@pytest.mark.parametrize("name", sorted(LAWS))
def test_certified_values_of_nist_strd_from_both_starts(name: str, start: int) -> None:
    # NIST Statistical Reference Datasets, nonlinear regression; certified to eleven digits.
    text = (STRD / f"{name}.dat").read_text(encoding="ascii")
    table = np.array(
        [line.split("=")[1].split() for line in text.splitlines() if re.match(r" *b\d+ =", line)],
        dtype=float,
    )
    data = np.array([line.split() for line in text.splitlines()[60:] if line.strip()], dtype=float)
    sd = re.search(r"Residual Standard Deviation:\s*(\S+)", text)
    assert sd is not None
    found = fit(LAWS[name], data[:, 1], data[:, 0], table[:, start], 1.0, scale_noise=True)
    assert found.parameters == pytest.approx(table[:, 2], rel=1e-6)
    assert np.sqrt(found.covariance.diagonal()) == pytest.approx(table[:, 3], rel=1e-5)
    assert found.residual_sd == pytest.approx(float(sd.group(1)), rel=1e-7)
    assert found.noise_dof == len(data) - len(table)


def line(x: Array, p: Array) -> Array:
    return np.asarray(p[0] + p[1] * x)


def test_certified_values_of_nist_norris() -> None:
    # NIST StRD, linear regression, Norris (calibration of ozone monitors); in the scipy wheel.
    path = files("scipy.stats.tests") / "data" / "nist_linregress" / "Norris.dat"
    rows = path.read_text(encoding="ascii").splitlines()[60:]
    y, x = np.array([r.split() for r in rows if r.strip()], dtype=float).T
    found = fit(line, x, y, [0.0, 1.0], 1.0, scale_noise=True)
    assert found.parameters == pytest.approx([-0.262323073774029, 1.00211681802045], rel=1e-8)
    u = np.sqrt(found.covariance.diagonal())
    assert u == pytest.approx([0.232818234301152, 0.429796848199937e-03], rel=1e-7)
    assert found.residual_sd == pytest.approx(0.884796396144373, rel=1e-9)
    assert found.describes


def test_group_means_of_nist_sirstv() -> None:
    # NIST StRD, analysis of variance, SiRstv (resistance, 5 instruments); in the scipy wheel.
    path = files("scipy.stats.tests") / "data" / "nist_anova" / "SiRstv.dat"
    rows = path.read_text(encoding="ascii").splitlines()[60:]
    who, y = np.array([r.split() for r in rows if r.strip()], dtype=float).T
    groups = who.astype(int) - 1
    within = fit(lambda g, p: p[g.astype(int)], groups, y, np.full(5, 196.0), 1.0, scale_noise=True)
    assert within.residual_sd == pytest.approx(1.04076068334656e-1, rel=1e-9)
    alone = fit(lambda g, p: np.full(g.shape, p[0]), groups, y, [196.0], 1.0, scale_noise=True)
    f = (alone.chi2 - within.chi2) / 4.0 / (within.chi2 / within.dof)
    assert f == pytest.approx(1.18046237440255, rel=1e-8)


T_H3 = [21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511]
B_H3 = [-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160]


def test_calibration_of_a_thermometer_in_jcgm_100_h3() -> None:
    # JCGM 100:2008, H.3: intercept, slope, their uncertainties and correlation, curve at 30 degC.
    x = np.array(T_H3) - 20.0
    found = fit(line, x, B_H3, [0.0, 0.0], 1.0, scale_noise=True, names=("y1", "y2"))
    u = np.sqrt(found.covariance.diagonal())
    assert found.parameters == pytest.approx([-0.1712, 0.00218], abs=6e-5)
    assert u == pytest.approx([0.0029, 0.00067], abs=6e-5)
    assert found.covariance[0, 1] / u[0] / u[1] == pytest.approx(-0.930, abs=6e-4)
    assert found.residual_sd == pytest.approx(0.0035, abs=6e-5)
    at_30 = found.budget_at(10.0)
    assert found.predict(10.0) == pytest.approx(-0.1494, abs=6e-5)
    assert at_30.u == pytest.approx(0.0041, abs=6e-5)
    assert at_30.dof == pytest.approx(9.0)
    assert at_30.expanded().k == pytest.approx(2.262, abs=2e-3)  # table G.2, 9 degrees of freedom


def test_an_error_common_to_the_sweep_does_not_average_out() -> None:
    # As GTC 1.5 does for H.3: an offset common to all readings goes whole into the intercept.
    x = np.array(T_H3) - 20.0
    one = np.ones(x.size)
    found = fit(
        line,
        x,
        B_H3,
        [0.0, 0.0],
        1.0,
        {"reference": 0.01 * one},
        {"reference": "rectangular"},
        scale_noise=True,
        names=("y1", "y2"),
    )
    assert found.contributions["reference"] == pytest.approx([0.01, 0.0], abs=1e-9)
    assert found.budget("y1").u == pytest.approx(math.hypot(0.0029, 0.01), abs=6e-5)
    assert found.budget("y2").u == pytest.approx(0.00067, abs=6e-6)
    # A thousand times the points leave the common part as it is.
    many = fit(
        line,
        np.tile(x, 1000),
        np.tile(B_H3, 1000),
        [0.0, 0.0],
        1.0,
        {"reference": np.tile(0.01 * one, 1000)},
        {"reference": "rectangular"},
        scale_noise=True,
        names=("y1", "y2"),
    )
    assert many.budget("y1").u == pytest.approx(0.01, rel=1e-3)
    other = Budget([c for c in many.budget("y1").components if c.name == "reference"])
    assert covariance(found.budget("y1"), other) == pytest.approx(1e-4, rel=1e-3)


def test_intervals_hold_the_truth_when_gain_and_offset_are_wrong() -> None:
    # Simulated boards: noise, gain and offset drawn anew for each; 95 % must hold the truth.
    rng = np.random.default_rng(4)
    x = np.linspace(0.1, 5.0, 12)
    truth = np.array([0.02, 0.03])
    held = np.zeros(2)
    trials = 400
    for _ in range(trials):
        ideal = line(x, truth)
        gain, offset = rng.uniform(-1.0, 1.0, 2) * [0.01, 2e-3]
        y = ideal * (1.0 + gain) + offset + 5e-4 * rng.standard_normal(x.size)
        found = fit(
            line,
            x,
            y,
            [0.0, 0.01],
            1.0,
            {"gain": y * 0.01 / math.sqrt(3.0), "offset": np.full(12, 2e-3 / math.sqrt(3.0))},
            {"gain": "rectangular", "offset": "rectangular"},
            scale_noise=True,
            names=("a", "b"),
        )
        for i, name in enumerate(found.names):
            held[i] += abs(found[name] - truth[i]) <= found.budget(name).expanded().U
    # 0.95 with four standard deviations of counting.
    assert np.all(np.abs(held / trials - 0.95) < 4.0 * math.sqrt(0.95 * 0.05 / trials))


def test_a_law_that_does_not_describe_the_data_says_so() -> None:
    x = np.linspace(0.0, 1.0, 40)
    noise = 0.01 * np.random.default_rng(2).standard_normal(40)
    good = fit(line, x, 1.0 + x + noise, [0.0, 1.0], 0.01)
    assert good.describes
    assert good.why == ""
    bent = fit(line, x, 1.0 + x + 0.5 * x**2 + noise, [0.0, 1.0], 0.01)
    assert not bent.describes
    assert "times the noise" in bent.why
    assert "wrong shape" in bent.why
    unknown = fit(line, x, 1.0 + x + 0.5 * x**2 + noise, [0.0, 1.0], 1.0, scale_noise=True)
    assert not unknown.describes
    assert "wrong shape" in unknown.why


def test_good_fits_are_seldom_called_bad() -> None:
    rng = np.random.default_rng(6)
    x = np.linspace(0.0, 1.0, 15)
    bad = sum(
        not fit(line, x, x + rng.standard_normal(15), [0.0, 1.0], 1.0).describes for _ in range(300)
    )
    assert bad <= 3  # expected 0.6 of 300 at 0.001 for each of two tests


def test_parameters_that_the_data_do_not_determine_are_named() -> None:
    x = np.linspace(0.0, 1.0, 9)
    found = fit(lambda q, p: (p[0] + p[1]) * q, x, x, [0.3, 0.3], 0.1, names=("lead", "channel"))
    assert not found.describes
    assert "do not determine lead, channel" in found.why
    assert math.isinf(found.budget("lead").u)
    with pytest.raises(KeyError, match="lead, channel"):
        found.budget("contact")


def test_runs_probability_is_that_of_counting() -> None:
    # Swed and Eisenhart 1943 (from memory): 10 plus and 10 minus, 6 runs or fewer: 0.019.
    signs = np.array([1.0] * 4 + [-1] * 3 + [1] * 3 + [-1] * 4 + [1] * 3 + [-1] * 3)
    assert runs_p(signs) == pytest.approx(0.019, abs=5e-4)
    assert math.isnan(runs_p(np.ones(30)))
    # The normal approximation takes over above 60 and must join on.
    alternating = np.tile([1.0, 1.0, -1.0, -1.0, 1.0, -1.0], 11)
    assert runs_p(alternating[:60]) == pytest.approx(runs_p(alternating[:66]), abs=0.05)


@pytest.mark.parametrize(
    ("x", "u", "says"),
    [
        ([1.0], 1.0, "cannot give"),
        ([1.0, 2.0, math.nan], 1.0, "not a finite"),
        ([1.0, 2.0, 3.0], 0.0, "above zero"),
    ],
)
def test_bad_data_are_refused_in_words(x: list[float], u: float, says: str) -> None:
    with pytest.raises(ValueError, match=says):
        fit(line, x, x, [0.0, 1.0], u, label="sweep 3")


def test_common_errors_must_be_complete() -> None:
    x = np.arange(5.0)
    with pytest.raises(ValueError, match=r"'gain' has no entry"):
        fit(line, x, x, [0.0, 1.0], 1.0, {"gain": x})
    with pytest.raises(ValueError, match=r"'gain' has shape"):
        fit(line, x, x, [0.0, 1.0], 1.0, {"gain": x[:3]}, {"gain": "normal"})
