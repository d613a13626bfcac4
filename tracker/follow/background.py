"""What the camera sees without the line: the still scene, its light and its noise.

A few frames spread over the clip are laid over each other. Where a pixel shows one brightness in all of
them, that is the scene. Where it shows several, because the line (or its shadow) stands there in part of the
frames, the one is taken that agrees best with the settled pixels around it, weighed by how often it was
seen: a plain mean or median would burn in a line that hangs still for half the clip. Lamps flicker and
exposure drifts, along the rows too when the shutter rolls: a gain, an offset and a slow profile along rows
and columns are fitted to each frame on a sparse grid, robustly, and taken out before any comparison.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import cv2
import numpy as np
from numpy.typing import NDArray

__all__ = ["Background", "Light", "Region"]

Region = tuple[int, int, int, int]
"""A patch of the picture: first column, first row, one past the last column, one past the last row."""

_MAD_TO_SIGMA = 1.4826
_QUANTISATION = 1.0 / np.sqrt(12.0)  # rounding to whole grey levels, the least noise a stored frame can have
_BLOCK_PIXELS = 200_000  # pixels handled at once when the stack is sorted, so that memory stays small
_GRID_COLUMNS, _GRID_ROWS = 40, 72  # points of the sparse grid on which the light is fitted


class _Motion(Protocol):
    """Camera movement of one frame, as `calibration.shake.Motion` gives it."""

    def undo(self, points_px: Any) -> Any: ...


@dataclass(frozen=True, slots=True, eq=False)
class Light:
    """How one frame is lit relative to the background: frame = gain * background * (1 + profile) + offset.

    Attributes
    ----------
    gain, offset : float
        Common to the frame; offset in grey levels.
    rows, columns : (h,) and (w,) float32 arrays or None
        Relative profile along rows and columns (rolling shutter under flickering lamps), None where level.
    """

    gain: float
    offset: float
    rows: NDArray[np.float32] | None = None
    columns: NDArray[np.float32] | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Background:
    """The still scene of one clip.

    Attributes
    ----------
    gray : (h, w) float32 array
        Brightness without the line, grey levels of the upright picture, in the light of the sampled frames.
    noise : float
        Robust standard deviation of one pixel of one frame about it, typical of the picture [grey levels].
    noise_by_level : (256,) float32 array
        The same by brightness: sensors are noisier in the light.
    unsettled : (h, w) bool array
        Pixels that showed several brightnesses in the sampled frames: something moved there.
    """

    gray: NDArray[np.float32]
    noise: float
    noise_by_level: NDArray[np.float32]
    unsettled: NDArray[np.bool_]

    @classmethod
    def from_frames(
        cls, frames: Sequence[NDArray[np.uint8]], motions: Sequence[_Motion | None] | None = None
    ) -> "Background":
        """Learn the scene from frames spread over the clip.

        Parameters
        ----------
        frames : sequence of (h, w) uint8 arrays
            At least three; 20 to 40 spread over the whole clip are best, so that the line has moved in between.
        motions : sequence of Motion, optional
            Camera movement of each of these frames; the first frame's system is kept when it is None.

        Raises
        ------
        ValueError
            Fewer than three frames, or frames of different size.
        """
        if len(frames) < 3:
            raise ValueError(f"Background.from_frames: expected at least 3 frames, got {len(frames)}.")
        if any(f.shape != frames[0].shape or f.ndim != 2 for f in frames):
            raise ValueError(f"Background.from_frames: frames differ in size: {sorted({f.shape for f in frames})}.")
        stack = _common_light(_common_view(frames, motions))
        gray, spread, unsettled = _settle(stack)
        noise, by_level = _noise(gray, spread, unsettled)
        return cls(gray=gray, noise=noise, noise_by_level=by_level, unsettled=unsettled)

    def light(self, gray: NDArray[np.uint8], motion: _Motion | None = None) -> Light:
        """Fit the light of one frame on a sparse grid; see `Light`."""
        h, w = self.gray.shape
        rows = np.linspace(2, h - 3, min(_GRID_ROWS, h)).astype(np.intp)
        columns = np.linspace(2, w - 3, min(_GRID_COLUMNS, w)).astype(np.intp)
        return _fit_light(gray[np.ix_(rows, columns)], self._seen_at(rows, columns, motion), rows, columns, (h, w), self.noise)

    def expected(
        self,
        shape: tuple[int, int],
        roi: Region | None = None,
        motion: _Motion | None = None,
        light: Light | None = None,
    ) -> NDArray[np.float32]:
        """What a frame of this shape would show in `roi` if there were no line, float32 grey levels."""
        x0, y0, x1, y1 = roi or (0, 0, shape[1], shape[0])
        if motion is None:
            patch = np.asarray(self.gray[y0:y1, x0:x1])
        else:
            flags = cv2.INTER_LINEAR | cv2.WARP_INVERSE_MAP
            moved = cv2.warpAffine(
                self.gray, _affine(motion, x0, y0), (x1 - x0, y1 - y0), flags=flags, borderMode=cv2.BORDER_REPLICATE
            )
            patch = np.asarray(moved, dtype=np.float32)
        if light is None:
            return np.array(patch, dtype=np.float32)
        lit = patch * np.float32(light.gain)
        if light.rows is not None:
            lit *= 1.0 + light.rows[y0:y1, None]
        if light.columns is not None:
            lit *= 1.0 + light.columns[None, x0:x1]
        lit += np.float32(light.offset)
        return np.asarray(lit, dtype=np.float32)

    def difference(
        self,
        gray: NDArray[np.uint8],
        motion: _Motion | None = None,
        roi: Region | None = None,
        light: Light | None = None,
    ) -> NDArray[np.float32]:
        """Frame minus scene, with the light's gain, offset and profile taken out.

        Parameters
        ----------
        gray : (h, w) uint8 array
            The whole frame, also when only a patch is asked for: its light is fitted over the whole of it.
        motion : Motion, optional
            Camera movement of this frame. The background is moved, never the frame, which keeps its grain.
        roi : Region, optional
            Only this patch is computed and returned.
        light : Light, optional
            From `light`, when several patches of one frame are wanted.

        Returns
        -------
        (rows, columns) float32 array
            Signed grey levels; its noise is `noise`.
        """
        light = self.light(gray, motion) if light is None else light
        x0, y0, x1, y1 = roi or (0, 0, gray.shape[1], gray.shape[0])
        h, w = gray.shape
        return gray[y0:y1, x0:x1] - self.expected((h, w), (x0, y0, x1, y1), motion, light)

    def doubt(self, motion: _Motion | None = None) -> NDArray[np.float32]:
        """What compression, and a camera movement known to a few tenths of a pixel, leave at the scene's own edges.

        Returns
        -------
        (h, w) float32 array
            Grey levels, in the reference frame's place, three pixels wide about each edge.
        """
        steep = cv2.morphologyEx(self.gray, cv2.MORPH_GRADIENT, np.ones((3, 3), np.uint8))
        wide = cv2.dilate(steep, np.ones((3, 3), np.uint8)) if motion is not None else steep
        return np.asarray((0.3 if motion is not None else 0.12) * wide, dtype=np.float32)

    def sigma(self, level: Any) -> NDArray[np.float32]:
        """Noise of pixels of the given brightness [grey levels]."""
        return np.asarray(self.noise_by_level[np.clip(np.asarray(level), 0, 255).astype(np.intp)])

    def _seen_at(
        self, rows: NDArray[np.intp], columns: NDArray[np.intp], motion: _Motion | None
    ) -> NDArray[np.float32]:
        if motion is None:
            return self.gray[np.ix_(rows, columns)]
        points = np.stack(np.meshgrid(columns, rows), axis=-1).astype(np.float64)
        place = np.asarray(motion.undo(points.reshape(-1, 2)), dtype=np.float32).reshape(points.shape)
        seen = cv2.remap(
            self.gray, place[..., 0], place[..., 1], cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE
        )
        return np.asarray(seen, dtype=np.float32)


def _affine(motion: _Motion, x0: int, y0: int) -> NDArray[np.float64]:
    """(2, 3) map from pixels of the patch at (x0, y0) to pixels of the reference frame."""
    corners = np.array([[x0, y0], [x0 + 1000.0, y0], [x0, y0 + 1000.0]])
    at = np.asarray(motion.undo(corners), dtype=np.float64)
    return np.column_stack([(at[1] - at[0]) / 1000.0, (at[2] - at[0]) / 1000.0, at[0]])


def _common_view(
    frames: Sequence[NDArray[np.uint8]], motions: Sequence[_Motion | None] | None
) -> list[NDArray[np.uint8]]:
    """All frames in the reference frame's place. `undo` gives reference places, so the inverse map is wanted here."""
    if motions is None:
        return list(frames)
    out = []
    for gray, motion in zip(frames, motions, strict=True):
        if motion is None:
            out.append(gray)
            continue
        h, w = gray.shape
        moved = cv2.warpAffine(
            gray, _affine(motion, 0, 0), (w, h), flags=cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE
        )
        out.append(np.asarray(moved, dtype=np.uint8))
    return out


def _common_light(frames: list[NDArray[np.uint8]]) -> NDArray[np.uint8]:
    """(n, h, w) stack with each frame brought to the light of the pixelwise median, in place of its own."""
    h, w = frames[0].shape
    rows = np.linspace(2, h - 3, min(_GRID_ROWS, h)).astype(np.intp)
    columns = np.linspace(2, w - 3, min(_GRID_COLUMNS, w)).astype(np.intp)
    grids = np.stack([f[np.ix_(rows, columns)] for f in frames])
    middle = np.median(grids, axis=0).astype(np.float32)
    noise = max(float(_MAD_TO_SIGMA * np.median(np.abs(grids - middle))), _QUANTISATION)
    stack = np.empty((len(frames), h, w), dtype=np.uint8)
    for i, gray in enumerate(frames):
        light = _fit_light(grids[i], middle, rows, columns, (h, w), noise)
        level = abs(light.gain - 1) < 1e-3 and abs(light.offset) < 0.1
        if level and light.rows is None and light.columns is None:
            stack[i] = gray
            continue
        flat = gray.astype(np.float32) - np.float32(light.offset)
        flat /= np.float32(light.gain)
        if light.rows is not None:
            flat /= 1.0 + light.rows[:, None]
        if light.columns is not None:
            flat /= 1.0 + light.columns[None, :]
        stack[i] = np.clip(np.rint(flat), 0, 255)
    return stack


def _fit_light(
    seen: NDArray[Any],
    scene: NDArray[np.float32],
    rows: NDArray[np.intp],
    columns: NDArray[np.intp],
    shape: tuple[int, int],
    noise: float,
) -> Light:
    """Robust gain and offset of `seen` against `scene`, then what is left along rows and columns."""
    s, b = seen.astype(np.float64), scene.astype(np.float64)
    good = (s > 3) & (s < 252) & (b > 3) & (b < 252)  # a clipped pixel does not follow the light
    if good.sum() < 50:
        return Light(1.0, 0.0)
    gain, offset = _robust_line(b[good], s[good], noise)
    off = s - (gain * b + offset)
    left = off / np.maximum(gain * b, 8.0)
    left[~good | ~_close(off, noise)] = np.nan  # a line that hangs along a column is no profile of the light
    by_row = _profile(left, 1, rows, shape[0], noise / max(float(np.median(b[good])), 8.0))
    if by_row is not None:
        left = left - np.interp(rows, np.arange(shape[0]), by_row)[:, None]
    by_column = _profile(left, 0, columns, shape[1], noise / max(float(np.median(b[good])), 8.0))
    return Light(gain, offset, by_row, by_column)


def _robust_line(x: NDArray[np.float64], y: NDArray[np.float64], noise: float) -> tuple[float, float]:
    """y = gain x + offset by iteratively trimmed least squares; a flat scene carries no gain, so gain is held near
    the ratio of the medians with a weight that any real contrast overrules."""
    gain, offset = float(np.median(y)) / max(float(np.median(x)), 1.0), 0.0
    keep = _close(y - gain * x, noise)  # from the start: on a flat wall the line alone has contrast, and would lead the fit
    for _ in range(3):
        xs, ys = x[keep], y[keep]
        mx, my = float(np.median(xs)), float(np.median(ys))
        ratio = my / max(mx, 1.0)
        held = 25.0 * xs.size  # as if every point had 5 grey levels of contrast in favour of a pure gain
        dx, dy = xs - mx, ys - my
        gain = float((dx @ dy + held * ratio) / (dx @ dx + held))
        offset = my - gain * mx
        keep = _close(y - gain * x - offset, noise)
    return gain, offset


def _close(left: NDArray[np.float64], noise: float) -> NDArray[np.bool_]:
    size = np.abs(left)
    return np.asarray(size <= max(3.0 * _MAD_TO_SIGMA * float(np.median(size)), 3.0 * noise, 1.0))


def _profile(
    left: NDArray[np.float64], axis: int, at: NDArray[np.intp], size: int, relative_noise: float
) -> NDArray[np.float32] | None:
    """Smooth relative profile along one axis, (size,) array, or None where it is not clearly there."""
    counts = np.isfinite(left).sum(axis=axis)
    usable = counts >= 8
    if usable.sum() < 8:
        return None
    ordered = np.sort(left[usable] if axis == 1 else left[:, usable].T, axis=1)  # NaN go last
    n, line = counts[usable], np.arange(int(usable.sum()))
    middle = 0.5 * (ordered[line, (n - 1) // 2] + ordered[line, n // 2])
    width = max(3, usable.sum() // 16)
    padded = np.pad(middle, width, mode="edge")
    smooth = np.convolve(padded, np.hanning(2 * width + 1) / np.hanning(2 * width + 1).sum(), mode="valid")
    scatter = 1.25 * relative_noise / np.sqrt(float(np.median(counts[usable])) * width)
    if smooth.std() < max(4.0 * scatter, 1e-3):
        return None
    return np.interp(np.arange(size), at[usable], smooth).astype(np.float32)


def _settle(stack: NDArray[np.uint8]) -> tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.bool_]]:
    """Scene, temporal spread and unsettled pixels of an (n, h, w) stack."""
    n, h, w = stack.shape
    gray = np.empty((h, w), np.float32)
    spread = np.empty((h, w), np.float32)
    extent = np.empty((h, w), np.float32)
    strip = max(1, _BLOCK_PIXELS // w)
    lower, upper = round(0.25 * (n - 1)), round(0.75 * (n - 1))
    stray = n // 30  # one sparkle in thirty is noise, not the line
    for y in range(0, h, strip):
        ordered = np.sort(stack[:, y : y + strip], axis=0)
        inner = ordered[lower : upper + 1].astype(np.float32)
        gray[y : y + strip] = inner.mean(axis=0)  # the mean of the middle half: robust, and finer than a whole level
        spread[y : y + strip] = (inner[-1] - inner[0]) / np.float32(1.349)
        extent[y : y + strip] = ordered[-1 - stray].astype(np.float32) - ordered[stray]
    noise = max(float(np.median(spread)), _QUANTISATION)
    steep = cv2.morphologyEx(gray, cv2.MORPH_GRADIENT, np.ones((3, 3), np.uint8))
    moved = extent > 8.0 * noise + 0.25 * steep  # compression makes still edges tremble by part of their height
    moved = cv2.morphologyEx(moved.astype(np.uint8), cv2.MORPH_OPEN, np.ones((2, 2), np.uint8))
    unsettled = cv2.dilate(moved, np.ones((5, 5), np.uint8)).astype(bool)
    _choose(stack, gray, unsettled, noise)
    return gray, spread, unsettled


def _choose(
    stack: NDArray[np.uint8], gray: NDArray[np.float32], unsettled: NDArray[np.bool_], noise: float
) -> None:
    """Write into `gray`, at unsettled pixels, the likeliest of the brightnesses seen there.

    Each value seen is a candidate: its score is the share of frames close to it times its probability among the
    settled pixels around, a mixture of what the row predicts, what the column predicts and what the area predicts.
    """
    rows, columns = np.nonzero(unsettled)
    predictions = _predictions(gray, ~unsettled, noise)
    n = stack.shape[0]
    near = np.float32(max(4.0 * noise, 2.0))
    for start in range(0, rows.size, _BLOCK_PIXELS // 4):
        r, c = rows[start : start + _BLOCK_PIXELS // 4], columns[start : start + _BLOCK_PIXELS // 4]
        values = stack[:, r, c].astype(np.float32)
        likely = np.full(values.shape, 1.0 / 2560.0, np.float32)  # one in ten: like nothing around it
        for mean, sd in predictions:
            m, s = mean[r, c], sd[r, c]
            likely += np.exp(-0.5 * ((values - m) / s) ** 2) / s
        best, level = np.zeros(r.size, np.float32), np.zeros(r.size, np.float32)
        for k in range(n):
            close = np.abs(values - values[k]) <= near
            count = close.sum(axis=0)
            score = count * likely[k]
            better = score > best
            best[better] = score[better]
            level[better] = ((values * close).sum(axis=0) / count)[better]
        gray[r, c] = level


def _predictions(
    gray: NDArray[np.float32], settled: NDArray[np.bool_], noise: float
) -> list[tuple[NDArray[np.float32], NDArray[np.float32]]]:
    """What the settled pixels along the row, along the column, and around predict, each as mean and spread."""
    found = [_across(gray, settled, noise)]
    turned = _across(np.ascontiguousarray(gray.T), np.ascontiguousarray(settled.T), noise)
    found.append((turned[0].T, turned[1].T))
    weight = settled.astype(np.float32)
    mean, sd = np.zeros_like(gray), np.full_like(gray, 1e3)
    for size in (127, 63, 31, 15):  # the smallest that holds enough is written last
        share = cv2.blur(weight, (size, size))
        m = cv2.blur(gray * weight, (size, size)) / np.maximum(share, 1e-6)
        var = cv2.blur(gray * gray * weight, (size, size)) / np.maximum(share, 1e-6) - m * m
        take = share * size * size >= 10
        mean[take] = m[take]
        sd[take] = np.sqrt(np.maximum(var[take], 0) + (3 * noise) ** 2)
    found.append((mean, sd))
    return found


def _across(
    gray: NDArray[np.float32], settled: NDArray[np.bool_], noise: float
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Each row's settled pixels interpolated across its unsettled ones; unsure where the two ends disagree."""
    h, w = gray.shape
    column = np.arange(w)
    left = np.maximum.accumulate(np.where(settled, column, -1), axis=1)
    right = np.minimum.accumulate(np.where(settled, column, w)[:, ::-1], axis=1)[:, ::-1]
    has_left, has_right = left >= 0, right < w
    row = np.arange(h)[:, None]
    at_left = gray[row, np.where(has_left, left, np.minimum(right, w - 1))]
    at_right = gray[row, np.where(has_right, right, np.maximum(left, 0))]
    span = np.maximum(right - left, 1)
    share = np.clip((column - left) / span, 0, 1).astype(np.float32)
    mean = at_left * (1 - share) + at_right * share
    sd = 3.0 * noise + 0.5 * np.abs(at_left - at_right) + 0.1 * np.minimum(column - left, right - column)
    sd[~(has_left | has_right)] = 1e3
    return mean.astype(np.float32), sd.astype(np.float32)


def _noise(
    gray: NDArray[np.float32], spread: NDArray[np.float32], unsettled: NDArray[np.bool_]
) -> tuple[float, NDArray[np.float32]]:
    """Typical noise and noise by level: root mean square of the settled pixels' spread, smoothed over levels."""
    still = ~unsettled
    if still.sum() < 100:
        still = np.ones_like(still)
    level = np.clip(gray[still], 0, 255).astype(np.intp)
    power = np.bincount(level, np.minimum(spread[still], 40.0) ** 2, 256)
    count = np.bincount(level, minlength=256).astype(np.float64)
    kernel = np.hanning(33)[1:-1]
    smooth = np.convolve(power, kernel, "same") / np.maximum(np.convolve(count, kernel, "same"), 1e-9)
    seen = np.convolve(count, kernel, "same") > 50
    overall = float(np.sqrt(power.sum() / count.sum() + _QUANTISATION**2))
    by_level = np.full(256, overall)
    if seen.any():
        by_level = np.interp(np.arange(256), np.nonzero(seen)[0], np.sqrt(smooth[seen] + _QUANTISATION**2))
    return overall, by_level.astype(np.float32)
