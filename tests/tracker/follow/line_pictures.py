"""Pictures of a line whose place is known: a hoop on two straight legs, drawn with 4 x 4 samples a pixel.

Everything is in pixels of an upright picture; the rim lies at `rim`, the line rises from it, turns over a half circle
and falls out of the picture. Its coordinate along itself is exact: length of the straight legs and of the half circle.
"""

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

Floats = NDArray[np.float64]
SAMPLES = 4


@dataclass(frozen=True)
class Hoop:
    """A line at one moment."""

    rim: tuple[float, float] = (80.3, 240.0)
    radius: float = 24.0
    height: float = 70.0  # of the axis' top above the rim
    bottom: float = 500.0

    @property
    def apex(self) -> tuple[float, float]:
        """Highest point of the axis."""
        return self.rim[0] + self.radius, self.rim[1] - self.height

    def point(self, s: Floats) -> Floats:
        """(n, 2) places at lengths s from the rim."""
        leg = self.height - self.radius
        turn = np.clip((s - leg) / self.radius, 0.0, np.pi)
        x = self.rim[0] + self.radius * (1 - np.cos(turn))
        y = self.rim[1] - leg - self.radius * np.sin(turn)
        y = np.where(s < leg, self.rim[1] - s, y)
        return np.column_stack([x, np.where(turn >= np.pi, self.rim[1] - leg + (s - leg - np.pi * self.radius), y)])

    @property
    def length(self) -> float:
        """From the rim to the bottom of the picture."""
        return self.height - self.radius + np.pi * self.radius + self.bottom - (self.rim[1] - self.height + self.radius)


def bare(scene: Floats, blur: float = 0.7) -> Floats:
    """The scene as the same lens shows it without a line."""
    return cv2.GaussianBlur(scene, (0, 0), blur)


def wall(shape: tuple[int, int] = (480, 240), level: float = 130.0) -> Floats:
    """A wall that is a little brighter in the middle."""
    y, x = np.mgrid[: shape[0], : shape[1]]
    return level + 12.0 * np.cos(x / 90.0) * np.cos(y / 170.0)


def draw(
    scene: Floats, hoop: Hoop, width: float, level: float | NDArray[np.float64], *, paid_out: float = 0.0,
    pitch: float = 0.0, marks: tuple[float, ...] = (), mark_length: float = 14.0, mark_level: float = 250.0,
    blur: float = 0.7, side_light: tuple[float, float] = (0.0, 0.0),
) -> Floats:  # fmt: skip
    """The scene with the line before it, without noise.

    `pitch`: beads of that pitch, which fill 70 % of it. `marks`: material places, as lengths that had been paid out when
    they passed the rim. `side_light`: brightness that a lamp adds per half width towards (x, y) [grey levels].
    """
    h, w = scene.shape
    s = np.arange(0.0, hoop.length, 0.1)
    points = hoop.point(s)
    tree = cKDTree(points)
    near = np.zeros((h, w), np.uint8)
    cv2.polylines(near, [np.rint(points).astype(np.int32)[:, None]], False, 1, int(2 * width + 9))
    near[int(hoop.rim[1]) + 1 :, : int(hoop.rim[0] + hoop.radius)] = 0  # the container hides what is below the rim
    rows, columns = np.nonzero(near)
    step = (np.arange(SAMPLES) + 0.5) / SAMPLES - 0.5
    total, cover = np.zeros(rows.size), np.zeros(rows.size)
    for dy in step:
        for dx in step:
            at = np.column_stack([columns + dx, rows + dy])
            distance, nearest = tree.query(at)
            material = paid_out - s[nearest]
            bright = np.full(rows.size, level, dtype=float)
            on = distance <= width / 2
            if pitch:
                on &= (material / pitch) % 1.0 < 0.7
            for m in marks:
                bright[np.abs(material - m) < mark_length / 2] = mark_level
            bright += (at - points[nearest]) @ np.asarray(side_light) / (width / 2)
            total += np.where(on, bright, 0.0)
            cover += on
    picture = scene.copy()
    n = SAMPLES**2
    picture[rows, columns] = scene[rows, columns] * (1 - cover / n) + total / n
    return cv2.GaussianBlur(picture, (0, 0), blur)


def seen(picture: Floats, rng: np.random.Generator, noise: float = 1.5) -> NDArray[np.uint8]:
    """As a sensor stores it."""
    return np.clip(np.rint(picture + rng.normal(0, noise, picture.shape)), 0, 255).astype(np.uint8)
