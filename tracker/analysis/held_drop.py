"""Held drop: a folded line, one end held, the other released; the free end outruns free fall.

One family holds the energy-conserving fold (k = 1, Calkin & March, Am. J. Phys. 57, 154 (1989)) and the inelastic limit
(k = 0, free fall): v' = g + k v^2/(2 (L - x)), v^2 = 2 g/(1 + k) (L^(1+k) - (L - x)^(1+k))/(L - x)^k, x fallen.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.analysis.common import accelerations, add_peak_speed, add_release, clear_end, with_reason
from tracker.analysis.fits import fit_nonlinear
from tracker.analysis.kinematics import Release, find_release, frame_steps, time_at, within
from tracker.analysis.tracks import Estimate, Evaluation, Finding, Track

__all__ = ["HeldDropSetup", "evaluate", "predict", "speed"]

Floats = NDArray[np.float64]
WINDOW = (0.1, 0.5)  # of the length fallen (design, section 3)
NODES = 400


@dataclass(frozen=True, slots=True)
class HeldDropSetup:
    """What is known of a held drop."""

    gravity: float
    length_m: float | None = None
    window_s: tuple[float, float] | None = None


def speed(x_m: Floats, k: float, length_m: float, gravity: float) -> Floats:
    """Speed of the free end, fallen x of a line of length L from rest [m/s]: the solved law."""
    left = length_m - np.asarray(x_m, dtype=float)
    square = 2 * gravity / (1 + k) * (length_m * (length_m / left) ** k - left)
    return np.asarray(np.sqrt(np.maximum(square, 0.0)), dtype=float)


def predict(t_s: Floats, k: float, length_m: float, gravity: float) -> Floats:
    """Distance fallen after t from rest [m]; NaN beyond 99 % of the length.

    Parameters
    ----------
    t_s : (n,) array
        Since release [s].
    k : float
        Fold coefficient, above -1.
    length_m : float
    gravity : float

    Returns
    -------
    (n,) array

    Notes
    -----
    With x = L s^2 the integrand of dt = dx/v stays finite at the start; Simpson's rule on a fixed grid of s.
    """
    s = np.linspace(0.0, np.sqrt(0.99), NODES)
    step = s[1]

    def slowness(s: Floats) -> Floats:
        x = length_m * s**2
        v = speed(x, k, length_m, gravity)
        start = np.sqrt(2 * length_m / gravity)  # limit of 2 L s / v at s = 0, where v^2 = 2 g x
        return np.where(s > 0, 2 * length_m * s / np.where(v > 0, v, 1.0), start)

    middle = slowness(s[:-1] + step / 2)
    at = slowness(s)
    times = np.concatenate([[0.0], np.cumsum(step / 6 * (at[:-1] + 4 * middle + at[1:]))])
    found = np.interp(np.asarray(t_s, dtype=float), times, s, left=0.0, right=np.nan)
    return np.asarray(length_m * found**2, dtype=float)


def evaluate(track: Track, setup: HeldDropSetup) -> Evaluation:
    """Measure a held drop.

    Parameters
    ----------
    track : Track
        Free end; z counts from the release point.
    setup : HeldDropSetup

    Returns
    -------
    Evaluation
        `effective_acceleration_mps2`, `acceleration_ratio`, `fold_coefficient`, `peak_end_speed_mps`, `release_s`.
    """
    full = setup.length_m
    release = find_release(track, setup.gravity, reach_m=0.06 * full if full is not None else 0.05)
    out = add_release(Evaluation(), release)
    level = release.z_m if release is not None else 0.0
    window = setup.window_s or _default_window(track, full, level, release)
    if window is None:
        reason = "the free end was not followed from a tenth to a half of the line's length"
        names = ("effective_acceleration_mps2", "acceleration_ratio", "fold_coefficient")
        return add_peak_speed(with_reason(out, reason, *names), track)
    index = within(track, window)
    extra: dict[str, object] = {}
    if full is not None and index.size:
        extra["window_x_over_L"] = [float((level - track.z_m[index[n]]) / full) for n in (0, -1)]
    out, _ = accelerations(out, track, window, setup.gravity, extra)
    out = _law(track, setup, release, window, out)
    return add_peak_speed(out, track)


def _default_window(
    track: Track, full: float | None, level: float, release: Release | None
) -> tuple[float, float] | None:
    after = release.t_s if release is not None else -np.inf
    if full is None:
        return None
    begin = time_at(track, level - WINDOW[0] * full, after)
    end = time_at(track, level - WINDOW[1] * full, after)
    if begin is None or end is None:
        return None
    return (begin, min(end, clear_end(track)))


def _law(
    track: Track, setup: HeldDropSetup, release: Release | None, window: tuple[float, float], out: Evaluation
) -> Evaluation:
    """`fold_coefficient`: the family fitted over the window, the moment of release free."""
    name = "fold_coefficient"
    if setup.length_m is None:
        return with_reason(out, "line.length_m is not given", name)
    if release is None:
        return with_reason(out, "the end is not seen at rest before it falls", name)
    index = within(track, window)
    if index.size < 8:
        return with_reason(out, "too few frames in the window", name)
    t, z = track.t_s[index], track.z_m[index]
    full, level = setup.length_m, release.z_m

    def model(p: Floats) -> Floats:
        return level - predict(t - release.t_s - p[1], max(float(p[0]), -0.9), full, setup.gravity)

    fit = fit_nonlinear(model, np.array([0.7, 0.0]), z, frame_steps(t), np.array([0.1, 0.002]))
    rms = float(np.sqrt(np.mean(fit.residuals**2)))
    findings = out.findings
    if rms > 4 * max(float(np.nanmedian(track.u_m[index])), 2e-4):
        findings += (
            Finding(
                "law-misfit",
                f"The fold law leaves {1e3 * rms:.2f} mm RMS in its window.",
                "The fold coefficient is a mean.",
                "",
            ),
        )
    u_k = float(np.sqrt(fit.covariance[0, 0]))
    words = "k of v' = g + k v^2/(2 (L - x)), 0 inelastic and 1 energy-conserving, fitted over the window with the release time free"
    value = Estimate(float(fit.parameters[0]), "1", u_k, fit.noise.dof, out.window_s, words, {"fit_rms_m": rms})
    end = float(t[-1])
    grid = np.linspace(release.t_s, end, 100)
    curves = {
        "law_z_m": np.stack(
            [
                grid,
                level - predict(grid - release.t_s - fit.parameters[1], float(fit.parameters[0]), full, setup.gravity),
            ],
            1,
        ),
        "free_fall_z_m": np.stack([grid, level - 0.5 * setup.gravity * (grid - release.t_s) ** 2], axis=1),
        "energy_conserving_z_m": np.stack(
            [grid, level - predict(grid - release.t_s, 1.0, full, setup.gravity)], axis=1
        ),
    }
    found = {**out.estimates, name: value}
    if findings == out.findings:  # the law holds: it knows the release better than a parabola, which its growing pull bends
        at = release.t_s + float(fit.parameters[1])
        words_of_release = "moment at which the end, at rest before, begins to fall, as the fold law of the window has it"
        found["release_s"] = Estimate(at, "s", float(np.sqrt(fit.covariance[1, 1])), fit.noise.dof, None, words_of_release)
    return replace(out, estimates=found, findings=findings, curves=curves)
