"""Drawn line: a line is pulled from a container at a set speed; its mean speed, its ripple, its snags."""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.analysis.common import with_reason
from tracker.analysis.fits import fit_linear, polynomial_rows, rough_noise
from tracker.analysis.kinematics import frame_steps
from tracker.analysis.tracks import Estimate, Evaluation, Finding, PayoutTrack

__all__ = ["DrawnSetup", "Snag", "evaluate", "find_snags"]

Floats = NDArray[np.float64]
SNAG_DEPTH = 0.15  # of the usual speed lost, at least, for a dip to be a snag
SNAG_SIGMA = 4.0


@dataclass(frozen=True, slots=True)
class DrawnSetup:
    """What is known of a drawn line."""

    window_s: tuple[float, float] | None = None


@dataclass(frozen=True, slots=True)
class Snag:
    """A dip of the speed."""

    from_s: float
    to_s: float
    lowest_mps: float
    lost_m: float  # line that did not pass


def find_snags(t_s: Floats, speed: Floats, u: Floats) -> tuple[Snag, ...]:
    """Dips of the speed below its median by more than a share and by more than its noise, two frames or longer."""
    usual = float(np.median(speed))
    noise = 1.4826 * float(np.median(np.abs(np.diff(speed)))) / np.sqrt(2)
    limit = usual - max(SNAG_DEPTH * usual, SNAG_SIGMA * max(noise, float(np.nanmedian(u))))
    low = speed < limit
    edges = np.flatnonzero(np.diff(np.concatenate([[0], low.astype(int), [0]])))
    snags = []
    for begin, end in zip(edges[::2], edges[1::2], strict=True):
        if end - begin < 2 or begin == 0 or end == low.size:  # a line that starts up or runs out is not snagged
            continue
        lost = float(np.trapezoid(usual - speed[begin:end], t_s[begin:end]))
        snags.append(Snag(float(t_s[begin]), float(t_s[end - 1]), float(speed[begin:end].min()), lost))
    return tuple(snags)


def evaluate(track: PayoutTrack, setup: DrawnSetup) -> Evaluation:
    """Measure a drawn line.

    Parameters
    ----------
    track : PayoutTrack
    setup : DrawnSetup

    Returns
    -------
    Evaluation
        `line_speed_mps`, `speed_ripple`, `snag_count`, `length_paid_out_m`.
    """
    out = Evaluation()
    ok = np.flatnonzero(np.isfinite(track.speed_mps) & np.isfinite(track.t_s))
    if setup.window_s is not None:
        ok = ok[(track.t_s[ok] >= setup.window_s[0] - 1e-9) & (track.t_s[ok] <= setup.window_s[1] + 1e-9)]
    names = ("line_speed_mps", "speed_ripple", "snag_count", "length_paid_out_m")
    if ok.size < 10:
        return with_reason(out, "the line's speed was measured in too few frames", *names)
    t, v, u = track.t_s[ok], track.speed_mps[ok], track.u_speed_mps[ok]
    window = (float(t[0]), float(t[-1]))
    snags = find_snags(t, v, u)
    steps = frame_steps(t)
    noise = rough_noise(v, steps)
    noise = replace(noise, sigma=max(noise.sigma, float(np.sqrt(np.nanmean(u**2)))))
    level = fit_linear(np.ones((t.size, 1)), v, steps, noise)
    mean = float(level.parameters[0])
    free = np.ones(t.size, dtype=bool)
    for snag in snags:
        free &= (t < snag.from_s - 0.02) | (t > snag.to_s + 0.02)
    found = {
        names[0]: Estimate(
            mean,
            "m/s",
            float(np.sqrt(level.covariance[0, 0])),
            noise.dof,
            window,
            "rate at which line crosses the rim, mean over the window",
        )
    }
    if free.sum() >= 10:
        rows, _, _ = polynomial_rows(t[free], 1)
        rest = v[free] - rows @ np.linalg.lstsq(rows, v[free], rcond=None)[0]
        square = float(np.mean(rest**2)) - float(np.nanmean(u[free] ** 2))
        ripple = float(np.sqrt(max(square, 0.0))) / mean
        u_ripple = float(np.sqrt(np.nanmean(u[free] ** 2))) / mean / np.sqrt(2 * max(free.sum() / 5, 1))
        words = (
            "standard deviation of the line speed about its trend, snags and measuring noise taken out, over its mean"
        )
        found[names[1]] = Estimate(
            ripple, "1", float(np.hypot(u_ripple, ripple / np.sqrt(2 * max(free.sum() / 5, 1)))), np.inf, window, words
        )
    else:
        out = with_reason(out, "too few frames without a snag", names[1])
    events: dict[str, object] = {
        "snags": [{"from_s": s.from_s, "to_s": s.to_s, "lowest_mps": s.lowest_mps, "lost_m": s.lost_m} for s in snags]
    }
    words = f"dips of the line speed by more than {100 * SNAG_DEPTH:.0f} % and {SNAG_SIGMA:.0f} times its noise, two frames or longer"
    found[names[2]] = Estimate(float(len(snags)), "1", 0.0, np.inf, window, words, events)
    paid = track.paid_out_m[ok]
    if np.isfinite(paid[[0, -1]]).all():
        u_paid = float(np.sqrt(np.nanmean(u**2)) * np.median(np.diff(t)) * np.sqrt(t.size))
        found[names[3]] = Estimate(
            float(paid[-1] - paid[0]), "m", u_paid, np.inf, window, "length of line that crossed the rim in the window"
        )
    findings = tuple(
        Finding(
            "snag",
            f"The line snagged at {s.from_s:.3f} s: down to {s.lowest_mps:.2f} m/s, {1e3 * s.lost_m:.0f} mm of line held back.",
            "",
            "",
        )
        for s in snags
    )
    return replace(out, estimates=found, findings=findings, window_s=window)
