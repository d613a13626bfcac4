"""A ball that falls through air, and a chain that slides over a table's edge, bead by bead: both stepped through time."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sample_clips.motion import Record, evenly, runge_kutta

__all__ = ["EdgeSlide", "drag_coefficient", "drop_ball", "slide_over_edge"]

Floats = NDArray[np.float64]
_STEP_S = 1e-4
_AIR_KG_PER_M3, _AIR_PA_S = 1.20, 1.81e-5  # dry air at 20 degrees Celsius, 101 kPa


def drag_coefficient(reynolds: ArrayLike) -> Floats:
    """Of a smooth sphere, up to a Reynolds number of 2e5.

    P. P. Brown and D. F. Lawler, J. Environ. Eng. 129, 222 (2003), recalled; within 3 % of 0.39 to 0.44 for 3000 to 20000.
    """
    re = np.maximum(np.asarray(reynolds, dtype=float), 1e-9)
    drag: Floats = 24 / re * (1 + 0.150 * re**0.681) + 0.407 / (1 + 8710 / re)
    return drag


def drop_ball(
    diameter_m: float, mass_kg: float, duration_s: float, *, gravity_mps2: float, start_mps: tuple[float, float] = (0.0, 0.0)
) -> Record:
    """Places x, z (k, 2) of a ball let go at (0, 0), with air drag and buoyancy.

    Parameters
    ----------
    diameter_m, mass_kg, duration_s, gravity_mps2 : float
    start_mps : tuple of 2 floats
        Speed to the right and upwards at release: fingers never let go quite straight.
    """
    area, volume = np.pi * diameter_m**2 / 4, np.pi * diameter_m**3 / 6
    weight = np.array([0.0, -gravity_mps2 * (1 - _AIR_KG_PER_M3 * volume / mass_kg)])

    def rate(_: float, y: Floats) -> Floats:
        speed = float(np.hypot(y[2], y[3]))
        drag = float(drag_coefficient(speed * diameter_m * _AIR_KG_PER_M3 / _AIR_PA_S))
        slowing = 0.5 * _AIR_KG_PER_M3 * drag * area * speed / mass_kg
        return np.concatenate([y[2:], weight - slowing * y[2:]])

    count = int(np.ceil(duration_s / _STEP_S))
    kept = np.empty((count + 1, 4))
    kept[0] = [0.0, 0.0, *start_mps]
    for k in range(count):
        kept[k + 1] = runge_kutta(rate, k * _STEP_S, kept[k], _STEP_S)
    return Record(evenly(count + 1, _STEP_S), kept[:, :2], kept[:, 2:])


@dataclass(frozen=True, slots=True, eq=False)
class EdgeSlide:
    """A chain drawn over a round guide at a table's edge by its own hanging part.

    Attributes
    ----------
    length_m : float
        From the trailing to the leading bead [m].
    overhang_m : float
        How far the leading bead has gone along the path beyond the start of the guide when it is let go [m].
    friction : float
        Sliding friction on the table.
    guide_m : float
        Radius of the quarter circle that the line's axis follows at the edge; it has no friction [m].
    record : Record
        The way gone since release [m].
    """

    length_m: float
    overhang_m: float
    friction: float
    guide_m: float
    record: Record

    def place(self, along_m: ArrayLike) -> Floats:
        """x and z (..., 2) of a way along the path: the table before 0, the guide, then straight down."""
        u = np.asarray(along_m, dtype=float)
        r = self.guide_m
        angle = np.clip(u / r, 0, np.pi / 2)
        x = np.minimum(u, 0) + r * np.sin(angle)
        z = -r + r * np.cos(angle) - np.maximum(u - np.pi / 2 * r, 0)
        return np.stack([x, z], axis=-1)


def slide_over_edge(
    *,
    beads: int,
    length_m: float,
    overhang_m: float,
    friction: float,
    guide_m: float,
    gravity_mps2: float,
    duration_s: float,
) -> EdgeSlide:
    """Add up the forces on each bead along its own path: friction on the table, gravity along the guide and below it.

    Raises
    ------
    ValueError
        The overhang is too short to start the slide.
    """
    start = overhang_m - np.linspace(0, length_m, beads)

    def pull(gone: float) -> float:
        u = start + gone
        drawn = np.sin(np.clip(u / guide_m, 0, np.pi / 2)).sum() - friction * np.count_nonzero(u < 0)
        return float(gravity_mps2 * drawn / beads)

    if pull(0.0) <= 0:
        raise ValueError(f"slide_over_edge: {overhang_m} m of overhang do not start a slide with friction {friction}.")

    def rate(_: float, y: Floats) -> Floats:
        return np.array([y[1], pull(float(y[0]))])

    count = int(np.ceil(duration_s / _STEP_S))
    kept = np.zeros((count + 1, 2))
    for k in range(count):
        kept[k + 1] = runge_kutta(rate, k * _STEP_S, kept[k], _STEP_S)
    return EdgeSlide(
        length_m, overhang_m, friction, guide_m, Record(evenly(count + 1, _STEP_S), kept[:, :1], kept[:, 1:])
    )
