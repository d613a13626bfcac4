"""A ball or a round mark in front of the still scene: outline, blur of motion, rolling shutter, look.

The look of a matt ball under any lamps is, to about one part in a hundred, a sum of nine functions of its surface's
direction, the spherical harmonics up to degree two (Ramamoorthi & Hanrahan, J. Opt. Soc. Am. A 18, 2448 (2001);
Basri & Jacobs, IEEE PAMI 25, 218 (2003)). A flat round mark needs the first only. What shines is left to the robust
weights of the fit.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from tracker.follow.layer import Drawn

__all__ = ["BLUR", "RADIUS", "SOFT", "Disc", "disc_looks", "look_spread", "roundness"]

Floats = NDArray[np.float64]

RADIUS, SOFT = 2, 3
"""Places of the radius and of the edge's blur among a disc's parameters, after column and row of its centre."""

BLUR = slice(4, 6)
"""Places of the way travelled during the exposure [px], columns and rows."""

_STEP = 1.5  # how far apart the moments may lie of which an exposure is made up [px]
_MOST_STEPS = 24
_SHORT = 0.5  # of the radius: a way over which the look changes little
_SLOPE, _BEND = 0.3, 0.15
_AGREE, _CRESCENT = 0.8, 0.06
_LIMB = 0.25  # the shading's slope is unbounded where a ball's surface turns away; it is cut off here


def disc_looks(radius_px: float) -> int:
    """How many functions of look a disc of this size can carry: 9, 4 or 1."""
    return 9 if radius_px >= 2.8 else 4 if radius_px >= 2.5 else 1


def roundness(velocity: Floats, time_slope: Floats, from_middle: Floats, focal_px: float) -> Floats:
    """How a moving ball's outline differs from a circle.

    Parameters
    ----------
    velocity : (2,) array
        In the picture [px/s].
    time_slope : (2,) array
        How much later a pixel farther to the right, or farther down, is exposed [s/px].
    from_middle : (2,) array
        Its place from the optical axis [px].
    focal_px : float
        Focal length; a sphere off the axis is seen longer along the ray, by one over the cosine of its angle. Infinite
        leaves it out.

    Returns
    -------
    (2, 2) array
        Takes an offset from the centre, as seen, to a circle of the radius that a ball on the axis would have.
    """
    still = np.eye(2) - np.outer(velocity, time_slope)
    rho = float(np.hypot(*from_middle))
    if not np.isfinite(focal_px) or rho < 1.0:
        return still
    ray = from_middle / rho
    cosine = focal_px / np.hypot(focal_px, rho)
    return np.asarray((np.eye(2) - (1.0 - cosine) * np.outer(ray, ray)) @ still)


def look_spread(looks: int, level: float) -> Floats:
    """Covariance of the functions' weights (looks, looks) that lamps make likely, for a look of about this grey level.

    A lamp alone from one side would give 0.5 of its light to the slopes and 0.3 to the curvatures (the Legendre
    series of the cosine cut off at zero: 1/4, 1/2, 5/16), but rooms are never without other light. A limit is needed: a
    limb that may be as dark as the wall lets the outline slip.
    """
    sigma = np.array([1.0, _SLOPE, _SLOPE, _SLOPE, _BEND, _BEND, _BEND, _BEND, _BEND])[:looks] * max(level, 1.0)
    sigma[0] = 200.0  # any grey level
    cov = np.diag(sigma**2)
    for i, j in ((1, 5), (2, 6)) if looks == 9 else ():
        # a lamp in front puts both on one side: opposite signs would draw a crescent along the limb, which no lamp does
        cov[i, j] = cov[j, i] = _AGREE * cov[i, i]
        cov[j, j] = _AGREE**2 * cov[i, i] + (_CRESCENT * max(level, 1.0)) ** 2
    return np.asarray(cov)


@dataclass(frozen=True, slots=True, eq=False)
class Disc:
    """A disc of `looks` functions; parameters are column, row, radius, edge's blur, way during exposure (2), all in px.

    Attributes
    ----------
    looks : int
        1, 4 or 9.
    round_again : (2, 2) array
        Takes an offset from the centre, as seen, to where it would be on a round disc; see `roundness`.
    """

    looks: int
    round_again: Floats
    parameters: int = 6

    def draw(self, p: Floats, x: Floats, y: Floats, look: Floats) -> Drawn:
        """Coverage, look and their derivatives on pixels (n,); see `layer.Shape`."""
        radius, soft = float(p[RADIUS]), float(p[SOFT])
        way = p[BLUR]
        length = float(np.hypot(*way))
        moments = int(np.clip(np.ceil(length / _STEP), 1, _MOST_STEPS))
        soft = float(np.hypot(soft, length / moments / np.sqrt(12)))  # the way between two moments
        shares = (np.arange(moments) + 0.5) / moments - 0.5
        m = self.round_again
        u0, v0 = x - p[0], y - p[1]
        u, v = m[0, 0] * u0 + m[0, 1] * v0, m[1, 0] * u0 + m[1, 1] * v0
        if length < _SHORT * radius:  # the look is smooth: that of mid-exposure will do
            return self._blurred_outline(u, v, radius, soft, way, shares, look)
        basis = np.zeros((self.looks, x.size))
        d_cover, d_colour = np.zeros((6, x.size)), np.zeros((6, x.size))
        for share in shares:
            one = self._blurred_outline(u - share * way[0], v - share * way[1], radius, soft, way, np.zeros(1), look)
            basis += one.basis / moments
            for total, part in ((d_cover, one.d_cover), (d_colour, one.d_colour)):
                total[:4] += part[:4] / moments
                total[4:] += share * part[:2] / moments
        return Drawn(basis, d_cover, d_colour)

    def _blurred_outline(
        self, u: Floats, v: Floats, radius: float, soft: float, way: Floats, shares: Floats, look: Floats
    ) -> Drawn:
        """A disc whose look stands still while its outline goes its way."""
        moves = np.zeros((6, u.size))
        cover = np.zeros(u.size)
        rho0 = np.sqrt(u * u + v * v) + 1e-12
        for share in shares:
            a, b, rho = u, v, rho0
            if share != 0.0:
                a, b = u - share * way[0], v - share * way[1]
                rho = np.sqrt(a * a + b * b) + 1e-12
            inside = (radius - rho) / soft
            slope = np.exp(-0.5 * inside * inside) * (0.3989422804014327 / soft)
            across = slope / rho
            cover += ndtr(inside)
            moves[0] += across * a
            moves[1] += across * b
            moves[2] += slope
            moves[3] -= slope * inside
            moves[4] += share * across * a
            moves[5] += share * across * b
        if shares.size > 1:
            cover, moves = cover / shares.size, moves / shares.size
        functions, d_look_x, d_look_y = _look(u, v, rho0, radius, look)
        paints = moves * (look @ functions)
        paints[0] -= cover * d_look_x
        paints[1] -= cover * d_look_y
        return Drawn(cover * functions, moves, paints)


def _look(u: Floats, v: Floats, rho: Floats, radius: float, look: Floats) -> tuple[Floats, Floats, Floats]:
    """The functions of the look (looks, n), and the look's slopes along columns and rows."""
    functions = np.ones((look.size, u.size))
    if look.size == 1:
        return functions, np.zeros_like(u), np.zeros_like(u)
    out = np.maximum(rho, radius)
    a, b = np.divide(u, out, out=functions[1]), np.divide(v, out, out=functions[2])
    aa, bb = a * a, b * b
    c = np.sqrt(np.maximum(1.0 - aa - bb, 0.0), out=functions[3])
    within = (rho < radius) / radius
    fall = 1.0 / np.maximum(c, _LIMB)
    if look.size == 4:
        through = look[3] * fall
        return functions, within * (look[1] - through * a), within * (look[2] - through * b)
    np.multiply(a, b, out=functions[4])
    np.multiply(a, c, out=functions[5])
    np.multiply(b, c, out=functions[6])
    np.subtract(aa, bb, out=functions[7])
    np.multiply(c, c, out=functions[8])
    through = (look[3] + look[5] * a + look[6] * b + 2 * look[8] * c) * fall
    d_x = within * (look[1] + look[4] * b + look[5] * c + 2 * look[7] * a - through * a)
    d_y = within * (look[2] + look[4] * a + look[6] * c - 2 * look[7] * b - through * b)
    return functions, d_x, d_y
