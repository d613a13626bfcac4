"""Round things painted in linear light: cover and shading of beads, bars and balls on a canvas of one moment.

Shapes have a soft edge of 0.5 px standard deviation, which stands for the pixel's own square and a part of the lens' blur: sampled
at pixel centres such a shape keeps its place to a few thousandths of a pixel, without supersampling.
"""

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from sample_clips.camera import Camera
from sample_clips.moving import Ball, LineStyle
from sample_clips.pieces import Beads, Line
from sample_clips.rolling import Seen
from sample_clips.scenery import Light

__all__ = ["EDGE_PX", "Canvas", "Shade", "paint_balls", "paint_beads", "paint_line"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Flags = NDArray[np.bool_]

EDGE_PX = 0.5  # standard deviation of the soft edge with which shapes are drawn: the pixel's own square and part of the lens
_EDGE_REACH = EDGE_PX * 5**0.5  # a smooth step over plus and minus w has standard deviation w / sqrt(5)


class Shade(NamedTuple):
    """The lamp in camera axes, for round things."""

    towards: Floats  # (3,)
    ambient: float
    lamp: float

    @classmethod
    def of(cls, light: Light, camera: Camera) -> "Shade":
        return cls(camera.rotation @ light.direction, light.ambient, light.lamp)

    def on(self, qx: Singles, qy: Singles, albedo: Singles, specular: float, shininess: float) -> Singles:
        """Radiance where the surface's normal has parts qx, qy across the line of sight; those beyond 1 are drawn in."""
        size2 = qx * qx + qy * qy
        shrink = 1 / np.sqrt(np.maximum(size2, 1.0))
        qx, qy = (qx * shrink).astype(np.float32), (qy * shrink).astype(np.float32)
        towards_us = np.sqrt(np.maximum(1 - np.minimum(size2, 1.0), 0.0))
        lx, ly, lz = (np.float32(v) for v in self.towards)
        lambert = np.maximum(qx * lx + qy * ly - towards_us * lz, 0)
        light = albedo * (np.float32(self.ambient) + np.float32(self.lamp) * lambert)
        if specular > 0:
            half = self.towards - np.array([0, 0, 1.0])  # mid-way between the lamp and us, at -z
            hx, hy, hz = (np.float32(v) for v in half / max(float(np.linalg.norm(half)), 1e-9))
            facing = np.maximum(qx * hx + qy * hy - towards_us * hz, 0)
            light = light + np.float32(self.lamp * specular) * facing ** np.float32(shininess)
        shaded: Singles = light
        return shaded


def _step(x: Singles) -> Singles:
    """Smooth step from 0 to 1 over the soft edge: how much of what lies below x."""
    u = np.clip(x * np.float32(0.5 / _EDGE_REACH) + np.float32(0.5), 0, 1)
    smooth: Singles = u * u * (3 - 2 * u)
    return smooth


def _soft(radius: Singles, distance: Singles) -> Singles:
    """Cover of a round bar of this radius at this distance from its axis; exact for lines, also those thinner than a pixel."""
    cover: Singles = _step(radius - distance) - _step(-radius - distance)
    return cover


class Canvas:
    """A window of the picture in which cover and light of one moment are summed, and the mean over moments is kept."""

    def __init__(self, window: tuple[slice, slice], front: Singles, depth_m: Singles) -> None:
        self.row0, self.column0 = window[0].start, window[1].start
        self.front, self.behind = front[window], depth_m[window]
        self.shape = self.front.shape
        self.cover, self.glow = np.zeros(self.shape), np.zeros(self.shape)
        self.moment_cover, self.moment_glow = np.zeros(self.shape), np.zeros(self.shape)

    def add(self, column: NDArray[np.intp], row: NDArray[np.intp], cover: Singles, light: Singles, depth: Singles) -> None:
        """Paint places of equal shape; what lies behind things of the still scene is held back."""
        i, j = row - self.row0, column - self.column0
        keep = (cover > 0) & (i >= 0) & (i < self.shape[0]) & (j >= 0) & (j < self.shape[1])
        i, j, cover, light, depth = i[keep], j[keep], cover[keep], light[keep], depth[keep]
        cover = cover * (1 - np.where(depth > self.behind[i, j], self.front[i, j], np.float32(0)))
        flat = i * self.shape[1] + j
        size = self.shape[0] * self.shape[1]
        self.moment_cover += np.bincount(flat, cover, size).reshape(self.shape)
        self.moment_glow += np.bincount(flat, cover * light, size).reshape(self.shape)

    def close_moment(self, share: float) -> None:
        """Add this moment with its share of the exposure; where things overlap, they share the pixel."""
        over = np.maximum(self.moment_cover, 1.0)
        self.cover += share * (self.moment_cover / over)
        self.glow += share * (self.moment_glow / over)
        self.moment_cover[...] = 0
        self.moment_glow[...] = 0


def _patch(middle: Floats, reach: float) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Columns and rows (m, p, p) of the pixels within reach of each of the places (m, 2)."""
    half = int(np.ceil(reach + 0.5))
    around = np.arange(-half, half + 1)
    centre = np.rint(middle).astype(np.intp)
    column = np.broadcast_to(centre[:, 0, None, None] + around[None, None, :], (middle.shape[0], around.size, around.size))
    row = np.broadcast_to(centre[:, 1, None, None] + around[None, :, None], column.shape)
    return column, row


def _each(values: Floats) -> Singles:
    """(m,) as (m, 1, 1) singles."""
    column: Singles = np.asarray(values, dtype=np.float32)[:, None, None]
    return column


def paint_beads(canvas: Canvas, beads: Beads, seen: Seen, camera: Camera, shade: Shade, style: LineStyle) -> None:
    near = seen.shown & _holds(canvas, seen.px)
    if not near.any():
        return
    px, depth = seen.px[near], seen.depth[near]
    radius = beads.radius_m[near] * camera.fx / depth
    column, row = _patch(px, float(radius.max()) + _EDGE_REACH)
    dx = (column - px[:, 0, None, None]).astype(np.float32)
    dy = (row - px[:, 1, None, None]).astype(np.float32)
    r = _each(radius)
    cover = _soft(r, np.hypot(dx, dy))
    light = shade.on(dx / r, dy / r, _each(beads.albedo[near]), style.specular, style.shininess)
    canvas.add(column, row, cover, light, np.broadcast_to(_each(depth), cover.shape))


def _holds(canvas: Canvas, px: Floats, margin: float = 40.0) -> Flags:
    """Whether places lie in the window or near it."""
    height, width = canvas.shape
    held: Flags = (np.abs(px[:, 0] - canvas.column0 - width / 2) < width / 2 + margin) & (
        np.abs(px[:, 1] - canvas.row0 - height / 2) < height / 2 + margin
    )
    return held


def paint_line(canvas: Canvas, line: Line, seen: Seen, camera: Camera, shade: Shade, style: LineStyle) -> None:
    """Round bars between neighbouring points. At a bend two bars share the pixels along its bisector, so that none is painted
    twice or left out; a free end is round, one cut off by the line's own visibility is square."""
    a, b = seen.px[:-1], seen.px[1:]
    along = b - a
    length = np.hypot(along[:, 0], along[:, 1])
    unit = along / np.maximum(length, 1e-9)[:, None]
    drawn = line.joined & seen.shown[:-1] & seen.shown[1:] & (_holds(canvas, a) | _holds(canvas, b))
    drawn &= length < 200  # a piece torn apart by a jump in the motion is not a line
    if not drawn.any():
        return
    before, after = np.r_[False, line.joined[:-1]], np.r_[line.joined[1:], False]
    at_a = np.where(before[:, None], unit + np.r_[unit[:1], unit[:-1]], 0.0)[drawn]
    at_b = np.where(after[:, None], unit + np.r_[unit[1:], unit[-1:]], 0.0)[drawn]
    free_a, free_b = ~before[drawn], ~after[drawn]

    a, unit, length = a[drawn], unit[drawn], length[drawn]
    depth = (seen.depth[:-1][drawn] + seen.depth[1:][drawn]) / 2
    per_m = camera.fx / depth
    thick = max(style.mark_radius_m, 0.0) if line.s_m is not None else 0.0
    reach = float((length / 2 + np.maximum(line.radius_m[drawn], thick) * per_m).max()) + _EDGE_REACH
    column, row = _patch(a + unit * (length / 2)[:, None], reach)
    x = (column - a[:, 0, None, None]).astype(np.float32)
    y = (row - a[:, 1, None, None]).astype(np.float32)
    ux, uy, long = _each(unit[:, 0]), _each(unit[:, 1]), _each(length)
    past_a = x * _each(at_a[:, 0]) + y * _each(at_a[:, 1]) >= 0
    xb, yb = x - ux * long, y - uy * long
    past_b = xb * _each(at_b[:, 0]) + yb * _each(at_b[:, 1]) >= 0
    mine = (past_a | free_a[:, None, None]) & (~past_b | free_b[:, None, None])
    reached: Singles = np.clip(x * ux + y * uy, 0, long)
    dx, dy = x - reached * ux, y - reached * uy

    radius, albedo = _each(line.radius_m[drawn] * per_m), _each(line.albedo[drawn])
    if line.s_m is not None and style.mark_spacing_m > 0:
        s0, s1 = line.s_m[:-1][drawn], line.s_m[1:][drawn]
        away = style.from_mark((s0[:, None, None] + reached * _each((s1 - s0) / np.maximum(length, 1e-9))).astype(float))
        inside = (style.mark_length_m / 2 - np.abs(away)) * np.median(per_m) + 0.5
        painted = np.clip(inside, 0, 1).astype(np.float32)
        albedo = albedo + painted * (np.float32(style.mark_albedo) - albedo)
        if style.mark_radius_m > 0:
            radius = radius + painted * (_each(style.mark_radius_m * per_m) - radius)
    cover = np.where(mine, _soft(radius, np.hypot(dx, dy)), np.float32(0))
    firm = np.maximum(radius, np.float32(0.3))
    light = shade.on(dx / firm, dy / firm, albedo, line.specular, line.shininess)
    canvas.add(column, row, cover, light, np.broadcast_to(_each(depth), cover.shape))


def paint_balls(canvas: Canvas, balls: Sequence[Ball], seen: Seen, shade: Shade) -> None:
    """Spheres as the ellipses their outlines are."""
    for n, ball in enumerate(balls):
        four = seen.px[4 * n : 4 * n + 4]
        centre = four.mean(axis=0)
        if not seen.shown[4 * n] or not _holds(canvas, centre[None], 200.0)[0]:
            continue
        axes = np.stack([four[0] - four[1], four[2] - four[3]], axis=1) / 2  # columns: half axes in pixels
        size = float(np.sqrt(abs(np.linalg.det(axes))))
        column, row = _patch(centre[None], float(np.abs(axes).sum(axis=1).max()) + _EDGE_REACH)
        offset = np.stack([column - centre[0], row - centre[1]], axis=-1)
        q = offset @ np.linalg.inv(axes).T @ (axes / np.linalg.norm(axes, axis=0)).T
        qx, qy = q[..., 0].astype(np.float32), q[..., 1].astype(np.float32)
        distance = np.hypot(qx, qy) * np.float32(size)
        cover = _soft(np.full_like(distance, size), distance)
        albedo = np.full_like(distance, ball.albedo)
        light = shade.on(qx, qy, albedo, ball.specular, 20.0)
        depth = np.full_like(distance, seen.depth[4 * n : 4 * n + 4].mean())
        canvas.add(column, row, cover, light, depth)
