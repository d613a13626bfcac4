"""Balls drawn for tests, by casting rays at fine sub-pixels: nothing here is shared with the code under test."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

import cv2
import numpy as np

__all__ = ["Scene", "ball", "chequers", "dropped", "wall"]

FINE = 8  # sub-pixels along each side


def wall(shape, level=110.0):
    """A wall with a slow gradient and some stains, grey levels as float."""
    h, w = shape
    y, x = np.mgrid[0:h, 0:w]
    stains = np.random.default_rng(5).normal(0, 1, (h // 8 + 2, w // 8 + 2)).astype(np.float32)
    return level + 8 * x / w - 10 * y / h + 3 * cv2.resize(stains, (w, h), interpolation=cv2.INTER_CUBIC)


def chequers(shape, square=9, low=60.0, high=200.0):
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]]
    return np.where((x // square + y // square) % 2 > 0, high, low).astype(float)


def ball(
    scene, centre, radius, *, level=190.0, light=None, ambient=0.5, way=(0.0, 0.0), soft=0.6, moments=None, box=None
):
    """`scene` with a ball before it, float grey levels.

    `light` is the direction to a distant lamp (x right, y down, z to the camera); with it the ball shades by Lambert's
    law, without it the disc is flat. The scene is taken as already blurred, the ball's outline gets `soft` (standard
    deviation, px) by a Gaussian on the fine grid. `way` is travelled during the exposure, `centre` is mid-exposure.
    """
    h, w = scene.shape
    reach = int(radius + abs(way[0]) / 2 + abs(way[1]) / 2 + 4 * soft + 3)
    x0, x1 = max(0, int(centre[0]) - reach), min(w, int(centre[0]) + reach + 1)
    y0, y1 = max(0, int(centre[1]) - reach), min(h, int(centre[1]) + reach + 1)
    if x1 <= x0 or y1 <= y0:
        return scene.copy()
    pad = int(np.ceil(4 * soft)) + 1
    xs = x0 - pad + (np.arange((x1 - x0 + 2 * pad) * FINE) + 0.5) / FINE - 0.5
    ys = y0 - pad + (np.arange((y1 - y0 + 2 * pad) * FINE) + 0.5) / FINE - 0.5
    count = moments or max(1, int(np.ceil(2 * np.hypot(*way))))
    cover, colour = np.zeros((ys.size, xs.size)), np.zeros((ys.size, xs.size))
    for share in (np.arange(count) + 0.5) / count - 0.5:
        u = (xs[None, :] - centre[0] - share * way[0]) / radius
        v = (ys[:, None] - centre[1] - share * way[1]) / radius
        inside = u * u + v * v < 1
        cover += inside / count
        if light is None:
            colour += inside * level / count
        else:
            n = np.asarray(light, float) / np.linalg.norm(light)
            z = np.sqrt(np.maximum(1 - u * u - v * v, 0))
            lit = np.maximum(n[0] * u + n[1] * v + n[2] * z, 0)
            colour += inside * level * (ambient + (1 - ambient) * lit) / count
    if soft > 0:
        cover, colour = (cv2.GaussianBlur(a, (0, 0), soft * FINE) for a in (cover, colour))

    def pixels(a):
        a = a.reshape(a.shape[0] // FINE, FINE, a.shape[1] // FINE, FINE).mean(axis=(1, 3))
        return a[pad : pad + y1 - y0, pad : pad + x1 - x0]

    out = scene.astype(float).copy()
    out[y0:y1, x0:x1] = out[y0:y1, x0:x1] * (1 - pixels(cover)) + pixels(colour)
    return out


def shadow(scene, centre, radius, depth=0.45, soft=1.5):
    """`scene` dimmed by a ball's shadow."""
    y, x = np.mgrid[0 : scene.shape[0], 0 : scene.shape[1]]
    inside = 1 / (1 + np.exp((np.hypot(x - centre[0], y - centre[1]) - radius) * 1.7 / soft))
    return scene * (1 - depth * inside)


@dataclass(frozen=True)
class Scene:
    """A clip of a ball on its way.

    `path(t)` is its place at a time [px]; `before(frame, index)` may draw what stands in front of the ball.
    """

    still: np.ndarray
    path: Callable[[float], np.ndarray]
    radius: float = 5.0
    level: float = 200.0
    light: tuple[float, float, float] | None = None
    ambient: float = 0.5
    exposure_s: float = 0.0005
    fps: float = 240.0
    noise: float = 1.5
    shadow_at: tuple[float, float] | None = None
    gain: Callable[[int], float] = field(default=lambda index: 1.0)
    before: Callable[[np.ndarray, int], np.ndarray] = field(default=lambda frame, index: frame)
    shift: Callable[[int], tuple[float, float]] = field(default=lambda index: (0.0, 0.0))

    def frames(self, count) -> Iterator[tuple[int, np.ndarray]]:
        rng = np.random.default_rng(11)
        for index in range(count):
            t = index / self.fps
            at = self.path(t)
            way = (self.path(t + self.exposure_s / 2) - self.path(t - self.exposure_s / 2))
            picture = self.still
            if self.shadow_at is not None:
                picture = shadow(picture, at + np.array(self.shadow_at), self.radius)
            picture = ball(picture, at, self.radius, level=self.level, light=self.light, ambient=self.ambient, way=way)
            picture = self.before(picture, index)
            dx, dy = self.shift(index)
            if dx or dy:
                matrix = np.array([[1, 0, dx], [0, 1, dy]], dtype=np.float32)
                size = (picture.shape[1], picture.shape[0])
                picture = cv2.warpAffine(picture, matrix, size, flags=cv2.INTER_CUBIC, borderMode=cv2.BORDER_REPLICATE)
            picture = picture * self.gain(index) + rng.normal(0, self.noise, picture.shape)
            yield index, np.clip(np.rint(picture), 0, 255).astype(np.uint8)


def dropped(origin, release_s, px_per_m=400.0, g=9.81):
    """A path: still, then free fall from `release_s` on."""

    def path(t):
        fallen = 0.5 * g * px_per_m * max(t - release_s, 0.0) ** 2
        return np.array([origin[0], origin[1] + fallen])

    return path
