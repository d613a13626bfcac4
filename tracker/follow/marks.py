"""Marks put on the line by hand: found in each frame as places unlike the line around them, then told apart from
whatever does not move with the line, and followed through the clip.

Along the line the brightness of its middle is averaged over one repeat of the texture. A mark is where that leaves
the running median of the line by far more than the line itself varies. How far all of them have moved together
from frame to frame is voted for by pairs of them, under a bound on how fast a speed can change; what stands still
in the picture, an edge of the board seen past the line for example, has no vote.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.signal import find_peaks

__all__ = ["MarkSight", "MarkTrack", "follow_marks", "see_marks"]

Floats = NDArray[np.float64]

_COARSE = 4  # px: the running median is taken on every fourth point
_STANDS_OUT = 6.0  # robust standard deviations of the line's own variation
_MOST_PER_FRAME = 16
_STILL_FRAMES = 6
_MOST_ACCELERATION = 100.0  # m/s^2: ten times free fall; a snag's stop is faster, and is then a gap
_STEP_M = 2e-4  # of the grid of displacements


@dataclass(frozen=True, slots=True, eq=False)
class MarkSight:
    """One place in one frame that may be a mark.

    Attributes
    ----------
    frame : int
    at : float
        Fractional index among the points of that frame's axis.
    place_px : (2,) array
    sigma_m : float
        Length along the line from the rim [m].
    t_s : float
        True time at which that place was seen.
    height : float
        How much it stands out [grey levels], signed.
    u_m : float
        Standard uncertainty of `sigma_m` from its own noise.
    """

    frame: int
    at: float
    place_px: Floats
    sigma_m: float
    t_s: float
    height: float
    u_m: float


@dataclass(frozen=True, slots=True, eq=False)
class MarkTrack:
    """One mark through the frames that show it."""

    sights: tuple[MarkSight, ...]


def see_marks(brightness: Floats, seen: NDArray[np.bool_], average_px: float, window_px: float) -> list[tuple[float, float, float]]:
    """Places along one frame's line that stand out.

    Parameters
    ----------
    brightness : (n,) array
        Brightness of the middle of the line, about a pixel apart [grey levels].
    seen : (n,) bool array
    average_px : float
        Length over which the texture is averaged away.
    window_px : float
        Length of the running median, several marks' lengths and less than twice their spacing.

    Returns
    -------
    list of (index, height, length)
        Fractional index, signed height above the line around [grey levels], and length at half height [px].
    """
    n = brightness.size
    size = max(3, round(average_px))
    if n < 6 * size:
        return []
    kernel = np.convolve(np.ones(size) / size, np.ones(size) / size)  # twice: what beads leave after once is gone
    smooth = np.convolve(np.pad(brightness, kernel.size // 2, mode="edge"), kernel, mode="valid")[:n]
    coarse = smooth[::_COARSE]
    reach = max(3, int(window_px / _COARSE) // 2)
    padded = np.pad(coarse, reach, mode="reflect" if coarse.size > reach else "edge")
    window = np.lib.stride_tricks.sliding_window_view(padded, 2 * reach + 1)
    middle = np.interp(np.arange(n), np.arange(coarse.size) * _COARSE, np.median(window, axis=1))
    out = np.where(seen, smooth - middle, 0.0)
    scatter = 1.4826 * float(np.median(np.abs(out[seen]))) if seen.any() else 0.0
    floor = max(_STANDS_OUT * scatter, 6.0)
    found = []
    for sign in (1.0, -1.0):
        peaks, facts = find_peaks(sign * out, height=floor, distance=max(size, 4), prominence=0.6 * floor)
        for peak, height in zip(peaks, facts["peak_heights"], strict=True):
            found.append(_place(sign * out, int(peak), float(height), sign))
    found.sort(key=lambda f: -abs(f[1]))
    apart: list[tuple[float, float, float]] = []
    for f in found:  # two peaks of one mark share their half heights
        if all(abs(f[0] - g[0]) > 0.5 * (f[2] + g[2]) for g in apart):
            apart.append(f)
    return apart[:_MOST_PER_FRAME]


def _place(out: Floats, peak: int, height: float, sign: float) -> tuple[float, float, float]:
    """Middle between the half heights, which a sparkle inside the mark does not move as it moves a centroid."""
    left = peak
    while left > 0 and out[left - 1] > height / 2:
        left -= 1
    right = peak
    while right < out.size - 1 and out[right + 1] > height / 2:
        right += 1

    def edge(inner: int, outer: int) -> float:
        if not 0 <= outer < out.size:
            return float(inner)
        fall = out[inner] - out[outer]
        return inner + (outer - inner) * float(np.clip((out[inner] - height / 2) / max(fall, 1e-9), 0, 1))

    low, high = edge(left, left - 1), edge(right, right + 1)
    return 0.5 * (low + high), sign * height, high - low


def follow_marks(sights: list[list[MarkSight]], frame_s: Floats, spacing_m: float | None, most_speed: float = 25.0) -> list[MarkTrack]:
    """Join sights of a clip into marks that move with the line.

    Parameters
    ----------
    sights : list of lists
        Per frame.
    frame_s : (n,) array
        True time of the frames [s].
    spacing_m : float or None
        Spacing of the marks; displacements between frames are looked for up to nine tenths of it.
    most_speed : float
        And up to this speed [m/s].

    Returns
    -------
    list of MarkTrack
        Each with at least three sights; empty where nothing moves along the line.
    """
    moving = _without_still(sights)
    moving = _alike(moving)
    if sum(map(len, moving)) < 4:
        return []
    steps = _displacements(moving, frame_s, spacing_m, most_speed)
    return _chains(moving, steps, spacing_m)


def _without_still(sights: list[list[MarkSight]]) -> list[list[MarkSight]]:
    """Without what stays within two pixels of the picture for several frames."""
    kept = []
    for k, here in enumerate(sights):
        keep = []
        for s in here:
            still = 0
            for j in list(range(k - _STILL_FRAMES, k)) + list(range(k + 1, k + _STILL_FRAMES + 1)):
                if 0 <= j < len(sights) and any(np.hypot(*(o.place_px - s.place_px)) < 1.5 for o in sights[j]):
                    still += 1
            if still < _STILL_FRAMES:
                keep.append(s)
        kept.append(keep)
    if sum(map(len, kept)) < 0.2 * sum(map(len, sights)):  # the line itself stands still
        return sights
    return kept


def _alike(sights: list[list[MarkSight]]) -> list[list[MarkSight]]:
    """Of the two signs, marks have the one that stands out more."""
    heights = np.array([s.height for here in sights for s in here])
    if heights.size == 0:
        return sights
    positive, negative = heights[heights > 0], -heights[heights < 0]
    sign = 1.0 if positive.sum() >= negative.sum() else -1.0
    typical = float(np.percentile(positive if sign > 0 else negative, 75))
    return [[s for s in here if s.height * sign > 0.25 * typical] for here in sights]


def _displacements(sights: list[list[MarkSight]], frame_s: Floats, spacing_m: float | None, most_speed: float) -> Floats:
    """(n - 1,) common displacement between neighbouring frames [m], by dynamic programming over a grid of them."""
    period = float(np.median(np.diff(frame_s)))
    most = most_speed * period
    if spacing_m is not None:
        most = min(most, 0.9 * spacing_m)
    grid = np.arange(-4 * _STEP_M, most + _STEP_M, _STEP_M)
    width = max(2 * _STEP_M, 4e-4)
    n = len(sights)
    score = np.zeros((n - 1, grid.size))
    for k in range(n - 1):
        for a in sights[k]:
            for b in sights[k + 1]:
                d = b.sigma_m - a.sigma_m
                if grid[0] - width <= d <= grid[-1] + width:
                    near = slice(max(int((d - grid[0]) / _STEP_M) - 8, 0), int((d - grid[0]) / _STEP_M) + 10)
                    score[k, near] += np.exp(-0.5 * ((grid[near] - d) / width) ** 2)
    reach = max(2, int(np.ceil((_MOST_ACCELERATION * period**2 + 3e-4) / _STEP_M)))
    return grid[_smoothest(score, reach, 0.3 / reach)]


def _smoothest(score: Floats, reach: int, price: float) -> NDArray[np.intp]:
    n, m = score.shape
    steps = np.arange(-reach, reach + 1)
    total = score[0].copy()
    came = np.zeros((n, m), np.int32)
    padded = np.full(m + 2 * reach, -np.inf)
    window = np.lib.stride_tricks.sliding_window_view(padded, 2 * reach + 1)
    cost = price * np.abs(steps)
    column = np.arange(m)
    for k in range(1, n):
        padded[reach : reach + m] = total
        options = window - cost
        came[k] = options.argmax(axis=1)
        total = options[column, came[k]] + score[k]
    path = np.empty(n, np.intp)
    path[-1] = int(total.argmax())
    for k in range(n - 1, 0, -1):
        path[k - 1] = path[k] + steps[came[k, path[k]]]
    return path


def _chains(sights: list[list[MarkSight]], steps: Floats, spacing_m: float | None) -> list[MarkTrack]:
    """Sights joined where the common displacement takes one frame's to the next's, over short gaps too."""
    tolerance = 2.5e-3 if spacing_m is None else min(2.5e-3, 0.1 * spacing_m)
    travelled = np.concatenate([[0.0], np.cumsum(steps)])
    open_: list[list[MarkSight]] = []
    done: list[list[MarkSight]] = []
    for k, here in enumerate(sights):
        free = list(here)
        still_open: list[list[MarkSight]] = []
        for chain in open_:
            last = chain[-1]
            expected = last.sigma_m + travelled[k] - travelled[last.frame]
            if free:
                best = min(free, key=lambda s: abs(s.sigma_m - expected))
                if abs(best.sigma_m - expected) < tolerance:
                    chain.append(best)
                    free.remove(best)
            (still_open if k - chain[-1].frame < 12 else done).append(chain)
        open_ = still_open + [[s] for s in free]
    chains = [c for c in done + open_ if len(c) >= 3 and c[-1].sigma_m - c[0].sigma_m > 1e-3]
    return [MarkTrack(tuple(c)) for c in sorted(chains, key=lambda c: c[0].frame)]
