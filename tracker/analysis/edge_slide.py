"""Edge slide: a line slides over a table's edge; the overhang grows.

Plain law (guided edge without friction, sliding friction mu on the table): x'' = g/L ((1 + mu) x - mu L), whose growth
rate is kappa = sqrt(g (1 + mu)/L). From rest, the fallen distance is y = (a0/kappa^2) (cosh kappa (t - t_r) - 1).
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.analysis.common import accelerations, add_release, clear_end, with_reason
from tracker.analysis.fits import fit_nonlinear
from tracker.analysis.kinematics import find_release, frame_steps, within
from tracker.analysis.tracks import Estimate, Evaluation, Finding, Track

__all__ = ["EdgeSlideSetup", "evaluate", "lift_off", "predict"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class EdgeSlideSetup:
    """What is known of an edge slide."""

    gravity: float
    length_m: float | None = None
    window_s: tuple[float, float] | None = None


def predict(t_s: Floats, kappa: float, start_acceleration: float) -> Floats:
    """Distance that the lower end has fallen after t from rest [m].

    Parameters
    ----------
    t_s : (n,) array
        Since release [s].
    kappa : float
        Growth rate [1/s].
    start_acceleration : float
        At rest [m/s^2].

    Returns
    -------
    (n,) array
    """
    t = np.maximum(np.asarray(t_s, dtype=float), 0)
    # 2 sinh^2(x/2) = cosh x - 1 without cancellation
    return np.asarray(2 * start_acceleration / kappa**2 * np.sinh(0.5 * kappa * t) ** 2, dtype=float)


def lift_off(length_m: float, start_m: float, mu: float, gravity: float) -> float:
    """Overhang at which the line lifts off the edge, where its tension there falls to lambda x'^2 [m]."""
    kappa2 = gravity * (1 + mu) / length_m
    x = np.linspace(start_m, length_m, 2000)
    square = kappa2 * ((x - mu / (1 + mu) * length_m) ** 2 - (start_m - mu / (1 + mu) * length_m) ** 2)
    acceleration = kappa2 * x - mu * gravity
    pull = x * (gravity - acceleration)  # of the hanging part on the edge, over lambda
    past = np.flatnonzero(pull < square)
    return float(x[past[0]]) if past.size else float(length_m)


def evaluate(track: Track, setup: EdgeSlideSetup) -> Evaluation:
    """Measure an edge slide.

    Parameters
    ----------
    track : Track
        Lower end.
    setup : EdgeSlideSetup

    Returns
    -------
    Evaluation
        `growth_rate_per_s`, `friction_coefficient`, `effective_acceleration_mps2`, `acceleration_ratio`, `release_s`.
    """
    release = find_release(track, 0.5 * setup.gravity, reach_m=0.05)
    out = add_release(Evaluation(), release)
    ok = track.t_s[np.isfinite(track.z_m) & np.isfinite(track.t_s)]
    if ok.size < 10:
        return with_reason(out, "too few frames measured", "growth_rate_per_s", "friction_coefficient")
    frame = float(np.median(np.diff(ok)))
    begin = release.t_s - 3 * frame if release is not None else float(ok[0])
    end = clear_end(track)
    window = setup.window_s or (begin, end)
    index = within(track, window)
    t, z = track.t_s[index], track.z_m[index]
    start = np.array([np.sqrt(setup.gravity / (setup.length_m or 1.0)), 0.3 * setup.gravity, t[0] + 3 * frame, z[0]])
    scales = np.array([0.3, 0.5, 0.005, 0.001])

    def model(p: Floats) -> Floats:
        return np.asarray(p[3] - predict(t - p[2], max(float(abs(p[0])), 1e-2), float(p[1])), dtype=float)

    fit = fit_nonlinear(model, start, z, frame_steps(t), scales)
    kappa = float(abs(fit.parameters[0]))
    u_kappa = float(np.sqrt(fit.covariance[0, 0]))
    rms = float(np.sqrt(np.mean(fit.residuals**2)))
    if not fit.converged or u_kappa > kappa:
        return with_reason(
            out,
            "the slide does not grow enough within the clip to fix its rate",
            "growth_rate_per_s",
            "friction_coefficient",
        )
    span = (float(t[0]), float(t[-1]))
    law = "plain law: friction on the table, none at the edge"
    found = {
        "growth_rate_per_s": Estimate(
            kappa,
            "1/s",
            u_kappa,
            fit.noise.dof,
            span,
            "rate of exponential growth of the overhang from rest",
            {"law": law, "fit_rms_m": rms},
        )
    }
    findings = out.findings
    if rms > 4 * max(float(np.nanmedian(track.u_m[index])), 2e-4):
        findings += (
            Finding(
                "law-misfit",
                f"The plain sliding law leaves {1e3 * rms:.2f} mm RMS.",
                "Growth rate and friction are means over the window.",
                "End the window before the line lifts off the edge.",
            ),
        )  # fmt: skip
    out = replace(out, estimates={**out.estimates, **found}, findings=findings)
    if setup.length_m is None:
        out = with_reason(out, "line.length_m is not given", "friction_coefficient")
    else:
        mu = kappa**2 * setup.length_m / setup.gravity - 1
        u_mu = 2 * kappa * u_kappa * setup.length_m / setup.gravity
        words = "sliding friction of the line on the table, from the growth rate"
        value = Estimate(float(mu), "1", float(u_mu), fit.noise.dof, span, words, {"law": law})
        out = replace(out, estimates={**out.estimates, "friction_coefficient": value})
    inner = (max(span[0], float(fit.parameters[2]) + 2 * frame), span[1])
    out, _ = accelerations(out, track, inner, setup.gravity, {})
    grid = np.linspace(*span, 100)
    curve = np.stack([grid, model_on(grid, fit.parameters)], axis=1)
    return replace(out, curves={"law_z_m": curve}, window_s=span)


def model_on(t_s: Floats, parameters: Floats) -> Floats:
    """The fitted slide on a grid of times [m]."""
    return np.asarray(
        parameters[3] - predict(t_s - parameters[2], float(abs(parameters[0])), float(parameters[1])), dtype=float
    )
