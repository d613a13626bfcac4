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
from scipy.signal import savgol_filter
from scipy.spatial import cKDTree

from tracker.follow.arc import arc_length

__all__ = ["Along", "along_line", "carried_jump", "jitter"]

Floats = NDArray[np.float64]

_RIM_POINTS = 20  # behind those that the container touches, for the line's run through the rim's level
_EVERY = 12  # points of the curve compared with the last frame's
_DRIFT_FRAMES = 31  # window of a local parabola: slower changes are left to the rim itself, as carried errors add up


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
    stretch : (n,) array
        Rate at which the length from the rim to there changes by the curve's movement alone [m/s].
    """

    metres: Floats
    sigma_m: Floats
    t_s: Floats
    stretch: Floats


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
    velocity = move_m / period_s
    moved = velocity[:, None] * normal
    tangent = np.gradient(metres, axis=0)
    tangent /= np.maximum(np.hypot(tangent[:, 0], tangent[:, 1]), 1e-12)[:, None]
    rate = (tangent[1:] * np.diff(moved, axis=0)).sum(axis=1)  # per step along the line
    at_rim = velocity[0] * normal[0, 1] / z_slope  # the rim's level is passed farther down the moved line
    t_rim = t_s[0]
    grown = at_rim + np.concatenate([[0.0], np.cumsum(rate)])
    timed = at_rim * t_rim + np.concatenate([[0.0], np.cumsum(rate * 0.5 * (t_s[1:] + t_s[:-1]))])
    return Along(metres, plain - origin + grown * t_s - timed, t_s, grown)


def _rim(metres: Floats, plain: Floats, touched: int) -> tuple[float, float]:
    """Where along the points the rim's level is passed, and the slope dz/ds there.

    Close to the container's edge the line's place is drawn aside, so a parabola through the points just
    behind is followed down to the level; it may not bend more than the line does there.
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
    last = min(first + int(np.clip(0.6 * (top - first), 5, _RIM_POINTS)), z.size)
    s0 = plain[first]
    degree = 2 if last - first >= 12 else 1
    c2, c1, c0 = np.append(np.zeros(2 - degree), np.polyfit(plain[first:last] - s0, z[first:last], degree))
    c1 = float(np.clip(c1, 0.3, 1.0))
    c2 = float(np.clip(c2, -c1 / max(plain[last - 1] - s0, 1e-9), 0.0))
    root = c1 * c1 - 4 * c2 * c0
    s = -2 * c0 / (c1 + np.sqrt(root)) if root > 0 else -c0 / c1
    return float(s0 + s), float(np.clip(c1 + 2 * c2 * s, 0.3, 1.0))


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


def jitter(jumps: Floats) -> Floats:
    """Error of the rim's crossing in each frame [m], from the jumps: their sum without its slow part.

    Parameters
    ----------
    jumps : (n,) array
        Of each frame against the one before; NaN where unknown (taken as none).
    """
    total = np.cumsum(np.nan_to_num(jumps))
    size = min(_DRIFT_FRAMES, 2 * ((total.size - 1) // 2) + 1)
    if size < 5:
        return np.zeros_like(total)
    return np.asarray(total - savgol_filter(total, size, 2, mode="interp"))
