"""Least squares against NIST's certified values and statsmodels; correlated errors against closed forms."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import stats

from tracker.analysis.fits import Noise, fit_linear, fit_nonlinear, noise_of, polynomial_rows, rough_noise, smooth_noise

NIST = Path(__file__).parents[2] / "reference" / "nist"
CERTIFIED = pd.read_csv(NIST / "certified.csv")
DEGREE = {"Wampler1": 5, "Wampler2": 5, "Wampler3": 5, "Wampler4": 5, "Wampler5": 5, "Pontius": 2}


def digits(value, certified):
    """Agreeing significant digits (log relative error)."""
    value, certified = np.asarray(value, float), np.asarray(certified, float)
    scale = np.where(certified == 0, 1.0, np.abs(certified))
    return float(np.min(-np.log10(np.maximum(np.abs(value - certified) / scale, 1e-16))))


def rows_of(name):
    data = pd.read_csv(NIST / f"{name}.csv")
    y = data["y"].to_numpy(float)
    if name in DEGREE:
        return np.vander(data["x"].to_numpy(float), DEGREE[name] + 1, increasing=True), y
    if name == "Longley":
        return np.column_stack([np.ones(len(y)), data.drop(columns="y").to_numpy(float)]), y
    return data["x"].to_numpy(float)[:, None], y


@pytest.mark.parametrize(
    ("name", "least"),
    [
        ("Wampler1", 8),
        ("Wampler2", 8),
        ("Wampler3", 8),
        ("Wampler4", 7),
        ("Wampler5", 5),
        ("Pontius", 9),
        ("Longley", 8),
        ("NoInt1", 12),
        ("NoInt2", 12),
    ],
)
def test_nist_linear_sets(name, least):
    rows, y = rows_of(name)
    told = CERTIFIED[CERTIFIED["dataset"] == name]
    sd = float(told["residual_sd"].iloc[0])
    fit = fit_linear(rows, y, np.arange(len(y)), Noise(sd, 0.0, 1.0))  # white: the certified standard errors are
    assert digits(fit.parameters, told["estimate"]) >= least
    if sd > 0:
        assert digits(np.sqrt(np.diag(fit.covariance)), told["standard_error"]) >= min(least, 8)


def test_norris_straight_line():
    text = (NIST / "Norris.dat").read_text(encoding="ascii").split("Data:       y          x")[1]
    y, x = np.array(text.split(), float).reshape(-1, 2).T
    fit = fit_linear(np.column_stack([np.ones_like(x), x]), y, np.arange(x.size))
    assert digits(fit.parameters, [-0.262323073774029, 1.00211681802045]) >= 10
    white = fit_linear(
        np.column_stack([np.ones_like(x), x]), y, np.arange(x.size), Noise(fit.residuals.std(ddof=2), 0.0, 34)
    )
    assert np.sqrt(white.covariance[0, 0]) == pytest.approx(0.232818234301152, rel=1e-9)


def test_gum_h3_thermometer():
    """JCGM 100:2008 H.3: intercept -0.1712(29), slope 0.00218(67), correlation -0.930, s 0.0035."""
    data = pd.read_csv(NIST.parent / "gum" / "H3.csv")
    t = data["t_degC"].to_numpy(float) - 20
    b = data["correction_degC"].to_numpy(float)
    rows = np.column_stack([np.ones_like(t), t])
    s = np.sqrt(np.sum((b - rows @ np.linalg.lstsq(rows, b, rcond=None)[0]) ** 2) / (len(t) - 2))
    fit = fit_linear(rows, b, np.arange(len(t)), Noise(float(s), 0.0, 9))
    u = np.sqrt(np.diag(fit.covariance))
    assert (round(fit.parameters[0], 4), round(fit.parameters[1], 5)) == (-0.1712, 0.00218)
    assert (round(float(u[0]), 4), round(float(u[1]), 5), round(float(s), 4)) == (0.0029, 0.00067, 0.0035)
    assert round(float(fit.covariance[0, 1] / u[0] / u[1]), 3) == -0.930


def test_covariance_of_correlated_errors_is_the_sandwich(rng):
    """statsmodels: OLS normalised covariance around the same error covariance."""
    n, rho = 60, 0.6
    x = np.sort(rng.uniform(-1, 1, n))
    rows = np.vander(x, 3, increasing=True)
    steps = np.arange(n, dtype=float)
    noise = Noise(0.2, rho, n)
    fit = fit_linear(rows, rng.normal(size=n), steps, noise)
    pinv = sm.OLS(rng.normal(size=n), rows).fit().model.pinv_wexog
    sigma = 0.04 * rho ** np.abs(np.subtract.outer(steps, steps))
    np.testing.assert_allclose(fit.covariance, pinv @ sigma @ pinv.T, rtol=1e-9)


@pytest.mark.parametrize("rho", [0.0, 0.3, 0.95])
def test_covariance_without_its_matrix_is_the_same(rng, rho):
    """The banded solution against the full matrix, over gaps."""
    steps = np.cumsum(rng.choice([1.0, 1.0, 1.0, 2.0, 5.0], 300))
    gain = rng.normal(size=(3, 300))
    noise = Noise(0.2, rho, 9)
    np.testing.assert_allclose(noise.through(gain, steps), gain @ noise.covariance(steps) @ gain.T, rtol=1e-10)


def test_known_autoregression_as_generalised_least_squares_has_it(rng):
    """statsmodels' GLS of y = mean with the same covariance: its own sandwich of OLS weights, (X'X)^-1 X'SX (X'X)^-1."""
    steps = np.arange(80.0)
    sigma = Noise(0.3, 0.6, 9).covariance(steps)
    rows = np.vander(np.linspace(-1, 1, 80), 3, increasing=True)
    fit = fit_linear(rows, rng.normal(size=80), steps, Noise(0.3, 0.6, 9))
    best = sm.GLS(rng.normal(size=80), rows, sigma=sigma).fit()
    ols, gls = np.diag(fit.covariance), np.diag(best.normalized_cov_params)
    assert np.all(ols >= gls * (1 - 1e-9))  # Gauss-Markov: no linear estimate is better than GLS
    assert np.all(ols < 1.2 * gls)  # and plain least squares loses little here


@pytest.mark.parametrize(("rho", "factor"), [(0.5, 2.96), (0.8, 8.60)])
def test_variance_of_a_mean_grows_as_for_an_autoregression(rho, factor):
    """(1 + r)/(1 - r) for many; for n = 100 exactly 2.96 and 8.60 (computed from the closed form)."""
    fit = fit_linear(np.ones((100, 1)), np.zeros(100), np.arange(100.0), Noise(1.0, rho, 99))
    assert fit.covariance[0, 0] * 100 == pytest.approx(factor, abs=0.005)


def autoregression(rng, n, rho):
    e = rng.normal(size=n)
    out = np.empty(n)
    out[0] = e[0]
    for i in range(1, n):
        out[i] = rho * out[i - 1] + np.sqrt(1 - rho**2) * e[i]
    return out


@pytest.mark.parametrize("rho", [0.0, 0.4, 0.7])
def test_intervals_of_a_quadratic_cover_with_correlated_errors(rng, rho):
    """95 % intervals of an acceleration from 100 frames, with Student's t: 400 runs, 4 sigma is 4.4 %."""
    t = np.linspace(0, 0.4, 100)
    rows, _, _ = polynomial_rows(t, 2)
    inside = 0
    for _ in range(400):
        y = rows @ [1.0, -0.5, -0.3] + 1e-3 * autoregression(rng, 100, rho)
        noise = smooth_noise(t, y, np.arange(100.0))
        fit = fit_linear(rows, y, np.arange(100.0), noise)
        k = stats.t.ppf(0.975, max(1.0, np.floor(noise.dof)))
        inside += abs(fit.parameters[2] + 0.3) < k * np.sqrt(fit.covariance[2, 2])
    assert 0.906 <= inside / 400 <= 0.994


def test_noise_knows_its_size_and_gaps(rng):
    steps = np.delete(np.arange(400.0), np.arange(100, 130))
    noise = noise_of(1e-3 * autoregression(rng, steps.size, 0.6), steps, 1)
    assert noise.sigma == pytest.approx(1e-3, rel=0.25)
    assert noise.rho == pytest.approx(0.6, abs=0.12)


def test_rough_noise_is_blind_to_motion(rng):
    t = np.linspace(0, 0.5, 120)
    kinked = np.where(t < 0.2, 5 * t**2, 0.2 + 2 * (t - 0.2) + 9 * (t - 0.2) ** 2)  # an acceleration that jumps
    white = rough_noise(kinked + rng.normal(0, 2e-4, t.size), np.arange(120.0))
    assert 2e-4 < white.sigma < 5e-4  # what neighbours may share is added


def test_nonlinear_fit_finds_an_exponential(rng):
    t = np.linspace(0, 2, 80)
    y = 3 * np.exp(-1.7 * t) + rng.normal(0, 0.01, t.size)
    fit = fit_nonlinear(
        lambda p: p[0] * np.exp(-p[1] * t), np.array([1.0, 1.0]), y, np.arange(80.0), np.array([1.0, 1.0])
    )
    assert fit.converged
    assert np.all(np.abs(fit.parameters - [3, 1.7]) < 4 * np.sqrt(np.diag(fit.covariance)))


def test_fewer_points_than_parameters_are_refused():
    with pytest.raises(ValueError, match="2 points for 3"):
        fit_linear(np.ones((2, 3)), np.zeros(2), np.arange(2.0))
