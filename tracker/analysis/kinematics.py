"""Motion without a law: the constant acceleration that fits best, the moment of release, places and speeds in between."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from tracker.analysis.fits import Noise, fit_linear, noise_of, polynomial_rows, rough_noise, smooth_noise
from tracker.analysis.tracks import Track

__all__ = [
    "ConstantAcceleration",
    "Release",
    "constant_acceleration",
    "find_release",
    "frame_steps",
    "local_state",
    "peak_mean_speed",
    "time_at",
    "usual_noise",
    "within",
]

Floats = NDArray[np.float64]
PEAK_SPAN_S = 1 / 120


@dataclass(frozen=True, slots=True, eq=False)
class ConstantAcceleration:
    """The parabola that fits z(t) best, start place and start speed free, all frames alike."""

    a: float  # downwards positive [m/s^2]
    u_a: float
    dof: float
    residuals: Floats  # (n,) [m]
    t_s: Floats
    rms_m: float


@dataclass(frozen=True, slots=True)
class Release:
    """When the end began to fall."""

    t_s: float
    u_s: float
    z_m: float  # where it hung
    u_z_m: float
    dof: float


def within(track: Track, window_s: tuple[float, float]) -> NDArray[np.intp]:
    """Indices of the measured frames in a window."""
    ok = np.isfinite(track.z_m) & np.isfinite(track.t_s)
    return np.flatnonzero(ok & (track.t_s >= window_s[0] - 1e-9) & (track.t_s <= window_s[1] + 1e-9))


def frame_steps(t_s: Floats) -> Floats:
    """Times as counts of the usual frame period, so that correlations know of gaps."""
    if t_s.size < 2:
        return np.zeros(t_s.size)
    return np.asarray((t_s - t_s[0]) / np.median(np.diff(t_s)), dtype=float)


def constant_acceleration(track: Track, window_s: tuple[float, float], parabola: bool) -> ConstantAcceleration | None:
    """Fit the unweighted quadratic of design section 3 over a window.

    Parameters
    ----------
    track : Track
    window_s : (float, float)
    parabola : bool
        Whether motion should be a parabola, so that what a smooth curve leaves is noise.

    Returns
    -------
    ConstantAcceleration or None
        None with fewer than seven frames.

    Notes
    -----
    The measurand is the best-fitting constant acceleration, so what the parabola leaves where motion follows another
    law is not noise. The noise of a fall comes from what a polynomial of degree six leaves, that of jerky motion
    (links that land one by one) from third differences.
    """
    index = within(track, window_s)
    if index.size < 7:
        return None
    t, z = track.t_s[index], track.z_m[index]
    steps = frame_steps(t)
    noise = smooth_noise(t, z, steps) if parabola else rough_noise(z, steps)
    rows, _, half = polynomial_rows(t, 2)
    fit = fit_linear(rows, z, steps, noise)
    # P2 = (3 x^2 - 1)/2: second derivative 3 in scaled time
    factor = -3.0 / half**2
    return ConstantAcceleration(
        a=float(factor * fit.parameters[2]),
        u_a=float(abs(factor) * np.sqrt(fit.covariance[2, 2])),
        dof=noise.dof,
        residuals=fit.residuals,
        t_s=t,
        rms_m=float(np.sqrt(np.mean(fit.residuals**2))),
    )


def find_release(track: Track, gravity: float, reach_m: float) -> Release | None:
    """The moment of release, from rest to a fall that begins as free fall.

    Parameters
    ----------
    track : Track
    gravity : float
        [m/s^2]; only a start, the acceleration of the early fall is free.
    reach_m : float
        How far the early fall is used: up to where another law sets in.

    Returns
    -------
    Release or None
        None where the end is not seen at rest, or does not fall.

    Notes
    -----
    z = z0 before t_r, z0 - a (t - t_r)^2/2 after; for each t_r this is linear in z0 and a. u from the scatter by
    the curvature of the sum of squares, divided by the effective number of frames.
    """
    ok = np.flatnonzero(np.isfinite(track.z_m) & np.isfinite(track.t_s))
    if ok.size < 8:
        return None
    t, z = track.t_s[ok], track.z_m[ok]
    level = float(np.median(z[:5]))
    noise = max(float(np.median(np.abs(np.diff(z[:8]))) / 0.954), 1e-6)
    fallen = np.flatnonzero(level - z > max(6 * noise, 0.002))
    if fallen.size == 0 or fallen[0] < 4:
        return None
    first = int(fallen[0])
    last = first + int(np.argmax(level - z[first:] > reach_m)) if (level - z[first:] > reach_m).any() else ok.size
    # no more rest than needed: a hang that sways long before must not pull
    begin = max(0, first - 60)
    used = slice(begin, max(last, first + 4))
    t, z = t[used], z[used]
    guess = float(t[first - begin] - np.sqrt(2 * max(level - z[first - begin], 1e-6) / gravity))
    step = float(np.median(np.diff(t)))

    def squares(release: float) -> tuple[float, Floats, Floats]:
        rows = np.stack([np.ones_like(t), -0.5 * np.maximum(t - release, 0) ** 2], axis=1)
        parameters, *_ = np.linalg.lstsq(rows, z, rcond=None)
        rest = z - rows @ parameters
        return float(rest @ rest), np.asarray(rest, dtype=float), np.asarray(parameters, dtype=float)

    best = optimize.minimize_scalar(
        lambda r: squares(r)[0], bounds=(guess - 8 * step, guess + 8 * step), method="bounded", options={"xatol": 1e-7}
    )
    release = float(best.x)
    if release < track.t_s[ok[2]]:  # fewer than three frames of rest are none
        return None
    _, rest, parameters = squares(release)
    steps = frame_steps(t)
    found = noise_of(rest, steps, 3)
    after = np.maximum(t - release, 0)
    rows = np.stack([np.ones_like(t), -0.5 * after**2, parameters[1] * after], axis=1)
    fit = fit_linear(rows, rest, steps, found)
    return Release(
        release,
        float(np.sqrt(fit.covariance[2, 2])),
        float(parameters[0]),
        float(np.sqrt(fit.covariance[0, 0])),
        found.dof,
    )


def local_state(track: Track, at_s: float, reach: int = 6, degree: int = 3) -> tuple[float, float, float, float] | None:
    """Place and velocity along z at a time, from a local polynomial: (z, vz, u_z, u_vz); None where too few are near."""
    ok = np.flatnonzero(np.isfinite(track.z_m) & np.isfinite(track.t_s))
    if ok.size < degree + 3:
        return None
    near = ok[np.argsort(np.abs(track.t_s[ok] - at_s), kind="stable")[: 2 * reach + 1]]
    near.sort()
    t = track.t_s[near] - at_s
    if near.size < degree + 3 or not t[0] <= 2 * np.median(np.diff(t)) or not t[-1] >= -2 * np.median(np.diff(t)):
        return None
    rows = np.vander(t, degree + 1, increasing=True)
    fit = fit_linear(rows, track.z_m[near], frame_steps(track.t_s[near]))
    return (
        float(fit.parameters[0]), float(fit.parameters[1]),
        float(np.sqrt(fit.covariance[0, 0])), float(np.sqrt(fit.covariance[1, 1])),
    )  # fmt: skip


def time_at(track: Track, z_m: float, after_s: float = -np.inf) -> float | None:
    """First time after `after_s` at which the end passes a height on its way down; None where it does not."""
    ok = np.flatnonzero(np.isfinite(track.z_m) & np.isfinite(track.t_s) & (track.t_s >= after_s))
    below = np.flatnonzero(track.z_m[ok] <= z_m)
    if below.size == 0 or below[0] == 0:
        return None
    j = ok[below[0]]
    at = float(track.t_s[j])
    for _ in range(6):
        state = local_state(track, at, reach=4)
        if state is None or state[1] >= 0:
            return None
        move = (z_m - state[0]) / state[1]
        at += float(np.clip(move, -0.01, 0.01))
        if abs(move) < 1e-9:
            break
    return at


def peak_mean_speed(track: Track, span_s: float = PEAK_SPAN_S) -> tuple[float, float, float, float] | None:
    """Largest mean speed over a span: (speed, when, u, change), change the relative difference of the spans beside it.

    None where the end was not seen without a gap around its fastest part.
    """
    ok = np.flatnonzero(np.isfinite(track.z_m) & np.isfinite(track.x_m) & np.isfinite(track.t_s))
    if ok.size < 8:
        return None
    t = track.t_s[ok]
    length = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(track.x_m[ok]), np.diff(track.z_m[ok])))])
    starts = t[t <= t[-1] - span_s]
    if starts.size < 5:
        return None
    speed = (np.interp(starts + span_s, t, length) - np.interp(starts, t, length)) / span_s
    best = int(np.argmax(speed))
    usual = float(np.median(np.diff(t)))
    near = (t >= starts[best] - 1.5 * span_s) & (t <= starts[best] + 2.5 * span_s)
    if np.diff(t[near]).max(initial=0.0) > 1.6 * usual or best == starts.size - 1:
        return None
    before, after = np.interp([starts[best] - span_s, starts[best] + span_s], starts, speed)
    change = float(max(speed[best] - before, speed[best] - after) / speed[best])
    u = float(np.sqrt(2.0) * np.nanmedian(track.u_m[ok]) / span_s)
    return float(speed[best]), float(starts[best] + span_s / 2), u, change


def usual_noise(track: Track, index: NDArray[np.intp]) -> Noise:
    """Noise of z about a smooth curve over some frames."""
    return smooth_noise(track.t_s[index], track.z_m[index], frame_steps(track.t_s[index]))
