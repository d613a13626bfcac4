"""From pixels to metres on the plane of motion, and how far each cause can have moved the answer.

One parametric camera is fitted to the corners of the board, together with everything else that is known of the
station, each with its own uncertainty: square, distance, lens, board's attitude and offset. The fit is the maximum
a posteriori one (Gauss-Newton on whitened residuals): an unknown that the picture fixes is taken from the picture,
one that it does not fix keeps its prior, and what both know is weighted. A tilted board so informs the focal
length, a taped distance too, and the two are held against each other.

Every prior, and the noise of the corners, is one independent observation e_i of standard uncertainty 1 after
whitening, so it moves the parameters by dtheta_i = (J^T J)^-1 J^T e_i. These `Source`s are what an uncertainty
budget needs: whoever measures pushes each one through the whole analysis. The sum of their squares is the full
posterior covariance.

Frames. The camera looks along its z, x to the right, y down. The plane of motion has its own axes: x to the right,
down (the world's -z), and away from the camera. The board's axes are those of the picture at zero attitude.
"""

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Literal

import cv2
import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import linalg, optimize

from calibration.board import BoardFind, BoardSpec
from calibration.lens import Lens, LensPrior, bend, unbend
from calibration.notice import BadInput, CannotMeasure, Notice

__all__ = ["PARAMETERS", "Plane", "Source", "fit_plane"]

Floats = NDArray[np.float64]
Shared = Literal["run", "station", "board", "lens", "site"]

PARAMETERS = (
    "turn_x", "turn_y", "turn_z",  # board to camera, rotation vector [rad]
    "bearing_x", "bearing_y", "log_depth",  # the board's middle in the camera's frame: X/Z, Y/Z, ln(Z / m)
    "log_focal", "log_aspect", "cx", "cy", "k1", "k2", "p1", "p2", "k3",
    "log_square",  # true over nominal square
    "offset",  # the board's middle behind the plane of motion [m]
    "lean", "yaw",  # board to plane of motion [rad]
    "vertical",  # gravity, or the plumb line, against what was taken for it [rad]
    "origin_x", "origin_y",  # true datum pixel against the given one [px]
)
AT = {name: index for index, name in enumerate(PARAMETERS)}
TURN, PLACE, LENS = slice(0, 3), slice(3, 6), slice(6, 15)

U_BIAS_PX = 0.03  # part of a corner's error that its neighbours share: found on pictures with known corners
BIAS_REACH_SQUARES = 2.0
FLAT_SHARE = 0.03  # residual of a corner, in squares, above which the sheet cannot be called flat


@dataclass(frozen=True, slots=True, eq=False)
class Source:
    """One independent cause of error of a plane, and how it moves all parameters.

    Attributes
    ----------
    name : str
        Unique within a plane, as "offset" or "board corners 2".
    label : str
        In a technician's words; sources with one label belong together in a budget.
    u : float
        Its standard uncertainty, in `unit`.
    unit : str
    shared : str
        What else has this very error: station, board or lens.
    id : str
        Short hash of what is shared; equal ids and names mean the very same error.
    dtheta : (22,) array
        Change of the parameters (see `PARAMETERS`) for +1 standard uncertainty of this source.
    """

    name: str
    label: str
    u: float
    unit: str
    shared: Shared
    id: str
    dtheta: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Plane:
    """The plane of motion as one camera sees it.

    World: metres, origin where the datum's ray meets the plane, x to the right, z up against gravity.
    """

    theta: Floats  # (22,), see PARAMETERS
    sources: tuple[Source, ...]
    origin_px: tuple[float, float]
    size: tuple[int, int]  # width and height of the picture [px]
    corners_px: Floats  # (n, 2), what the scale rests on
    plumb_px: Floats | None = None  # (2, 2), two pixels on a plumb line
    residual_px: float = 0.0  # RMS of one coordinate of a corner
    provenance: str = ""
    notices: tuple[Notice, ...] = ()
    along_line: bool = False  # scale known along one line only
    _to_metres: Floats = field(init=False, repr=False, default_factory=lambda: np.eye(3))
    _axes: Floats = field(init=False, repr=False, default_factory=lambda: np.eye(3))
    _origin: Floats = field(init=False, repr=False, default_factory=lambda: np.zeros(3))

    def __post_init__(self) -> None:
        theta = np.array(self.theta, dtype=float)
        if theta.shape != (len(PARAMETERS),) or not np.isfinite(theta).all():
            raise ValueError(f"Plane.theta: expected {len(PARAMETERS)} finite numbers, got shape {theta.shape}.")
        axes, point = _plane_axes(theta, self.plumb_px)
        datum = np.asarray(self.origin_px) + theta[[AT["origin_x"], AT["origin_y"]]]
        ray = np.append(_rays(theta, datum), 1.0)
        depth, toward = axes[2] @ point, axes[2] @ ray
        if depth <= 0 or not toward > 0:
            raise CannotMeasure(
                f"The datum at column {datum[0]:.0f}, row {datum[1]:.0f} does not lie on the plane of motion as the "
                "camera sees it.", "Check datum.origin_px and the board's lean_deg, yaw_deg and offset_m.",
                "beyond-horizon")
        origin = ray * depth / toward
        # x = (ex . ray) depth / (en . ray) - ex . origin, and likewise down: one homography on rays.
        across, down, away = axes
        matrix = np.stack([across * depth - (across @ origin) * away, (down @ origin) * away - down * depth, away])
        for name, value in (("theta", theta), ("_to_metres", matrix), ("_axes", axes), ("_origin", origin)):
            value.flags.writeable = False
            object.__setattr__(self, name, value)

    # --- mapping ---

    def to_metres(self, points_px: ArrayLike) -> Floats:
        """Map pixels to places on the plane of motion.

        Parameters
        ----------
        points_px : (..., 2) array_like
            Column and row [px], upright picture; NaN where not measured.

        Returns
        -------
        (..., 2) array
            x and z [m]; NaN in, NaN out.

        Raises
        ------
        CannotMeasure
            A point on or beyond the horizon of the plane, or where the lens model cannot be inverted.
        """
        points = _pairs(points_px, "points_px")
        metres = self._map(points)
        lost = np.isnan(metres[..., 0]) & np.isfinite(points).all(axis=-1)
        if lost.any():
            column, row = points[lost][0]
            raise CannotMeasure(
                f"{int(lost.sum())} point(s) lie beyond the horizon of the plane of motion or outside the lens, the "
                f"first at column {column:.0f}, row {row:.0f}.",
                "Check the board's attitude and the lens, or mark the point again.", "beyond-horizon")
        return metres

    def _map(self, points: Floats) -> Floats:
        """As `to_metres`, NaN instead of an error."""
        x, y = np.moveaxis(_rays(self.theta, points), -1, 0)
        m = self._to_metres
        with np.errstate(invalid="ignore", divide="ignore"):
            toward = m[2, 0] * x + m[2, 1] * y + m[2, 2]
            toward = np.where(toward > 1e-9, toward, np.nan)
            return np.stack([(m[0, 0] * x + m[0, 1] * y + m[0, 2]) / toward,
                             (m[1, 0] * x + m[1, 1] * y + m[1, 2]) / toward], axis=-1)

    def to_pixels(self, points_m: ArrayLike) -> Floats:
        """Where places (..., 2) on the plane [m] are seen [px]: the exact inverse of `to_metres`."""
        metres = _pairs(points_m, "points_m")
        space = self._origin + metres[..., :1] * self._axes[0] - metres[..., 1:] * self._axes[1]
        with np.errstate(invalid="ignore", divide="ignore"):
            depth = np.where(space[..., 2:] > 0, space[..., 2:], np.nan)
            return _pixels(self.theta, space[..., :2] / depth)

    def scale_px_per_m(self, at_px: ArrayLike | None = None) -> float:
        """Pixels to a metre at a pixel (the datum where none is given): geometric mean over directions."""
        at = np.asarray(self.origin_px if at_px is None else at_px, dtype=float)
        steps = self.to_metres(at + np.array([[0.5, 0], [-0.5, 0], [0, 0.5], [0, -0.5]]))
        area = abs(np.linalg.det(np.stack([steps[0] - steps[1], steps[2] - steps[3]])))
        return float(1.0 / np.sqrt(area))

    # --- uncertainty ---

    def shifted(self, i: int, n_sigma: float = 1.0) -> "Plane":
        """The plane as it would be if source `i` were off by `n_sigma` of its standard uncertainties."""
        return self._at(self.theta + n_sigma * self.sources[i].dtheta)

    def drawn(self, rng: np.random.Generator) -> "Plane":
        """A plane drawn from the posterior: every source moved by a normal deviate."""
        return self._at(self.theta + sum(rng.normal() * source.dtheta for source in self.sources))

    def _at(self, theta: Floats) -> "Plane":
        return Plane(theta, self.sources, self.origin_px, self.size, self.corners_px, self.plumb_px, self.residual_px,
                     self.provenance, self.notices, self.along_line)

    def effects(self, points_px: ArrayLike) -> Floats:
        """What one standard uncertainty of each source does to each point: (sources, ..., 2) [m]."""
        points = _pairs(points_px, "points_px")
        parts = [0.5 * (self.shifted(i)._map(points) - self.shifted(i, -1.0)._map(points))
                 for i in range(len(self.sources))]
        return np.stack(parts) if parts else np.zeros((0, *points.shape))

    def covariance(self, points_px: ArrayLike) -> Floats:
        """Covariance of the places of (n, 2) points on the plane, all with all [m^2].

        Returns
        -------
        (2n, 2n) array
            Order x0, z0, x1, z1, ... The plane's part only: that of the points' own pixels comes on top.

        Notes
        -----
        First order by central differences, JCGM 102:2011, 6.2.
        """
        points = _pairs(points_px, "points_px").reshape(-1, 2)
        parts = self.effects(points).reshape(len(self.sources), -1)
        return np.asarray(parts.T @ parts, dtype=float)

    # --- what to tell ---

    @property
    def distance_m(self) -> float:
        """Perpendicular distance of the lens to the plane of motion [m]."""
        return float(self._axes[2] @ self._origin)

    @property
    def tilt_deg(self) -> float:
        """Angle between the camera's axis and the normal of the plane of motion [degree]."""
        return float(np.degrees(np.arccos(np.clip(self._axes[2, 2], -1, 1))))

    @property
    def roll_deg(self) -> float:
        """How far gravity's vertical leans to the right of the picture's, upwards, at the datum [degree]."""
        low, high = self.to_pixels([[0.0, -0.01], [0.0, 0.01]])
        return float(np.degrees(np.arctan2(high[0] - low[0], low[1] - high[1])))

    def u_parameter(self, name: str) -> float:
        """Standard uncertainty of one of `PARAMETERS`."""
        return float(np.sqrt(sum(source.dtheta[AT[name]] ** 2 for source in self.sources)))

    def describe(self) -> dict[str, object]:
        """Figures for the result, with what they rest on."""
        focal = float(np.exp(self.theta[AT["log_focal"]]))
        return {
            "px_per_m": self.scale_px_per_m(),
            "distance_m": self.distance_m,
            "focal_px": focal,
            "u_focal_px": focal * self.u_parameter("log_focal"),
            "residual_px": self.residual_px,
            "tilt_deg": self.tilt_deg,
            "roll_deg": self.roll_deg,
            "offset_m": float(self.theta[AT["offset"]]),
            "corners": len(self.corners_px),
            "scale": "along one line" if self.along_line else "in the whole plane",
            "provenance": self.provenance,
        }


def fit_plane(
    find: BoardFind,
    spec: BoardSpec,
    *,
    size: tuple[int, int],
    origin_px: tuple[float, float],
    distance_m: float | None = None,
    u_distance_m: float | None = None,
    lens: Lens | None = None,
    offset_m: float = 0.0,
    u_offset_m: float = 0.003,
    lean_deg: float = 0.0,
    u_lean_deg: float = 0.5,
    yaw_deg: float = 0.0,
    u_yaw_deg: float = 0.5,
    u_square_m: float | None = None,
    u_origin_px: float = 1.5,
    vertical: Literal["board"] | ArrayLike = "board",
    u_vertical_deg: float = 0.3,
    u_plumb_px: float = 0.7,
    prior: LensPrior | None = None,
    station: str = "",
    board_name: str = "",
) -> Plane:
    """Fit the camera and the plane of motion to the board.

    Parameters
    ----------
    find : BoardFind
        The board as found.
    spec : BoardSpec
        Its kind and square.
    size : (int, int)
        Width and height of the upright picture [px].
    origin_px : (float, float)
        Datum: column and row [px].
    distance_m, u_distance_m : float, optional
        Perpendicular distance from the lens to the plane of motion [m]; u defaults to 2 % of it.
    lens : Lens, optional
        From a lens calibration; without it `prior` stands.
    offset_m, u_offset_m : float
        How far the board's middle is BEHIND the plane of motion, seen from the camera [m].
    lean_deg, u_lean_deg : float
        The board's top leans away from the camera, against the plane of motion [degree].
    yaw_deg, u_yaw_deg : float
        The board's right side is turned away from the camera [degree].
    u_square_m : float, optional
        Standard uncertainty of a square's side [m], common to the whole board; 0.3 % of it by default.
    u_origin_px : float
        Of each coordinate of the datum [px].
    vertical : "board" or (2, 2) array_like
        Gravity from the board's edge nearest to the picture's vertical, or from two pixels on a plumb line,
        which may hang anywhere in the picture.
    u_vertical_deg : float
        How far the board may be out of level [degree] (with "board").
    u_plumb_px : float
        Of each coordinate of each plumb pixel [px].
    prior : LensPrior, optional
        What is expected of the lens without a lens file.
    station : str
        Name of a station whose camera has not moved: runs with the same name and the same inputs share errors.
        Without it each run's errors are its own.
    board_name : str
        Tells apart boards of the same nominal size; same for all runs filmed with one print.

    Returns
    -------
    Plane

    Raises
    ------
    BadInput
        A value that cannot be.
    CannotMeasure
        The corners do not lie on a flat board, or the geometry cannot be.
    """
    plumb = None if isinstance(vertical, str) else np.asarray(vertical, dtype=float)
    _check_inputs(size, origin_px, distance_m, offset_m, lean_deg, yaw_deg, plumb, vertical)
    if lens is not None:
        lens = lens.resized(size)
    expected = _Expected.of(find, spec, size, distance_m, u_distance_m, lens, prior or LensPrior())
    expected.put("offset", offset_m, u_offset_m, "board offset", "m")
    expected.put("lean", np.radians(lean_deg), np.radians(u_lean_deg), "board lean", "rad")
    expected.put("yaw", np.radians(yaw_deg), np.radians(u_yaw_deg), "board yaw", "rad")
    u_square = 0.003 if u_square_m is None else u_square_m / spec.square_m
    expected.put("log_square", 0.0, u_square, "board square", "1")
    if find.along_line:
        for name in ("turn_x", "turn_y"):  # marks on a line do not show which way the camera looks
            expected.put(name, 0.0, np.radians(5.0), "camera square to the plane of motion", "rad")

    solved = _solve(find, size, expected)
    residual = _residual_px(find, solved.theta)
    notices = list(find.notices)
    notices += _judge_flatness(find, residual)

    if plumb is None:
        u_vertical, label = np.radians(u_vertical_deg), "vertical (board out of level)"
    else:
        u_vertical = np.sqrt(2.0) * u_plumb_px / float(np.hypot(*(plumb[1] - plumb[0])))
        label = "vertical (plumb line)"
    sources = _sources(find, expected, solved, size, origin_px, u_origin_px, u_vertical, label, station, board_name)
    bare = Plane(solved.theta, sources, (float(origin_px[0]), float(origin_px[1])), size, np.array(find.corners_px),
                 plumb, residual, _provenance(find, lens, distance_m), (), find.along_line)
    notices += _judge_plane(bare, find, expected, solved, u_vertical_deg, plumb)
    return Plane(bare.theta, sources, bare.origin_px, size, bare.corners_px, plumb, residual, bare.provenance,
                 tuple(notices), find.along_line)


# --- geometry --------------------------------------------------------------------------------------------------------


def _pairs(points: ArrayLike, name: str) -> Floats:
    array = np.asarray(points, dtype=float)
    if array.shape[-1:] != (2,):
        raise ValueError(f"{name}: expected shape (..., 2), got {array.shape}.")
    return array


def _inner(theta: Floats) -> tuple[float, float, float, float, Floats]:
    focal = float(np.exp(theta[AT["log_focal"]]))
    return (focal, focal * float(np.exp(theta[AT["log_aspect"]])), float(theta[AT["cx"]]), float(theta[AT["cy"]]),
            theta[AT["k1"]: AT["k3"] + 1])


def _rays(theta: Floats, points: Floats) -> Floats:
    fx, fy, cx, cy, k = _inner(theta)
    return unbend((points - [cx, cy]) / [fx, fy], k)


def _pixels(theta: Floats, rays: Floats) -> Floats:
    fx, fy, cx, cy, k = _inner(theta)
    return bend(rays, k) * [fx, fy] + [cx, cy]


def _turned(angles: Floats) -> Floats:
    """Rotation matrix of a rotation vector."""
    return np.asarray(cv2.Rodrigues(np.asarray(angles, dtype=float))[0], dtype=float)


def _place(theta: Floats) -> Floats:
    """The board's middle in the camera's frame [m].

    Held as a logarithm, a change of distance and one of the focal length cancel in the picture to all orders, as a
    taped distance makes them do.
    """
    across, down, log_depth = theta[PLACE]
    return np.asarray(np.array([across, down, 1.0]) * np.exp(log_depth), dtype=float)


def _board_normal_frame(theta: Floats) -> Floats:
    """Rows: the plane of motion's across, down and away in the camera's frame, before gravity is taken in."""
    lean, yaw = theta[AT["lean"]], theta[AT["yaw"]]
    attitude = _turned(np.array([0.0, -yaw, 0.0])) @ _turned(np.array([-lean, 0.0, 0.0]))  # board in the plane
    return np.asarray((_turned(theta[TURN]) @ attitude.T).T, dtype=float)


def _plane_axes(theta: Floats, plumb_px: Floats | None) -> tuple[Floats, Floats]:
    """The plane's axes as rows, in the camera's frame, and a point of it."""
    across, down, away = _board_normal_frame(theta)
    point = _place(theta) - theta[AT["offset"]] * away
    angle = -theta[AT["vertical"]]
    if plumb_px is not None:
        # The plane through the lens and the plumb line holds gravity, so does the plane of motion: it is their cut.
        first, second = (np.append(ray, 1.0) for ray in _rays(theta, plumb_px))
        gravity = np.cross(away, np.cross(first, second))
        gravity = gravity * np.sign(gravity @ down)
        angle = angle + np.arctan2(-(gravity @ across), gravity @ down)
    c, s = np.cos(angle), np.sin(angle)
    return np.stack([c * across + s * down, c * down - s * across, away]), point


def _seen(theta: Floats, points_m: Floats) -> Floats:
    """Pixels of places (n, 2) on the board [m, nominal square]."""
    turn = _turned(theta[TURN])
    space = np.exp(theta[AT["log_square"]]) * points_m @ turn[:, :2].T + _place(theta)
    return _pixels(theta, space[:, :2] / space[:, 2:])


def _seen_slope(theta: Floats, points_m: Floats) -> Floats:
    """(n, 2, 22), change of `_seen` with each parameter."""
    fx, fy, cx, cy, k = _inner(theta)
    scale = float(np.exp(theta[AT["log_square"]]))
    board = np.c_[scale * points_m, np.zeros(len(points_m))]
    place = _place(theta)
    _, jacobian = cv2.projectPoints(board, theta[TURN], place, np.array([[fx, 0, cx], [0, fy, cy], [0, 0, 1.0]]), k)
    jacobian = jacobian.reshape(len(board), 2, -1)  # turn, place, fx, fy, cx, cy, k1, k2, p1, p2, k3
    slope = np.zeros((len(board), 2, len(PARAMETERS)))
    slope[..., TURN] = jacobian[..., 0:3]
    slope[..., PLACE] = jacobian[..., 3:6] @ np.array([[place[2], 0, place[0]], [0, place[2], place[1]], [0, 0, place[2]]])
    slope[..., AT["log_aspect"]] = jacobian[..., 7] * fy
    slope[..., AT["log_focal"]] = jacobian[..., 6] * fx + jacobian[..., 7] * fy
    slope[..., AT["cx"]: AT["k3"] + 1] = jacobian[..., 8:15]
    slope[..., AT["log_square"]] = np.einsum("ncj,nj->nc", jacobian[..., 3:6], board @ _turned(theta[TURN]).T)
    return slope


def _distance(theta: Floats) -> float:
    """Perpendicular distance of the lens to the plane of motion [m]."""
    away = _board_normal_frame(theta)[2]
    return float(away @ _place(theta) - theta[AT["offset"]])


def _distance_slope(theta: Floats) -> Floats:
    """(22,), change of `_distance` with each parameter, by central differences: it is smooth and small."""
    slope = np.zeros(len(PARAMETERS))
    for name in ("turn_x", "turn_y", "turn_z", "bearing_x", "bearing_y", "log_depth", "offset", "lean", "yaw"):
        step = np.zeros(len(PARAMETERS))
        step[AT[name]] = 1e-5
        slope[AT[name]] = (_distance(theta + step) - _distance(theta - step)) / 2e-5
    return slope


# --- the fit ---------------------------------------------------------------------------------------------------------


@dataclass(slots=True)
class _Prior:
    """One independent piece of knowledge: row . (theta - mean) has standard deviation 1."""

    name: str
    label: str
    row: Floats
    mean: Floats
    u: float
    unit: str
    shared: Shared
    key: str  # what is hashed into its id


@dataclass(slots=True)
class _Expected:
    """All that is known before the corners are looked at."""

    start: Floats
    free: NDArray[np.bool_]
    priors: list[_Prior]
    distance: tuple[float, float] | None = None
    lens: Lens | None = None
    square_m: float = 0.0

    @classmethod
    def of(cls, find: BoardFind, spec: BoardSpec, size: tuple[int, int], distance_m: float | None,
           u_distance_m: float | None, lens: Lens | None, prior: LensPrior) -> "_Expected":
        n = len(PARAMETERS)
        free = np.zeros(n, dtype=bool)
        free[TURN] = free[PLACE] = True
        known = cls(np.zeros(n), free, [], None, lens, spec.square_m)
        if distance_m is not None:
            known.distance = (distance_m, 0.02 * distance_m if u_distance_m is None else max(u_distance_m, 1e-6))
        long_side = max(size)
        if lens is None:
            middle, u = prior.log_focal
            known.put("log_focal", middle + np.log(long_side), u, "focal length (no lens file)", "1")
            for name, side in (("cx", size[0]), ("cy", size[1])):
                known.put(name, 0.5 * (side - 1), prior.u_centre * long_side, "principal point (no lens file)", "px")
            for name, u in (("k1", prior.u_k1), ("k2", prior.u_k2), ("p1", prior.u_p), ("p2", prior.u_p)):
                known.put(name, 0.0, u, "lens distortion (no lens file)", "1")
        else:
            known.put_lens(lens)
        return known

    def put(self, name: str, mean: float, u: float, label: str, unit: str) -> None:
        """A parameter's own prior; without uncertainty it is held."""
        self.start[AT[name]] = mean
        self.free[AT[name]] = u > 0
        if u > 0:
            row = np.zeros(len(PARAMETERS))
            row[AT[name]] = 1.0 / u
            means = np.zeros(len(PARAMETERS))
            means[AT[name]] = mean
            shared: Shared = "board" if name == "log_square" else "station"
            self.priors.append(_Prior(name, label, row, means, u, unit, shared, f"{name} {mean:.12g} {u:.12g}"))

    def put_lens(self, lens: Lens) -> None:
        """The lens file's figures with their covariance, as independent modes."""
        values = np.array([np.log(lens.fx), np.log(lens.fy / lens.fx), lens.cx, lens.cy, *lens.k])
        chain = np.eye(9)
        chain[0, 0], chain[1, 0], chain[1, 1] = 1 / lens.fx, -1 / lens.fx, 1 / lens.fy
        cov = chain @ lens.cov @ chain.T
        scale = np.sqrt(np.diag(cov)).clip(1e-12)
        weights, modes = np.linalg.eigh(cov / np.outer(scale, scale))
        weights = weights.clip(1e-9)  # an exactly known combination still gets a width, far below any other
        whiten = (modes / np.sqrt(weights)).T / scale
        self.start[LENS] = values
        self.free[LENS] = True
        for number, line in enumerate(whiten[::-1], start=1):
            row, mean = np.zeros(len(PARAMETERS)), np.zeros(len(PARAMETERS))
            row[LENS], mean[LENS] = line, values
            self.priors.append(_Prior(f"lens {number}", "lens calibration", row, mean, 1.0, "1", "lens", lens.id))


@dataclass(slots=True)
class _Solved:
    theta: Floats
    gain: Floats  # (22, observations), change of theta for a unit of each whitened observation
    cost: float  # sum of squares
    corner_chi2: float
    other: tuple[Floats, float] | None = None  # a second minimum and how much dearer it is


def _whitener(find: BoardFind, inflate: float) -> Floats:
    """(n, n) lower triangle that makes the errors of one coordinate of the corners independent, unit ones."""
    u = np.full(len(find.grid), max(find.u_px, 0.01))
    cov = np.diag(u**2)
    if not find.along_line:
        apart = np.linalg.norm(find.grid[:, None] - find.grid[None], axis=2) / BIAS_REACH_SQUARES
        cov += max(U_BIAS_PX, 0.5 * find.u_px) ** 2 * np.exp(-0.5 * apart**2)
    lower = linalg.cholesky(inflate * cov, lower=True)
    return np.asarray(linalg.solve_triangular(lower, np.eye(len(u)), lower=True), dtype=float)


def _solve(find: BoardFind, size: tuple[int, int], expected: _Expected) -> _Solved:
    """Maximum a posteriori, once more with wider corner noise if the corners scatter more than was assumed."""
    solved = _solve_with(find, expected, _whitener(find, 1.0), _starts(find, expected))
    dof = max(2 * len(find.corners_px) - 11, 1)
    if (ratio := solved.corner_chi2 / dof) > 1.0 and not find.along_line:  # Birge, Phys. Rev. 40, 207 (1932)
        solved = _solve_with(find, expected, _whitener(find, ratio), _starts(find, expected))
    return solved


def _starts(find: BoardFind, expected: _Expected) -> list[Floats]:
    """Starting points: both poses in which a flat board looks nearly the same."""
    theta = expected.start.copy()
    middle = find.corners_px.mean(axis=0)
    px = find.square_px / (float(np.hypot(*np.diff(find.points_m, axis=0)[0])) or 1.0)
    if expected.lens is None and expected.distance is not None:
        theta[AT["log_focal"]] = np.log(px * (expected.distance[0] + theta[AT["offset"]]))
    if find.along_line:
        theta[PLACE] = np.append(_rays(theta, middle), theta[AT["log_focal"]] - np.log(px))
        direction = find.corners_px[-1] - find.corners_px[0]
        wanted = find.points_m[-1] - find.points_m[0]
        theta[AT["turn_z"]] = np.arctan2(direction[1], direction[0]) - np.arctan2(wanted[1], wanted[0])
        return [theta]
    rays = _rays(theta, np.asarray(find.corners_px))
    board = np.c_[find.points_m, np.zeros(len(find.points_m))]
    count, turns, places, _ = cv2.solvePnPGeneric(board, rays, np.eye(3), np.zeros(5), flags=cv2.SOLVEPNP_IPPE)
    starts = []
    for n in range(count):
        start = theta.copy()
        x, y, z = np.ravel(places[n])
        if z > 0:
            start[TURN], start[PLACE] = np.ravel(turns[n]), (x / z, y / z, np.log(z))
            starts.append(start)
    if not starts:
        raise CannotMeasure("The board's corners do not fit any place of a flat board before the camera.",
                            "Show the board flat and facing the camera.", "board-not-flat")
    return starts


def _solve_with(find: BoardFind, expected: _Expected, whiten: Floats, starts: Sequence[Floats]) -> _Solved:
    free = expected.free
    rows = np.array([prior.row for prior in expected.priors])
    means = np.array([prior.row @ prior.mean for prior in expected.priors])
    corners, points = np.asarray(find.corners_px), np.asarray(find.points_m)

    def missing(part: Floats) -> Floats:
        theta = expected.start.copy()
        theta[free] = part
        told = [rows @ theta - means]
        if expected.distance is not None:
            told.append(np.array([(_distance(theta) - expected.distance[0]) / expected.distance[1]]))
        return np.concatenate([(whiten @ (_seen(theta, points) - corners)).T.ravel(), *told])

    def slope(part: Floats) -> Floats:
        theta = expected.start.copy()
        theta[free] = part
        told = [rows]
        if expected.distance is not None:
            told.append(_distance_slope(theta)[None] / expected.distance[1])
        by_corners = np.einsum("nm,mcp->cnp", whiten, _seen_slope(theta, points))
        return np.concatenate([by_corners.reshape(-1, len(theta)), *told])[:, free]

    widths = 1.0 / np.sqrt((slope(starts[0][free]) ** 2).sum(axis=0)).clip(1e-12)
    minima: list[tuple[float, Floats]] = []
    for start in starts:
        fit = optimize.least_squares(missing, start[free], jac=slope, method="lm", x_scale=widths, xtol=1e-10,
                                     ftol=1e-12, gtol=1e-12, max_nfev=200)
        minima.append((float(2 * fit.cost), fit.x))
    minima.sort(key=lambda pair: pair[0])
    cost, part = minima[0]
    jacobian = slope(part)
    scale = np.sqrt((jacobian**2).sum(axis=0))
    if not (scale > 0).all():
        raise CannotMeasure("The board does not fix the camera.", "Show the whole board.", "board-weak")
    gain = np.linalg.pinv(jacobian / scale, rcond=1e-11) / scale[:, None]  # what is told +1 u, theta follows
    full = np.zeros((len(PARAMETERS), gain.shape[1]))
    full[free] = gain
    theta = expected.start.copy()
    theta[free] = part
    other = None
    if len(minima) > 1 and minima[1][0] - cost < 12.0:
        second = expected.start.copy()
        second[free] = minima[1][1]
        if np.abs(second[TURN] - theta[TURN]).max() > np.radians(0.2):
            other = (second, minima[1][0] - cost)
    rest = missing(part)[: 2 * len(corners)]
    return _Solved(theta, full, cost, float(rest @ rest), other)


def _residual_px(find: BoardFind, theta: Floats) -> float:
    rest = _seen(theta, np.asarray(find.points_m)) - find.corners_px
    return float(np.sqrt((rest**2).mean()))


# --- sources ---------------------------------------------------------------------------------------------------------


def _hash(*parts: object) -> str:
    return hashlib.sha256("|".join(str(part) for part in parts).encode("utf-8")).hexdigest()[:12]


def _sources(find: BoardFind, expected: _Expected, solved: _Solved, size: tuple[int, int],
             origin_px: tuple[float, float], u_origin_px: float, u_vertical: float, vertical_label: str,
             station: str, board_name: str) -> tuple[Source, ...]:
    """Each independent cause with its effect on all parameters."""
    n_corner = 2 * len(find.corners_px)
    place = _hash("station", station) if station else _hash(np.asarray(find.corners_px).tobytes().hex(), origin_px)
    sources = []
    for number, prior in enumerate(expected.priors):
        dtheta = solved.gain[:, n_corner + number]
        sources.append((prior.name, prior.label, prior.u, prior.unit, prior.shared, prior.key, dtheta))
    if expected.distance is not None:
        sources.append(("distance", "distance lens to plane", expected.distance[1], "m", "station",
                        f"distance {expected.distance}", solved.gain[:, -1]))
    modes = _corner_modes(find, solved, size)
    for number, mode in enumerate(modes, start=1):
        sources.append((f"board corners {number}", "board corners", 1.0, "1", "station", "corners", mode))
    if solved.other is not None:
        second, dearer = solved.other
        weight = np.exp(-0.5 * dearer) / (1 + np.exp(-0.5 * dearer))
        sources.append(("tilt side", "which way the board is tilted", 1.0, "1", "station", "tilt side",
                        np.sqrt(weight) * (second - solved.theta)))
    for name, u, label, unit in (("vertical", u_vertical, vertical_label, "rad"),
                                 ("origin_x", u_origin_px, "datum across", "px"),
                                 ("origin_y", u_origin_px, "datum height", "px")):
        if u > 0:
            step = np.zeros(len(PARAMETERS))
            step[AT[name]] = u
            sources.append((name, label, u, unit, "station", f"{name} {u:.12g} {origin_px}", step))
    made = []
    for name, label, u, unit, shared, key, dtheta in sources:
        if shared == "lens":
            identity = key
        elif shared == "board":
            identity = _hash("board", board_name, expected.square_m, key)
        else:
            identity = _hash(place, key)
        made.append(Source(name, label, float(u), unit, shared, identity, np.asarray(dtheta, dtype=float)))
    return tuple(made)


def _corner_modes(find: BoardFind, solved: _Solved, size: tuple[int, int]) -> list[Floats]:
    """The corner noise as a few independent changes of the parameters, those that move the picture most first.

    Rotating the independent corner errors among each other changes nothing of their sum of squares; the rotation
    chosen is that of the singular vectors of their effect on a grid of pixels all over the picture, and what moves
    no pixel by a thousandth of the whole is left out.
    """
    noise = solved.gain[:, : 2 * len(find.corners_px)]
    columns, rows = np.meshgrid(np.linspace(0.1, 0.9, 4) * size[0], np.linspace(0.1, 0.9, 6) * size[1])
    pixels = np.stack([columns.ravel(), rows.ravel()], axis=1)
    middle = tuple(np.asarray(find.corners_px).mean(axis=0))
    # Effects in metres per unit of each parameter, about the board's middle and about the picture's.
    effect = []
    for j in range(len(PARAMETERS)):
        step = np.zeros(len(PARAMETERS))
        step[j] = 1e-6
        ends = [Plane(solved.theta + sign * step, (), (float(middle[0]), float(middle[1])), size,
                      find.corners_px)._map(pixels) for sign in (1, -1)]
        effect.append(((ends[0] - ends[1]) / 2e-6).ravel())
    picture = np.nan_to_num(np.stack(effect, axis=1))
    _, strengths, turns = np.linalg.svd(picture @ noise, full_matrices=False)
    modes: list[Floats] = []
    for strength, turn in zip(strengths, turns, strict=True):
        if strength < 1e-3 * strengths[0] or len(modes) == 8:
            break
        mode = noise @ turn
        modes.append(mode * (1.0 if mode[np.argmax(np.abs(mode))] >= 0 else -1.0))
    return modes


# --- what has to be said ---------------------------------------------------------------------------------------------


def _check_inputs(size: tuple[int, int], origin_px: tuple[float, float], distance_m: float | None, offset_m: float,
                  lean_deg: float, yaw_deg: float, plumb: Floats | None, vertical: object) -> None:
    width, height = size
    if isinstance(vertical, str) and vertical != "board":
        raise BadInput(f"datum.vertical is {vertical!r}.", 'Write "board", or "plumb" with plumb_px.')
    if not (0 <= origin_px[0] <= width - 1 and 0 <= origin_px[1] <= height - 1):
        raise BadInput(f"datum.origin_px is [{origin_px[0]:g}, {origin_px[1]:g}], outside the upright picture of "
                       f"{width} x {height} px.", "Give column and row in the upright picture, from its top left.")
    if distance_m is not None and not 0.1 < distance_m < 100:
        raise BadInput(f"camera.distance_m is {distance_m:g}.", "Give the distance from lens to plane in metres.")
    if abs(offset_m) > 3:
        raise BadInput(f"board.offset_m is {offset_m:g}.", "Give the offset in metres, board behind the plane +.")
    if distance_m is not None and offset_m <= -0.8 * distance_m:
        raise BadInput(f"board.offset_m is {offset_m:g} with a distance of {distance_m:g} m: the board would be at the "
                       "lens.", "Give the offset as + where the board is behind the plane of motion.")
    if max(abs(lean_deg), abs(yaw_deg)) > 60:
        raise BadInput(f"board.lean_deg is {lean_deg:g} and yaw_deg {yaw_deg:g}.",
                       "Set the board within 60 degrees of the plane of motion.")
    if plumb is not None and (plumb.shape != (2, 2) or not np.isfinite(plumb).all()
                              or np.hypot(*(plumb[1] - plumb[0])) < 50):
        raise BadInput("datum.plumb_px must be two pixels on a plumb line, 50 px or more apart.",
                       "Mark the line near its top and near its bottom: [[x, y], [x, y]].")


def _provenance(find: BoardFind, lens: Lens | None, distance_m: float | None) -> str:
    board = (f"{len(find.corners_px)} marks on a line" if find.along_line
             else f"{find.shape[0]} x {find.shape[1]} corners, {find.frames} picture(s)")
    return ", ".join([board, "lens file" if lens is not None else "no lens file, stated prior",
                      "no distance given" if distance_m is None else f"distance {distance_m:g} m taped"])


def _judge_flatness(find: BoardFind, residual: float) -> list[Notice]:
    """A sheet that is not flat shows in its corners only as far as the camera looks at it askew."""
    if find.along_line:
        return []
    share = residual / find.square_px
    span = float(np.ptp(find.grid, axis=0).max())
    damage = 2 * share / max(span, 1.0)  # a corner's error over half the board's length
    if residual > max(FLAT_SHARE * find.square_px, 0.6):
        raise CannotMeasure(
            f"The board is not flat, or not evenly printed: its corners are {residual:.2f} px RMS ({100 * share:.1f} % "
            f"of a square) off a flat grid; the scale would be out by some {100 * damage:.1f} %.",
            "Glue the sheet to a flat plate, and check that it was printed without scaling.", "board-not-flat")
    if residual > max(0.01 * find.square_px, 0.2):
        return [Notice("board-residual", f"The board's corners are {residual:.2f} px RMS off a flat grid.",
                       f"The scale may be out by some {100 * damage:.2f} %.",
                       "Glue the sheet to a flat plate; light it evenly; hold the camera still.")]
    return []


def _judge_plane(plane: Plane, find: BoardFind, expected: _Expected, solved: _Solved, u_vertical_deg: float,
                 plumb: Floats | None) -> list[Notice]:
    """Everything about the geometry that a technician should know."""
    notices = []
    span = np.ptp(find.corners_px, axis=0)
    if (share := float(span.max()) / max(plane.size)) < 0.12 and not find.along_line:
        notices.append(Notice("board-small-in-picture", f"The board covers {100 * share:.0f} % of the picture's long "
                              "side.", "Scale and tilt away from it are extrapolated; U says so.",
                              "Use a larger board, or film it nearer to the motion."))
    middle = np.asarray(find.corners_px).mean(axis=0)
    away = float(np.hypot(*(np.asarray(plane.origin_px) - middle)))
    if away > 3.0 * float(span.max()):
        notices.append(Notice("board-far", f"The datum is {away / span.max():.1f} board lengths from the board.",
                              "The scale there is extrapolated; U says so.", "Hang the board beside the motion."))
    if plane.tilt_deg > 20:
        notices.append(Notice("tilt-large", f"The camera looks at the plane of motion {plane.tilt_deg:.0f} degrees "
                              "askew.", "Depth of the line and the lens then enter the scale strongly.",
                              "Set the camera square to the plane of motion."))
    if expected.distance is not None:
        told, u = expected.distance
        miss = (_distance(solved.theta) - told) / u
        if abs(miss) > 2.0:
            notices.append(Notice("distance-disagrees", f"The tape says {told:.3f} m from lens to plane, board and "
                                  f"lens say {plane.distance_m:.3f} m.", "One of distance, square, offset and lens "
                                  "file is wrong; the result stands between them.",
                                  "Measure the distance again, and check square_m and the lens file's mode."))
    if solved.other is not None:
        notices.append(Notice("tilt-side", "The board looks the same tilted to one side or the other.",
                              "U holds both.", "Film the board larger, or give the lens file and the distance."))
    notices += _judge_vertical(plane, find, u_vertical_deg, plumb)
    return notices


def _judge_vertical(plane: Plane, find: BoardFind, u_vertical_deg: float, plumb: Floats | None) -> list[Notice]:
    if plumb is not None:
        by_board, _ = _plane_axes(plane.theta, None)
        apart = float(np.degrees(np.arctan2(by_board[1] @ plane._axes[0], by_board[1] @ plane._axes[1])))
        u = float(np.hypot(u_vertical_deg, np.degrees(plane.u_parameter("vertical"))))
        if abs(apart) > 3 * u and not find.along_line:
            return [Notice("vertical-disagrees", f"Plumb line and board disagree by {abs(apart):.1f} degrees about "
                           "the vertical.", "The plumb line was believed.", "Level the board, or mark the plumb line "
                           "again.")]
    elif abs(plane.roll_deg) > 3.0 and not find.along_line:
        return [Notice("vertical-roll", f"The board's edge leans {abs(plane.roll_deg):.1f} degrees from the picture's "
                       "vertical and was taken for gravity's.", "If the board is not level, a fall is "
                       f"{100 * (1 - np.cos(np.radians(plane.roll_deg))):.2f} % short and moves sideways.",
                       "Level the board, or hang a plumb line and give datum.plumb_px.")]
    return []
