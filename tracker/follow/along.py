"""The coordinate along the line: its length from the rim, at the moment when each place was seen.

A rolling shutter sees the rim, the top and the falling leg at different times, and between them the arc grows. What
is wanted at a place is the length of the line from the rim to there when that place was seen. The measured
curve is made of moments; each of its pieces lengthens at the rate with which the curve's movement along
its normals stretches it, so the difference is an integral over the curve.

The same law carries the coordinate from one frame to the next. That tells apart what the rim's crossing really
does from how noisily it is seen: on a small arc the line passes the rim at a flat angle, and half a pixel of
height is a pixel of length.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solveh_banded
from scipy.ndimage import uniform_filter1d
from scipy.spatial import cKDTree

from tracker.follow.arc import arc_length
from tracker.follow.smooth import local_polynomial

__all__ = ["Along", "along_line", "carried_jump", "jitter"]

Floats = NDArray[np.float64]

_RIM_POINTS = 20  # behind those that the container touches, for the line's run through the rim's level
_CALM_POINTS = 31
_STEADY_FRAMES = 25
_MOST_CARRIED = 15.0  # px that the line is carried on to the rim's level
_EVERY = 12  # points of the curve compared with the last frame's


@dataclass(frozen=True, slots=True, eq=False)
class Along:
    """Coordinate along one frame's line.

    Attributes
    ----------
    metres : (n, 2) array
        Points of the axis on the plane of motion.
    sigma_m : (n,) array
        Length from the rim when each point was seen [m].
    t_s : (n,) array
        When it was seen.
    doubt_m : float
        How far another way to carry the line to the rim's level disagrees [m].
    stretch : (n,) array
        Rate at which the length from the rim to there changes by the curve's movement alone [m/s].
    """

    metres: Floats
    sigma_m: Floats
    t_s: Floats
    stretch: Floats
    doubt_m: float


def along_line(
    metres: Floats, move_m: Floats, normal: Floats, t_s: Floats, period_s: float, touched: int = 0
) -> Along:
    """Coordinate along the line of one frame.

    Parameters
    ----------
    metres : (n, 2) array
        Axis from the rim [m].
    move_m : (n,) array
        Movement along the normal since the last frame [m].
    normal : (n, 2) array
        Unit normals on the plane of motion (x, z).
    t_s : (n,) array
        When each point was seen.
    period_s : float
        Time since the last frame.
    touched : int
        Number of points at the start whose place the container's edge may have drawn aside.
    """
    plain = arc_length(metres)
    origin, z_slope = _rim(metres, plain, touched)
    straight = plain[0] - metres[0, 1] / z_slope  # from the first point seen, at the slope of the fit
    velocity = _calm(move_m) / period_s
    moved = velocity[:, None] * normal
    tangent = np.gradient(metres, axis=0)
    tangent /= np.maximum(np.hypot(tangent[:, 0], tangent[:, 1]), 1e-12)[:, None]
    rate = (tangent[1:] * np.diff(moved, axis=0)).sum(axis=1)  # per step along the line
    at_rim = velocity[0] * normal[0, 1] / z_slope  # the rim's level is passed farther down the moved line
    t_rim = t_s[0]
    grown = at_rim + np.concatenate([[0.0], np.cumsum(rate)])
    timed = at_rim * t_rim + np.concatenate([[0.0], np.cumsum(rate * 0.5 * (t_s[1:] + t_s[:-1]))])
    return Along(metres, plain - origin + grown * t_s - timed, t_s, grown, float(straight - origin))


def _calm(values: Floats) -> Floats:
    """Smoothed along the line: the noise of a point is in its movement and in the curvature there too, and the
    integral of their product would not vanish."""
    return local_polynomial(values, _CALM_POINTS // 2, 1)


def _rim(metres: Floats, plain: Floats, touched: int) -> tuple[float, float]:
    """Where along the points the rim's level is passed, and the slope dz/ds there.

    Close to the container's edge the line's place is drawn aside, so the points just behind, on a small arc those
    over its top too, are followed down to the level by a parabola or a cubic.
    """
    z = metres[:, 1]
    above = np.nonzero(z >= 0)[0]
    if above.size and above[0] > touched:  # seen below the rim's level too
        i = int(above[0])
        share = -z[i - 1] / max(z[i] - z[i - 1], 1e-12)
        near = slice(max(i - 6, 0), i + 6)
        slope = float(np.polyfit(plain[near], z[near], 1)[0])
        return float(plain[i - 1] + share * (plain[i] - plain[i - 1])), float(np.clip(slope, 0.3, 1.0))
    top = int(np.argmax(z))
    first = min(touched, top // 3)  # of a small arc there is no more to spare
    last = min(first + int(np.clip(2 * (top - first), 14, _RIM_POINTS)), z.size)
    degree = 3 if last > top else 2
    pixel = (plain[last - 1] - plain[first]) / max(last - 1 - first, 1)
    u = (plain[first:last] - plain[first]) / pixel
    c = np.polynomial.polynomial.polyfit(u, z[first:last], min(degree, last - first - 1))
    down = np.arange(0.0, -_MOST_CARRIED, -0.25)
    height = np.polynomial.polynomial.polyval(down, c)
    under = np.nonzero(height <= 0)[0]
    if under.size and under[0] > 0:
        i = int(under[0])
        slope = float((height[i - 1] - height[i]) / (0.25 * pixel))
        return float(plain[first] + pixel * (down[i] + 0.25 * height[i] / (height[i] - height[i - 1]))), float(np.clip(slope, 0.3, 1.0))
    slope = float(np.clip((z[min(first + 5, z.size - 1)] - z[first]) / (5 * pixel), 0.3, 1.0))
    return float(plain[first] - z[first] / slope), slope


def carried_jump(last: Along, now: Along, move_m: Floats, normal: Floats) -> float:
    """How much farther along the rim puts the points of this frame than the last frame's coordinate, carried on, does.

    Median over the line [m]; NaN where the two do not overlap.
    """
    pick = np.arange(_EVERY, now.sigma_m.size - _EVERY, _EVERY)
    if pick.size < 5 or last.sigma_m.size < 10:
        return float("nan")
    back = now.metres[pick] - normal[pick] * move_m[pick, None]
    distance, near = cKDTree(last.metres).query(back)
    near = np.clip(near, 1, last.sigma_m.size - 2)
    tangent = last.metres[near + 1] - last.metres[near - 1]
    size = np.maximum(np.hypot(tangent[:, 0], tangent[:, 1]), 1e-12)
    ahead = ((back - last.metres[near]) * tangent).sum(axis=1) / size
    carried = last.sigma_m[near] + ahead + now.stretch[pick] * (now.t_s[pick] - last.t_s[near])
    good = distance < 4 * float(np.median(np.diff(arc_length(now.metres))))
    if good.sum() < 5:
        return float("nan")
    return float(np.median(now.sigma_m[pick][good] - carried[good]))


def jitter(jumps_m: Floats, u_jumps_m: Floats, u_rim_m: float) -> Floats:
    """Error of the rim's crossing in each frame [m], from both ways to know it.

    Parameters
    ----------
    jumps_m, u_jumps_m : (n,) arrays
        Of each frame's coordinate against the last one's carried on, and their standard uncertainty; NaN where unknown.
    u_rim_m : float
        Standard uncertainty of the rim's crossing as seen in one frame.

    Notes
    -----
    Least squares over the clip: the errors e are small, (e / u_rim)^2, and follow the jumps,
    ((e_k - e_k-1 - jump_k) / u_k)^2. While the line's shape rests that is nearly the jumps' sum, while it moves fast
    nearly nothing.
    """
    n = jumps_m.size
    if n < 3:
        return np.zeros(n)
    known = np.isfinite(jumps_m[1:]) & np.isfinite(u_jumps_m[1:])
    u = np.where(known, u_jumps_m[1:], 1.0)
    jump = np.where(known, jumps_m[1:], 0.0)
    steady = uniform_filter1d(jump, _STEADY_FRAMES, mode="nearest")  # of a moving shape an error of what is carried
    jump = jump - steady * u**2 / (u**2 + (0.4 * u_rim_m) ** 2)
    weight = np.where(known, 1.0 / u**2, 0.0)
    pull = weight * jump
    diagonal = np.full(n, 1.0 / u_rim_m**2)
    diagonal[1:] += weight
    diagonal[:-1] += weight
    upper = np.concatenate([[0.0], -weight])
    right = np.concatenate([[0.0], pull]) - np.concatenate([pull, [0.0]])
    return np.asarray(solveh_banded(np.stack([upper, diagonal]), right))
