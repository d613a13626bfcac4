"""Free drop: an object falls from rest, z = z0 + v0 t - g t^2/2, with drag where its size and mass are known.

Measured gravity is the acceleration that the clip shows, freed of drag and of the buoyancy of air. Held against local
gravity it proves scale and clock together.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.analysis.common import accelerations, add_release, clear_end
from tracker.analysis.fits import polynomial_rows
from tracker.analysis.kinematics import Release, find_release
from tracker.analysis.tracks import Estimate, Evaluation, Finding, Track

__all__ = ["FreeDropSetup", "evaluate", "predict"]

Floats = NDArray[np.float64]
AIR_DENSITY = 1.2  # kg/m^3, at 20 degrees and sea level
DRAG_COEFFICIENT = 0.47  # a sphere at Reynolds numbers of 1e3 to 2e5; u 20 % (design, section 4)
EARLY_M = 0.15  # of fall from which the release is found: drag has not bent it yet
FEW_FRAMES = 2  # after release: the first frames of a fall are not yet clear of the release


@dataclass(frozen=True, slots=True)
class FreeDropSetup:
    """What is known of a drop."""

    gravity: float  # m/s^2
    diameter_m: float | None = None
    mass_kg: float | None = None
    drag_coefficient: float = DRAG_COEFFICIENT
    window_s: tuple[float, float] | None = None


def predict(setup: FreeDropSetup, t_s: Floats) -> Floats:
    """Distance fallen from rest after t [m], with drag where size and mass are known.

    Parameters
    ----------
    setup : FreeDropSetup
    t_s : (n,) array
        Since release [s].

    Returns
    -------
    (n,) array

    Notes
    -----
    Quadratic drag: z = (v_t^2/g) ln cosh(g t/v_t).
    """
    t = np.maximum(np.asarray(t_s, dtype=float), 0)
    terminal = _terminal_speed(setup)
    if terminal is None:
        return np.asarray(0.5 * setup.gravity * t**2, dtype=float)
    scaled = setup.gravity * t / terminal
    # ln cosh x without overflow
    return np.asarray(terminal**2 / setup.gravity * (scaled + np.log1p(np.exp(-2 * scaled)) - math.log(2)), dtype=float)


def _terminal_speed(setup: FreeDropSetup) -> float | None:
    if setup.diameter_m is None or setup.mass_kg is None or setup.drag_coefficient <= 0:
        return None
    area = math.pi * setup.diameter_m**2 / 4
    return math.sqrt(2 * setup.mass_kg * setup.gravity / (AIR_DENSITY * setup.drag_coefficient * area))


def buoyancy(setup: FreeDropSetup) -> float:
    """Share of its weight that air carries of the object; 0 where size or mass are not known."""
    if setup.diameter_m is None or setup.mass_kg is None:
        return 0.0
    return AIR_DENSITY * math.pi / 6 * setup.diameter_m**3 / setup.mass_kg


def air_share(setup: FreeDropSetup, t_s: Floats, release_s: float) -> float:
    """By how much air, by buoyancy and drag, lowers the best-fitting constant acceleration over times t_s, relative to gravity."""
    if _terminal_speed(setup) is None:
        return 0.0
    rows, _, half = polynomial_rows(t_s, 2)
    lighter = replace(setup, gravity=setup.gravity * (1 - buoyancy(setup)))
    parameters, *_ = np.linalg.lstsq(rows, predict(lighter, t_s - release_s), rcond=None)
    return float(1.0 - 3.0 / half**2 * parameters[2] / setup.gravity)


def evaluate(track: Track, setup: FreeDropSetup) -> Evaluation:
    """Measure gravity from a drop.

    Parameters
    ----------
    track : Track
    setup : FreeDropSetup

    Returns
    -------
    Evaluation
        `measured_gravity_mps2`, `effective_acceleration_mps2`, `acceleration_ratio`, `release_s`.
    """
    release = find_release(track, setup.gravity, reach_m=EARLY_M)
    out = add_release(Evaluation(), release)
    window = setup.window_s or _default_window(track, release.t_s if release is not None else None)
    out, fit = accelerations(out, track, window, setup.gravity, {}, parabola=True)
    if fit is None:
        return replace(out, absent={**out.absent, "measured_gravity_mps2": out.absent["effective_acceleration_mps2"]})
    started = release.t_s if release is not None else float(fit.t_s[0])
    share = air_share(setup, fit.t_s, started)
    extra: Mapping[str, object] = {**out.estimates["effective_acceleration_mps2"].extra, "air_share": share}
    words = "local gravity as the clip shows it: the fitted acceleration, freed of drag where size and mass are known"
    found = Estimate(fit.a / (1 - share), "m/s2", fit.u_a / (1 - share), fit.dof, out.window_s, words, extra)
    findings: tuple[Finding, ...] = out.findings
    if _terminal_speed(setup) is None:
        findings += (
            Finding(
                "drag-not-corrected",
                "Drag is not corrected: line.object_diameter_m and line.object_mass_kg are not given.",
                "The acceleration is low by some 0.1 to 1 % for small steel balls, more for light ones.",
                "Give diameter and mass of the object.",
            ),
        )
    curves = {"free_fall_z_m": _curve(track, setup, release)} if release is not None else {}
    return replace(out, estimates={"measured_gravity_mps2": found, **out.estimates}, findings=findings, curves=curves)


def _default_window(track: Track, release_s: float | None) -> tuple[float, float]:
    ok = track.t_s[np.isfinite(track.z_m) & np.isfinite(track.t_s)]
    if ok.size < 2:
        return (0.0, 0.0)
    frame = float(np.median(np.diff(ok)))
    return (float(ok[0]) if release_s is None else release_s + FEW_FRAMES * frame, clear_end(track))


def _curve(track: Track, setup: FreeDropSetup, release: Release) -> Floats:
    t = np.linspace(release.t_s, clear_end(track), 120)
    return np.stack([t, release.z_m - predict(setup, t - release.t_s)], axis=1)
