"""Where the axis lies across the line: a profile fit finer than a pixel, and what one-sided light does to it.

Across the line the size of the difference from the scene is averaged along the line over about one repeat of its
texture, so that beads do not make it wander. Its place is found by least squares against a template (the clip's
own mean profile, made symmetric), together with a level and a slope left by a shadow beside it; the template makes
nearly the best use of the light there is (Cramer-Rao). A lamp from one side makes one flank of the line brighter,
and any brightness centre then lies off the axis, steadily. The edges of the silhouette do not move so: profiles of
the whole clip are pooled by the direction of the normal, and the middle between their edges tells the offset.
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares
from scipy.special import ndtr

__all__ = ["ProfilePool", "SideLight", "Template", "bar_profile", "fit_centres", "side_light", "side_light_offset"]

_MOST_SHIFT = 0.8  # px: the fit is linear about its start, farther than this it must start again
_SECTORS = 24  # directions of the normal apart in the pool
_FLAT_BAR = 4.0  # blurs: in a narrower bar a shift and an uneven light look alike
_NO_BAR = 0.04  # of the height: what a bar's fit may leave
_LEAST_DOUBT_PX = 0.1  # of the place of an edge against the body's own, whatever the light


@dataclass(frozen=True, slots=True, eq=False)
class Template:
    """The expected profile across the line on a symmetric grid of offsets.

    Attributes
    ----------
    offset_px : (m,) array
        Offsets from the axis.
    height : (m,) array
        Profile, 1 at its highest, 0 far off.
    solve : (4, m) array
        Least-squares solution for height, height times shift, level and slope.
    precision : float
        Standard deviation of the shift for unit height and unit independent noise at each offset [px].
    """

    offset_px: NDArray[np.float64]
    height: NDArray[np.float64]
    solve: NDArray[np.float64]
    precision: float

    @classmethod
    def from_profile(cls, offset_px: NDArray[np.float64], height: NDArray[np.float64]) -> "Template":
        """Symmetric template from a measured or computed profile on a symmetric grid."""
        even = 0.5 * (height + height[::-1])
        even = even - 0.5 * (even[0] + even[-1])
        even = even / max(float(np.abs(even).max()), 1e-12)
        slope = np.gradient(even, offset_px)
        design = np.column_stack([even, -slope, np.ones_like(even), offset_px / offset_px[-1]])
        solve = np.linalg.pinv(design)
        precision = float(np.sqrt((solve[1] ** 2).sum()))
        return cls(offset_px, even, solve, precision)


def bar_profile(offset_px: NDArray[np.float64], width_px: float, blur_px: float) -> NDArray[np.float64]:
    """A bar of the given width under Gaussian blur, of height 1 before the blur."""
    half = width_px / 2
    profile = ndtr((offset_px + half) / blur_px) - ndtr((offset_px - half) / blur_px)
    return np.asarray(profile, dtype=np.float64)


def fit_centres(
    bands: NDArray[np.float32],
    offset0: float,
    start: NDArray[np.float64],
    template: Template,
    rounds: int = 2,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Fit the place of the line in each section.

    Parameters
    ----------
    bands : (n, k) float32 array
        Averaged size of the difference, a row per section, a column per pixel across.
    offset0 : float
        Offset of the first column [px].
    start : (n,) array
        Where each section's line is believed, to about half a pixel.
    template : Template
    rounds : int
        Times the fit starts again from its own answer.

    Returns
    -------
    centre, height, misfit : (n,) arrays
        Place [px], height [grey levels], root mean square of what the fit leaves [grey levels]. Centre is NaN where
        the profile would reach outside the band.
    """
    n, k = bands.shape
    centre = np.array(start, dtype=np.float64)
    first, last = template.offset_px[0], template.offset_px[-1]
    model = np.column_stack(
        [template.height, -np.gradient(template.height, template.offset_px), np.ones_like(template.height),
         template.offset_px / last]
    )  # fmt: skip
    rows = np.arange(n)[:, None]
    for _ in range(rounds):
        at = centre[:, None] + template.offset_px[None, :] - offset0
        low = np.clip(np.floor(at).astype(np.intp), 0, k - 2)
        share = (at - low).astype(np.float32)
        profile = bands[rows, low] * (1 - share) + bands[rows, low + 1] * share
        answer = profile @ template.solve.T
        height = answer[:, 0]
        shift = np.where(height > 0, answer[:, 1] / np.maximum(height, 1e-6), 0.0)
        misfit = np.sqrt(np.mean((profile - answer @ model.T) ** 2, axis=1))
        centre = centre + np.clip(shift, -_MOST_SHIFT, _MOST_SHIFT)
    outside = (centre + first < offset0 - 0.5) | (centre + last > offset0 + k - 0.5)
    centre[outside] = np.nan
    return centre, height, misfit


@dataclass(slots=True, eq=False)
class ProfilePool:
    """Mean profile by the direction of the normal, gathered over a clip; memory does not grow with it.

    The normal of a section is its tangent (from rim to exit) turned by -90 degrees in the picture.
    """

    offset_px: NDArray[np.float64]
    total: NDArray[np.float64] = field(init=False)
    count: NDArray[np.float64] = field(init=False)

    def __post_init__(self) -> None:
        self.total = np.zeros((_SECTORS, self.offset_px.size))
        self.count = np.zeros(_SECTORS)

    def add(self, normal: NDArray[np.float64], profile: NDArray[np.float64]) -> None:
        """Add (n, m) profiles on the pool's offsets with their (n, 2) normals."""
        angle = np.arctan2(normal[:, 1], normal[:, 0])
        sector = np.floor((angle + np.pi) / (2 * np.pi) * _SECTORS).astype(np.intp) % _SECTORS
        member = (sector[None, :] == np.arange(_SECTORS)[:, None]).astype(np.float64)
        self.total += member @ profile
        self.count += member.sum(axis=1)

    def mean(self) -> NDArray[np.float64]:
        """(m,) mean over all directions."""
        return np.asarray(self.total.sum(axis=0) / max(self.count.sum(), 1.0))

    def along(self, direction: tuple[float, float], reach_rad: float = 0.45) -> tuple[NDArray[np.float64], float]:
        """(m,) mean profile along a direction and how many sections it rests on."""
        middle = (np.arange(_SECTORS) + 0.5) / _SECTORS * 2 * np.pi - np.pi
        turned = np.arctan2(direction[1], direction[0])
        near = np.abs((middle - turned + np.pi) % (2 * np.pi) - np.pi) <= reach_rad
        count = float(self.count[near].sum())
        return np.asarray(self.total[near].sum(axis=0) / max(count, 1.0)), count


@dataclass(frozen=True, slots=True, eq=False)
class SideLight:
    """Correction for one-sided light.

    Attributes
    ----------
    vector_px : (2,) array
        Its part along a normal is what has to be added to a fitted place along that normal [px].
    u_px : float
        Standard uncertainty of that part, common to the clip.
    """

    vector_px: NDArray[np.float64]
    u_px: float

    @classmethod
    def unknown(cls) -> "SideLight":
        """No correction; light may have moved the axis by up to 0.7 px."""
        return cls(np.zeros(2), 0.4)

    def across(self, points: NDArray[np.floating]) -> NDArray[np.float64]:
        """(n, 2) correction of the points of a curve, each along its own normal; NaN stays NaN."""
        tangent = np.gradient(np.asarray(points, dtype=np.float64), axis=0)
        size = np.hypot(tangent[:, 0], tangent[:, 1])
        normal = np.column_stack([tangent[:, 1], -tangent[:, 0]]) / np.maximum(size, 1e-9)[:, None]
        return np.asarray((normal @ self.vector_px)[:, None] * normal)


def side_light(pool: ProfilePool) -> SideLight:
    """How one-sided light moved the fitted axis of a clip, from its pooled profiles.

    A lamp moves the brightness of every section towards itself, so the offset goes with the cosine between the normal and
    the lamp: one vector is fitted to the offsets of all directions, weighed by the line that was seen in each.
    """
    width = 2 * np.pi / _SECTORS
    rows = []
    mean = pool.mean()
    bar = fit_bar(pool.offset_px, mean - 0.5 * (np.median(mean[:3]) + np.median(mean[-3:])))
    for k in range(_SECTORS):
        angle = (k + 0.5) * width - np.pi
        if pool.count[k] < 50:
            continue
        middle, doubt = side_light_offset(pool.offset_px, pool.total[k] / pool.count[k], bar)
        rows.append((np.cos(angle), np.sin(angle), middle, doubt, pool.count[k]))
    if len(rows) < 3:
        return SideLight.unknown()
    c, s, offset, u, count = (np.array(x) for x in zip(*rows, strict=True))
    weight = np.asarray(np.sqrt(count) / np.hypot(u, 0.05) ** 2)
    design = np.column_stack([c, s])
    normal = design.T @ (weight[:, None] * design) + 1e-3 * weight.sum() * np.eye(2)
    vector = np.linalg.solve(normal, design.T @ (weight * offset))
    left = offset - design @ vector
    spread = float(np.sqrt((weight * left**2).sum() / weight.sum()))
    typical = float((weight * u).sum() / weight.sum())
    # A flank as bright as the scene behind it hides its edge, and the correction then stops short: half of it is in doubt.
    unsure = np.hypot(_LEAST_DOUBT_PX, 0.5 * float(np.hypot(*vector)))
    return SideLight(vector, float(np.hypot(max(spread, typical), unsure)))


def side_light_offset(
    offset_px: NDArray[np.float64], profile: NDArray[np.float64], bar: tuple[float, float] | None = None
) -> tuple[float, float]:
    """Middle of the body against the place the template fit gives, and its standard uncertainty [px].

    Where the body is seen from flank to flank, a bar whose brightness goes evenly from one flank to the other is fitted,
    of the `bar`'s width and blur. Where a glint outshines the body no bar fits, but the body's edges still differ
    a little from the scene: then the middle between the outermost crossings of low levels is taken, with their spread.
    """
    floor = np.array([np.median(profile[:3]), np.median(profile[-3:])])
    p = np.asarray(profile - np.interp(offset_px, offset_px[[0, -1]], floor))
    high = float(p.max())
    if high <= 0:
        return 0.0, 0.4
    bar = fit_bar(offset_px, p) if bar is None else bar
    shift, misfit = _lit_bar(offset_px, p, *bar)
    if misfit < _NO_BAR * high and bar[0] > _FLAT_BAR * bar[1]:
        return shift, max(0.04, misfit / high * bar[0])
    middles = [0.5 * sum(_outer(offset_px, p, share * high)) for share in (0.06, 0.1, 0.15, 0.2)]
    return float(np.mean(middles)), max(float(np.std(middles)), 0.03)


def fit_bar(offset_px: NDArray[np.float64], profile: NDArray[np.float64]) -> tuple[float, float]:
    """Width and blur of the evenly bright bar nearest to a profile [px]."""
    wide = profile > 0.5 * profile.max()
    step = float(offset_px[1] - offset_px[0])
    start = np.array([float(profile.max()), max(float(wide.sum()) * step, 1.0), 0.9, 0.0])

    def left(x: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(x[0] * bar_profile(offset_px - x[3], x[1], x[2]) - profile)

    low, high = [0.0, 0.5, 0.35, -1.0], [np.inf, 2 * float(offset_px[-1]), 3.0, 1.0]
    found = least_squares(left, np.clip(start, np.array(low) + 1e-6, np.array(high) - 1e-6), bounds=(low, high))
    return float(found.x[1]), float(found.x[2])


def _lit_bar(
    offset: NDArray[np.float64], p: NDArray[np.float64], width: float, blur: float
) -> tuple[float, float]:
    """Place of a bar whose brightness changes evenly across it, and the root mean square of what the fit leaves."""
    place = np.arange(-1.2, 1.2001, 0.02)
    x = offset[None, :] - place[:, None]
    u1, u2 = (x + width / 2) / blur, (x - width / 2) / blur
    even = ndtr(u1) - ndtr(u2)
    bell = np.exp(-0.5 * u1**2) - np.exp(-0.5 * u2**2)
    tilted = x * even + blur * bell / np.sqrt(2 * np.pi)
    ee, et, tt = (even**2).sum(1), (even * tilted).sum(1), (tilted**2).sum(1)
    pe, pt = even @ p, tilted @ p
    det = ee * tt - et**2
    a, b = (pe * tt - pt * et) / det, (pt * ee - pe * et) / det
    left = ((p - a[:, None] * even - b[:, None] * tilted) ** 2).mean(axis=1)
    i = int(np.clip(np.argmin(left), 1, place.size - 2))
    bend = left[i - 1] - 2 * left[i] + left[i + 1]
    fine = 0.5 * (left[i - 1] - left[i + 1]) / bend if bend > 0 else 0.0
    return float(place[i] + 0.02 * np.clip(fine, -1, 1)), float(np.sqrt(left[i]))


def _outer(offset: NDArray[np.float64], p: NDArray[np.float64], value: float) -> tuple[float, float]:
    """Outermost places where a profile passes a value."""
    over = np.nonzero(p >= value)[0]
    left = _crossing(offset[: over[0] + 1][::-1], p[: over[0] + 1][::-1], value)
    return left, _crossing(offset[over[-1] :], p[over[-1] :], value)


def _crossing(offset: NDArray[np.float64], falling: NDArray[np.float64], value: float) -> float:
    below = np.nonzero(falling < value)[0]
    if below.size == 0:
        return float(offset[-1])
    i = int(below[0])
    if i == 0:
        return float(offset[0])
    share = (falling[i - 1] - value) / max(falling[i - 1] - falling[i], 1e-9)
    return float(offset[i - 1] + share * (offset[i] - offset[i - 1]))
