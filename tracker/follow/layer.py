"""A small thing in front of the still scene: its place from the whole picture of it, not from its brightness alone.

A pixel shows a mixture, `(1 - coverage) * scene + coverage * look`. The scene is known from the background. Coverage
follows from the thing's outline, its place, the blur of the picture and the blur of the motion. The look is a sum of
a few smooth functions whose weights are found with the place, by Gauss and Newton's method with outlying pixels
weighted down. So place means the place of the outline: a lamp from one side, which moves the centre of
brightness, changes the look and leaves the outline where it is; and a chequered board behind is part of the scene,
no disturbance.

What a frame teaches of look and size is kept for the next (an iterated Kalman filter, with the place left free
each time, so that neighbouring frames share no error by way of a motion model).
"""

from dataclasses import dataclass
from functools import lru_cache
from typing import Protocol

import cv2
import numpy as np
from numpy.typing import NDArray

__all__ = ["Belief", "Drawn", "LayerFit", "Patch", "Shape", "fit_layer"]

Floats = NDArray[np.float64]

_SETTLED_PX = 0.01
_OUTLIER = 3.0  # residuals, in their sigma, from which a pixel counts less
_MODEL_SHARE = 0.03  # of the contrast: what smooth looks leave unexplained, however quiet the sensor
_EDGE_SHARE = 0.10  # and of the edge's steepness: how pictures are sharpened and compressed is not known
_EARLY_SHARE = 0.30
_FOREIGN_SHARE = 0.25  # of the contrast, outside the outline: something else is there
_SCENE_SIGMA = 0.05  # by how much shadows may dim the scene behind, and how unevenly


class Shape(Protocol):
    """An outline with a look."""

    @property
    def parameters(self) -> int:
        """How many; the first two are column and row of its place."""
        ...

    @property
    def looks(self) -> int:
        """Of how many functions its look is made; the first is 1."""
        ...

    def draw(self, p: Floats, x: Floats, y: Floats, look: Floats) -> "Drawn": ...


@dataclass(frozen=True, slots=True, eq=False)
class Drawn:
    """A shape on some pixels.

    Attributes
    ----------
    basis : (looks, n) array
        Coverage times each function of the look; the first row is the coverage.
    d_cover : (parameters, n) array
        Derivative of the coverage with respect to each parameter.
    d_colour : (parameters, n) array
        Derivative of coverage times look.
    """

    basis: Floats
    d_cover: Floats
    d_colour: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Patch:
    """A part of one frame, as arrays over its (h, w) pixels.

    Attributes
    ----------
    x, y : (h, w) arrays
        Column and row of each pixel in the frame.
    seen, scene : (h, w) arrays
        Grey levels of the frame, and of the still scene in the frame's light.
    sigma : (h, w) array
        Noise of each pixel [grey levels].
    trust : (h, w) array
        1 where the scene behind is known, less where it is guessed, 0 where a pixel is to be left out.
    """

    x: Floats
    y: Floats
    seen: Floats
    scene: Floats
    sigma: Floats
    trust: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Belief:
    """What is known before a frame is seen: means and covariances. The place carries none."""

    p: Floats  # (parameters,)
    p_sigma: Floats  # (parameters,) infinite where nothing is known
    look: Floats  # (looks,)
    look_cov: Floats  # (looks, looks)


@dataclass(frozen=True, slots=True, eq=False)
class LayerFit:
    """One frame's answer.

    Attributes
    ----------
    p, p_cov : (parameters,) and (parameters, parameters) arrays
    look, look_cov : (looks,) and (looks, looks) arrays
    explained : float
        Share of the squared difference between frame and scene, under the outline, that the fit explains.
    misfit : float
        Robust root mean square of the residuals under the outline, in their sigma.
    contrast : float
        Root mean square of look minus scene under the outline [grey levels].
    cover : float
        Share of the outline's area whose pixels were in the picture and agreed.
    edge : float
        Share of the outline's edge that carried the fit.
    cost : float
        Mean robust loss of the patch's pixels, to compare fits of one patch.
    area : float
        Of the outline, as far as it lies in the picture [px^2].
    """

    p: Floats
    p_cov: Floats
    look: Floats
    look_cov: Floats
    explained: float
    misfit: float
    contrast: float
    cover: float
    edge: float
    cost: float
    area: float


def fit_layer(
    patch: Patch, shape: Shape, belief: Belief, *, soften: tuple[float, ...] = (1.0, 0.0, 0.0), blur_at: int = 3, reach: float = 1e9
) -> LayerFit | None:
    """Find a shape in a patch.

    Parameters
    ----------
    patch : Patch
    shape : Shape
    belief : Belief
        Start, and what is known of size and look.
    soften : tuple of float
        Blur added to the edge's own in each step [px], the last of them 0: a soft edge is found from farther off.
    blur_at : int
        Which parameter the edge's blur is.
    reach : float
        How far the place may move from the start [px].

    Returns
    -------
    LayerFit or None
        None where the fit ran away or there was nothing to hold on to.
    """
    pixels = _Pixels.of(patch)
    x, y, seen, scene, trust = pixels.x, pixels.y, pixels.seen, pixels.scene, pixels.trust
    p, look = belief.p.astype(float).copy(), belief.look.astype(float).copy()
    n_p, n_l = shape.parameters, shape.looks
    look_precision = np.linalg.inv(belief.look_cov)
    p_precision = np.where(np.isfinite(belief.p_sigma), 1.0 / np.maximum(belief.p_sigma, 1e-9) ** 2, 0.0)
    tilt = pixels.tilt
    n = n_p + n_l + 3
    prior = np.zeros((n, n))
    prior[:n_p, :n_p] = np.diag(p_precision)
    prior[n_p : n_p + n_l, n_p : n_p + n_l] = look_precision
    prior[n_p + n_l :, n_p + n_l :] = np.eye(3) / _SCENE_SIGMA**2
    solved = np.zeros(n)
    shade = np.zeros(3)
    for extra in soften:
        q = p.copy()
        q[blur_at] = np.hypot(q[blur_at], extra)
        drawn = shape.draw(q, x, y, look)
        cover = drawn.basis[0]
        lit = scene * (1.0 + shade @ tilt)
        behind = (1.0 - cover) * lit
        residual = seen - behind - look @ drawn.basis
        contrast = _contrast(drawn.basis, look, lit, cover)
        variance = _variance(pixels.noise2, drawn, contrast)
        scale = variance + (_EARLY_SHARE * contrast * min(extra, 1.0)) ** 2  # while it is not in place, all are outliers
        foreign = _foreign(residual, cover, variance, contrast, pixels, float(p[blur_at])) if extra < 1.0 else np.zeros_like(cover, bool)
        weight = trust * ~foreign / (variance * (1.0 + residual**2 / scale / _OUTLIER**2))
        design = np.concatenate([drawn.d_colour - lit * drawn.d_cover, drawn.basis, (1.0 - cover) * scene * tilt])
        scaled = design * weight
        normal = scaled @ design.T + prior
        target = scaled @ (residual + look @ drawn.basis + behind - (1.0 - cover) * scene)
        target[:n_p] += p_precision * (belief.p - p)
        target[n_p : n_p + n_l] += look_precision @ belief.look
        try:
            solved = np.linalg.solve(normal, target)
        except np.linalg.LinAlgError:
            return None
        move = np.clip(solved[:n_p], -np.maximum(1.5, extra), np.maximum(1.5, extra))
        p = p + move
        p[blur_at] = max(p[blur_at], 0.35)
        look, shade = solved[n_p : n_p + n_l], solved[n_p + n_l :]
        if not np.isfinite(p).all() or float(np.hypot(*(p[:2] - belief.p[:2]))) > reach:
            return None
        if extra == 0.0 and float(np.abs(move[:2]).max()) < _SETTLED_PX:
            return _judge(pixels, shape, p, look, shade, prior, blur_at, drawn)  # as good as drawn at p
    return _judge(pixels, shape, p, look, shade, prior, blur_at)


def _variance(noise2: Floats, drawn: Drawn, contrast: float) -> Floats:
    """Noise, and what the model leaves unexplained under the outline and at its edge."""
    slope = np.hypot(drawn.d_cover[0], drawn.d_cover[1])
    return np.asarray(noise2 + (contrast * (_MODEL_SHARE * drawn.basis[0] + _EDGE_SHARE * slope)) ** 2)


def _contrast(basis: Floats, look: Floats, scene: Floats, cover: Floats) -> float:
    """Root mean square of coverage times (look - scene) over the shape."""
    return float(np.sqrt(((look @ basis - cover * scene) ** 2).sum() / max(float((cover**2).sum()), 1e-9)))


@lru_cache(maxsize=32)
def _round(radius: int) -> NDArray[np.uint8]:
    return np.asarray(cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * radius + 1, 2 * radius + 1)), dtype=np.uint8)


def _foreign(residual: Floats, cover: Floats, variance: Floats, contrast: float, pixels: "_Pixels", soft: float) -> NDArray[np.bool_]:
    """Pixels outside the outline that show something else (the line, a clamp), and their neighbours."""
    odd = (cover < 0.02) & (residual**2 > np.maximum(16 * variance, (_FOREIGN_SHARE * contrast) ** 2))
    if not odd.any():
        return odd
    near = cv2.dilate(pixels.grid(cover > 0.02), _round(2))  # its own edge, not quite in place yet
    grown = cv2.dilate(pixels.grid(odd) & (near == 0), _round(round(2 + 2.5 * soft)))  # back to where half is covered
    return np.asarray(grown.ravel()[pixels.at] > 0)


@dataclass(frozen=True, slots=True, eq=False)
class _Pixels:
    """Those pixels of a patch that count, as (n,) arrays; `at` is their place in it."""

    x: Floats
    y: Floats
    seen: Floats
    scene: Floats
    noise2: Floats
    trust: Floats
    tilt: Floats  # (3, n): 1, column and row from -1 to 1
    at: NDArray[np.intp]
    shape: tuple[int, int]

    @classmethod
    def of(cls, patch: Patch) -> "_Pixels":
        at = np.flatnonzero(patch.trust)
        x, y = patch.x.ravel()[at], patch.y.ravel()[at]
        half = max(patch.seen.shape) / 2
        tilt = np.stack([np.ones_like(x), (x - patch.x[0, 0]) / half - 1.0, (y - patch.y[0, 0]) / half - 1.0])
        return cls(
            x, y, patch.seen.ravel()[at], patch.scene.ravel()[at], patch.sigma.ravel()[at] ** 2, patch.trust.ravel()[at],
            tilt, at, (patch.seen.shape[0], patch.seen.shape[1]),
        )  # fmt: skip

    def grid(self, values: NDArray[np.bool_]) -> NDArray[np.uint8]:
        """Back on the patch, 1 where true."""
        out = np.zeros(self.shape, np.uint8)
        out.ravel()[self.at] = values
        return out


def _judge(
    pixels: _Pixels, shape: Shape, p: Floats, look: Floats, shade: Floats, prior: Floats, blur_at: int,
    drawn: Drawn | None = None,
) -> LayerFit | None:
    """Quality and covariance at the solution."""
    seen, scene, tilt = pixels.seen, pixels.scene, pixels.tilt
    drawn = shape.draw(p, pixels.x, pixels.y, look) if drawn is None else drawn
    cover = drawn.basis[0]
    lit = scene * (1.0 + shade @ tilt)
    residual = seen - (1.0 - cover) * lit - look @ drawn.basis
    contrast = _contrast(drawn.basis, look, lit, cover)
    variance = _variance(pixels.noise2, drawn, contrast)
    foreign = _foreign(residual, cover, variance, contrast, pixels, float(p[blur_at]))
    agree = ~foreign / (1.0 + residual**2 / variance / _OUTLIER**2)
    design = np.concatenate([drawn.d_colour - lit * drawn.d_cover, drawn.basis, (1.0 - cover) * scene * tilt])
    try:
        cov = np.linalg.inv((design * (pixels.trust * agree / variance)) @ design.T + prior)
    except np.linalg.LinAlgError:
        return None
    inside = cover > 0.5
    area = float(cover.sum())
    if area < 1.0 or not inside.any():
        return None
    core = cover**2
    missing = float((core * np.minimum(residual**2, 9 * contrast**2)).sum())
    there = float((core * (seen - lit) ** 2).sum())
    slope = np.hypot(drawn.d_cover[0], drawn.d_cover[1])
    n_p, n_l = shape.parameters, shape.looks
    return LayerFit(
        p=p, p_cov=cov[:n_p, :n_p], look=look, look_cov=cov[n_p : n_p + n_l, n_p : n_p + n_l],
        explained=1.0 - missing / max(there, 1e-9),
        misfit=float(1.4826 * np.median(np.abs(residual[inside]) / np.sqrt(variance[inside]))),
        contrast=contrast, cover=float((cover * agree).sum() / area),
        edge=float((slope * agree).sum() / max(float(slope.sum()), 1e-9)),
        cost=float(np.average(np.log1p(residual**2 / (_OUTLIER**2 * pixels.noise2)), weights=pixels.trust)), area=area,
    )  # fmt: skip
