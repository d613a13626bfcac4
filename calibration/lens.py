"""A camera's lens: focal length, principal point and distortion, with their covariance.

The model is Brown & Conrady's as OpenCV writes it: a point at (x, y) = (X/Z, Y/Z) is seen at

    x' = x (1 + k1 r^2 + k2 r^4 + k3 r^6) + 2 p1 x y + p2 (r^2 + 2 x^2),   column = fx x' + cx

and likewise for y (D. C. Brown, Photogrammetric Engineering 32, 444 (1966)). `bend` applies it, `unbend` takes it
out by Newton's method with the exact derivative, which converges to rounding where the model can be inverted.

Where no lens file is given, `LensPrior` says what may be expected of a phone: the size of its figures is ours
(an ordinary phone lens left uncorrected moves an acceleration by 0.5 to 0.7 %), not from a publication.
"""

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import ArrayLike, NDArray

from calibration.board import BoardFind
from calibration.notice import BadInput, CannotMeasure, Notice

__all__ = ["Lens", "LensCalibration", "LensPrior", "bend", "calibrate_lens", "unbend"]

Floats = NDArray[np.float64]
LENS_NAMES = ("fx", "fy", "cx", "cy", "k1", "k2", "p1", "p2", "k3")


@dataclass(frozen=True, slots=True)
class LensPrior:
    """What is expected of a phone's lens of which nothing is known: standard uncertainties about zero.

    Radial terms are normalised by the focal length. Cameras whose makers correct distortion stay below a tenth of
    this; wide-angle lenses exceed it, and need a lens file.
    """

    u_k1: float = 0.05
    u_k2: float = 0.10
    u_p: float = 3e-4  # decentring: each of p1 and p2
    u_centre: float = 0.01  # principal point from the middle of the picture, per long side
    focal: tuple[float, float] = (0.5, 2.5)  # range of the focal length, per long side

    @property
    def log_focal(self) -> tuple[float, float]:
        """Middle and standard deviation of ln(focal length / long side), rectangular over its range."""
        low, high = np.log(self.focal)
        return float(0.5 * (low + high)), float((high - low) / np.sqrt(12.0))


@dataclass(frozen=True, slots=True, eq=False)
class Lens:
    """A calibrated lens, for pictures of one size.

    Attributes
    ----------
    fx, fy, cx, cy : float
        Focal lengths and principal point [px], upright picture, centre of the top-left pixel (0, 0).
    k : (5,) array
        k1, k2, p1, p2, k3.
    cov : (9, 9) array
        Covariance of fx, fy, cx, cy, k1, k2, p1, p2, k3.
    size : (int, int)
        Width and height of the picture [px].
    """

    fx: float
    fy: float
    cx: float
    cy: float
    k: Floats
    cov: Floats
    size: tuple[int, int]

    def __post_init__(self) -> None:
        for name, shape in (("k", (5,)), ("cov", (9, 9))):
            value = np.array(getattr(self, name), dtype=float)
            if value.shape != shape or not np.isfinite(value).all():
                raise BadInput(f"The lens's {name} is not {shape} finite numbers but has shape {value.shape}.",
                               "Make the lens file again with linefall lens.")
            value.flags.writeable = False
            object.__setattr__(self, name, value)
        if not (self.fx > 0 and self.fy > 0):
            raise BadInput(f"The lens's focal lengths are {self.fx} and {self.fy} px.",
                           "Make the lens file again with linefall lens.")
        scale = np.sqrt(np.diag(self.cov)).clip(1e-300)
        if np.linalg.eigvalsh(self.cov / np.outer(scale, scale)).min() < -1e-6:
            raise BadInput("The lens's covariance is not a covariance: it has a negative eigenvalue.",
                           "Make the lens file again with linefall lens.")

    @property
    def values(self) -> Floats:
        """(9,) fx, fy, cx, cy, k1, k2, p1, p2, k3."""
        return np.array([self.fx, self.fy, self.cx, self.cy, *self.k])

    @property
    def id(self) -> str:
        """Short hash of the lens: two runs with it share its errors."""
        return hashlib.sha256(np.r_[self.values, self.cov.ravel(), self.size].astype("<f8").tobytes()).hexdigest()[:12]

    def rays(self, points_px: ArrayLike) -> Floats:
        """Undistorted (X/Z, Y/Z) of pixels, shape (..., 2); NaN where not given or not to be inverted."""
        points = np.asarray(points_px, dtype=float)
        return unbend((points - [self.cx, self.cy]) / [self.fx, self.fy], self.k)

    def pixels(self, rays: ArrayLike) -> Floats:
        """Pixels of (X/Z, Y/Z), shape (..., 2)."""
        return bend(np.asarray(rays, dtype=float), self.k) * [self.fx, self.fy] + [self.cx, self.cy]

    def undistort(self, points_px: ArrayLike) -> Floats:
        """Where a lens without distortion would have shown the pixels (..., 2)."""
        return self.rays(points_px) * [self.fx, self.fy] + [self.cx, self.cy]

    def distort(self, points_px: ArrayLike) -> Floats:
        """Where this lens shows the pixels (..., 2) of a lens without distortion."""
        return self.pixels((np.asarray(points_px, dtype=float) - [self.cx, self.cy]) / [self.fx, self.fy])

    def resized(self, size: tuple[int, int]) -> "Lens":
        """The same lens for a picture of another size but the same shape.

        Raises
        ------
        BadInput
            The shape differs: the picture is then cropped, which no lens file of another mode can know.
        """
        width, height = size
        factor = width / self.size[0]
        if abs(height / self.size[1] / factor - 1) > 0.005:
            raise BadInput(f"The lens file is for pictures of {self.size[0]} x {self.size[1]} px, the clip has "
                           f"{width} x {height}.", "Calibrate the lens in the mode in which the runs are filmed.")
        if factor == 1.0:
            return self
        scale = np.array([factor] * 4 + [1.0] * 5)
        centre = (np.array([self.cx, self.cy]) + 0.5) * factor - 0.5
        return Lens(self.fx * factor, self.fy * factor, float(centre[0]), float(centre[1]), self.k,
                    self.cov * np.outer(scale, scale), size)


@dataclass(frozen=True, slots=True)
class LensCalibration:
    """A lens as calibrated from views of a board."""

    lens: Lens
    residual_px: float  # RMS of one coordinate over the views used
    views: tuple[int, ...]  # indices of the views used
    view_rms_px: tuple[float, ...]  # of all views
    notices: tuple[Notice, ...] = ()


def bend(rays: ArrayLike, k: ArrayLike) -> Floats:
    """Apply distortion to (X/Z, Y/Z), shape (..., 2), with k = (k1, k2, p1, p2, k3)."""
    x, y = np.moveaxis(np.asarray(rays, dtype=float), -1, 0)
    k1, k2, p1, p2, k3 = np.asarray(k, dtype=float)
    r2 = x * x + y * y
    radial = 1.0 + r2 * (k1 + r2 * (k2 + r2 * k3))
    return np.stack([x * radial + 2 * p1 * x * y + p2 * (r2 + 2 * x * x),
                     y * radial + p1 * (r2 + 2 * y * y) + 2 * p2 * x * y], axis=-1)


def unbend(seen: ArrayLike, k: ArrayLike) -> Floats:
    """Take distortion out of normalised points (..., 2): the inverse of `bend`.

    Returns NaN where the point is NaN, or where the model cannot be inverted (far outside the picture that a lens
    was calibrated on, where its polynomial turns back).
    """
    points = np.asarray(seen, dtype=float)
    target = points.reshape(-1, 2).T
    k1, k2, p1, p2, k3 = (float(v) for v in np.asarray(k, dtype=float))
    if not (k1 or k2 or p1 or p2 or k3):
        return points.copy()
    x, y = target.copy()
    det = np.ones_like(x)
    with np.errstate(all="ignore"):
        for _ in range(20):
            r2 = x * x + y * y
            radial = 1.0 + r2 * (k1 + r2 * (k2 + r2 * k3))
            slope = 2.0 * (k1 + r2 * (2.0 * k2 + r2 * 3.0 * k3))  # d radial / d r2, times two
            xy = x * y
            miss_x = x * radial + 2 * p1 * xy + p2 * (r2 + 2 * x * x) - target[0]
            miss_y = y * radial + p1 * (r2 + 2 * y * y) + 2 * p2 * xy - target[1]
            xx = radial + slope * x * x + 2 * p1 * y + 6 * p2 * x
            yy = radial + slope * y * y + 6 * p1 * y + 2 * p2 * x
            cross = slope * xy + 2 * (p1 * x + p2 * y)
            det = xx * yy - cross * cross
            step_x = (yy * miss_x - cross * miss_y) / det
            step_y = (xx * miss_y - cross * miss_x) / det
            x -= step_x
            y -= step_y
            worst = max(np.nanmax(np.abs(step_x), initial=0.0), np.nanmax(np.abs(step_y), initial=0.0))
            if not worst > 1e-13:
                break
        rest = np.hypot(step_x, step_y)
        lost = ~((det > 0) & (rest < 1e-9))
    x[lost] = np.nan
    y[lost] = np.nan
    return np.stack([x, y], axis=-1).reshape(points.shape)


def calibrate_lens(finds: Sequence[BoardFind], size: tuple[int, int]) -> LensCalibration:
    """Calibrate a lens from many views of one flat board.

    Parameters
    ----------
    finds : sequence of BoardFind
        One per view; six or more, tilted and spread over the picture.
    size : (int, int)
        Width and height of the picture [px].

    Returns
    -------
    LensCalibration

    Raises
    ------
    CannotMeasure
        Too few views, or views that do not fix the lens.

    Notes
    -----
    Z. Zhang, IEEE PAMI 22, 1330 (2000), by `cv2.calibrateCamera`. A view whose residual is more than 2.5 times the
    median is left out and the rest fitted again. The covariance is that of least squares, widened where the views
    disagree by more than their corners do (jackknife over views): finders err alike over a whole view.
    """
    if len(finds) < 6:
        raise CannotMeasure(f"The board was found in {len(finds)} views; a lens needs six or more, better fifteen.",
                            "Film the board tilted to all sides and in every corner of the picture.", "lens-few-views")
    used = list(range(len(finds)))
    every: list[float] = []
    for _ in range(3):
        fit = _fit_views([finds[n] for n in used], size)
        rms = np.array(fit["view_rms"])
        if not every:
            every = [float(v) for v in rms]
        good = rms <= max(2.5 * float(np.median(rms)), 0.1)
        if good.all() or good.sum() < 6:
            break
        used = [n for n, keep in zip(used, good, strict=True) if keep]
    cov, residual = _intrinsic_covariance([finds[n] for n in used], fit)
    camera, k = fit["camera"], fit["k"]
    u_focal = float(np.sqrt(cov[0, 0]) / camera[0, 0])
    if not np.isfinite(cov).all() or u_focal > 0.1:
        raise CannotMeasure(f"These views fix the focal length only to {100 * u_focal:.0f} %.",
                            "Tilt the board by 20 to 40 degrees, to all sides, and come nearer.", "lens-weak-views")
    notices = []
    if dropped := sorted(set(range(len(finds))) - set(used)):
        notices.append(Notice("lens-views-left-out", f"Views {dropped} do not fit the others and were left out.",
                              f"Their residual is up to {max(every[n] for n in dropped):.2f} px.",
                              "Hold the board still and flat."))
    reach = _reach([finds[n] for n in used], size)
    if reach < 0.75:
        notices.append(Notice("lens-edge-unseen", f"The board reached only {100 * reach:.0f} % of the way to the "
                              "picture's corners.", "Distortion beyond that is extrapolated.",
                              "Film the board in the corners of the picture too."))
    lens = Lens(float(camera[0, 0]), float(camera[1, 1]), float(camera[0, 2]), float(camera[1, 2]), k, cov, size)
    return LensCalibration(lens, residual, tuple(used), tuple(every), tuple(notices))


def _fit_views(finds: Sequence[BoardFind], size: tuple[int, int]) -> dict[str, Any]:
    boards = [np.c_[find.points_m, np.zeros(len(find.points_m))].astype(np.float32) for find in finds]
    pixels = [find.corners_px.astype(np.float32) for find in finds]
    stop = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 200, 1e-10)
    start = np.array([[1.1 * max(size), 0, size[0] / 2 - 0.5], [0, 1.1 * max(size), size[1] / 2 - 0.5], [0, 0, 1.0]])
    try:
        _, camera, k, turns, places, _, _, view_rms = cv2.calibrateCameraExtended(
            boards, pixels, size, start, np.zeros(5), flags=cv2.CALIB_USE_INTRINSIC_GUESS, criteria=stop)
    except cv2.error as error:
        raise CannotMeasure("These views do not fix a lens.",
                            "Film the board tilted to all sides and in every corner of the picture.",
                            "lens-weak-views") from error
    return {"camera": camera, "k": np.asarray(k, dtype=float).ravel()[:5], "turns": turns, "places": places,
            "view_rms": [float(v) for v in np.ravel(view_rms)]}


def _intrinsic_covariance(finds: Sequence[BoardFind], fit: dict[str, Any]) -> tuple[Floats, float]:
    """Covariance of the nine figures, and the RMS residual of one coordinate."""
    normal = np.zeros((9, 9))
    gradients, total, count = [], 0.0, 0
    for find, turn, place in zip(finds, fit["turns"], fit["places"], strict=True):
        board = np.c_[find.points_m, np.zeros(len(find.points_m))]
        seen, jacobian = cv2.projectPoints(board, turn, place, fit["camera"], fit["k"])
        rest = (find.corners_px - seen.reshape(-1, 2)).ravel()
        pose, inner = jacobian[:, :6], jacobian[:, 6:15]
        inner = inner - pose @ np.linalg.lstsq(pose, inner, rcond=None)[0]  # what the pose does not take up
        normal += inner.T @ inner
        gradients.append(inner.T @ rest)
        total += float(rest @ rest)
        count += len(rest)
    scale = np.sqrt(np.diag(normal))
    inverse = np.linalg.pinv(normal / np.outer(scale, scale), rcond=1e-14) / np.outer(scale, scale)
    variance = total / max(count - 9 - 6 * len(finds), 1)
    cov = variance * inverse
    moves = np.array(gradients) @ inverse  # change of the figures by each view, first order
    spread = moves.T @ moves * len(finds) / (len(finds) - 1)
    widen = max(1.0, float(np.mean(np.diag(spread) / np.diag(cov))))
    return widen * cov, float(np.sqrt(total / count))


def _reach(finds: Sequence[BoardFind], size: tuple[int, int]) -> float:
    """How far towards the picture's corners the boards came, as a share; the least of the four."""
    middle = (np.array(size) - 1) / 2
    points = (np.concatenate([find.corners_px for find in finds]) - middle) / middle
    shares = []
    for sign in ((-1, -1), (1, -1), (-1, 1), (1, 1)):
        inside = points * sign
        shares.append(float(inside.min(axis=1).max()))
    return min(shares)
