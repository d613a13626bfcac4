"""What the falling kinds have in common: the default windows' beginnings, and the quantities that every fall has."""

from dataclasses import replace

import numpy as np

from tracker.analysis.kinematics import ConstantAcceleration, Release, constant_acceleration, peak_mean_speed, within
from tracker.analysis.tracks import Estimate, Evaluation, Finding, Track

__all__ = ["PEAK_UNRESOLVED", "accelerations", "add_peak_speed", "add_release", "clear_end", "with_reason"]

PEAK_UNRESOLVED = 0.15  # a mean speed that changes by more from one 1/120 s to the next is no peak speed


def with_reason(evaluation: Evaluation, reason: str, *names: str) -> Evaluation:
    """Note why quantities are absent."""
    return replace(evaluation, absent={**evaluation.absent, **dict.fromkeys(names, reason)})


def clear_end(track: Track) -> float:
    """Time of the last frame in which the end was measured [s]."""
    ok = np.isfinite(track.z_m) & np.isfinite(track.t_s)
    return float(track.t_s[ok][-1]) if ok.any() else float("nan")


def add_release(evaluation: Evaluation, release: Release | None) -> Evaluation:
    """`release_s`, or why it is absent."""
    if release is None:
        return with_reason(evaluation, "the end is not seen at rest before it falls", "release_s")
    value = Estimate(
        release.t_s, "s", release.u_s, release.dof, None, "moment at which the end, at rest before, begins to fall"
    )
    return replace(evaluation, estimates={**evaluation.estimates, "release_s": value})


def accelerations(
    evaluation: Evaluation, track: Track, window_s: tuple[float, float], gravity: float, extra: dict[str, object], parabola: bool = False
) -> tuple[Evaluation, ConstantAcceleration | None]:
    """`effective_acceleration_mps2` and `acceleration_ratio` over a window, or why they are absent."""
    names = ("effective_acceleration_mps2", "acceleration_ratio")
    fit = constant_acceleration(track, window_s, parabola)
    if fit is None:
        reason = f"only {within(track, window_s).size} frames measured from {window_s[0]:.3f} to {window_s[1]:.3f} s"
        return with_reason(evaluation, reason, *names), None
    words = "constant acceleration that best fits z(t) over the window, start place and start speed left free"
    # the window is stated to the middle between frames, so that it does not hang on the last digit of a time which it holds
    half = 0.5 * float(np.median(np.diff(fit.t_s)))
    window = (
        min(max(window_s[0], float(fit.t_s[0]) - half), float(fit.t_s[0]) - 0.1 * half),
        max(min(window_s[1], float(fit.t_s[-1]) + half), float(fit.t_s[-1]) + 0.1 * half),
    )
    more = {**extra, "fit_rms_m": fit.rms_m, "frames": int(fit.t_s.size)}
    found = {
        names[0]: Estimate(fit.a, "m/s2", fit.u_a, fit.dof, window, words, more),
        names[1]: Estimate(
            fit.a / gravity, "1", fit.u_a / gravity, fit.dof, window, "effective acceleration over local gravity", more
        ),
    }
    return replace(evaluation, estimates={**evaluation.estimates, **found}, window_s=window), fit


def add_peak_speed(evaluation: Evaluation, track: Track) -> Evaluation:
    """`peak_end_speed_mps`, or why it is absent."""
    name = "peak_end_speed_mps"
    peak = peak_mean_speed(track)
    if peak is None:
        return with_reason(evaluation, "the end's fastest part was not followed without a gap", name)
    speed, at, u, change = peak
    if change > PEAK_UNRESOLVED:
        reason = (
            f"the end's speed changes by {100 * change:.0f} % from one 1/120 s to the next about its fastest part: "
            "its peak is not resolved at this frame rate"
        )
        finding = Finding("peak-unresolved", f"No peak speed is given: {reason}.", "", "Film at a higher frame rate.")
        return replace(with_reason(evaluation, reason, name), findings=(*evaluation.findings, finding))
    value = Estimate(
        speed, "m/s", u, np.inf, (at - 1 / 240, at + 1 / 240), "largest mean speed of the end over 1/120 s"
    )
    return replace(evaluation, estimates={**evaluation.estimates, name: value})
