"""A phone camera: where a point of the world is seen, in which row, at which moment, and how light becomes grey levels.

World: x to the right, y away from the camera, z up [m]. Camera: x to the right, y down, z forward. Pictures are UPRIGHT,
(column, row) floats with (0, 0) the centre of the top-left pixel; `quarter_turns` and `mirrored` say how the sensor's own,
stored rows lie in that upright picture, and only the order of reading (the rolling shutter) and the file depend on them.

Lens distortion follows D. C. Brown, "Close-range camera calibration", Photogrammetric Engineering 37, 855 (1971), in the
parameter order that is common use: k1, k2, p1, p2, k3.
"""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Camera", "Flicker", "Sensor", "Shake", "truth_pixels", "turned"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Flicker:
    """Lamp light that swings at twice the mains frequency: 1 + depth cos(2 pi 2 mains t + phase).

    Attributes
    ----------
    mains_hz : float
        Mains frequency [Hz].
    depth : float
        Half of the swing over the mean, 0 to 1.
    phase_rad : float
        Phase at t = 0 [rad].
    """

    mains_hz: float = 50.0
    depth: float = 0.0
    phase_rad: float = 0.0

    def gain(self, t_s: ArrayLike, exposure_s: float) -> Floats:
        """Mean light over an exposure centred on `t_s`, relative to the steady lamp."""
        omega = 4 * np.pi * self.mains_hz
        smear = np.sinc(omega * exposure_s / (2 * np.pi))  # NumPy's sinc holds the pi
        swing: Floats = np.cos(omega * np.asarray(t_s, dtype=float) + self.phase_rad)
        light: Floats = 1.0 + self.depth * smear * swing
        return light


@dataclass(frozen=True, slots=True)
class Shake:
    """Small turns of a camera that is not held still, smooth in time and zero at t = 0.

    Each of the three angles is a sum of sines with random frequencies below `bandwidth_hz` and random phases, scaled to the
    stated RMS about its mean; what it is at t = 0 is then taken off, so that the camera's stated attitude is that of t = 0.

    Attributes
    ----------
    rms_px : float
        RMS wander of the picture's centre, each of column and row [px].
    rms_roll_deg : float
        RMS turn about the optical axis [degree].
    bandwidth_hz : float
        Highest frequency [Hz].
    seed : int
        Of the random path.
    """

    rms_px: float = 0.0
    rms_roll_deg: float = 0.0
    bandwidth_hz: float = 4.0
    seed: int = 0

    def angles(self, t_s: ArrayLike, focal_px: float) -> Floats:
        """Turn about the camera's own x, y and z axes at times `t_s`: (..., 3) [rad]."""
        t = np.asarray(t_s, dtype=float)[..., None, None]
        rng = np.random.default_rng(self.seed)
        waves = 8
        frequency = rng.uniform(0.1, 1.0, (3, waves)) * self.bandwidth_hz
        phase = rng.uniform(0, 2 * np.pi, (3, waves))
        weight = rng.uniform(0.5, 1.0, (3, waves)) / frequency**0.5
        weight *= np.sqrt(2 / (weight**2).sum(axis=1, keepdims=True))
        path: Floats = (weight * (np.sin(2 * np.pi * frequency * t + phase) - np.sin(phase))).sum(axis=-1)
        scale = np.array([self.rms_px / focal_px, self.rms_px / focal_px, np.deg2rad(self.rms_roll_deg)])
        turns: Floats = path * scale
        return turns


@dataclass(frozen=True, slots=True)
class Sensor:
    """How linear light becomes grey levels.

    Attributes
    ----------
    full_well_e : float
        Electrons at white (linear light 1). Shot noise is the root of the count; at mid grey of an 8-bit picture
        1500 electrons give about 2 grey levels. Infinite: no noise.
    read_e : float
        Read noise [electrons].
    transfer : str
        "srgb" (IEC 61966-2-1) or "linear".
    sharpen : float
        Unsharp masking done by the phone: the share of the difference to a 1.2 px Gaussian that is added; 0 is none.
    """

    full_well_e: float = 3000.0
    read_e: float = 6.0
    transfer: str = "srgb"
    sharpen: float = 0.0

    def __post_init__(self) -> None:
        if self.transfer not in ("srgb", "linear"):
            raise ValueError(f'Sensor.transfer: expected "srgb" or "linear", got {self.transfer!r}.')

    def encode(self, light: ArrayLike) -> Floats:
        """Signal 0..1 of linear light 0..1; what is outside is clipped."""
        x: Floats = np.clip(np.asarray(light, dtype=float), 0.0, 1.0)
        if self.transfer == "linear":
            return x
        y: Floats = np.where(x <= 0.0031308, 12.92 * x, 1.055 * x ** (1 / 2.4) - 0.055)
        return y

    def decode(self, signal: ArrayLike) -> Floats:
        """Linear light 0..1 of a signal 0..1: the inverse of `encode`."""
        y: Floats = np.clip(np.asarray(signal, dtype=float), 0.0, 1.0)
        if self.transfer == "linear":
            return y
        x: Floats = np.where(y <= 0.04045, y / 12.92, ((y + 0.055) / 1.055) ** 2.4)
        return x


@dataclass(frozen=True, slots=True)
class Camera:
    """A phone on a tripod.

    Attributes
    ----------
    width, height : int
        Of the UPRIGHT picture [px]. The stored picture is turned, see `quarter_turns` and `stored_size`.
    fx, fy, cx, cy : float
        Focal lengths and principal point, upright picture [px].
    k1, k2, p1, p2, k3 : float
        Brown's lens distortion, upright picture.
    position_m : tuple of 3 floats
        Place of the lens in the world [m]; before the plane of motion y is negative.
    yaw_deg, pitch_deg, roll_deg : float
        Looks to the right, looks up, is turned clockwise as seen from behind it (the picture's content turns
        counter-clockwise) [degree]; yaw is done first, then pitch, then roll.
    fps : float
        True frame rate [1/s].
    exposure_s : float
        Of each row [s].
    readout_s : float
        First to last STORED row, mid-exposure to mid-exposure [s]; negative when the last row is read first.
    quarter_turns : int
        Clockwise quarter turns, 0 to 3, that bring the stored picture upright (the file's rotation tag).
    mirrored : bool
        The stored picture is mirrored left-right before those turns.
    blur_px : float
        Standard deviation of the lens' Gaussian point spread [px], at least 0.41.
    vignetting : float
        Share of light lost at the picture's corner, quadratic in the distance from the principal point.
    exposure : float
        Factor from radiance (albedo times light) to sensor light, 1 being white.
    sensor, shake, flicker
        See their classes; None: none.
    """

    width: int = 720
    height: int = 1280
    fx: float = 1150.0
    fy: float = 1150.0
    cx: float = 359.5
    cy: float = 639.5
    k1: float = 0.0
    k2: float = 0.0
    p1: float = 0.0
    p2: float = 0.0
    k3: float = 0.0
    position_m: tuple[float, float, float] = (0.0, -2.0, 0.0)
    yaw_deg: float = 0.0
    pitch_deg: float = 0.0
    roll_deg: float = 0.0
    fps: float = 240.0
    exposure_s: float = 0.0005
    readout_s: float = 0.004
    quarter_turns: int = 0
    mirrored: bool = False
    blur_px: float = 0.7
    vignetting: float = 0.0
    exposure: float = 1.0
    sensor: Sensor = field(default_factory=Sensor)
    shake: Shake | None = None
    flicker: Flicker | None = None

    def __post_init__(self) -> None:
        if self.quarter_turns not in (0, 1, 2, 3):
            raise ValueError(f"Camera.quarter_turns: expected 0, 1, 2 or 3, got {self.quarter_turns!r}.")
        if self.blur_px < 0.41:
            raise ValueError(f"Camera.blur_px: expected at least 0.41 px, got {self.blur_px}; less would alias.")
        for name in ("width", "height", "fx", "fy", "fps", "exposure_s", "exposure"):
            if not getattr(self, name) > 0:
                raise ValueError(f"Camera.{name}: expected a positive number, got {getattr(self, name)!r}.")

    # --- geometry -----------------------------------------------------------------------------------------------

    @property
    def stored_size(self) -> tuple[int, int]:
        """Width and height of the picture as stored [px]."""
        return (self.height, self.width) if self.quarter_turns % 2 else (self.width, self.height)

    @property
    def rotation(self) -> Floats:
        """(3, 3), world axes to camera axes, without shake."""
        yaw, pitch, roll = np.deg2rad([self.yaw_deg, self.pitch_deg, self.roll_deg])
        cy, sy, cp, sp, cr, sr = np.cos(yaw), np.sin(yaw), np.cos(pitch), np.sin(pitch), np.cos(roll), np.sin(roll)
        base = np.array([[1.0, 0, 0], [0, 0, -1.0], [0, 1.0, 0]])
        by_yaw = np.array([[cy, 0, -sy], [0, 1, 0], [sy, 0, cy]])
        by_pitch = np.array([[1, 0, 0], [0, cp, sp], [0, -sp, cp]])
        by_roll = np.array([[cr, sr, 0], [-sr, cr, 0], [0, 0, 1]])
        turned: Floats = by_roll @ by_pitch @ by_yaw @ base
        return turned

    def shake_angles(self, t_s: ArrayLike) -> Floats:
        """Turn of the camera at times `t_s` about its own axes: (..., 3) [rad]; zeros without shake."""
        if self.shake is None:
            return np.zeros((*np.shape(t_s), 3))
        return self.shake.angles(t_s, (self.fx + self.fy) / 2)

    def to_camera(self, points_m: ArrayLike, t_s: ArrayLike | None = None) -> Floats:
        """World points (..., 3) in camera axes [m], with the shake of times `t_s` (broadcast) where given."""
        p: Floats = (np.asarray(points_m, dtype=float) - np.asarray(self.position_m)) @ self.rotation.T
        if t_s is None or self.shake is None:
            return p
        return turned(p, -self.shake_angles(t_s))

    def project(self, points_m: ArrayLike, t_s: ArrayLike | None = None) -> Floats:
        """Where world points are seen.

        Parameters
        ----------
        points_m : (..., 3) array_like
            World points [m].
        t_s : (...) array_like, optional
            Time of each [s], for the camera's shake; absent: the camera stands as stated.

        Returns
        -------
        (..., 2) array
            Column and row in the upright picture [px]; NaN for points that are not before the lens.
        """
        return self.pixels(self.to_camera(points_m, t_s))

    def pixels(self, points_c: ArrayLike) -> Floats:
        """Upright pixels (..., 2) of points (..., 3) in camera axes; NaN where z <= 0."""
        p = np.asarray(points_c, dtype=float)
        z = np.where(p[..., 2] > 0, p[..., 2], np.nan)
        return self.distort(p[..., :2] / z[..., None])

    def distort(self, xy: ArrayLike) -> Floats:
        """Upright pixels (..., 2) of ideal directions (x/z, y/z) (..., 2)."""
        u = np.asarray(xy, dtype=float)
        x, y = u[..., 0], u[..., 1]
        r2 = x * x + y * y
        radial = 1 + r2 * (self.k1 + r2 * (self.k2 + r2 * self.k3))
        xd = x * radial + 2 * self.p1 * x * y + self.p2 * (r2 + 2 * x * x)
        yd = y * radial + self.p1 * (r2 + 2 * y * y) + 2 * self.p2 * x * y
        return np.stack([self.fx * xd + self.cx, self.fy * yd + self.cy], axis=-1)

    def undistort(self, points_px: ArrayLike) -> Floats:
        """Ideal directions (x/z, y/z) (..., 2) of upright pixels (..., 2), by Newton's method to 1e-12.

        Raises
        ------
        ValueError
            The distortion folds the picture over within reach, so that there is no inverse.
        """
        p = np.asarray(points_px, dtype=float)
        u = (p - [self.cx, self.cy]) / [self.fx, self.fy]
        step = 1e-6
        dx, dy = np.array([step, 0.0]), np.array([0.0, step])
        for _ in range(30):
            f = self.distort(u) - p
            jx = (self.distort(u + dx) - self.distort(u - dx)) / (2 * step)
            jy = (self.distort(u + dy) - self.distort(u - dy)) / (2 * step)
            det = jx[..., 0] * jy[..., 1] - jy[..., 0] * jx[..., 1]
            move = np.stack(
                [f[..., 0] * jy[..., 1] - jy[..., 0] * f[..., 1], jx[..., 0] * f[..., 1] - f[..., 0] * jx[..., 1]],
                axis=-1,
            )
            u = u - move / det[..., None]
            if np.nanmax(np.abs(f), initial=0.0) < 1e-9 and self._unfolded(u):
                return u
        raise ValueError("Camera: the lens distortion has no inverse inside the picture; use smaller k1, k2, k3.")

    def _unfolded(self, ideal: Floats) -> bool:
        """Whether the radial distortion grows outwards as far as these ideal directions: then Newton found the right branch."""
        r2 = np.linspace(0, float(np.nanmax((ideal**2).sum(axis=-1), initial=0.0)), 200)
        return bool((1 + r2 * (3 * self.k1 + r2 * (5 * self.k2 + r2 * 7 * self.k3)) > 0).all())

    def rays(self, points_px: ArrayLike) -> Floats:
        """World directions (..., 3) of upright pixels, of depth 1 along the optical axis, without shake."""
        u = self.undistort(points_px)
        directions: Floats = np.concatenate([u, np.ones_like(u[..., :1])], axis=-1) @ self.rotation
        return directions

    # --- time ---------------------------------------------------------------------------------------------------

    def frame_times(self, count: int) -> Floats:
        """Mid-exposure of stored row 0 of frames 0 to count - 1 at the true rate: (count,) [s]."""
        return np.arange(count) / self.fps

    def stored_row(self, points_px: ArrayLike) -> Floats:
        """Stored row (...) in which upright pixels (..., 2) lie; a float, also outside the picture."""
        p = np.asarray(points_px, dtype=float)
        column, row = p[..., 0], p[..., 1]
        by_turns: list[Floats] = [row, self.width - 1 - column, self.height - 1 - row, column]
        return by_turns[self.quarter_turns]  # mirroring left-right, as stored, leaves rows where they are

    def delay(self, points_px: ArrayLike) -> Floats:
        """Mid-exposure of the row of upright pixels (..., 2) after that of stored row 0 [s]."""
        return self.readout_s * self.stored_row(points_px) / (self.stored_size[1] - 1)

    # --- light --------------------------------------------------------------------------------------------------

    def falloff(self) -> NDArray[np.float32]:
        """(height, width), share of light that vignetting leaves."""
        x = (np.arange(self.width) - self.cx)[None, :]
        y = (np.arange(self.height) - self.cy)[:, None]
        corner2 = max(self.cx, self.width - 1 - self.cx) ** 2 + max(self.cy, self.height - 1 - self.cy) ** 2
        return (1 - self.vignetting * (x * x + y * y) / corner2).astype(np.float32)

    def turn_to_stored(self, upright: NDArray[np.generic]) -> NDArray[np.generic]:
        """The picture as stored, of an upright picture (height, width, ...)."""
        stored = np.rot90(upright, self.quarter_turns)  # counter-clockwise: the inverse of what the tag asks
        return stored[:, ::-1] if self.mirrored else stored


def turned(vectors: Floats, angles: Floats) -> Floats:
    """Vectors (..., 3) turned by rotation vectors (..., 3) [rad]: Rodrigues' formula."""
    angle = np.linalg.norm(angles, axis=-1, keepdims=True)
    axis = angles / np.maximum(angle, 1e-300)
    along = (axis * vectors).sum(axis=-1, keepdims=True)
    result: Floats = vectors * np.cos(angle) + np.cross(axis, vectors) * np.sin(angle) + axis * along * (1 - np.cos(angle))
    return result


def truth_pixels(
    camera: Camera, path: Callable[[Floats], ArrayLike], frame_s: ArrayLike, *, tolerance_s: float = 1e-10
) -> tuple[Floats, Floats]:
    """Where and when each frame sees a moving point: the rolling shutter's fixed point.

    Parameters
    ----------
    camera : Camera
    path : callable
        World places (m, 3) [m] of the point at times (m,) [s], the i-th for the i-th frame.
    frame_s : (m,) array_like
        Mid-exposure of stored row 0 of each frame [s].
    tolerance_s : float
        Change of time at which the iteration stops [s].

    Returns
    -------
    px : (m, 2) array
        Upright pixel in which the point is seen at mid-exposure of its own row, with the camera's shake; NaN where the point
        is behind the lens.
    t_s : (m,) array
        That moment [s].

    Raises
    ------
    ValueError
        No fixed point: the point runs as fast as the rows are read, and the frame sees it smeared or not at all.
    """
    start = np.atleast_1d(np.asarray(frame_s, dtype=float))
    t = start.copy()
    for _ in range(60):
        px = camera.project(path(t), t)
        new = start + camera.delay(px)
        change = np.abs(new - t)
        t = np.where(np.isfinite(new), new, t)
        if not (change > tolerance_s).any():  # NaN counts as settled
            return camera.project(path(t), t), t
    worst = int(np.nanargmax(change))
    raise ValueError(f"truth_pixels: no moment found at which frame {worst} sees the point; it outruns the readout.")
