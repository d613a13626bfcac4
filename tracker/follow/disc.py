"""Where the centre of a round mark is, from its outline, however it is lit and whatever is behind it.

The picture around a ball or a dot is what it covers, times the light of its own face, plus what it leaves free, times
the scene behind. How much it covers follows from its radius, from the blur of the picture and from the way it went
during the exposure; the face is left free to be brighter on one side (a constant, a slope, the light of a ball and
curvatures, fitted anew in each frame), the scene is known or a slope. What then remains to be found is the outline's
centre: a variable projection (Golub & Pereyra, SIAM J. Numer. Anal. 10, 413 (1973)) by Gauss-Newton steps, with
Tukey's biweight against whatever touches the outline (a clamp, the line's last link, a highlight). A brightness
centroid would follow the light, by several tenths of a pixel under a lamp at one side; the outline does not.

Coordinates are (column, row) of the frame, centre of the top-left pixel = (0, 0).
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

__all__ = ["DiscFit", "DiscShape", "cover", "fit_disc", "learn_shape"]

Floats = NDArray[np.float64]

_PIXEL = 1.0 / np.sqrt(12.0)  # the blur of a square pixel itself
_SECTORS = 12
_CLEAR = 3.0  # an outline sector counts where the disc differs from what is behind it by this many sigmas
_STEP_PX = 0.75  # a disc in motion is laid along its way in steps of at most this


@dataclass(frozen=True, slots=True)
class DiscShape:
    """A round mark as the camera draws it.

    Attributes
    ----------
    radius_px : float
    soft_px : float
        Standard deviation of the blur across its outline, the pixel's own included [px].
    terms : int
        How freely its face may be lit: 1 evenly, 3 with a slope, 4 as a ball, 7 with curvatures besides.
    """

    radius_px: float
    soft_px: float = 0.7
    terms: int = 7


@dataclass(frozen=True, slots=True, eq=False)
class DiscFit:
    """One disc found in one patch.

    Attributes
    ----------
    centre : (2,) array
        Column and row [px].
    cov : (2, 2) array
        Its covariance from the residuals [px^2].
    face : (terms,) array
        Light of the face, in units of grey levels, coordinates in radii.
    level : float
        Mean grey level of the face.
    rms : float
        Robust standard deviation of the residuals around the outline [grey levels].
    support : float
        Share of the outline's sectors that can be seen and agree with the disc.
    seen : float
        Share of the outline's sectors in which the disc differs from what is behind it.
    explains : float
        Share of what the scene alone leaves unexplained that the disc explains, 1 for all of it.
    sharp : float
        SSE with an outline three times as soft over SSE as drawn, less one: negative for a shadow.
    ok : bool
        The steps converged to a place inside the patch.
    """

    centre: Floats
    cov: Floats
    face: Floats
    level: float
    rms: float
    support: float
    seen: float
    explains: float
    sharp: float
    ok: bool


@dataclass(frozen=True, slots=True, eq=False)
class _Pixels:
    """The pixels of a patch that can tell of a disc, as columns: places (n, 2), grey levels, scene behind."""

    x: Floats
    y: Floats
    gray: Floats
    scene: Floats | None


def cover(x: Floats, y: Floats, centre: Floats, shape: DiscShape, trail: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """How much of each pixel a disc covers on the mean of the exposure, and its slopes.

    Parameters
    ----------
    x, y : (n,) arrays
        Places of the pixels [px].
    centre : (2,) array
        Of the disc at mid-exposure [px].
    shape : DiscShape
    trail : (2,) array
        The way it goes during the exposure [px].

    Returns
    -------
    (n,) arrays
        Cover 0..1; its derivatives by the centre's column and row and by the radius [1/px].

    Notes
    -----
    The outline is taken as straight over its blur, good to soft / (2 radius) of the cover's slope.
    """
    steps = max(1, int(np.ceil(np.hypot(*trail) / _STEP_PX)))
    at = ((np.arange(steps) + 0.5) / steps - 0.5)[:, None]
    dx, dy = x - centre[0] - at * trail[0], y - centre[1] - at * trail[1]
    r = np.maximum(np.hypot(dx, dy), 1e-9)
    inside = (shape.radius_px - r) / shape.soft_px
    bell = np.exp(-0.5 * inside**2) / (np.sqrt(2 * np.pi) * shape.soft_px)
    return ndtr(inside).mean(axis=0), (bell * dx / r).mean(axis=0), (bell * dy / r).mean(axis=0), bell.mean(axis=0)


def _face(x: Floats, y: Floats, centre: Floats, shape: DiscShape) -> Floats:
    """Ways in which a round face can be lit, (n, terms)."""
    u, v = (x - centre[0]) / shape.radius_px, (y - centre[1]) / shape.radius_px
    far = np.maximum(np.hypot(u, v), 1.0)  # outside the rim its light goes on as at the rim
    u, v = u / far, v / far
    one = np.ones_like(u)
    ball = np.sqrt(np.maximum(1.0 - u * u - v * v, 0.0))  # towards the camera: Lambert's law is linear in (u, v, ball)
    return np.stack([one, u, v, ball, u * u - v * v, u * v, u * u + v * v][: shape.terms], axis=1)


def _behind(pixels: _Pixels, centre: Floats, shape: DiscShape) -> Floats:
    """What the scene may look like, (n, k): as known but for its light, or a slope."""
    one = np.ones_like(pixels.x)
    if pixels.scene is not None:
        return np.stack([pixels.scene, one], axis=1)
    return np.stack([one, (pixels.x - centre[0]) / shape.radius_px, (pixels.y - centre[1]) / shape.radius_px], axis=1)


def _solve(columns: Floats, values: Floats, weight: Floats) -> tuple[Floats, Floats]:
    """Weighted least squares with a ridge of rounding size, and the normal matrix."""
    weighted = columns * weight[:, None]
    normal = weighted.T @ columns
    normal[np.diag_indices_from(normal)] += 1e-9 * np.trace(normal) / len(normal) + 1e-12
    return np.linalg.solve(normal, weighted.T @ values), normal


def _biweight(left: Floats, scale: float) -> Floats:
    return np.clip(1.0 - (left / (4.685 * scale)) ** 2, 0.0, None) ** 2


def _scale(left: Floats, noise: float) -> float:
    return max(noise, 1.4826 * float(np.median(np.abs(left))))


def _pick(patch: NDArray[np.generic], corner: tuple[int, int], centre: Floats, reach: float,
          scene: NDArray[np.generic] | None) -> _Pixels | None:
    """The pixels within `reach` of a place, or None where the patch does not hold enough of them."""
    h, w = patch.shape
    cx, cy = centre[0] - corner[0], centre[1] - corner[1]
    x0, x1 = max(0, int(np.floor(cx - reach))), min(w, int(np.ceil(cx + reach)) + 1)
    y0, y1 = max(0, int(np.floor(cy - reach))), min(h, int(np.ceil(cy + reach)) + 1)
    if x1 - x0 < 4 or y1 - y0 < 4:
        return None
    yy, xx = np.mgrid[y0:y1, x0:x1]
    near = (xx - cx) ** 2 + (yy - cy) ** 2 < reach**2
    if near.sum() < 30:
        return None
    part = patch[y0:y1, x0:x1][near].astype(float)
    behind = None if scene is None else scene[y0:y1, x0:x1][near].astype(float)
    return _Pixels(xx[near] + float(corner[0]), yy[near] + float(corner[1]), part, behind)


def fit_disc(
    patch: NDArray[np.generic],
    corner: tuple[int, int],
    start: Floats,
    shape: DiscShape,
    *,
    scene: NDArray[np.generic] | None = None,
    trail: Floats | None = None,
    noise: float = 1.0,
    steps: int = 8,
) -> DiscFit | None:
    """Find the outline of a disc of known size near `start`.

    Parameters
    ----------
    patch : (h, w) array
        Grey levels.
    corner : (int, int)
        Column and row of its top-left pixel in the frame.
    start : (2,) array
        Where to begin, good to about half a radius [px].
    shape : DiscShape
    scene : (h, w) array, optional
        What the patch would show without the disc; None takes a slope for it.
    trail : (2,) array, optional
        The way the disc goes during the exposure [px].
    noise : float
        Standard deviation of a pixel [grey levels].
    steps : int
        Gauss-Newton steps at most.

    Returns
    -------
    DiscFit or None
        None where the patch holds too little of it.
    """
    trail = np.zeros(2) if trail is None else np.asarray(trail, dtype=float)
    centre = np.array(start, dtype=float)
    reach = shape.radius_px + 0.5 * float(np.hypot(*trail)) + max(4.0 * shape.soft_px, 3.0)
    pixels = _pick(patch, corner, centre, reach + 1.5, scene)
    if pixels is None:
        return None
    weight, scale, done = np.ones_like(pixels.gray), noise, False
    limit, picked_at = 0.35 * shape.radius_px + 1.0, centre.copy()
    for step in range(steps):
        columns = _columns(pixels, centre, shape, trail)
        for _ in range(3 if step == 0 else 1):
            left = _left(columns, pixels.gray, weight, shape, with_slopes=True)[0]
            scale = _scale(left, noise)
            weight = _biweight(left, scale if step > 1 else 2.0 * scale)
        solution, normal = _left(columns, pixels.gray, weight, shape, with_slopes=True)[1:]
        move = solution[-2:]
        size = float(np.hypot(*move))
        if not np.isfinite(size):
            return None
        centre = centre + move * min(1.0, limit / max(size, 1e-12))
        if step >= 2 and size < 0.004:
            done = True
            break
        if float(np.hypot(*(centre - picked_at))) > 1.0:
            again = _pick(patch, corner, centre, reach + 1.5, scene)
            if again is None:
                return None
            pixels, picked_at = again, centre.copy()
            weight = np.ones_like(pixels.gray)
    return _judge(pixels, centre, shape, trail, noise, done or size < 0.05)


def _columns(pixels: _Pixels, centre: Floats, shape: DiscShape, trail: Floats) -> tuple[Floats, Floats, tuple[Floats, ...]]:
    """Face and scene as covered, (n, terms) and (n, k), and the cover with its slopes."""
    covered = cover(pixels.x, pixels.y, centre, shape, trail)
    return _face(pixels.x, pixels.y, centre, shape), _behind(pixels, centre, shape), covered


def _left(columns: tuple[Floats, Floats, tuple[Floats, ...]], gray: Floats, weight: Floats, shape: DiscShape, *,
          with_slopes: bool) -> tuple[Floats, Floats, Floats]:
    """Residuals, solution and normal matrix of the light, and of the centre's move when asked for."""
    face, behind, (a, ax, ay, _) = columns
    light = np.concatenate([face * a[:, None], behind * (1.0 - a)[:, None]], axis=1)
    solution, normal = _solve(light, gray, weight)
    if with_slopes:
        step = face @ solution[: shape.terms] - behind @ solution[shape.terms :]
        light = np.concatenate([light, (step * ax)[:, None], (step * ay)[:, None]], axis=1)
        solution, normal = _solve(light, gray, weight)
    return gray - light @ solution, solution, normal


def _judge(pixels: _Pixels, centre: Floats, shape: DiscShape, trail: Floats, noise: float, ok: bool) -> DiscFit:
    """How good a disc this is at this place."""
    columns = _columns(pixels, centre, shape, trail)
    face, behind, (a, _, _, rim) = columns
    weight = np.ones_like(pixels.gray)
    scale = noise
    for _ in range(3):
        left, solution, normal = _left(columns, pixels.gray, weight, shape, with_slopes=True)
        scale = _scale(left, noise)
        weight = _biweight(left, scale)
    left, light, _ = _left(columns, pixels.gray, weight, shape, with_slopes=False)
    inside, outside = face @ light[: shape.terms], behind @ light[shape.terms :]
    bare = pixels.gray - behind @ _solve(behind, pixels.gray, weight * np.where(a > 0.5, 1e-3, 1.0))[0]
    sse = float((weight * left**2).sum())
    soft = replace(shape, soft_px=3.0 * shape.soft_px)
    soft_left = _left(_columns(pixels, centre, soft, trail), pixels.gray, weight, soft, with_slopes=False)[0]
    near = a * (1 - a) > 0.002
    support, seen = _sectors(pixels, centre, near, left, inside - outside, a, scale)
    cov = np.linalg.pinv(normal)[-2:, -2:] * scale**2 * float(weight.sum() / max(weight.sum() - len(normal), 1.0))
    return DiscFit(centre, cov, light[: shape.terms], float(np.average(inside, weights=a + 1e-9)), scale, support, seen,
                   1.0 - float((left**2).sum()) / max(float((bare**2).sum()), 1e-9),
                   float((weight * soft_left**2)[near].sum()) / max(float((weight * left**2)[near].sum()), 1e-9) - 1.0,
                   ok and bool(np.isfinite(cov).all()) and sse >= 0.0)


def _sectors(pixels: _Pixels, centre: Floats, near: NDArray[np.bool_], left: Floats, step: Floats, a: Floats,
             scale: float) -> tuple[float, float]:
    """Shares of the outline that agree with the disc, and that can be seen at all."""
    angle = np.arctan2(pixels.y - centre[1], pixels.x - centre[0])[near]
    sector = np.minimum(((angle + np.pi) / (2 * np.pi) * _SECTORS).astype(np.intp), _SECTORS - 1)
    left, step, a = left[near], step[near], a[near]

    def total(values: Floats) -> Floats:
        return np.bincount(sector, values, _SECTORS)

    # were the disc not there the residual would hold the whole covered step; were it larger, the uncovered step
    none, full = total((left + step * a) ** 2), total((left - step * (1 - a)) ** 2)
    seen = np.minimum(total((step * a) ** 2), total((step * (1 - a)) ** 2)) > (_CLEAR * scale) ** 2
    agrees = seen & (total(left**2) < 0.5 * np.minimum(none, full))
    return float(agrees.mean()), float(seen.mean())


def learn_shape(
    patch: NDArray[np.generic], corner: tuple[int, int], start: Floats, shape: DiscShape, *,
    scene: NDArray[np.generic] | None = None, noise: float = 1.0
) -> tuple[DiscShape, DiscFit | None]:
    """Radius and blur of a disc at rest, from a picture of it, near those that are expected.

    The radius is sought within 25 %, the blur from 0.35 to 3 px, by the least robust sum of squares on a grid that is
    refined twice; the fit that belongs to them comes with it.
    """
    best, fit = shape, fit_disc(patch, corner, start, shape, scene=scene, noise=noise)
    if fit is None:
        return shape, None
    ranges = (np.linspace(0.8, 1.25, 10) * shape.radius_px, np.array([0.4, 0.7, 1.2, 2.0]))
    for level in range(3):
        tried = []
        for radius in ranges[0]:
            for soft in ranges[1]:
                one = replace(shape, radius_px=float(radius), soft_px=float(soft))
                found = fit_disc(patch, corner, fit.centre, one, scene=scene, noise=noise, steps=5)
                if found is not None:
                    tried.append((_misfit(patch, corner, found, one, shape.radius_px * 1.25 + 5.0, scene, noise), one, found))
        if not tried:
            return best, fit
        _, best, fit = min(tried, key=lambda item: item[0])
        width = 0.06 / 4**level * shape.radius_px
        ranges = (best.radius_px + np.linspace(-width, width, 5), best.soft_px * np.array([0.7, 1.0, 1.4]) ** (1 / 2**level))
    return best, fit


def _misfit(patch: NDArray[np.generic], corner: tuple[int, int], fit: DiscFit, shape: DiscShape, reach: float,
            scene: NDArray[np.generic] | None, noise: float) -> float:
    """Robust loss of a fit over the same pixels whatever the radius: mean of Tukey's rho in units of the noise."""
    pixels = _pick(patch, corner, fit.centre, reach, scene)
    if pixels is None:
        return float("inf")
    columns = _columns(pixels, fit.centre, shape, np.zeros(2))
    weight = np.ones_like(pixels.gray)
    for _ in range(4):
        left = _left(columns, pixels.gray, weight, shape, with_slopes=False)[0]
        weight = _biweight(left, _scale(left, noise))
    cut = 4.685 * 3.0 * noise
    return float((1.0 - np.clip(1.0 - (left / cut) ** 2, 0.0, None) ** 3).mean())
