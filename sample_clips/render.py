"""From a scene in the world to the frames a phone would record of it.

The still scene (`scenery.py`) is traced once. Per frame only what moves (`drawing.py`) is drawn, in linear light, at many
moments of the exposure and each piece at the time of its own row; then come the lens' blur, lamp flicker, vignetting, noise
and the transfer curve. Nothing here knows how the line moves: it asks a `Motion`.

    camera = Camera(...)
    renderer = Renderer(camera, scenery, motion, style, frame_s=camera.frame_times(200), seed=1)
    write_clip(path, renderer.frames(), ticks, Fraction(1, 240), quarter_turns=camera.quarter_turns, mirrored=camera.mirrored)

Where to look: `camera.py` geometry, timing, sensor; `moving.py` what a motion must offer; `rolling.py` rows and their times;
`pieces.py` lines cut up; `paint.py` round things in light; `encode.py` the file.
"""

from collections.abc import Iterator, Sequence

import cv2
import numpy as np
from numpy.typing import NDArray

from sample_clips.camera import Camera, turned
from sample_clips.drawing import draw
from sample_clips.moving import LineStyle, Motion
from sample_clips.paint import EDGE_PX
from sample_clips.scenery import Scenery, trace

__all__ = ["Renderer"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]

_FINER = 3  # a shaken picture is drawn from one so many times as fine
_TABLE = 1 << 16  # steps of linear light in the transfer table: below 0.05 grey level each


class Renderer:
    """The frames a camera records of a scene.

    Parameters
    ----------
    camera : Camera
    scenery : Scenery
        What stands still.
    motion : Motion or None
        What moves; None: nothing.
    style : LineStyle
        What the line is made of.
    frame_s : sequence of float
        Mid-exposure of stored row 0 of each frame, true time [s].
    seed : int
        Of the noise: frame i has the same noise whatever was rendered before it.
    knot_s : float
        Longest step between the times at which the motion is asked for [s].
    """

    def __init__(
        self,
        camera: Camera,
        scenery: Scenery,
        motion: Motion | None,
        style: LineStyle | None = None,
        *,
        frame_s: Sequence[float] | NDArray[np.float64],
        seed: int = 0,
        knot_s: float = 0.001,
    ) -> None:
        self.camera, self.scenery, self.motion, self.style = camera, scenery, motion, style or LineStyle()
        self.frame_s = np.asarray(frame_s, dtype=float)
        self.seed, self.knot_s = seed, knot_s
        self.still = trace(scenery, camera)
        self._base = _blurred(self.still.light, camera.blur_px)
        self._level: Singles = camera.falloff() * np.float32(camera.exposure)
        rest = camera.blur_px**2 + 1 / 12 - EDGE_PX**2  # what the soft edges of drawn things leave of lens and pixel
        self._rest_px = rest**0.5 if rest > 0 else 0.0
        self._wander = _Wander(camera) if camera.shake is not None else None
        self._table = camera.sensor.encode(np.arange(_TABLE) / (_TABLE - 1)).astype(np.float32)

    def linear(self, frame_s: float) -> Singles:
        """Upright linear light (h, w) on the sensor, 1 being white, of the frame that starts at `frame_s` [s]; no noise."""
        base, direct, front, depth = self._still_at(frame_s)
        if self.motion is not None:
            drawn = draw(
                self.camera, self.scenery, front, depth, self.motion, self.style, frame_s, knot_s=self.knot_s
            )
            if drawn is not None:
                if drawn.shade is not None:
                    size = (self.camera.width, self.camera.height)
                    base = base * (1 - direct * cv2.resize(drawn.shade, size, interpolation=cv2.INTER_LINEAR))
                change = drawn.glow - drawn.cover * base[drawn.window]
                if self._rest_px > 0:
                    change = _blurred(change, self._rest_px)
                base = base.copy() if base is self._base else base
                base[drawn.window] += change
        light: Singles = base * self._level * self._lamp(frame_s)
        return light

    def frame(self, index: int, bits: int = 8) -> NDArray[np.uint8] | NDArray[np.uint16]:
        """Upright frame (h, w): uint8 of 0..255, or uint16 of 0..1023 for 10 bits."""
        light = self.linear(float(self.frame_s[index]))
        sensor = self.camera.sensor
        if np.isfinite(sensor.full_well_e):
            rng = np.random.default_rng([self.seed, index])
            sigma = np.sqrt(np.maximum(light, 0) * np.float32(sensor.full_well_e) + np.float32(sensor.read_e**2))
            light = light + sigma * rng.standard_normal(light.shape, dtype=np.float32) / np.float32(sensor.full_well_e)
        signal: Singles = self._table[np.clip(light * np.float32(_TABLE - 1) + np.float32(0.5), 0, _TABLE - 1).astype(np.uint16)]
        if sensor.sharpen > 0:
            signal = signal + np.float32(sensor.sharpen) * (signal - _blurred(signal, 1.2))
        top = 255 if bits == 8 else 1023
        level: Singles = np.clip(np.rint(signal * np.float32(top)), 0, top)
        return level.astype(np.uint8) if bits == 8 else level.astype(np.uint16)

    def frames(self, bits: int = 8) -> Iterator[NDArray[np.uint8] | NDArray[np.uint16]]:
        """All frames in turn."""
        for index in range(self.frame_s.size):
            yield self.frame(index, bits)

    def _row_times(self, frame_s: float) -> Floats:
        """Mid-exposure [s] of each pixel's row, as (h, 1) or (1, w), whichever way the rows lie."""
        along_columns = bool(self.camera.quarter_turns % 2)
        along = np.arange(self.camera.width if along_columns else self.camera.height, dtype=float)
        places = np.stack([along, 0 * along] if along_columns else [0 * along, along], axis=-1)
        times: Floats = frame_s + self.camera.delay(places)
        return times[None, :] if along_columns else times[:, None]

    def _lamp(self, frame_s: float) -> Singles | np.float32:
        """Light of the lamp over each row's exposure, relative to its mean."""
        if self.camera.flicker is None:
            return np.float32(1)
        return self.camera.flicker.gain(self._row_times(frame_s), self.camera.exposure_s).astype(np.float32)

    def _still_at(self, frame_s: float) -> tuple[Singles, Singles, Singles, Singles]:
        """Light, direct share, front and depth of the still scene, moved by the shake of each row's time."""
        still = self.still
        if self._wander is None:
            return self._base, still.direct, still.front, still.depth_m
        column, row = self._wander.source(frame_s)
        return (
            _moved(self._wander.fine(self._base), _FINER * (column + 0.5) - 0.5, _FINER * (row + 0.5) - 0.5, cv2.INTER_LINEAR),
            _moved(still.direct, column, row, cv2.INTER_LINEAR),
            _moved(still.front, column, row, cv2.INTER_LINEAR),
            _moved(still.depth_m, column, row, cv2.INTER_NEAREST),
        )


def _blurred(picture: Singles, sigma: float) -> Singles:
    return cv2.GaussianBlur(picture, (0, 0), sigma).astype(np.float32, copy=False)


def _moved(picture: Singles, column: Singles, row: Singles, how: int) -> Singles:
    return cv2.remap(picture, column, row, how, borderMode=cv2.BORDER_REPLICATE).astype(np.float32, copy=False)


class _Wander:
    """Where the pixels of a shaken picture lie in the still one: exact every 16 pixels, and straight between (to 1e-3 px).

    Light is taken from a three times finer copy by linear interpolation, which keeps places exactly and, so fine, the sharpness to a
    few per cent. OpenCV's own cubic would move what it draws by up to 0.05 px, depending on the fraction of a pixel (measured).
    """

    def __init__(self, camera: Camera) -> None:
        self.camera = camera
        rows, self.down = _spread(camera.height)
        columns, self.across = _spread(camera.width)
        self.nodes = np.stack(np.meshgrid(columns, rows), axis=-1)
        ideal = camera.undistort(self.nodes)
        self.rays = np.concatenate([ideal, np.ones_like(ideal[..., :1])], axis=-1)
        self.delay = camera.delay(self.nodes)
        self._fine: Singles | None = None

    def fine(self, base: Singles) -> Singles:
        """The finer copy, made once: the cosine series of the picture, evaluated more closely."""
        if self._fine is None:
            height, width = base.shape
            series = np.zeros((_FINER * height, _FINER * width), dtype=np.float32)
            series[:height, :width] = cv2.dct(base)
            self._fine = (_FINER * cv2.idct(series)).astype(np.float32)
        return self._fine

    def source(self, frame_s: float) -> tuple[Singles, Singles]:
        """Columns and rows (h, w) in the still picture."""
        back = turned(self.rays, self.camera.shake_angles(frame_s + self.delay))
        at = self.camera.pixels(back).astype(np.float32)
        return self._between(at[..., 0]), self._between(at[..., 1])

    def _between(self, at_nodes: Singles) -> Singles:
        return (self.down @ at_nodes @ self.across.T).astype(np.float32, copy=False)


def _spread(size: int, step: int = 16) -> tuple[Floats, Singles]:
    """Nodes (n,) that span pixels 0 to size - 1, and the matrix (size, n) that interpolates linearly between them."""
    nodes = np.arange(0, size - 1 + step, step, dtype=float)
    weights = np.maximum(0, 1 - np.abs(np.arange(size)[:, None] - nodes[None, :]) / step)
    return nodes, weights.astype(np.float32)
