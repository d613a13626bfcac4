"""The line's axis in each frame, followed from frame to frame in a narrow band.

The last curve, moved on by its own speed, is laid over the new frame; the difference from the still scene is
read along its normals, so that the line lies nearly straight in a long narrow picture. There a ridge filter that a
broad shadow does not answer finds it, dynamic programming keeps it continuous where it is faint, and the profile
fit of `profile` places it. Frames in which it is lost are said and searched from nothing again.
"""

from dataclasses import dataclass, field
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from tracker.follow.background import Background, Light
from tracker.follow.path import Path, find_path
from tracker.follow.profile import ProfilePool, Template, bar_profile, fit_centres
from tracker.follow.smooth import local_polynomial

__all__ = ["Centreline", "LineFollower", "continuous_ridge"]

_STATION_PX = 2.0  # sections are this far apart along the line
_FLANK_PX = 4.0  # scene looked at on either side of the line
_LEAST_BAND_PX = 8.0
_SMOOTH_PX = 9.0  # half length of the local cubic that keeps the curve from roughening frame by frame
_CALM_PX = 25  # half length over which the movement carried into the next frame is smoothed: roughness would feed itself
_MOST_TURNING = 4 * np.pi  # of a line in all; a half turn over the arc, and as much again to and fro on its legs
_BORDER_PX = 1.5
_START_REACH = 0.12  # of the picture's height: the line's first seen point may be so far above the rim
_GAP_PX = 60.0  # a longer stretch without evidence ends the line


@dataclass(frozen=True, slots=True, eq=False)
class Centreline:
    """The axis of the line in one frame, from the rim to its exit.

    Attributes
    ----------
    points_px : (n, 2) float64 array
        Column and row, about a pixel apart along the line, bridged over gaps.
    seen : (n,) bool array
        False where the line was not seen and its place is bridged.
    u_px : (n,) array
        Standard uncertainty of the place across the line, without the steady part common to the clip.
    normal : (n, 2) array
        Unit normal, the tangent turned by -90 degrees in the picture.
    move_px : (n,) array
        Movement along the normal since the last frame, smoothed; zero in the first.
    brightness : (n,) array
        Frame minus scene, meaned over the inner half of the width [grey levels].
    strength : (n,) array
        Size of the difference summed across the line over its width at most [grey levels times px], unsigned.
    contrast : float
        Median size of the difference on the axis [grey levels].
    reaches_exit : bool
        Whether it runs to the border of the picture.
    """

    points_px: NDArray[np.float64]
    seen: NDArray[np.bool_]
    u_px: NDArray[np.float64]
    normal: NDArray[np.float64]
    move_px: NDArray[np.float64]
    brightness: NDArray[np.float64]
    strength: NDArray[np.float64]
    contrast: float
    reaches_exit: bool


@dataclass(slots=True, eq=False)
class LineFollower:
    """Follows one line through the frames of a clip, in order.

    Parameters
    ----------
    background : Background
    origin_px : (column, row)
        The rim in the reference frame.
    repeat_px : float or None
        Length of one repeat of the texture in the picture; None for a smooth line.
    up : (column, row) direction
        Unit vector against gravity.
    """

    background: Background
    origin_px: tuple[float, float]
    repeat_px: float | None = None
    up: tuple[float, float] = (0.0, -1.0)
    width_px: float = 0.0
    template: Template | None = None
    pool: ProfilePool | None = None
    contrast: float = 0.0
    _curve: NDArray[np.float64] | None = None
    _move: NDArray[np.float64] = field(default_factory=lambda: np.zeros(0))
    _searched: int = 0
    _next_search: int = 0

    def follow(self, index: int, gray: NDArray[np.uint8], motion: Any = None) -> Centreline | None:
        """The line in the next frame, or None where it is not found."""
        light = self.background.light(gray, motion)
        if self._curve is not None:
            curve = self._moved_on()
            curve = curve if motion is None else np.asarray(motion.apply(curve))
            line = self._step(gray, motion, light, curve, _LEAST_BAND_PX)
            if line is not None:
                return line
            self._curve = None
            self._next_search = index
        if index < self._next_search:
            return None
        return self._search(index, gray, motion, light)

    # from nothing -----------------------------------------------------------------------------------------------

    def _search(self, index: int, gray: NDArray[np.uint8], motion: Any, light: Light) -> Centreline | None:
        difference = self.background.difference(gray, motion, light=light)
        origin = np.asarray(self.origin_px) if motion is None else np.asarray(motion.apply(self.origin_px))
        path = find_path(
            difference, self.background.noise, (float(origin[0]), float(origin[1])), self.up,
            doubt=self.background.doubt(motion),
        )  # fmt: skip
        line = None
        if path is not None:
            line = self._refine(gray, motion, light, path)
        if line is None:  # searching every frame of a clip that shows no line would cost more than decoding it
            self._searched += 1
            self._next_search = index + min(2**self._searched // 2, 16)
            return None
        self._searched = 0
        return line

    def _refine(self, gray: NDArray[np.uint8], motion: Any, light: Light, path: Path) -> Centreline | None:
        if self.template is None:
            self.width_px = float(np.clip(path.width_px, 2.0, 60.0))
            self._set_template(None)
        curve = _even(_smooth(_even(path.points_px), max(_SMOOTH_PX, self.width_px)))
        self._move = np.zeros(curve.shape[0])
        self.contrast = path.contrast
        for _ in range(3):
            line = self._step(gray, motion, light, curve, _LEAST_BAND_PX, first=True)
            if line is None or self._curve is None:
                return None
            curve = self._curve if motion is None else np.asarray(motion.apply(self._curve))
        return line

    def _set_template(self, profile: NDArray[np.float64] | None) -> None:
        reach = np.ceil(self.width_px / 2 + _FLANK_PX)
        offset = np.arange(-reach, reach + 0.25, 0.5)
        shape = bar_profile(offset, self.width_px, 0.9) if profile is None else profile
        self.template = Template.from_profile(offset, shape)
        if self.pool is None or self.pool.offset_px.size != offset.size:
            self.pool = ProfilePool(offset)

    # from the last frame ----------------------------------------------------------------------------------------

    def _moved_on(self) -> NDArray[np.float64]:
        assert self._curve is not None
        return _even(self._curve + _normals(self._curve) * self._move[:, None])

    def _step(
        self,
        gray: NDArray[np.uint8],
        motion: Any,
        light: Light,
        curve: NDArray[np.float64],
        spare: float,
        first: bool = False,
    ) -> Centreline | None:
        assert self.template is not None and self.pool is not None
        h, w = gray.shape
        curve = self._lengthen(curve, (h, w))
        normal = _normals(curve)
        half = int(np.ceil(self.template.offset_px[-1] + spare))
        band, inside = self._band(gray, motion, light, curve, normal, half)
        size = np.abs(band)
        along = max(3, round(self.repeat_px or max(self.width_px, 5.0)))
        mean = np.asarray(cv2.blur(size, (1, along), borderType=cv2.BORDER_REPLICATE), dtype=np.float32)
        step = int(_STATION_PX)
        at = np.arange(0, curve.shape[0], step)
        ridge = self._ridge(mean[at])
        allowed = inside[at] & _before_folding(curve, normal, half)[at]
        place, evidence = continuous_ridge(ridge, allowed, half, self.contrast)
        centre, height, misfit = fit_centres(mean[at], -half, place, self.template)
        noise = self.background.noise
        seen = (evidence > max(0.2 * self.contrast, 2.5 * noise)) & np.isfinite(centre) & (np.abs(centre - place) < 1.5)
        span = _span(seen, curve[at], _GAP_PX)
        if span is None:
            return None
        q, seen = _robust(at, centre, seen, span)
        return self._finish(curve, normal, band, mean, at, q, seen, height, misfit, span, half, (h, w), motion, first)

    def _lengthen(self, curve: NDArray[np.float64], shape: tuple[int, int]) -> NDArray[np.float64]:
        """Longer at both ends: the rim's crossing moves, and the exit is where the picture ends."""
        extra = int(6 + 2 * self.width_px)
        k = min(12, curve.shape[0] - 1)
        before = (curve[0] - curve[k]) / max(np.hypot(*(curve[0] - curve[k])), 1e-9)
        after = (curve[-1] - curve[-1 - k]) / max(np.hypot(*(curve[-1] - curve[-1 - k])), 1e-9)
        n = np.arange(1, extra + 1)[:, None]
        long = np.concatenate([curve[0] + before * n[::-1], curve, curve[-1] + after * n])
        return long

    def _band(
        self,
        gray: NDArray[np.uint8],
        motion: Any,
        light: Light,
        curve: NDArray[np.float64],
        normal: NDArray[np.float64],
        half: int,
    ) -> tuple[NDArray[np.float32], NDArray[np.bool_]]:
        """Difference from the scene along the normals, (n, 2 half + 1), and where it lies in the picture."""
        h, w = gray.shape
        q = np.arange(-half, half + 1)
        place = curve[:, None, :] + normal[:, None, :] * q[None, :, None]
        x, y = place[..., 0], place[..., 1]
        inside = (x >= 0) & (x <= w - 1) & (y >= 0) & (y <= h - 1)
        x0, x1 = int(np.clip(x.min() - 2, 0, w - 2)), int(np.clip(x.max() + 3, 2, w))
        y0, y1 = int(np.clip(y.min() - 2, 0, h - 2)), int(np.clip(y.max() + 3, 2, h))
        patch = self.background.difference(gray, motion, (x0, y0, x1, y1), light)
        band = cv2.remap(
            patch, (x - x0).astype(np.float32), (y - y0).astype(np.float32), cv2.INTER_LINEAR,
            borderMode=cv2.BORDER_REPLICATE,
        )  # fmt: skip
        band[~inside] = 0.0
        return np.asarray(band, dtype=np.float32), inside

    def _ridge(self, mean: NDArray[np.float32]) -> NDArray[np.float32]:
        """Inside minus the brighter flank: a line stands out on both sides, the flank of a broad shadow does not."""
        inner = max(1, round(self.width_px * 0.6) | 1)
        gap = round(self.width_px / 2 + 1)
        flank = 3
        inside = cv2.blur(mean, (inner, 1), borderType=cv2.BORDER_REPLICATE)
        side = cv2.blur(mean, (flank, 1), borderType=cv2.BORDER_REPLICATE)
        padded = np.pad(side, ((0, 0), (gap + 1, gap + 1)), mode="edge")
        left, right = padded[:, : -2 * (gap + 1)], padded[:, 2 * (gap + 1) :]
        return np.asarray(inside - 0.5 * (left + right) - 0.25 * np.abs(left - right), dtype=np.float32)

    def _finish(
        self,
        curve: NDArray[np.float64],
        normal: NDArray[np.float64],
        band: NDArray[np.float32],
        mean: NDArray[np.float32],
        at: NDArray[np.intp],
        q: NDArray[np.float64],
        seen: NDArray[np.bool_],
        height: NDArray[np.float64],
        misfit: NDArray[np.float64],
        span: tuple[int, int],
        half: int,
        shape: tuple[int, int],
        motion: Any,
        first: bool,
    ) -> Centreline | None:
        assert self.template is not None and self.pool is not None
        a, b = at[span[0]], at[span[1]]
        index = np.arange(a, b + 1)
        shift = np.interp(index, at, q)
        raw = curve[index] + normal[index] * shift[:, None]
        points = _smooth(raw, _SMOOTH_PX)
        keep = self._within(points, shape, motion)
        if keep.sum() < max(20, 4 * self.width_px):
            return None
        first_kept, last_kept = np.nonzero(keep)[0][[0, -1]]
        take = slice(int(first_kept), int(last_kept) + 1)
        points, index, shift = points[take], index[take], shift[take]
        if not self._begins_at_rim(points[0], shape, motion):
            return None
        section = np.clip(np.searchsorted(at, index), 0, at.size - 1)
        seen_here = seen[section]
        if seen_here.mean() < 0.5:
            return None
        good = np.maximum(height[section], 1e-3)
        along = max(3, round(self.repeat_px or max(self.width_px, 5.0)))
        noise = self.template.precision * np.hypot(self.background.noise / np.sqrt(along), misfit[section]) / good
        u = np.where(seen_here, np.clip(noise, 0.01, 2.0), 2.0)
        middle = _gather(band, index, shift + half, int(max(1, self.width_px // 4)))
        strength = _gather(np.abs(band), index, shift + half, int(np.ceil(self.width_px / 2 + 1)))
        self.contrast = 0.8 * self.contrast + 0.2 * float(np.median(height[seen])) if not first else float(
            np.median(height[seen])
        )
        self._pool(mean, at[seen], q[seen], normal, half)
        move = np.zeros(points.shape[0])
        if not first:
            move = local_polynomial(self._predicted_move(index, curve.shape[0]) + shift, 6, 1)
        if _turning(points) > _MOST_TURNING:
            return None  # it has begun to zigzag: look again from nothing
        place = points if motion is None else np.asarray(motion.undo(points))  # kept as if the camera had stood still
        self._curve, self._move = _even_with(place, local_polynomial(move, _CALM_PX, 1))
        exits = bool(
            (points[-1, 0] < 4) | (points[-1, 0] > shape[1] - 5) | (points[-1, 1] < 4) | (points[-1, 1] > shape[0] - 5)
        )
        return Centreline(
            points_px=points, seen=seen_here, u_px=u, normal=_normals(points), move_px=move, brightness=middle,
            strength=strength, contrast=self.contrast, reaches_exit=exits,
        )  # fmt: skip

    def _predicted_move(self, index: NDArray[np.intp], size: int) -> NDArray[np.float64]:
        """Movement already put into the laid-over curve, at the given points of it."""
        extra = int(6 + 2 * self.width_px)
        if self._move.size == 0:
            return np.zeros(index.size)
        share = (index - extra) / max(size - 2 * extra - 1, 1) * (self._move.size - 1)
        return np.interp(share, np.arange(self._move.size), self._move)

    def _within(self, points: NDArray[np.float64], shape: tuple[int, int], motion: Any) -> NDArray[np.bool_]:
        """Points of the picture, after the line's last rise through the rim's level on the rising side."""
        h, w = shape
        x, y = points[:, 0], points[:, 1]
        inside = (x >= _BORDER_PX) & (x <= w - 1 - _BORDER_PX) & (y >= _BORDER_PX) & (y <= h - 1 - _BORDER_PX)
        place = points if motion is None else np.asarray(motion.undo(points))
        height = (place - np.asarray(self.origin_px)) @ np.asarray(self.up)
        top = int(np.argmax(height))
        below = np.nonzero(height[:top] < -1.0)[0]
        if below.size:
            inside[: below[-1]] = False
        return np.asarray(inside)

    def _begins_at_rim(self, point: NDArray[np.float64], shape: tuple[int, int], motion: Any) -> bool:
        """Neither below the rim's level nor far above it, where only a part of the line would be followed."""
        place = point if motion is None else np.asarray(motion.undo(point))
        height = float((place - np.asarray(self.origin_px)) @ np.asarray(self.up))
        return -10.0 <= height <= _START_REACH * shape[0]

    def _pool(
        self, mean: NDArray[np.float32], at: NDArray[np.intp], q: NDArray[np.float64], normal: NDArray[np.float64], half: int
    ) -> None:
        assert self.template is not None and self.pool is not None
        place = q[:, None] + self.template.offset_px[None, :] + half
        low = np.clip(np.floor(place).astype(np.intp), 0, mean.shape[1] - 2)
        share = place - low
        rows = at[:, None]
        profile = mean[rows, low] * (1 - share) + mean[rows, low + 1] * share
        self.pool.add(normal[at], np.asarray(profile, dtype=np.float64))


def continuous_ridge(
    ridge: NDArray[np.float32], allowed: NDArray[np.bool_], half: int, contrast: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The most continuous strong ridge down a straightened band.

    Parameters
    ----------
    ridge : (n, 2 half + 1) array
        Response per section and pixel across [grey levels].
    allowed : same shape, bool
        False outside the picture and beyond the centre of curvature.
    half : int
    contrast : float
        Response of the line itself, at which a pixel counts fully.

    Returns
    -------
    place : (n,) array
        Offset across, to a fraction of a pixel.
    evidence : (n,) array
        Response there [grey levels].

    Notes
    -----
    Dynamic programming: the response, capped at the line's own contrast so that a sparkle does not draw the path
    away, minus a price for each pixel that it steps sideways. Where every section's highest place already is
    continuous, that is the same answer and the search is not needed.
    """
    n, k = ridge.shape
    score = np.where(allowed, np.clip(ridge / max(contrast, 1e-6), -0.2, 1.0), -0.5).astype(np.float64)
    q = np.arange(-half, half + 1)
    score -= 0.004 * np.abs(q)  # of two equal ridges the one nearer to where the line was expected
    best = score.argmax(axis=1)
    clear = score[np.arange(n), best] > 0.3
    jumps = np.abs(np.diff(best)) > 2
    if (jumps & clear[1:] & clear[:-1]).any() or clear.mean() < 0.9:
        best = _programme(score)
    rows = np.arange(n)
    inner = np.clip(best, 1, k - 2)
    a, b, c = ridge[rows, inner - 1], ridge[rows, inner], ridge[rows, inner + 1]
    bend = a - 2 * b + c
    fraction = np.where(bend < -1e-6, 0.5 * (a - c) / np.where(bend < -1e-6, bend, -1.0), 0.0)
    place = inner + np.clip(fraction, -0.5, 0.5) - half
    return np.asarray(place, dtype=np.float64), np.asarray(ridge[rows, best], dtype=np.float64)


def _programme(score: NDArray[np.float64], most: int = 2, price: float = 0.08) -> NDArray[np.intp]:
    n, k = score.shape
    steps = np.arange(-most, most + 1)
    total = score[0].copy()
    came = np.zeros((n, k), dtype=np.int8)
    padded = np.full(k + 2 * most, -np.inf)
    window = np.lib.stride_tricks.sliding_window_view(padded, 2 * most + 1)
    cost = price * np.abs(steps)
    columns = np.arange(k)
    for i in range(1, n):
        padded[most : most + k] = total
        options = window - cost
        pick = options.argmax(axis=1)
        came[i] = pick
        total = options[columns, pick] + score[i]
    path = np.empty(n, dtype=np.intp)
    path[-1] = int(total.argmax())
    for i in range(n - 1, 0, -1):
        path[i - 1] = path[i] + steps[came[i, path[i]]]
    return path


def _before_folding(curve: NDArray[np.float64], normal: NDArray[np.float64], half: int) -> NDArray[np.bool_]:
    """(n, 2 half + 1): False beyond 0.8 of the radius of curvature on the hollow side, where normals cross."""
    tangent = np.gradient(curve, axis=0)
    turn = np.gradient(np.unwrap(np.arctan2(tangent[:, 1], tangent[:, 0])))
    turn = cv2.blur(turn.astype(np.float64).reshape(-1, 1), (1, 7)).ravel()
    q = np.arange(-half, half + 1)
    # normal = tangent turned by -90 degrees: a positive turn (clockwise on the screen) is hollow on the side of -normal
    return np.asarray(-q[None, :] * turn[:, None] < 0.8)


def _span(seen: NDArray[np.bool_], points: NDArray[np.float64], gap_px: float) -> tuple[int, int] | None:
    """First and last section of the longest run without a gap longer than `gap_px`."""
    index = np.nonzero(seen)[0]
    if index.size < 10:
        return None
    apart = np.hypot(*np.diff(points[index], axis=0).T)
    cuts = np.nonzero(apart > gap_px)[0]
    starts = np.concatenate([[0], cuts + 1])
    ends = np.concatenate([cuts, [index.size - 1]])
    run = int(np.argmax(ends - starts))
    return int(index[starts[run]]), int(index[ends[run]])


def _robust(
    at: NDArray[np.intp], centre: NDArray[np.float64], seen: NDArray[np.bool_], span: tuple[int, int]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Offsets with outliers and gaps bridged, and which of them were seen."""
    seen = seen.copy()
    seen[: span[0]] = False
    seen[span[1] + 1 :] = False
    filled = np.interp(at, at[seen], centre[seen])
    middle = _running_median(filled, 7)
    away = np.abs(filled - middle)
    seen &= away < max(1.0, 5 * 1.4826 * float(np.median(away[seen])))
    filled = np.interp(at, at[seen], centre[seen])
    return filled, seen


def _running_median(values: NDArray[np.float64], size: int) -> NDArray[np.float64]:
    padded = np.pad(values, size // 2, mode="edge")
    return np.asarray(np.median(np.lib.stride_tricks.sliding_window_view(padded, size), axis=1))


def _normals(curve: NDArray[np.float64]) -> NDArray[np.float64]:
    tangent = np.gradient(curve, axis=0)
    tangent = cv2.blur(tangent, (1, 5), borderType=cv2.BORDER_REPLICATE)
    tangent = tangent / np.maximum(np.hypot(tangent[:, 0], tangent[:, 1]), 1e-9)[:, None]
    return np.column_stack([tangent[:, 1], -tangent[:, 0]])


def _smooth(points: NDArray[np.float64], half_px: float) -> NDArray[np.float64]:
    """Local cubic over points a pixel apart: it takes the roughness out without shortening the bend."""
    return points if points.shape[0] <= 2 * int(half_px) + 1 else local_polynomial(points, int(half_px), 3)


def _turning(points: NDArray[np.float64]) -> float:
    """Sum of all turns along a curve [rad], of either sense, over steps that noise does not turn."""
    chord = np.diff(points[::10], axis=0)
    angle = np.unwrap(np.arctan2(chord[:, 1], chord[:, 0]))
    return float(np.abs(np.diff(angle)).sum())


def _even(points: NDArray[np.float64]) -> NDArray[np.float64]:
    return _even_with(points, np.zeros(points.shape[0]))[0]


def _even_with(
    points: NDArray[np.float64], values: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Points a pixel apart along the curve, with the values carried."""
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))])
    n = max(round(along[-1]), 2)
    s = np.linspace(0.0, along[-1], n + 1)
    even = np.column_stack([np.interp(s, along, points[:, 0]), np.interp(s, along, points[:, 1])])
    return even, np.interp(s, along, values)


def _gather(
    band: NDArray[np.float32], rows: NDArray[np.intp], centre: NDArray[np.float64], reach: int
) -> NDArray[np.float64]:
    """Mean over `2 reach + 1` pixels about a fractional place in each row."""
    at = centre[:, None] + np.arange(-reach, reach + 1)[None, :]
    low = np.clip(np.floor(at).astype(np.intp), 0, band.shape[1] - 2)
    share = at - low
    r = rows[:, None]
    return np.asarray((band[r, low] * (1 - share) + band[r, low + 1] * share).mean(axis=1), dtype=np.float64)
