"""What moves in one frame, drawn with motion blur and rolling shutter, and the shadow it throws on the wall.

The exposure is cut into moments so close that nothing moves more than 0.4 px between two; at each moment every piece is painted
where its own row sees it (`rolling.py`), and the moments are averaged in linear light.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from sample_clips.camera import Camera
from sample_clips.moving import Ball, LineStyle, Motion
from sample_clips.paint import Canvas, Shade, paint_ball, paint_beads, paint_line, sphere_outline
from sample_clips.pieces import Beads, Line, gather
from sample_clips.rolling import Knots, Seen, Track, row_shear, seen_by, watch
from sample_clips.scenery import Scenery

__all__ = ["Drawn", "draw"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]

_STEP_PX = 0.4  # nothing moves further between two moments of the exposure
_MOST_MOMENTS = 64
_COARSE = 4  # pixels to a cell of the shadow's picture


@dataclass(frozen=True, slots=True, eq=False)
class Drawn:
    """What moves in one frame.

    Attributes
    ----------
    window : tuple of 2 slices
        Rows and columns of the picture that the next two cover.
    cover : (h, w) float32
        Share of light from behind that is held up, mean over the exposure.
    glow : (h, w) float32
        Radiance added.
    shade : (h/4, w/4) float32 or None
        Share of the lamp taken from the wall, of the whole picture in cells of 4 x 4 pixels.
    """

    window: tuple[slice, slice]
    cover: Singles
    glow: Singles
    shade: Singles | None


def draw(
    camera: Camera,
    scenery: Scenery,
    front: Singles,
    depth_m: Singles,
    motion: Motion,
    style: LineStyle,
    frame_s: float,
    *,
    knot_s: float = 0.001,
) -> Drawn | None:
    """Draw what moves in one frame.

    Parameters
    ----------
    camera, scenery, style
    front, depth_m : (h, w) float32
        Of the still scene as this frame sees it: what is further than `depth_m` is hidden by the share `front`.
    motion : Motion
    frame_s : float
        Mid-exposure of stored row 0 [s].
    knot_s : float
        Longest step between the times at which the motion is asked for [s].

    Returns
    -------
    Drawn or None
        None when nothing that moves is in the picture.
    """
    knots = Knots.across(camera, frame_s, knot_s)
    lines, beads, balls, centres = gather(camera, knots, motion, style)
    tracks = [watch(camera, knots, line.points_m, line.shown) for line in lines]
    if beads is not None:
        tracks.append(watch(camera, knots, beads.points_m, beads.shown))
    if balls:
        tracks.append(watch(camera, knots, centres, np.ones(centres.shape[:2], dtype=bool)))
    if not tracks:
        return None
    window, speed = _extent(camera, knots, tracks)
    if window is None:
        return None
    moments = int(np.clip(np.ceil(speed * camera.exposure_s / _STEP_PX), 1, _MOST_MOMENTS))
    canvas = Canvas(window, front, depth_m)
    shade = Shade.of(scenery.light, camera)
    for k in range(moments):
        offset = camera.exposure_s * ((k + 0.5) / moments - 0.5)
        seen = [seen_by(camera, knots, track, frame_s, offset) for track in tracks]
        for line, at in zip(lines, seen, strict=False):
            paint_line(canvas, line, at, camera, shade, style)
        if beads is not None:
            paint_beads(canvas, beads, seen[len(lines)], camera, shade, style)
        if balls:  # they hide the line's end that is tied to them
            canvas.close_layer()
            _paint_seen_balls(canvas, camera, knots, balls, centres, tracks[-1], seen[-1], shade)
        canvas.close_moment(1 / moments)
    cast = _cast_shadow(camera, scenery, knots, frame_s, lines, beads, balls, centres)
    return Drawn(window, canvas.cover.astype(np.float32), canvas.glow.astype(np.float32), cast)


def _paint_seen_balls(
    canvas: Canvas,
    camera: Camera,
    knots: Knots,
    balls: Sequence[Ball],
    centres: Floats,
    track: Track,
    seen: Seen,
    shade: Shade,
) -> None:
    """Paint each ball with the outline it has when its centre is seen, sheared by the rows' different times."""
    places = knots.cubic(centres, seen.t)
    drift = row_shear(camera, knots, track, seen)
    for n, ball in enumerate(balls):
        if seen.shown[n]:
            beside, axes = sphere_outline(camera, places[n], ball.radius_m, float(seen.t[n]))
            paint_ball(canvas, ball, seen.px[n] + drift[n] @ beside, drift[n] @ axes, float(seen.depth[n]), shade)


def _extent(camera: Camera, knots: Knots, tracks: Sequence[Track]) -> tuple[tuple[slice, slice] | None, float]:
    """Window of the picture that the tracks cross while shown, and their largest speed in it [px/s]."""
    low, high, speed = np.array([np.inf, np.inf]), np.array([-np.inf, -np.inf]), 0.0
    margin = 40.0
    for track in tracks:
        inside = track.shown & (track.px > -margin).all(axis=-1)
        inside &= (track.px < np.array([camera.width, camera.height]) + margin).all(axis=-1)
        if not inside.any():
            continue
        low, high = np.minimum(low, track.px[inside].min(axis=0)), np.maximum(high, track.px[inside].max(axis=0))
        moved = np.linalg.norm(np.diff(track.px, axis=0), axis=-1)[inside[1:] & inside[:-1]]
        speed = max(speed, float(moved.max(initial=0.0)) / knots.step)
    if not np.isfinite(low).all():
        return None, 0.0
    first = np.clip(np.floor(low) - margin, 0, None).astype(int)
    last = np.clip(np.ceil(high) + margin, None, [camera.width, camera.height]).astype(int)
    if (last <= first).any():
        return None, 0.0
    return (slice(first[1], last[1]), slice(first[0], last[0])), speed


def _cast_shadow(
    camera: Camera,
    scenery: Scenery,
    knots: Knots,
    frame_s: float,
    lines: Sequence[Line],
    beads: Beads | None,
    balls: Sequence[Ball],
    centres: Floats,
) -> Singles | None:
    """Soft shadow on the wall at mid-exposure: each point leaves its area there, blurred by the lamp's size and its throw."""
    towards = scenery.light.direction
    if towards[1] >= -0.05:
        return None
    points = [(line.points_m, line.shown, line.area_m2) for line in lines if line.area_m2.any()]
    if beads is not None:
        points.append((beads.points_m, beads.shown, beads.area_m2))
    if balls:
        points.append((centres, np.ones(centres.shape[:2], dtype=bool), np.pi * np.array([b.radius_m for b in balls]) ** 2))
    shape = (camera.height // _COARSE, camera.width // _COARSE)
    dark, throws, per_m = np.zeros(shape, dtype=np.float32), [], camera.fx
    for places, shown, area in points:
        throw = (scenery.wall.y_m - places[..., 1]) / -towards[1]
        track = watch(camera, knots, places - throw[..., None] * towards, shown)
        seen = seen_by(camera, knots, track, frame_s, 0.0)
        size = area * (camera.fx / seen.depth) ** 2 / _COARSE**2
        _deposit(dark, (seen.px + 0.5) / _COARSE - 0.5, np.where(seen.shown, size, 0.0))
        throws.append(float(throw.mean()))
        per_m = camera.fx / float(np.median(seen.depth))
    if not throws:
        return None
    spread = scenery.light.softness * max(float(np.mean(throws)), 0.0) / 2 * per_m / _COARSE
    biggest = max([b.radius_m for b in balls], default=0.0) * per_m / _COARSE / 2  # a ball is laid down as one point
    return np.minimum(cv2.GaussianBlur(dark, (0, 0), max(spread, biggest, 0.8)), np.float32(1))


def _deposit(picture: Singles, px: Floats, weight: Floats) -> None:
    """Add weights (m,) at places (m, 2), shared by the four cells around each."""
    height, width = picture.shape
    cell = np.floor(px)
    part = px - cell
    for right in (0, 1):
        for down in (0, 1):
            i, j = cell[:, 1].astype(np.intp) + down, cell[:, 0].astype(np.intp) + right
            keep = (i >= 0) & (i < height) & (j >= 0) & (j < width)
            share = weight * np.abs(1 - right - part[:, 0]) * np.abs(1 - down - part[:, 1])
            flat = np.bincount(i[keep] * width + j[keep], share[keep], height * width)
            picture += flat.reshape(height, width).astype(np.float32)
