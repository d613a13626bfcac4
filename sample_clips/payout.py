"""A line that leaves its container by itself (payout), or is drawn from it, with the material it is made of carried along.

Payout: the momentum of the rising and of the falling leg is stepped through time from rest, with a push at the pile of `push` v^2 and
a pull at the floor of `pull` w^2 (per mass and length), and an apex with a radius of curvature. Until the line can fly it hangs over
the container's lip like over a pulley; then the arc grows as the two momenta demand.

    h v' = push v^2 + T - g h - v^2 - c' v        rising leg: height h above the pile, which sinks at c'
    H w' = g H + pull w^2 - T                     falling leg: height H above the floor, speed w = v - 2 z'
    T = (v - z')^2 - g r                          tension at an apex that rises at z' and has the radius r

Shape: an inverted catenary with that radius, ripples that run along it, and a slow wander. The line does not stretch: what lies at
the arc length sigma past the rim is the material s = paid out - sigma.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from sample_clips.motion import Record, Strand, evenly, runge_kutta

__all__ = ["Drawing", "Payout", "PayoutRig", "Ripple", "curvature_radius", "pay_out"]

Floats = NDArray[np.float64]
_STEP_S = 1e-4
_POINT_M = 0.0007  # between points of the curve


@dataclass(frozen=True, slots=True)
class Ripple:
    """A transverse wave that runs along the line.

    Attributes
    ----------
    height_m : float
        Amplitude across the line [m].
    length_m : float
        Wavelength along it [m].
    speed_mps : float
        Of its crests past the rim, away from it; negative: they run back [m/s].
    phase_rad : float
        At the rim at release.
    """

    height_m: float
    length_m: float
    speed_mps: float
    phase_rad: float = 0.0

    def across(self, sigma: Floats, t: float) -> Floats:
        """Displacement (n,) at arc lengths past the rim [m]."""
        wave: Floats = self.height_m * np.sin(2 * np.pi / self.length_m * (sigma - self.speed_mps * t) + self.phase_rad)
        return wave


@dataclass(frozen=True, slots=True)
class PayoutRig:
    """Line, container and drop of a payout.

    Attributes
    ----------
    push, pull : float
        Coefficients at the pile and at the floor.
    drop_m : float
        Rim to floor [m].
    pile_m : tuple of 2 floats
        Rim down to the pile, at the start and when the whole line has left [m].
    length_m : float
        Of line in the container at release [m].
    lip_m : float
        Height of the line's axis above the rim while it hangs over the lip [m].
    lip_width_m, arc_width_m : float
        Distance of the legs at rim height: over the lip, and of a high arc [m].
    width_height_m : float
        Arc height at which the width has grown by 63 % [m].
    out_m : float
        x at which the falling leg passes the rim's height [m].
    ripples : tuple of Ripple
        At full arc height; smaller while the arc is low.
    wander_m, wander_hz : float
        Slow sideways wander of the whole arc.
    depth_m : float
        The same towards and from the camera.
    gravity_mps2 : float
    """

    push: float = 0.12
    pull: float = 0.05
    drop_m: float = 0.9
    pile_m: tuple[float, float] = (0.03, 0.06)
    length_m: float = 10.0
    lip_m: float = 0.004
    lip_width_m: float = 0.010
    arc_width_m: float = 0.070
    width_height_m: float = 0.05
    out_m: float = 0.064
    ripples: tuple[Ripple, ...] = ()
    wander_m: float = 0.003
    wander_hz: float = 1.2
    depth_m: float = 0.001
    gravity_mps2: float = 9.80665

    def width(self, apex_m: float) -> float:
        """Distance of the legs at rim height for an apex at this height [m]."""
        grown = -np.expm1(-max(apex_m - self.lip_m, 0.0) / self.width_height_m)
        return float(self.lip_width_m + (self.arc_width_m - self.lip_width_m) * grown)


def curvature_radius(width_m: float, height_m: float) -> float:
    """Radius of curvature at the apex [m] of the inverted catenary of this width at this depth below its apex."""

    def excess(log_radius: float) -> float:
        r = float(np.exp(log_radius))
        return float(2 * r * np.arccosh(1 + height_m / r) - width_m)

    return float(np.exp(brentq(excess, np.log(1e-12 * height_m), np.log(1e7 * height_m), xtol=1e-12)))


# --- dynamics ---------------------------------------------------------------------------------------------------------


def pay_out(rig: PayoutRig, duration_s: float) -> "Payout":
    """Step a payout through time, from the line's release with its end on the floor.

    Raises
    ------
    ValueError
        The hanging part cannot draw the line over the lip, or the tail leaves within the time asked for.
    """
    legs = _Legs(rig)
    count = int(np.ceil(duration_s / _STEP_S))
    kept, slope = np.zeros((count + 1, 4)), np.zeros((count + 1, 4))
    kept[0] = [rig.lip_m, 0.0, 0.0, 0.0]  # apex height, its rate, speed, paid out
    lifted = False
    for k in range(count + 1):
        lifted = lifted or legs.flies(kept[k])
        rate = legs.flying if lifted else legs.over_lip
        slope[k] = rate(0.0, kept[k])
        if k < count:
            kept[k + 1] = runge_kutta(rate, 0.0, kept[k], _STEP_S)
    if slope[0, 2] <= 0:
        raise ValueError("pay_out: the hanging part does not draw the line over the lip; lengthen the drop.")
    if kept[-1, 3] > rig.length_m:
        raise ValueError(f"pay_out: after {duration_s} s the tail of {rig.length_m} m has left, and its whip is not modelled here.")
    return Payout(rig, Record(evenly(count + 1, _STEP_S), kept, slope))


class _Legs:
    """Rates of change of apex height z, its rate, speed v and length paid out, over the lip and in flight."""

    def __init__(self, rig: PayoutRig) -> None:
        self.rig, self.g = rig, rig.gravity_mps2
        self.sink = (rig.pile_m[1] - rig.pile_m[0]) / rig.length_m  # of the pile, per length paid out
        heights = np.geomspace(rig.lip_m / 2, 3.0, 600)
        radii = np.array([curvature_radius(rig.width(z), z) for z in heights])
        self._log_radius = CubicSpline(np.log(heights), np.log(radii))

    def _heights(self, y: Floats) -> tuple[float, float, float]:
        """Rising height, falling height and radius of curvature."""
        rig = self.rig
        depth = rig.pile_m[0] + self.sink * float(y[3])
        z = float(y[0])
        return z + depth, rig.drop_m + z, float(np.exp(self._log_radius(np.log(z))))

    def over_lip(self, _: float, y: Floats) -> Floats:
        """The lip carries the bend: one speed for both legs."""
        rising, falling, _r = self._heights(y)
        v = float(y[2])
        force = self.g * (falling - rising) - (1 - self.rig.push + self.sink - self.rig.pull) * v * v
        return np.array([0.0, 0.0, force / (rising + falling), v])

    def flies(self, y: Floats) -> bool:
        """Whether the tension over the lip is no longer enough to bend the moving line."""
        rising, _f, radius = self._heights(y)
        v = float(y[2])
        tension = rising * (self.over_lip(0.0, y)[2] + self.g) + (1 - self.rig.push + self.sink) * v * v
        return bool(tension <= v * v - self.g * radius)

    def flying(self, _: float, y: Floats) -> Floats:
        rising, falling, radius = self._heights(y)
        _z, up, v, _p = (float(q) for q in y)
        tension = (v - up) ** 2 - self.g * radius
        faster = (self.rig.push * v * v + tension - v * v - self.sink * v * v) / rising - self.g
        return self._with_fall(y, faster, tension, falling)

    def _with_fall(self, y: Floats, faster: float, tension: float, falling: float) -> Floats:
        up, v = float(y[1]), float(y[2])
        down = v - 2 * up
        falls_faster = self.g + (self.rig.pull * down * down - tension) / falling
        return np.array([up, (faster - falls_faster) / 2, faster, v])


# --- shape ------------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Curve:
    """The line's axis at one moment, from the pile over the apex to the floor."""

    points_m: Floats  # (n, 3)
    sigma_m: Floats  # (n,), arc length past the rim
    apex: int  # number of its highest point


class Payout:
    """A payout as camera and truth ask for it; times in seconds since release, before it the line hangs still.

    Attributes
    ----------
    rig : PayoutRig
    record : Record
        Apex height (without ripples) [m], its rate, speed at the pile and rim [m/s], length paid out [m].
    """

    def __init__(self, rig: PayoutRig, record: Record) -> None:
        self.rig, self.record = rig, record
        self._last: tuple[float, _Curve] | None = None

    def speed(self, t: float) -> float:
        """Of the line at the rim [m/s]."""
        return float(self.record.at(max(t, 0.0))[2])

    def paid_out(self, t: float) -> float:
        """Length that has passed the rim since release [m]."""
        return float(self.record.at(max(t, 0.0))[3])

    def apex(self, t: float) -> Floats:
        """(3,) highest point of the axis [m], between the points of the curve by a parabola."""
        curve = self._curve(t)
        i = int(np.clip(curve.apex, 1, len(curve.points_m) - 2))
        three, at = curve.points_m[i - 1 : i + 2], curve.sigma_m[i - 1 : i + 2] - curve.sigma_m[i]
        bend = np.polyfit(at, three[:, 2], 2)
        top = float(np.clip(-bend[1] / (2 * bend[0]), at[0], at[2]))
        weights = np.array([np.prod([(top - q) / (p - q) for q in at if q != p]) for p in at])
        place: Floats = weights @ three
        return place

    def width(self, t: float) -> float:
        """Distance of the legs at half the apex' height [m]."""
        curve = self._curve(t)
        z, x, i = curve.points_m[:, 2], curve.points_m[:, 0], curve.apex
        half = float(self.apex(t)[2]) / 2
        up, down = np.flatnonzero(z[:i] < half), i + np.flatnonzero(z[i:] < half)

        def cross(a: int, b: int) -> float:
            return float(x[a] + (half - z[a]) / (z[b] - z[a]) * (x[b] - x[a]))

        return cross(down[0], down[0] - 1) - cross(up[-1], up[-1] + 1)

    def strand(self, t: float) -> Strand:
        """The line at one moment."""
        curve = self._curve(t)
        return Strand(curve.points_m, self.paid_out(t) - curve.sigma_m, np.ones(curve.sigma_m.size, dtype=bool))

    def _curve(self, t: float) -> _Curve:
        if self._last is None or self._last[0] != t:
            self._last = (t, self._shape(t))
        return self._last[1]

    def _shape(self, t: float) -> _Curve:
        rig, since = self.rig, max(t, 0.0)
        z_apex = float(self.record.at(since)[0])
        width = rig.width(z_apex)
        radius = curvature_radius(width, z_apex)
        free = (z_apex - rig.lip_m) / (z_apex + 0.03)  # ripples and wander grow with the arc
        sway = 2 * np.pi * rig.wander_hz * since
        middle = rig.out_m - width / 2 + free * rig.wander_m * np.sin(sway)

        # along an inverted catenary the arc length from its apex is r sinh(x/r): equal steps of it, inside and out
        inside = radius * np.sinh(np.arccosh(1 + (z_apex + rig.pile_m[1] + 0.02) / radius))
        outside = radius * np.sinh(np.arccosh(1 + (z_apex + rig.drop_m) / radius))
        past_apex = _POINT_M * np.arange(-np.ceil(inside / _POINT_M), np.ceil(outside / _POINT_M) + 1)
        x = radius * np.arcsinh(past_apex / radius)
        slope = np.arcsinh(past_apex / radius)
        z = z_apex - radius * (np.cosh(slope) - 1)
        normal = np.stack([np.tanh(slope), 1 / np.cosh(slope)], axis=1)
        to_apex = radius * np.sinh(np.arccosh(1 + z_apex / radius))
        from_rim = past_apex + to_apex
        grip = 1 - np.exp(-np.maximum(from_rim + 0.04, 0) / 0.06)  # the pile holds the ripples small
        across = sum((r.across(from_rim, since) for r in rig.ripples), np.zeros_like(x)) * free * grip
        plane = np.stack([middle + x, z], axis=1) + across[:, None] * normal
        away = free * rig.depth_m * np.sin(0.7 * sway + 3 * np.maximum(from_rim, 0)) * grip
        points = np.stack([plane[:, 0], away, plane[:, 1]], axis=1)

        length = np.r_[0.0, np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))]
        first = int(np.flatnonzero(points[:, 2] >= 0)[0])  # the rising leg passes the rim between first - 1 and first
        share = points[first, 2] / (points[first, 2] - points[first - 1, 2])
        at_rim = length[first] - share * (length[first] - length[first - 1])
        return _Curve(points, length - at_rim, int(points[:, 2].argmax()))


# --- drawn ------------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Drawing:
    """A line drawn over a container's rim by a winch out of the picture; times in seconds since the winch starts.

    Attributes
    ----------
    speed_mps : float
        Set speed.
    start_s : float
        Time constant of the winch's start [s].
    ripple, ripple_hz : float
        Relative amplitude and frequency of the speed's ripple.
    snag_s, snag_length_s, snag_depth : float
        Middle, length (standard deviation) and relative depth of a snag.
    rim_radius_m, pile_m : float
        Of the container; rim down to the pile [m].
    rise : float
        Slope of the run from the lip to the winch.
    reach_m : float
        x at which the run has left the picture [m].
    ripples : tuple of Ripple
        Waves on the run.
    duration_s : float
        Speeds are known for this long [s].
    """

    speed_mps: float = 1.2
    start_s: float = 0.06
    ripple: float = 0.05
    ripple_hz: float = 7.0
    snag_s: float = 0.6
    snag_length_s: float = 0.02
    snag_depth: float = 0.7
    rim_radius_m: float = 0.06
    pile_m: float = 0.05
    rise: float = 0.12
    reach_m: float = 0.9
    ripples: tuple[Ripple, ...] = ()
    duration_s: float = 2.0

    def speed(self, t: ArrayLike) -> Floats:
        """Of the line at the rim [m/s] at times (...)."""
        since = np.maximum(np.asarray(t, dtype=float), 0.0)
        swing = 1 + self.ripple * np.sin(2 * np.pi * self.ripple_hz * since)
        dip = 1 - self.snag_depth * np.exp(-0.5 * ((since - self.snag_s) / self.snag_length_s) ** 2)
        v: Floats = self.speed_mps * -np.expm1(-((since / self.start_s) ** 2)) * swing * dip
        return v

    @cached_property
    def record(self) -> Record:
        """Length drawn [m], by Simpson's rule on steps of 0.1 ms."""
        t = np.arange(0.0, self.duration_s + _STEP_S, _STEP_S)
        v = self.speed(t)
        steps = _STEP_S / 6 * (v[:-1] + 4 * self.speed(t[:-1] + _STEP_S / 2) + v[1:])
        return Record(t, np.r_[0.0, np.cumsum(steps)], v)

    def paid_out(self, t: float) -> float:
        """Length that has passed the rim since the start [m]."""
        return float(self.record.at(max(t, 0.0)))

    def strand(self, t: float) -> Strand:
        """The line at one moment: up from the pile, round the lip, straight to the winch, with its waves."""
        lip = 0.008  # radius of the bend over the lip
        lean, turn = 0.45, np.pi / 2 - np.arctan(self.rise)  # of the way from upright: off the pile, and on the run
        corner = np.array([self.rim_radius_m + 0.001 - lip * np.cos(lean), 0.0])
        up = np.arange(-(self.pile_m + 0.03) / np.cos(lean), 0.0, _POINT_M)
        angle = np.append(np.arange(lean, turn, _POINT_M / lip), turn)
        run = np.arange(_POINT_M, self.reach_m, _POINT_M)
        bend = corner + lip * np.stack([np.cos(lean) - np.cos(angle), np.sin(angle) - np.sin(lean)], axis=1)
        end = bend[-1]
        ahead = np.array([1.0, self.rise]) / np.hypot(1.0, self.rise)
        still = run * 0 + (1 - np.exp(-((run / 0.05) ** 2)))  # held at the lip
        since = max(t, 0.0)
        across = sum((r.across(run, since) for r in self.ripples), np.zeros_like(run)) * still
        straight = end + run[:, None] * ahead + across[:, None] * np.array([-ahead[1], ahead[0]])
        plane = np.vstack([corner + up[:, None] * np.array([np.sin(lean), np.cos(lean)]), bend, straight])
        length = np.r_[0.0, np.cumsum(np.linalg.norm(np.diff(plane, axis=0), axis=1))]
        sigma = length - length[up.size]  # the bend begins at the rim's height
        points = np.stack([plane[:, 0], np.zeros(len(plane)), plane[:, 1]], axis=1)
        return Strand(points, self.paid_out(t) - sigma, np.ones(len(points), dtype=bool))
