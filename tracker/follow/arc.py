"""The arc of one frame: its highest point, its width at half its height, its curvature at the top.

Near its top the axis is fitted by polynomials of its own arc length, which follow a bend of any direction and
bend on themselves less than z(x) would: a quartic over nine tenths of a radius of curvature leaves a
circle's top in place within a thousandth of the radius.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Arc", "arc_length", "measure_arc"]

Floats = NDArray[np.float64]

_REACH = 0.9  # of the radius of curvature, on either side of the top
_LEAST_POINTS = 9
_CORRELATED_POINTS = 9.0  # neighbouring points a pixel apart share their noise over about so many
_LEG_POINTS = 7  # fitted on either side of a leg's crossing


@dataclass(frozen=True, slots=True, eq=False)
class Arc:
    """What one frame says of the arc.

    Attributes
    ----------
    apex_px : (2,) array
        Column and row of the highest point of the axis.
    apex_m : (2,) array
        x and z [m].
    u_apex_m : float
        Standard uncertainty of z from the noise of the points alone [m].
    apex_at : float
        Its place among the points, as a fractional index.
    radius_m, u_radius_m : float
        Radius of curvature there and its standard uncertainty from the noise [m].
    width_m : float
        Distance between the legs at half the apex's height [m]; NaN where a leg is not seen there.
    legs_px : (2, 2) array
        Where the rising and the falling leg pass that height [px]; NaN likewise.
    bridged : bool
        The line was not seen at its top, the place is carried over a gap.
    """

    apex_px: Floats
    apex_m: Floats
    u_apex_m: float
    apex_at: float
    radius_m: float
    u_radius_m: float
    width_m: float
    legs_px: Floats
    bridged: bool


def arc_length(points: Floats) -> Floats:
    """Length along (n, 2) points from the first, (n,)."""
    return np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))])


def measure_arc(points_px: Floats, points_m: Floats, seen: NDArray[np.bool_], u_m: Floats) -> Arc | None:
    """Measure the arc of one frame.

    Parameters
    ----------
    points_px, points_m : (n, 2) arrays
        The axis from the rim to the exit, about a pixel apart, in the picture and on the plane of motion (x, z).
    seen : (n,) bool array
        Where it was seen, not bridged.
    u_m : (n,) array
        Standard uncertainty of each point across the line [m].

    Returns
    -------
    Arc or None
        None where the line has no top: its highest point is an end of it.
    """
    z = points_m[:, 1]
    top = int(np.argmax(z))
    n = z.size
    if n < 2 * _LEAST_POINTS or top < 2 or top > n - 3:
        return None
    s = arc_length(points_m)
    fit = None
    reach = float(s[min(top + 8, n - 1)] - s[max(top - 8, 0)]) / 2
    for degree in (2, 4, 4):
        fit = _fit_top(s, points_px, points_m, top, reach, degree)
        if fit is None:
            return None
        reach = float(np.clip(_REACH * fit.radius, 5 * (s[-1] / (n - 1)), 0.5 * s[-1]))
    assert fit is not None
    near = slice(fit.first, fit.last)
    u_point = float(np.sqrt(np.mean(u_m[near][seen[near]] ** 2))) if seen[near].any() else float(np.mean(u_m[near]))
    u_point = float(np.hypot(u_point, fit.scatter))
    gain = np.sqrt(_CORRELATED_POINTS)
    at = float(np.interp(fit.s_top, s, np.arange(n)))
    around = slice(max(int(at) - 2, 0), int(at) + 4)
    width, legs = _legs(points_px, points_m, top, fit.apex_m[1] / 2)
    return Arc(
        apex_px=fit.apex_px, apex_m=fit.apex_m, u_apex_m=u_point * min(gain * fit.u_unit_top, 1.0), apex_at=at,
        radius_m=fit.radius, u_radius_m=fit.radius**2 * u_point * gain * fit.u_unit_bend,
        width_m=width, legs_px=legs, bridged=not bool(seen[around].any()),
    )  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class _Top:
    apex_px: Floats
    apex_m: Floats
    s_top: float
    radius: float
    first: int
    last: int
    scatter: float
    u_unit_top: float  # standard deviation of the height for unit independent noise of each point
    u_unit_bend: float  # of the second derivative


def _fit_top(s: Floats, points_px: Floats, points_m: Floats, top: int, reach: float, degree: int) -> _Top | None:
    first = int(np.searchsorted(s, s[top] - reach))
    last = int(np.searchsorted(s, s[top] + reach, side="right"))
    if last - first < _LEAST_POINTS:
        first, last = max(top - _LEAST_POINTS // 2, 0), min(top + _LEAST_POINTS // 2 + 1, s.size)
    if last - first < degree + 3:
        return None
    scale = max(s[last - 1] - s[top], s[top] - s[first])
    t = (s[first:last] - s[top]) / scale
    basis = np.vander(t, degree + 1, increasing=True)
    solve = np.linalg.pinv(basis)
    c_m, c_px = solve @ points_m[first:last], solve @ points_px[first:last]
    place = _highest(c_m[:, 1], float(t[0]), float(t[-1]))
    if place is None:
        return None
    powers = place ** np.arange(degree + 1)
    k = np.arange(1, degree + 1)
    first_d = (c_m[1:] * (k * place ** (k - 1))[:, None]).sum(axis=0) / scale
    second = (k * (k - 1))[1:] * place ** (k[1:] - 2)
    second_d = (c_m[2:] * second[:, None]).sum(axis=0) / scale**2
    bend = abs(first_d[0] * second_d[1] - first_d[1] * second_d[0]) / max(float(np.hypot(*first_d)) ** 3, 1e-12)
    left = points_m[first:last, 1] - basis @ c_m[:, 1]
    return _Top(
        apex_px=powers @ c_px, apex_m=powers @ c_m, s_top=float(s[top] + place * scale),
        radius=1.0 / max(bend, 1e-3), first=first, last=last, scatter=float(left.std()),
        u_unit_top=float(np.sqrt(((powers @ solve) ** 2).sum())),
        u_unit_bend=float(np.sqrt(((second @ solve[2:]) ** 2).sum()) / scale**2),
    )  # fmt: skip


def _highest(c: Floats, low: float, high: float) -> float | None:
    """Where a polynomial (rising powers) has its highest inner maximum."""
    fine = np.linspace(low, high, 61)
    values = np.polynomial.polynomial.polyval(fine, c)
    i = int(np.argmax(values))
    if i in (0, fine.size - 1):
        return None
    a, b, d = values[i - 1 : i + 2]
    bend = a - 2 * b + d
    shift = 0.5 * (a - d) / bend if bend < 0 else 0.0
    return float(fine[i] + shift * (fine[1] - fine[0]))


def _legs(points_px: Floats, points_m: Floats, top: int, height: float) -> tuple[float, Floats]:
    """Distance of the legs at a height, and the two places in the picture."""
    z = points_m[:, 1]
    legs = np.full((2, 2), np.nan)
    x = np.full(2, np.nan)
    under = np.nonzero(z[:top] < height)[0]
    if under.size:
        x[0], legs[0] = _pass(points_px, points_m, int(under[-1]), height)
    under = np.nonzero(z[top:] < height)[0]
    if under.size:
        x[1], legs[1] = _pass(points_px, points_m, top + int(under[0]), height)
    return float(abs(x[1] - x[0])), legs


def _pass(points_px: Floats, points_m: Floats, i: int, height: float) -> tuple[float, Floats]:
    """x and pixel where a leg passes a height, from the straight line through the points around it."""
    near = slice(max(i - _LEG_POINTS // 2, 0), i + _LEG_POINTS // 2 + 1)
    z = points_m[near, 1]
    d = z - z.mean()
    spread = float(d @ d)
    if spread < 1e-14:
        return float(points_m[i, 0]), points_px[i]
    both = np.column_stack([points_m[near, 0], points_px[near]])
    slope = d @ (both - both.mean(axis=0)) / spread
    value = both.mean(axis=0) + slope * (height - z.mean())
    return float(value[0]), value[1:]
