"""How the camera moved against a reference picture, from the still background.

Some forty small textured patches, spread over the picture, are found again in each frame by the inverse
compositional form of Lucas & Kanade's method (Baker & Matthews, Int. J. Comput. Vis. 56, 221 (2004)), with light
level and contrast taken out, so that flicker does not look like motion. A shift, a turn and a zoom are fitted to
their displacements, patches that do something else (the line, its shadow, a hand) being weighted down until they do
not count. The search starts from the frame measured before; where that fails, from the best match of the whole
picture, eight times smaller, by way of patches four times as wide and coarse.

Only the patches are read, not the picture: a 1080p frame costs less than a millisecond.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import cv2
import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Motion", "ShakeMeter", "moving_parts", "settle"]

Floats = NDArray[np.float64]
Gray = NDArray[np.uint8]

PATCH = 17  # side of a patch [px]
SMALLER = 8  # how much smaller the picture of the coarse step is
SMALL_REACH = 4  # how far it is searched, in its own pixels
FLOOR_PX = 0.02  # compression moves a strong patch by this much, whatever its contrast
LEAST = 8  # patches that must agree


@dataclass(frozen=True, slots=True)
class Motion:
    """Movement of the picture against the reference: p = centre + zoom R(rotation) (p_ref - centre) + (dx, dy).

    Attributes
    ----------
    dx, dy : float
        To the right and down, at the picture's centre [px].
    rotation : float
        Clockwise as seen [rad].
    u_px : float
        Standard uncertainty of a corrected coordinate at the patches' middle, from the scatter of the patches [px].
    ok : bool
        False where the background could not carry it; the motion is then zero.
    still : bool
        The motion is not larger than its own noise and was set to nothing.
    zoom : float
        1 for a phone that does not breathe or warp; noticed, and undone.
    """

    dx: float
    dy: float
    rotation: float
    u_px: float
    ok: bool
    still: bool = False
    zoom: float = 1.0
    centre: tuple[float, float] = (0.0, 0.0)
    patches: int = 0

    @property
    def zoomed(self) -> bool:
        """The scale of the picture changed: a stabiliser that warps, or focus that breathes."""
        return abs(self.zoom - 1.0) > 1e-3

    def undo(self, points_px: ArrayLike) -> Floats:
        """Where points (..., 2) of this frame lie in the reference picture [px]; NaN stays NaN."""
        points = np.asarray(points_px, dtype=float)
        if self.still or not self.ok:
            return points.copy()
        x, y = np.moveaxis(points - self.centre - [self.dx, self.dy], -1, 0)
        c, s = np.cos(self.rotation) / self.zoom, np.sin(self.rotation) / self.zoom
        return np.stack([c * x + s * y, c * y - s * x], axis=-1) + self.centre

    def apply(self, points_px: ArrayLike) -> Floats:
        """Where points (..., 2) of the reference picture lie in this frame [px]: the inverse of `undo`."""
        points = np.asarray(points_px, dtype=float)
        if self.still or not self.ok:
            return points.copy()
        x, y = np.moveaxis(points - self.centre, -1, 0)
        c, s = np.cos(self.rotation) * self.zoom, np.sin(self.rotation) * self.zoom
        return np.stack([c * x - s * y, s * x + c * y], axis=-1) + self.centre + [self.dx, self.dy]


class ShakeMeter:
    """Measures the camera's movement against one reference picture.

    Parameters
    ----------
    reference_gray : (h, w) uint8 array
    avoid_mask : (h, w) bool array, optional
        True where the background must not be trusted: where the line moves.
    patches : int
        How many patches to use at most.
    """

    def __init__(self, reference_gray: Gray, avoid_mask: NDArray[Any] | None = None, patches: int = 48) -> None:
        gray = np.ascontiguousarray(reference_gray)
        if gray.ndim != 2 or gray.dtype != np.uint8 or min(gray.shape) < 12 * PATCH:
            raise ValueError(f"reference_gray: expected (h, w) uint8, {12 * PATCH} px or more, got {gray.dtype} "
                             f"{gray.shape}.")
        self.shape = (int(gray.shape[0]), int(gray.shape[1]))
        self.centre = (0.5 * (self.shape[1] - 1), 0.5 * (self.shape[0] - 1))
        self.noise = _noise(gray)
        self._places = _choose(gray, avoid_mask, patches, self.noise).astype(np.intp)  # (n, 2), column and row
        self.ok = len(self._places) >= LEAST
        if not self.ok:
            return
        self._fine = _Patches(gray, self._places, 1, self.noise)
        reach = PATCH // 2 * 4 + 6
        inside = ((self._places > reach) & (self._places < np.array(self.shape[::-1]) - 1 - reach)).all(axis=1)
        self._wide = _Patches(gray, self._places[inside], 4, self.noise) if inside.sum() >= LEAST else None
        self._small = _smaller(gray)
        self._last = Motion(0.0, 0.0, 0.0, 0.0, True, True, 1.0, self.centre)  # where to look first
        self._usual = LEAST + 1  # patches that agree in a good frame

    def measure(self, gray: Gray) -> Motion:
        """The movement of one frame against the reference.

        Parameters
        ----------
        gray : (h, w) uint8 array
            Of the reference's shape.

        Returns
        -------
        Motion
            `ok` is false where the background has too little texture, or too few patches were found again.
        """
        if gray.shape != self.shape:
            raise ValueError(f"gray: expected the reference's shape {self.shape}, got {gray.shape}.")
        if not self.ok:
            return self._nothing()
        flat = np.ascontiguousarray(gray).ravel()
        motion = self._agree(flat, self._fine, self._last)
        jump = float(np.hypot(motion.dx - self._last.dx, motion.dy - self._last.dy))
        if motion.ok and 1.0 < jump <= 5.0:  # from here more patches are found again
            motion = self._agree(flat, self._fine, motion)
        # lost, or a chance agreement of few, or perhaps locked onto the next square of a board
        if not motion.ok or motion.patches < 0.7 * self._usual or jump > 5.0:
            guess = self._coarse(gray)
            if self._wide is not None:
                better = self._agree(flat, self._wide, guess)
                guess = better if better.ok else guess
            other = self._agree(flat, self._fine, guess)
            motion = other if other.patches > motion.patches else motion
        if motion.ok:
            self._last, self._usual = motion, max(self._usual, motion.patches)
        return motion

    def _agree(self, flat: Gray, patches: "_Patches", guess: Motion) -> Motion:
        """What the patches that are found again near a guess have in common."""
        places = patches.places.astype(float)
        shifts, alike = patches.track(flat, self.shape, guess.apply(places) - places)
        good = alike > patches.alike_enough
        if good.sum() < LEAST:
            return self._nothing()
        return self._fit(places[good], shifts[good], patches.u[good])

    def _nothing(self) -> Motion:
        return Motion(0.0, 0.0, 0.0, float("nan"), False, False, 1.0, self.centre, 0)

    def _coarse(self, gray: Gray) -> Motion:
        """A shift good to a pixel or two, from the whole picture."""
        n = SMALL_REACH
        match = cv2.matchTemplate(_smaller(gray), self._small[n:-n, n:-n], cv2.TM_CCOEFF_NORMED)
        row, column = np.unravel_index(int(match.argmax()), match.shape)
        dx = column - n + _vertex(match[row, column - 1:column + 2])
        dy = row - n + _vertex(match[row - 1:row + 2, column])
        return Motion(SMALLER * dx, SMALLER * dy, 0.0, 0.0, True, False, 1.0, self.centre)

    def _fit(self, places: Floats, shifts: Floats, u: Floats) -> Motion:
        """Robust shift, turn and zoom of displacements (n, 2) with standard uncertainties u (n, 2)."""
        x, y = (places - self.centre).T
        reach = 0.5 * max(self.shape)
        zero, one = np.zeros_like(x), np.ones_like(x)
        # to first order: shift + turn * (-y, x) + (zoom - 1) * (x, y)
        design = np.stack([np.stack([one, zero, -y / reach, x / reach], axis=1),
                           np.stack([zero, one, x / reach, y / reach], axis=1)], axis=1)  # (n, 2, 4)
        weight = 1.0 / u**2
        start = np.median(shifts, axis=0)
        solution = np.array([start[0], start[1], 0.0, 0.0])
        spread, keep, cov = 1.0, np.ones(len(x)), np.eye(4)
        for _ in range(8):
            rest = (shifts - design @ solution) / u
            size = np.sqrt((rest**2).sum(axis=1))
            spread = max(1.0, float(np.median(size)) / 1.1774)  # median of a Rayleigh of scale 1
            keep = np.clip(1 - (size / (4.5 * spread)) ** 2, 0, None) ** 2  # Tukey's biweight
            w = weight * keep[:, None]
            normal = np.einsum("nci,ncj,nc->ij", design, design, w)
            if np.linalg.cond(normal) > 1e10:
                return self._nothing()
            new = np.linalg.solve(normal, np.einsum("nci,nc,nc->i", design, shifts, w))
            cov = np.linalg.inv(normal) * spread**2
            done = np.abs(new - solution).max() < 1e-4
            solution = new
            if done:
                break
        used = int((keep > 0.1).sum())
        if used < max(LEAST, 0.3 * len(x)):
            return self._nothing()
        u_px = float(np.sqrt(0.5 * np.trace(cov[:2, :2])))
        chi2 = float(solution @ np.linalg.solve(cov, solution))
        largest = float(np.abs(solution).sum())
        if chi2 < 18.5 or largest < 0.02:  # the 0.1 % point of chi squared, four degrees of freedom
            return Motion(0.0, 0.0, 0.0, u_px, True, True, 1.0, self.centre, used)
        # The linear terms are cos and sin of the turn, times the zoom.
        s, c = solution[2] / reach, 1.0 + solution[3] / reach
        return Motion(float(solution[0]), float(solution[1]), float(np.arctan2(s, c)), u_px, True, False,
                      float(np.hypot(s, c)), self.centre, used)


class _Patches:
    """Templates of the reference around chosen places, sampled every `stride` pixels from means over the stride."""

    def __init__(self, gray: Gray, places: NDArray[np.intp], stride: int, noise: float) -> None:
        self.places, self.stride = places, stride
        half = PATCH // 2
        bell = np.exp(-0.5 * (np.arange(-half, half + 1) / (0.5 * half)) ** 2)
        weight = np.outer(bell, bell)
        self._weight = np.asarray(weight / weight.sum(), dtype=np.float32)
        steps = np.arange(-(half + 1) * stride - stride // 2, (half + 2) * stride - stride // 2 + (stride == 1))
        wide = _sampled(gray.ravel(), gray.shape[1], places, steps[: (PATCH + 2) * stride], stride)
        template, contrast = _evened(wide[:, 1:-1, 1:-1], self._weight)
        slope_x = (wide[:, 1:-1, 2:] - wide[:, 1:-1, :-2]) / (2 * contrast)
        slope_y = (wide[:, 2:, 1:-1] - wide[:, :-2, 1:-1]) / (2 * contrast)
        slopes = np.stack([slope_x, slope_y], axis=1)  # (n, 2, s, s)
        normal = np.einsum("nisr,njsr,sr->nij", slopes, slopes, self._weight)
        normal = normal + 1e-6 * np.trace(normal, axis1=1, axis2=2)[:, None, None] * np.eye(2)
        steer = np.linalg.solve(normal, (slopes * self._weight).reshape(len(places), 2, -1))
        self._template = template.reshape(len(places), -1)
        self._steer = (stride * steer).astype(np.float32)  # (n, 2, s*s), evened difference to displacement [px]
        # (n, 2) [px]: noise of both pictures through the very same weights
        noise_px = np.sqrt(2.0) * noise / stride / contrast.reshape(-1, 1) * stride * np.sqrt((steer**2).sum(axis=2))
        self.u = np.hypot(noise_px, FLOOR_PX * stride)
        # noise alone makes a picture of the very same patch this much unlike it; half as much again is another thing
        self.alike_enough = 0.92 / (1.0 + (noise / stride / contrast.ravel()) ** 2)
        # what a frame is read at: one sample more than the template where it is interpolated
        self._steps = steps[stride: (PATCH + 1) * stride + (stride == 1)]

    def track(self, flat: Gray, shape: tuple[int, int], start: Floats) -> tuple[Floats, Floats]:
        """Displacement (n, 2) of each patch, searched from `start` (n, 2), and how alike it is (correlation)."""
        height, width = shape
        margin = -int(self._steps[0]) + 2
        low, high = margin - self.places, np.array([width, height]) - 1 - margin - self.places
        shifts = np.clip(start, low, high)
        for _ in range(5):
            if self.stride == 1:
                whole = np.floor(shifts).astype(np.intp)
                a, b = (shifts - whole).astype(np.float32).T[:, :, None, None]
                raw = _sampled(flat, width, self.places + whole, self._steps, 1)
                rows = raw[:, :-1] + b * (raw[:, 1:] - raw[:, :-1])
                seen = rows[:, :, :-1] + a * (rows[:, :, 1:] - rows[:, :, :-1])
            else:  # a coarse look needs no fraction of a pixel
                whole = np.rint(shifts).astype(np.intp)
                seen = _sampled(flat, width, self.places + whole, self._steps, self.stride)
                shifts = whole.astype(float)
            even, _ = _evened(seen, self._weight)
            even = even.reshape(len(even), -1)
            step = np.matmul(self._steer, (even - self._template)[..., None])[..., 0]
            shifts = np.clip(shifts - np.clip(step, -2.0 * self.stride, 2.0 * self.stride), low, high)
            if np.abs(step).max() < 0.003 * self.stride:
                break
        alike = (even * self._template) @ self._weight.ravel()
        alike[np.abs(shifts - start).max(axis=1) > 5.0 * self.stride] = 0.0
        return shifts, alike


def _sampled(flat: Gray, width: int, places: NDArray[np.intp], steps: NDArray[np.intp],
             stride: int) -> NDArray[np.float32]:
    """(n, s, s) grey levels at `steps` about each place, averaged over blocks of `stride`."""
    offsets = steps[:, None] * width + steps[None, :]
    at = places[:, 1] * width + places[:, 0]
    raw = flat.take(at[:, None, None] + offsets).astype(np.float32)
    if stride == 1:
        return raw
    side = len(steps) // stride
    return np.asarray(raw.reshape(len(places), side, stride, side, stride).mean(axis=(2, 4)), dtype=np.float32)


def settle(motions: Iterable[Motion]) -> tuple[Motion, ...]:
    """Take a whole clip's motions together: a camera that stood still gets no correction at all.

    Where the motions over a clip are no larger than three times their noise, or below 0.05 px RMS, each is set to
    `still`, so that correcting does not make the measurement noisier.
    """
    every = tuple(motions)
    known = [motion for motion in every if motion.ok]
    if not known:
        return every
    size = np.sqrt(np.mean([motion.dx**2 + motion.dy**2 + (300.0 * motion.rotation) ** 2 for motion in known]))
    noise = np.sqrt(np.mean([motion.u_px**2 for motion in known]))
    if size > max(3.0 * noise, 0.05):
        return every
    return tuple(replace(motion, dx=0.0, dy=0.0, rotation=0.0, zoom=1.0, still=True) if motion.ok else motion
                 for motion in every)


def _noise(gray: Gray) -> float:
    """Noise of a picture in grey levels: median of what a 3 x 3 second difference leaves (Immerkaer 1996)."""
    part = gray[::2].astype(np.float32) if gray.size > 1_000_000 else gray.astype(np.float32)
    second = cv2.filter2D(part, cv2.CV_32F, np.array([[1, -2, 1], [-2, 4, -2], [1, -2, 1]], dtype=np.float32))
    return max(float(np.median(np.abs(second))) / (0.6745 * 6.0), 1.0)  # compression hides noise, not error


def _evened(patches: NDArray[np.float32], weight: NDArray[np.float32]) -> tuple[NDArray[np.float32], Any]:
    """Patches (n, s, s) without their mean level and contrast, and that contrast."""
    n = len(patches)
    flat = patches.reshape(n, -1)
    w = weight.ravel()
    level = flat @ w
    centred = flat - level[:, None]
    contrast = np.sqrt(np.maximum((centred * centred) @ w, 1e-3))
    even = np.asarray(centred / contrast[:, None], dtype=np.float32).reshape(patches.shape)
    return even, contrast[:, None, None]


def _choose(gray: Gray, avoid: NDArray[Any] | None, wanted: int, noise: float) -> NDArray[np.int_]:
    """Corners (n, 2) that fix both directions, spread over the picture."""
    height, width = gray.shape
    margin = PATCH + 12
    allowed = np.zeros((height, width), dtype=np.uint8)
    allowed[margin:-margin, margin:-margin] = 255
    if avoid is not None:
        grown = cv2.dilate(np.asarray(avoid, dtype=np.uint8), np.ones((PATCH + 8, PATCH + 8), dtype=np.uint8))
        allowed[grown > 0] = 0
    smooth = np.asarray(cv2.GaussianBlur(gray, (0, 0), 1.0), dtype=np.uint8)
    strength = cv2.cornerMinEigenVal(smooth, 9, ksize=3)
    strength[allowed == 0] = 0
    floor = 6.0 * float(np.median(strength[allowed > 0])) if (allowed > 0).any() else 0.0
    columns, rows = (8, 6) if width > height else (6, 8)
    chosen: list[tuple[int, float, int, int]] = []
    for rank in range(3):  # the best of every cell first, so that the patches span the picture
        for i in range(rows):
            for j in range(columns):
                top, left = i * height // rows, j * width // columns
                cell = strength[top:(i + 1) * height // rows, left:(j + 1) * width // columns]
                row, column = np.unravel_index(int(cell.argmax()), cell.shape)
                if (value := float(cell[row, column])) <= max(floor, 1e-9):
                    continue
                row, column = top + int(row), left + int(column)
                if _fixes(smooth, row, column, noise):
                    chosen.append((rank, -value, row, column))
                strength[max(0, row - PATCH):row + PATCH + 1, max(0, column - PATCH):column + PATCH + 1] = 0
    chosen.sort()
    return np.array([(column, row) for _, _, row, column in chosen[:wanted]], dtype=int).reshape(-1, 2)


def _fixes(smooth: Gray, row: int, column: int, noise: float) -> bool:
    """Does the patch fix both directions against the noise, to a quarter of a pixel at worst?"""
    half = PATCH // 2
    patch = smooth[row - half - 1:row + half + 2, column - half - 1:column + half + 2].astype(float)
    gx = 0.5 * (patch[1:-1, 2:] - patch[1:-1, :-2])
    gy = 0.5 * (patch[2:, 1:-1] - patch[:-2, 1:-1])
    normal = np.array([[(gx * gx).sum(), (gx * gy).sum()], [(gx * gy).sum(), (gy * gy).sum()]])
    weakest = float(np.linalg.eigvalsh(normal)[0])
    return weakest > (2.0 * noise / 0.25) ** 2


def moving_parts(frames: Sequence[Gray], reach_px: int = 24) -> NDArray[np.bool_]:
    """Where something moves that a moving camera does not explain: no place for the patches of a `ShakeMeter`.

    A hung line that falls carries more texture than a plain wall, and patches on it would agree on its fall. What
    camera movement does to a pixel is to bring one from its neighbourhood: a value that the neighbourhood did not have
    has come from elsewhere, and one that the neighbourhood no longer has has gone.

    Parameters
    ----------
    frames : sequence of (h, w) uint8 arrays
        Spread over the clip; the first is the reference.
    reach_px : int
        How far the camera may have moved the picture.

    Returns
    -------
    (h, w) bool array
        True where the background must not be trusted, with a margin of a patch.
    """
    height, width = frames[0].shape
    size = (width // 2, height // 2)
    kernel = np.ones((2 * (reach_px // 2) + 1,) * 2, np.uint8)
    first = cv2.resize(frames[0], size, interpolation=cv2.INTER_AREA).astype(np.float32)
    low, high = cv2.erode(first, kernel), cv2.dilate(first, kernel)
    limit = max(12.0, 6.0 * _noise(np.ascontiguousarray(frames[0])))
    moved = np.zeros(first.shape, dtype=bool)
    for frame in frames[1:]:
        here = cv2.resize(frame, size, interpolation=cv2.INTER_AREA).astype(np.float32)
        here *= float(np.median(first)) / max(float(np.median(here)), 1.0)  # flicker and exposure
        moved |= (here > high + limit) | (here < low - limit)
        moved |= (first > cv2.dilate(here, kernel) + limit) | (first < cv2.erode(here, kernel) - limit)
    margin = np.ones((2 * PATCH - 1,) * 2, np.uint8)
    whole = cv2.resize(moved.astype(np.uint8), (width, height), interpolation=cv2.INTER_NEAREST)
    return np.asarray(cv2.dilate(whole, margin), dtype=bool)


def _smaller(gray: Gray) -> NDArray[np.float32]:
    height, width = gray.shape
    small = cv2.resize(gray, (width // SMALLER, height // SMALLER), interpolation=cv2.INTER_AREA)
    return small.astype(np.float32)


def _vertex(three: NDArray[Any]) -> float:
    """Where between -0.5 and 0.5 the parabola through three neighbours has its top; 0 at a border."""
    if len(three) < 3:
        return 0.0
    before, top, after = (float(v) for v in three)
    bend = before - 2 * top + after
    return float(np.clip(0.5 * (before - after) / bend, -0.5, 0.5)) if bend < 0 else 0.0
