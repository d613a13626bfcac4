"""Surface drop: a hung line is released and lands; the landing pulls what is still in the air.

With length l above the surface and speed v, dv/dt = g + b v^2/l, so with v0 at first touch (l = L)
v^2 = v0^2 (L/l)^(2b) + 2 g/(2 b + 1) (L^(2b+1) - l^(2b+1))/l^(2b). Place over time follows by quadrature of dt = -dl/v.
Without a surface in the sheet the same line falls freely: the control run.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.analysis.common import accelerations, add_peak_speed, add_release, clear_end, with_reason
from tracker.analysis.fits import fit_linear, fit_nonlinear
from tracker.analysis.kinematics import Release, find_release, frame_steps, local_state, time_at, within
from tracker.analysis.tracks import Estimate, Evaluation, Finding, Track

__all__ = ["SurfaceDropSetup", "evaluate", "predict", "speed"]

Floats = NDArray[np.float64]
WINDOW_END = 0.25  # of the length still above the surface (design, section 3)
NODES = 400


@dataclass(frozen=True, slots=True)
class SurfaceDropSetup:
    """What is known of a surface drop. Without length or height it is a control run."""

    gravity: float  # m/s^2
    length_m: float | None = None
    drop_height_m: float | None = None  # release point of the top end to the surface
    landing_rise_m: float = 0.0
    window_s: tuple[float, float] | None = None
    touch_s: float | None = None  # fixed when the budget is made, so that windows do not move


def speed(length_m: Floats, b: float, v0: float, full_m: float, gravity: float) -> Floats:
    """Speed of the top end with `length_m` still above the surface [m/s]: the solved law."""
    ratio = full_m / np.asarray(length_m, dtype=float)
    square = v0**2 * ratio ** (2 * b) + 2 * gravity / (2 * b + 1) * (full_m * ratio ** (2 * b) - np.asarray(length_m))
    return np.asarray(np.sqrt(np.maximum(square, 0.0)), dtype=float)


def predict(t_s: Floats, b: float, v0: float, full_m: float, gravity: float) -> Floats:
    """Length still above the surface at times since first touch [m].

    Parameters
    ----------
    t_s : (n,) array
        Since first touch [s]; before it, free fall.
    b : float
        Landing coefficient, above -1/2.
    v0 : float
        Speed at first touch [m/s], above 0.
    full_m : float
        Length of the line [m].
    gravity : float
        [m/s^2].

    Returns
    -------
    (n,) array
        NaN once less than a hundredth of the line is left, where the law diverges.
    """
    t = np.asarray(t_s, dtype=float)
    lengths = full_m * np.linspace(1.0, 0.01, NODES)
    slowness = 1.0 / np.maximum(speed(lengths, b, v0, full_m, gravity), 1e-6)
    step = lengths[0] - lengths[1]
    # Simpson's rule on each step with the midpoint: dt = dl/v
    middle = 1.0 / np.maximum(speed(lengths[:-1] - step / 2, b, v0, full_m, gravity), 1e-6)
    times = np.concatenate([[0.0], np.cumsum(step / 6 * (slowness[:-1] + 4 * middle + slowness[1:]))])
    after = np.interp(t, times, lengths, right=np.nan)
    # linear interpolation within a step errs by v' dt^2/8: one correction with the law's own acceleration
    at = np.clip(np.searchsorted(times, t) - 1, 0, NODES - 2)
    share = t - times[at]
    rate = speed(np.maximum(after, 0.01 * full_m), b, v0, full_m, gravity)
    pull = gravity + b * rate**2 / np.maximum(after, 0.01 * full_m)
    after = after + 0.5 * pull * share * (times[at + 1] - times[at] - share)
    return np.where(t < 0, full_m - v0 * t - 0.5 * gravity * t**2, after)


def evaluate(track: Track, setup: SurfaceDropSetup) -> Evaluation:
    """Measure a surface drop or its control.

    Parameters
    ----------
    track : Track
        Top end; z counts from the release point.
    setup : SurfaceDropSetup

    Returns
    -------
    Evaluation
        `effective_acceleration_mps2`, `acceleration_ratio`, `landing_coefficient`, `lead_over_free_fall_s`,
        `first_touch_s`, `release_s`, `peak_end_speed_mps`.
    """
    before_touch = None
    if setup.length_m is not None and setup.drop_height_m is not None:
        before_touch = setup.drop_height_m - setup.landing_rise_m - setup.length_m
    reach = before_touch if before_touch is not None and before_touch > 0.01 else 0.3
    release = find_release(track, setup.gravity, reach_m=reach)
    out = add_release(Evaluation(), release)
    if before_touch is None or setup.length_m is None or setup.drop_height_m is None:
        return _control(track, setup, release, out)
    z_touch = -before_touch
    seen = time_at(track, z_touch)
    touch = setup.touch_s if setup.touch_s is not None else seen
    if touch is None or seen is None:
        reason = "the top end was not followed through the place of first touch"
        names = (
            "effective_acceleration_mps2",
            "acceleration_ratio",
            "landing_coefficient",
            "lead_over_free_fall_s",
            "first_touch_s",
        )
        return with_reason(out, reason, *names)
    floor = -(setup.drop_height_m - setup.landing_rise_m)
    z_end = floor + WINDOW_END * setup.length_m
    end = time_at(track, z_end, touch)
    window = setup.window_s or (touch, min(end if end is not None else np.inf, clear_end(track)))
    state = local_state(track, touch)
    at_touch = Estimate(
        seen, "s", state[2] / max(abs(state[1]), 1e-3) if state else 0.0, np.inf, None,
        "moment at which the fallen distance equals drop height less line length: the lower end touches the surface",
    )  # fmt: skip
    ends = [float(np.interp(t, track.t_s[within(track, window)], track.z_m[within(track, window)])) for t in window]
    extra: dict[str, object] = {"window_l_over_L": [(z - floor) / setup.length_m for z in ends]}
    out, _ = accelerations(out, track, window, setup.gravity, extra)
    out = replace(out, estimates={**out.estimates, "first_touch_s": at_touch})
    out = _lead(track, setup, release, touch, out)
    out = _law(track, setup, touch, floor, out)
    return add_peak_speed(out, track)


def _control(track: Track, setup: SurfaceDropSetup, release: Release | None, out: Evaluation) -> Evaluation:
    """The fall without a surface: all of it, from two frames after release."""
    ok = track.t_s[np.isfinite(track.z_m) & np.isfinite(track.t_s)]
    frame = float(np.median(np.diff(ok))) if ok.size > 1 else 0.0
    begin = release.t_s + 2 * frame if release is not None else (float(ok[0]) if ok.size else 0.0)
    out, _ = accelerations(out, track, setup.window_s or (begin, clear_end(track)), setup.gravity, {}, parabola=True)
    reason = "no surface is known: line.length_m with test.drop_height_m or datum.floor_px is missing, so this is a control run"
    out = with_reason(out, reason, "landing_coefficient", "lead_over_free_fall_s", "first_touch_s")
    finding = Finding("no-surface", f"Taken as a control run: {reason}.", "", "For a landing, give test.drop_height_m.")
    out = replace(out, findings=(*out.findings, finding))
    if release is not None:
        t = np.linspace(release.t_s, clear_end(track), 120)
        fall = np.stack([t, release.z_m - 0.5 * setup.gravity * (t - release.t_s) ** 2], axis=1)
        out = replace(out, curves={"free_fall_z_m": fall})
    return add_peak_speed(out, track)


def _lead(track: Track, setup: SurfaceDropSetup, release: Release | None, touch: float, out: Evaluation) -> Evaluation:
    """How much sooner the end is at the end of the window than free fall from its place and speed at first touch."""
    name = "lead_over_free_fall_s"
    window = out.window_s
    ok = track.t_s[np.isfinite(track.z_m) & np.isfinite(track.t_s)]
    frame = float(np.median(np.diff(ok)))
    begin = release.t_s + 2 * frame if release is not None else float(ok[0])
    index = within(track, (begin, touch))
    if window is None or index.size < 6:
        return with_reason(out, "fewer than six frames of fall before first touch", name)
    t = track.t_s[index] - touch
    # free fall before touch with local gravity: place and speed at touch from all of it
    fit = fit_linear(
        np.stack([np.ones_like(t), t], axis=1),
        track.z_m[index] + 0.5 * setup.gravity * t**2,
        frame_steps(track.t_s[index]),
    )
    z0, v0 = float(fit.parameters[0]), -float(fit.parameters[1])
    at_end = local_state(track, window[1])
    if at_end is None or v0 <= 0:
        return with_reason(out, "the end of the window is not followed well enough", name)
    fall = z0 - at_end[0]
    duration = (-v0 + np.sqrt(v0**2 + 2 * setup.gravity * fall)) / setup.gravity
    v_end = v0 + setup.gravity * duration
    lead = duration - (window[1] - touch)
    # errors of z0, v0 and of the end's place as times
    slope = np.array([1.0, duration]) / v_end
    u = float(np.hypot(np.sqrt(slope @ fit.covariance @ slope), at_end[2] / v_end))
    extra: dict[str, object] = {
        "at_z_m": at_end[0],
        "lead_m": float(z0 - v0 * (window[1] - touch) - 0.5 * setup.gravity * (window[1] - touch) ** 2 - at_end[0]),
        "speed_at_touch_mps": v0,
    }  # fmt: skip
    words = "time by which the end is at its place at the window's end before free fall with its place and speed at first touch"
    value = Estimate(float(lead), "s", u, fit.noise.dof, window, words, extra)
    t_fall = np.linspace(0, window[1] - touch, 80)
    curve = np.stack([touch + t_fall, z0 - v0 * t_fall - 0.5 * setup.gravity * t_fall**2], axis=1)
    return replace(out, estimates={**out.estimates, name: value}, curves={**out.curves, "free_fall_z_m": curve})


def _law(track: Track, setup: SurfaceDropSetup, touch: float, floor: float, out: Evaluation) -> Evaluation:
    """`landing_coefficient`: the law fitted with place and speed at touch left free."""
    name = "landing_coefficient"
    window = out.window_s
    index = within(track, window) if window is not None else np.zeros(0, dtype=np.intp)
    full = setup.length_m
    if index.size < 8 or full is None:
        return with_reason(out, "too few frames between first touch and the window's end", name)
    t, z = track.t_s[index], track.z_m[index]
    state = local_state(track, touch)
    v0 = max(-state[1], 0.05) if state is not None else 1.0

    def model(p: Floats) -> Floats:
        return floor + predict(
            t - touch - p[2], float(np.clip(p[0], -0.45, 3.0)), max(float(p[1]), 1e-3), full, setup.gravity
        )

    fit = fit_nonlinear(model, np.array([0.05, v0, 0.0]), z, frame_steps(t), np.array([0.05, 0.1, 0.002]))
    u_b = float(np.sqrt(fit.covariance[0, 0]))
    typical = float(np.nanmedian(track.u_m[index]))
    worst = float(np.max(np.abs(fit.residuals)))
    rms = float(np.sqrt(np.mean(fit.residuals**2)))
    findings = out.findings
    if rms > 4 * max(typical, 2e-4):
        when = float(t[int(np.argmax(np.abs(fit.residuals)))])
        findings += (
            Finding(
                "law-misfit",
                f"The landing law does not describe this run: leaves {1e3 * rms:.2f} mm RMS, up to {1e3 * worst:.1f} mm ({when:.3f} s).",
                "The landing coefficient is a mean over pieces that land one by one; read the acceleration instead.",
                "",
            ),
        )
    extra: dict[str, object] = {"fit_rms_m": rms, "speed_at_touch_mps": float(fit.parameters[1])}
    words = "landing pull over line mass per length times speed squared, fitted over the window with place and speed at touch free"
    value = Estimate(float(fit.parameters[0]), "1", u_b, fit.noise.dof, window, words, extra)
    grid = np.linspace(touch, t[-1], 80)
    law = floor + predict(
        grid - touch - fit.parameters[2], float(fit.parameters[0]), float(fit.parameters[1]), full, setup.gravity
    )
    curves = {**out.curves, "law_z_m": np.stack([grid, law], axis=1)}
    return replace(out, estimates={**out.estimates, name: value}, findings=findings, curves=curves)
