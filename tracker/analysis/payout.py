"""Payout: a line leaves a container over its rim and falls; the arc over the rim, the speed, the two coefficients.

The steady laws hold for an arc that no longer grows. While it grows at h', the line passes its top at v - h' and falls
at w = v - 2 h', and the coefficients follow from the momentum of the two legs with the arc's radius of curvature c:
a = 1 - ((v-h')^2 - h (v' + g) - g c)/v^2 and b = ((v-h')^2 + H (w' - g) - g c)/w^2, h above the pile and H = h1 + h.
With h' = v' = w' = 0 these are a = g (h + c)/v^2 and b = 1 - g (H + c)/v^2.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.analysis.common import with_reason
from tracker.analysis.fits import fit_linear, polynomial_rows, rough_noise
from tracker.analysis.kinematics import frame_steps
from tracker.analysis.tracks import Estimate, Evaluation, Finding, PayoutTrack

__all__ = ["PayoutSetup", "coefficients", "evaluate", "steady_window"]

Floats = NDArray[np.float64]
STEADY_SHARE = 0.04  # by which height and speed may still differ from their end values within a steady window
SHORTEST_S = 0.08
FEWEST = 10
EDGE_FRAMES = 2  # the first and last frames of a run are not steady


@dataclass(frozen=True, slots=True)
class PayoutSetup:
    """What is known of a payout."""

    gravity: float
    drop_height_m: float | None = None  # rim to floor
    pile_start_m: float | None = None  # rim down to the pile, at start and end of the run
    pile_end_m: float | None = None
    landing_rise_m: float = 0.0
    length_m: float | None = None
    window_s: tuple[float, float] | None = None


@dataclass(frozen=True, slots=True)
class _Mean:
    value: float
    u: float
    dof: float
    drift: float  # over the window
    slope: float
    u_slope: float


def steady_window(track: PayoutTrack) -> tuple[tuple[float, float], bool] | None:
    """The stretch at the end of the run in which height and speed stay near their end values.

    Parameters
    ----------
    track : PayoutTrack

    Returns
    -------
    ((float, float), bool) or None
        From and to [s], and whether it is steady; False where the arc grows to the end and the last sixth is taken.
        None with too few frames.
    """
    ok = np.flatnonzero(np.isfinite(track.apex_z_m) & np.isfinite(track.t_s))
    if ok.size < FEWEST + 2 * EDGE_FRAMES:
        return None
    ok = ok[EDGE_FRAMES:-EDGE_FRAMES]
    t = track.t_s[ok]
    curves = [track.apex_z_m[ok]]
    speed = track.speed_mps[ok]
    if np.isfinite(speed).mean() > 0.8:
        curves.append(np.interp(t, t[np.isfinite(speed)], speed[np.isfinite(speed)]))
    begin = t[0]
    for curve in curves:
        rows, _, _ = polynomial_rows(t, int(min(8, max(2, t.size // 6))))
        smooth = rows @ np.linalg.lstsq(rows, curve, rcond=None)[0]
        late = float(np.mean(curve[-max(FEWEST, t.size // 10) :]))
        off = np.flatnonzero(np.abs(smooth - late) > STEADY_SHARE * abs(late))
        if off.size:
            begin = max(begin, t[min(off[-1] + 1, t.size - 1)])
    end = float(t[-1])
    if end - begin >= SHORTEST_S and np.count_nonzero(t >= begin) >= FEWEST:
        return (float(begin), end), True
    begin = max(float(t[0]), end - max(SHORTEST_S, (end - float(t[0])) / 6))
    if np.count_nonzero(t >= begin) < FEWEST:
        begin = float(t[max(0, t.size - FEWEST)])
    return (begin, end), False


def coefficients(
    v: float, v_rate: float, h: float, h_rate: float, h_curve: float, c: float, height: float, gravity: float
) -> tuple[float, float]:
    """Pick-up and landing coefficient (a, b) of an arc that may still grow.

    Parameters
    ----------
    v, v_rate : float
        Line speed at the rim and its rate [m/s, m/s^2].
    h, h_rate, h_curve : float
        Arc height above the PILE, its rate and the rate of that [m, m/s, m/s^2].
    c : float
        Radius of curvature of the axis at the apex [m]; 0 for an arc without width.
    height : float
        Pile to the place of landing [m].
    gravity : float

    Returns
    -------
    (float, float)
    """
    top, w = v - h_rate, v - 2 * h_rate
    w_rate = v_rate - 2 * h_curve
    a = 1 - (top**2 - h * (v_rate + gravity) - gravity * c) / v**2
    b = (top**2 + (height + h) * (w_rate - gravity) - gravity * c) / w**2
    return a, b


def evaluate(track: PayoutTrack, setup: PayoutSetup) -> Evaluation:
    """Measure a payout.

    Parameters
    ----------
    track : PayoutTrack
    setup : PayoutSetup

    Returns
    -------
    Evaluation
        `arc_height_m`, `line_speed_mps`, `arc_width_m`, `length_paid_out_m`, `pickup_coefficient`, `landing_coefficient`.
    """
    out = Evaluation()
    found = (setup.window_s, True) if setup.window_s is not None else steady_window(track)
    if found is None:
        return with_reason(
            out, "the arc was measured in too few frames", "arc_height_m", "arc_width_m", "line_speed_mps"
        )
    window, steady = found
    assert window is not None
    out = replace(out, window_s=window)
    if not steady:
        finding = Finding(
            "arc-still-growing",
            f"The arc grows to the end of the clip; its last {1e3 * (window[1] - window[0]):.0f} ms are taken.",
            "Height and speed are those of a growing arc, not steady ones.",
            "Film longer, with more line in the container.",
        )
        out = replace(out, findings=(*out.findings, finding))
    series = (
        (
            "arc_height_m",
            "m",
            track.apex_z_m,
            track.u_apex_m,
            "height of the apex of the line's axis above the rim, mean over the window",
        ),
        (
            "line_speed_mps",
            "m/s",
            track.speed_mps,
            track.u_speed_mps,
            "rate at which line crosses the rim, mean over the window",
        ),
        (
            "arc_width_m",
            "m",
            track.width_m,
            track.u_apex_m * 1.5,
            "distance of the legs at half the apex height, mean over the window",
        ),
    )
    means: dict[str, _Mean] = {}
    for name, unit, values, us, words in series:
        mean = _mean(track.t_s, values, us, window)
        if mean is None:
            out = with_reason(out, "measured in too few frames of the window", name)
            continue
        means[name] = mean
        per = "mps2" if unit == "m/s" else "mps"
        extra: dict[str, object] = {f"drift_{per}": mean.slope, f"drift_over_window_{'mps' if unit == 'm/s' else 'm'}": mean.drift}
        out = replace(
            out, estimates={**out.estimates, name: Estimate(mean.value, unit, mean.u, mean.dof, window, words, extra)}
        )
    out = _paid_out(track, out)
    return _coefficients(track, setup, means, out)


def _mean(t_s: Floats, values: Floats, us: Floats, window: tuple[float, float]) -> _Mean | None:
    """Time mean over a window. What ripples is the arc, not noise; noise is no less than the frames' own."""
    index = np.flatnonzero(
        np.isfinite(values) & np.isfinite(t_s) & (t_s >= window[0] - 1e-9) & (t_s <= window[1] + 1e-9)
    )
    if index.size < 6:
        return None
    t, y = t_s[index], values[index]
    steps = frame_steps(t)
    noise = rough_noise(y, steps)
    own = float(np.sqrt(np.nanmean(us[index] ** 2))) if np.isfinite(us[index]).any() else 0.0
    noise = replace(noise, sigma=max(noise.sigma, own))
    rows, _, half = polynomial_rows(t, 1)
    line = fit_linear(rows, y, steps, noise)
    level = fit_linear(np.ones((t.size, 1)), y, steps, noise)
    slope, u_slope = line.parameters[1] / half, float(np.sqrt(line.covariance[1, 1])) / half
    return _Mean(
        float(level.parameters[0]),
        float(np.sqrt(level.covariance[0, 0])),
        noise.dof,
        float(2 * line.parameters[1]),
        float(slope),
        u_slope,
    )


def _paid_out(track: PayoutTrack, out: Evaluation) -> Evaluation:
    ok = np.flatnonzero(np.isfinite(track.paid_out_m) & np.isfinite(track.t_s))
    if ok.size < 2:
        return with_reason(
            out, "the line's speed was not followed from the first to the last frame", "length_paid_out_m"
        )
    first, last = ok[0], ok[-1]
    length = float(track.paid_out_m[last] - track.paid_out_m[first])
    us = track.u_speed_mps[ok]
    u = (
        float(np.sqrt(np.nanmean(us**2)) * np.median(np.diff(track.t_s[ok])) * np.sqrt(ok.size))
        if np.isfinite(us).any()
        else 0.0
    )
    words = "length of line that crossed the rim from the window's first to its last moment"
    window = (float(track.t_s[first]), float(track.t_s[last]))
    return replace(
        out, estimates={**out.estimates, "length_paid_out_m": Estimate(length, "m", u, np.inf, window, words)}
    )


def _coefficients(track: PayoutTrack, setup: PayoutSetup, means: dict[str, _Mean], out: Evaluation) -> Evaluation:
    names = ("pickup_coefficient", "landing_coefficient")
    if "arc_height_m" not in means or "line_speed_mps" not in means:
        return with_reason(out, "height or speed of the window is missing", *names)
    if setup.pile_start_m is None or setup.pile_end_m is None:
        return with_reason(out, "test.pile_depth_m is not given, and the laws count from the pile", *names)
    if setup.drop_height_m is None:
        out = with_reason(out, "test.drop_height_m is not given", names[1])
    window = out.window_s
    assert window is not None
    h, v = means["arc_height_m"], means["line_speed_mps"]
    radius = track.radius_m[(track.t_s >= window[0]) & (track.t_s <= window[1])]
    if not np.isfinite(radius).any():
        return with_reason(out, "the curvature of the arc's top was not measured", *names)
    c = float(np.nanmedian(radius))
    middle = 0.5 * (window[0] + window[1])
    ok = track.t_s[np.isfinite(track.t_s)]
    share = (middle - ok[0]) / max(ok[-1] - ok[0], 1e-9)
    pile = setup.pile_start_m + share * (setup.pile_end_m - setup.pile_start_m)
    height = (setup.drop_height_m or 0.0) - setup.landing_rise_m - pile

    def both(dv: float = 0.0, dh: float = 0.0, dv_rate: float = 0.0, dh_rate: float = 0.0) -> Floats:
        return np.array(
            coefficients(
                v.value + dv, v.slope + dv_rate, h.value + pile + dh, h.slope + dh_rate, 0.0, c, height, setup.gravity
            )
        )

    a, b = both()
    moves = [
        both(dv=v.u) - both(),
        both(dh=h.u) - both(),
        both(dv_rate=v.u_slope) - both(),
        both(dh_rate=h.u_slope) - both(),
    ]
    spread = float(np.nanstd(radius)) / np.sqrt(max(np.isfinite(radius).sum() / 5, 1))
    by_radius = setup.gravity * spread / v.value**2
    u_a, u_b = (float(np.sqrt(sum(m[i] ** 2 for m in moves) + by_radius**2)) for i in (0, 1))
    extra: dict[str, object] = {
        "law": "growing arc with width",
        "apex_radius_m": c,
        "growth_mps": h.slope,
        "pile_depth_m": pile,
    }
    found = {
        names[0]: Estimate(
            float(a), "1", u_a, v.dof, window, "pick-up push over line mass per length times speed squared", extra
        )
    }
    if setup.drop_height_m is not None:
        found[names[1]] = Estimate(
            float(b), "1", u_b, v.dof, window, "landing pull over line mass per length times speed squared", extra
        )
    return replace(out, estimates={**out.estimates, **found})
