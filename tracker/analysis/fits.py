"""Least squares whose uncertainty survives correlated residuals.

Errors of neighbouring frames are alike: the same edge pixels, the same compression, the same light. A fit that takes
them for independent gives too small an uncertainty. Here the noise of a series is described by its standard deviation
and a first-order autoregression, both estimated from what a smooth curve leaves, and pushed through the estimator:
u^2 = row R row', R the covariance of the errors (JCGM 100:2008, 5.2.2, with correlated inputs).
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, optimize

__all__ = [
    "LinearFit",
    "Noise",
    "NonlinearFit",
    "fit_linear",
    "fit_nonlinear",
    "noise_of",
    "polynomial_rows",
    "smooth_noise",
]

Floats = NDArray[np.float64]
FEWEST_DOF = 4.0  # below, an effective number of degrees of freedom says nothing
NEIGHBOURS = 0.5  # correlation of neighbouring frames' errors where the series itself cannot tell it from motion
STRONGEST = 0.95  # an autocorrelation above this is a drift, not noise


@dataclass(frozen=True, slots=True)
class Noise:
    """Standard deviation, lag-1 correlation of neighbouring frames, and how well both are known."""

    sigma: float
    rho: float
    dof: float  # effective

    def covariance(self, steps: Floats) -> Floats:
        """Covariance (n, n) of errors at places `steps` (n,), counted in frames."""
        return self.sigma**2 * self.rho ** np.abs(steps[:, None] - steps[None, :])

    def through(self, gain: Floats, steps: Floats) -> Floats:
        """Covariance (p, p) of gain @ errors, gain (p, n), in memory that grows with n and not with its square.

        The inverse of a first-order autoregression's covariance has three diagonals whatever the gaps (an
        Ornstein-Uhlenbeck process is Markov), so its product with a vector is one banded solution.
        """
        if self.rho <= 0 or steps.size < 2:
            return np.asarray(self.sigma**2 * gain @ gain.T, dtype=float)
        alike = self.rho ** np.maximum(np.diff(steps), 1e-3)
        loss = 1.0 / (1.0 - alike**2)
        bands = np.zeros((2, steps.size))
        bands[1] = 1.0
        bands[1, :-1] += alike**2 * loss
        bands[1, 1:] += alike**2 * loss
        bands[0, 1:] = -alike * loss
        return np.asarray(self.sigma**2 * gain @ linalg.solveh_banded(bands, gain.T), dtype=float)


@dataclass(frozen=True, slots=True, eq=False)
class LinearFit:
    """Parameters of y = rows @ parameters with a covariance that holds for correlated errors."""

    parameters: Floats  # (p,)
    covariance: Floats  # (p, p)
    residuals: Floats  # (n,)
    noise: Noise


@dataclass(frozen=True, slots=True, eq=False)
class NonlinearFit:
    """As `LinearFit`, for a model that is not linear in its parameters."""

    parameters: Floats
    covariance: Floats
    residuals: Floats
    noise: Noise
    converged: bool


def polynomial_rows(t: Floats, degree: int) -> tuple[Floats, float, float]:
    """Legendre rows (n, degree + 1) over times scaled to -1..1, with the middle and the half-length of the window."""
    middle, half = 0.5 * float(t[0] + t[-1]), 0.5 * float(t[-1] - t[0]) or 1.0
    return np.asarray(np.polynomial.legendre.legvander((t - middle) / half, degree), dtype=float), middle, half


def noise_of(residuals: Floats, steps: Floats, parameters: int) -> Noise:
    """Noise behind the residuals of a fit.

    Parameters
    ----------
    residuals : (n,) array
    steps : (n,) array
        Frame numbers, so that a gap counts as one.
    parameters : int
        How many the fit used up.

    Returns
    -------
    Noise

    Notes
    -----
    The lag-1 correlation of residuals is low by about (1 + 3 rho)/n for a mean (Kendall, Biometrika 41, 403 (1954)), and
    each further parameter takes about (1 + rho)/n: raw = rho - (p (1 + rho) + 3 rho)/n is solved for rho, cut to 0..0.95,
    so that the noise is never taken for better than white.
    """
    n = residuals.size
    spare = max(n - parameters, 1)
    sigma = float(np.sqrt(residuals @ residuals / spare))
    pairs = np.flatnonzero(np.diff(steps) <= 1.5)
    if pairs.size < 4 or sigma == 0:
        return Noise(sigma, 0.0, float(spare))
    variance = float(residuals @ residuals) / n
    raw = float(np.mean(residuals[pairs] * residuals[pairs + 1])) / variance
    spent = min(parameters / n, 0.4)
    rho = float(np.clip((raw + spent) / (1 - spent - 3 / n), 0.0, STRONGEST)) if raw > -spent else 0.0
    # the variance of residuals is itself low where errors hang together: the fit follows them
    effective = n * (1 - rho) / (1 + rho)
    lost = min(parameters, 0.8 * effective) if rho > 0 else parameters
    sigma = float(np.sqrt(variance * effective / max(effective - lost, 0.2 * effective))) if rho > 0 else sigma
    return Noise(sigma, rho, float(max(effective - lost, FEWEST_DOF)))


def smooth_noise(t: Floats, y: Floats, steps: Floats, degree: int = 6) -> Noise:
    """Noise of a series about a smooth curve, whatever its law: what a polynomial of fixed degree leaves."""
    degree = int(min(degree, max(2, t.size // 4)))
    rows, _, _ = polynomial_rows(t, degree)
    parameters, *_ = linalg.lstsq(rows, y, lapack_driver="gelsy")
    return noise_of(y - rows @ parameters, steps, degree + 1)


def rough_noise(y: Floats, steps: Floats) -> Noise:
    """Noise of a series that also moves in ways no polynomial follows: from its third differences.

    What is slower than a few frames counts as motion; the correlation of neighbouring frames, which cannot be told
    from it, is taken as `NEIGHBOURS`. A first-order autoregression of correlation r has third differences of variance
    sigma^2 (20 - 30 r + 12 r^2 - 2 r^3).
    """
    whole = np.flatnonzero((steps[3:] - steps[:-3]) < 3.5)
    if whole.size < 4:
        return smooth_noise(steps, y, steps)
    third = (y[3:] - 3 * y[2:-1] + 3 * y[1:-2] - y[:-3])[whole]
    r = NEIGHBOURS
    sigma = float(np.sqrt(np.mean(third**2) / (20 - 30 * r + 12 * r**2 - 2 * r**3)))
    return Noise(sigma, r, max(whole.size / 3.0, FEWEST_DOF))


def fit_linear(rows: Floats, y: Floats, steps: Floats, noise: Noise | None = None) -> LinearFit:
    """Unweighted least squares by QR, with the covariance for correlated errors.

    Parameters
    ----------
    rows : (n, p) array
        Design matrix; its columns are scaled within.
    y : (n,) array
    steps : (n,) array
        Frame numbers.
    noise : Noise, optional
        Where the model is not the law of the data, the noise found otherwise; else from the residuals.

    Returns
    -------
    LinearFit

    Raises
    ------
    ValueError
        Fewer points than parameters.
    """
    n, p = rows.shape
    if n < p:
        raise ValueError(f"fit_linear: {n} points for {p} parameters.")
    scale = np.sqrt((rows**2).sum(axis=0))
    q, r, order = linalg.qr(rows / scale, mode="economic", pivoting=True)
    inverse = np.zeros((p, n))
    # a few by a few: inverted outright, which no linear algebra library spreads over threads that wait for each other
    inverse[order] = np.linalg.inv(r) @ q.T
    inverse /= scale[:, None]
    parameters = inverse @ y
    residuals = y - rows @ parameters
    residuals_again = inverse @ residuals  # one step of iterative refinement, for stiff problems
    parameters = parameters + residuals_again
    residuals = y - rows @ parameters
    found = noise if noise is not None else noise_of(residuals, steps, p)
    return LinearFit(parameters, found.through(inverse, steps), residuals, found)


def fit_nonlinear(
    model: Callable[[Floats], Floats], start: Floats, y: Floats, steps: Floats, scales: Floats
) -> NonlinearFit:
    """Unweighted non-linear least squares (Levenberg-Marquardt of MINPACK), with the covariance for correlated errors.

    Parameters
    ----------
    model : callable
        (p,) parameters to (n,) values.
    start : (p,) array
    y : (n,) array
    steps : (n,) array
        Frame numbers.
    scales : (p,) array
        A typical change of each parameter.

    Returns
    -------
    NonlinearFit
    """

    def miss(reduced: Floats) -> Floats:
        value = model(start + reduced * scales) - y
        clean: Floats = np.nan_to_num(np.asarray(value, dtype=float), nan=1e3, posinf=1e3, neginf=-1e3)
        return clean

    fit = optimize.least_squares(
        miss, np.zeros(start.size), method="lm", xtol=1e-11, ftol=1e-11, gtol=1e-11, max_nfev=400
    )
    parameters = start + fit.x * scales
    residuals = -fit.fun
    noise = noise_of(residuals, steps, start.size)
    inverse = np.linalg.pinv(fit.jac) * scales[:, None]
    return NonlinearFit(parameters, noise.through(inverse, steps), residuals, noise, bool(fit.success))
