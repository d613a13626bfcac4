"""The rolling shutter: where and when the rows of one frame see points that move.

A point's row decides when it is seen, and when decides in which row: t = t_frame + readout row/(rows - 1) + u is solved as a fixed
point. The motion is asked for at a few knots across the frame; between them the places SEEN are interpolated by cubics.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from sample_clips.camera import Camera

__all__ = ["Knots", "Seen", "Track", "row_shear", "seen_by", "watch"]

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]


class Knots(NamedTuple):
    """Evenly spaced times at which the motion is asked for."""

    start: float
    step: float
    number: int

    @classmethod
    def across(cls, camera: Camera, frame_s: float, step: float) -> "Knots":
        """From before the first to after the last moment of a frame, one more on each side for the cubics."""
        reach = camera.readout_s
        low = frame_s + min(0.0, reach) - camera.exposure_s / 2
        high = frame_s + max(0.0, reach) + camera.exposure_s / 2
        count = max(1, int(np.ceil((high - low) / step)))
        step = (high - low) / count
        return cls(low - step, step, count + 3)

    @property
    def times(self) -> Floats:
        return np.linspace(self.start, self.start + self.step * (self.number - 1), self.number)

    @property
    def middle(self) -> int:
        return self.number // 2

    def cubic(self, values: Floats, t: Floats) -> Floats:
        """Values (k, m, ...) at the knots, at the time t (m,) of each of the m: Lagrange's cubic through the four knots around."""
        at = np.clip((t - self.start) / self.step, 1.0, self.number - 2.0)
        first = np.clip(at.astype(np.intp) - 1, 0, self.number - 4)
        x: Floats = at - first
        weights = (
            -(x - 1) * (x - 2) * (x - 3) / 6,
            x * (x - 2) * (x - 3) / 2,
            -x * (x - 1) * (x - 3) / 2,
            x * (x - 1) * (x - 2) / 6,
        )
        each = np.arange(t.size)
        shape = (-1,) + (1,) * (values.ndim - 2)
        total = np.zeros(values.shape[1:])
        for k, weight in enumerate(weights):
            total += weight.reshape(shape) * values[first + k, each]
        return total


class Track(NamedTuple):
    """Points seen at the knots."""

    px: Floats  # (k, m, 2)
    depth: Floats  # (k, m)
    shown: Flags  # (k, m)


class Seen(NamedTuple):
    """Points at one moment of each row's exposure."""

    px: Floats  # (m, 2)
    depth: Floats  # (m,)
    shown: Flags  # (m,)
    t: Floats  # (m,)


def watch(camera: Camera, knots: Knots, points_m: Floats, shown: Flags) -> Track:
    """Project points (k, m, 3) at each knot, with the camera's shake."""
    px, depth = np.empty((*points_m.shape[:2], 2)), np.empty(points_m.shape[:2])
    for k, t in enumerate(knots.times):
        in_camera = camera.to_camera(points_m[k], t)
        px[k], depth[k] = camera.pixels(in_camera), in_camera[:, 2]
    lost = np.isnan(px[..., 0]) | np.isnan(px[..., 1])
    return Track(np.where(lost[..., None], -1e4, px), depth, shown & ~lost)


def seen_by(camera: Camera, knots: Knots, track: Track, frame_s: float, offset_s: float) -> Seen:
    """Each point where its own row sees it, `offset_s` from that row's mid-exposure."""
    t = np.full(track.px.shape[1], frame_s + offset_s + camera.readout_s / 2)
    low, high = knots.start, knots.start + knots.step * (knots.number - 1)
    for _ in range(40):  # each pass shrinks the error by the share of the scan's speed that the motion has: 1/20, seldom 1/2
        before = t
        t = np.clip(frame_s + offset_s + camera.delay(knots.cubic(track.px, t)), low, high)
        if np.abs(t - before).max(initial=0.0) < 1e-8:
            break
    nearest = np.clip(np.rint((t - knots.start) / knots.step).astype(np.intp), 0, knots.number - 1)
    each = np.arange(t.size)
    return Seen(knots.cubic(track.px, t), knots.cubic(track.depth, t), track.shown[nearest, each], t)


def row_shear(camera: Camera, knots: Knots, track: Track, seen: Seen) -> Floats:
    """How the rows' different times shear a small thing that moves as a whole, for each of the points it is followed by.

    Parts that lie e beside the point in the picture of one moment are seen e' = e + w rho (n . e') beside it, with w the speed in the
    picture, rho the time from row to row and n the direction of reading: e' = (1 - rho w n^T)^-1 e.

    Returns
    -------
    (m, 2, 2) array
        Those matrices.
    """
    step = 1e-5
    speed = (knots.cubic(track.px, seen.t + step) - knots.cubic(track.px, seen.t - step)) / (2 * step)
    rho_n = camera.delay(np.eye(2)) - camera.delay(np.zeros(2))
    return np.asarray(np.linalg.inv(np.eye(2) - speed[:, :, None] * rho_n[None, None, :]), dtype=float)
