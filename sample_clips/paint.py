"""Round things painted in linear light: cover and shading of beads, bars and balls on a canvas of one moment.

Shapes have a soft edge, a quadratic B-spline of 0.5 px standard deviation, which stands for the pixel's own square and a part of the
lens' blur. Sums over pixels of such a spline times 1, x or x^2 are exact wherever it lies, so that without supersampling a line keeps
its light, its place and its width.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from sample_clips.camera import Camera
from sample_clips.moving import Ball, LineStyle
from sample_clips.pieces import Beads, Line
from sample_clips.rolling import Seen
from sample_clips.scenery import Light

__all__ = ["EDGE_PX", "Canvas", "Shade", "paint_ball", "paint_beads", "paint_line", "sphere_outline"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Flags = NDArray[np.bool_]

EDGE_PX = 0.5  # standard deviation of the soft edge with which shapes are drawn
_EDGE_REACH = 1.5  # and its reach: those of the quadratic B-spline


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
    """Integral of the quadratic B-spline up to x, from truncated cubes."""
    away = np.abs(x)
    outer, inner = np.maximum(np.float32(1.5) - away, 0), np.maximum(np.float32(0.5) - away, 0)
    tail = (outer * outer * outer - 3 * inner * inner * inner) * np.float32(1 / 6)
    smooth: Singles = np.where(x > 0, 1 - tail, tail)
    return smooth


def _soft(radius: Singles, distance: Singles) -> Singles:
    """Cover of a round bar of this radius at this distance from its axis; exact for lines, also those thinner than a pixel."""
    cover: Singles = _step(radius - distance) - _step(-radius - distance)
    return cover


def _round(radius: Singles, distance: Singles) -> Singles:
    """Cover of a disc of this radius at this distance from its centre.

    A soft edge on a circle adds pi EDGE^2 to its area; the radius is drawn in by as much, and the smallest discs are drawn fainter.
    """
    firm2 = np.maximum(radius * radius - np.float32(EDGE_PX**2), np.float32(0.2))
    share = np.minimum(radius * radius / (firm2 + np.float32(EDGE_PX**2)), np.float32(1))
    cover: Singles = share * _soft(np.sqrt(firm2), distance)
    return cover


class Canvas:
    """A window of the picture: things of a layer share a pixel, each layer of a moment lies over those before, moments are averaged."""

    def __init__(self, window: tuple[slice, slice], front: Singles, depth_m: Singles) -> None:
        self.row0, self.column0 = window[0].start, window[1].start
        self.front, self.behind = front[window], depth_m[window]
        self.shape = self.front.shape
        self.cover, self.glow = np.zeros(self.shape), np.zeros(self.shape)
        self.moment_cover, self.moment_glow = np.zeros(self.shape), np.zeros(self.shape)
        self.layer_cover, self.layer_glow = np.zeros(self.shape), np.zeros(self.shape)

    def add(self, column: NDArray[np.intp], row: NDArray[np.intp], cover: Singles, light: Singles, depth: Singles) -> None:
        """Paint places of equal shape; what lies behind things of the still scene is held back."""
        i, j = row - self.row0, column - self.column0
        keep = (cover > 0) & (i >= 0) & (i < self.shape[0]) & (j >= 0) & (j < self.shape[1])
        i, j, cover, light, depth = i[keep], j[keep], cover[keep], light[keep], depth[keep]
        cover = cover * (1 - np.where(depth > self.behind[i, j], self.front[i, j], np.float32(0)))
        flat = i * self.shape[1] + j
        size = self.shape[0] * self.shape[1]
        self.layer_cover += np.bincount(flat, cover, size).reshape(self.shape)
        self.layer_glow += np.bincount(flat, cover * light, size).reshape(self.shape)

    def close_layer(self) -> None:
        """Lay what was added over this moment's earlier layers."""
        over = np.maximum(self.layer_cover, 1.0)
        self.layer_cover /= over
        self.layer_glow /= over
        self.moment_cover *= 1 - self.layer_cover
        self.moment_cover += self.layer_cover
        self.moment_glow *= 1 - self.layer_cover
        self.moment_glow += self.layer_glow
        self.layer_cover[...] = 0
        self.layer_glow[...] = 0

    def close_moment(self, share: float) -> None:
        """Add this moment with its share of the exposure."""
        self.close_layer()
        self.cover += share * self.moment_cover
        self.glow += share * self.moment_glow
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
    cover = _round(r, np.hypot(dx, dy))
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
    at_a = (unit + np.r_[unit[:1], unit[:-1]])[drawn]
    at_b = (unit + np.r_[unit[1:], unit[-1:]])[drawn]
    free_a, free_b = ~before[drawn], ~after[drawn]

    a, b, unit, length = a[drawn], b[drawn], unit[drawn], length[drawn]
    depth = (seen.depth[:-1][drawn] + seen.depth[1:][drawn]) / 2
    per_m = camera.fx / depth
    thick = max(style.mark_radius_m, 0.0) if line.s_m is not None else 0.0
    reach = float((length / 2 + np.maximum(line.radius_m[drawn], thick) * per_m).max()) + _EDGE_REACH
    column, row = _patch(a + unit * (length / 2)[:, None], reach)
    x = (column - a[:, 0, None, None]).astype(np.float32)
    y = (row - a[:, 1, None, None]).astype(np.float32)
    ux, uy, long = _each(unit[:, 0]), _each(unit[:, 1]), _each(length)
    mine = (_past(column, row, a, at_a) | free_a[:, None, None]) & (~_past(column, row, b, at_b) | free_b[:, None, None])
    along_it = x * ux + y * uy
    reached = np.clip(along_it, 0, long).astype(np.float32)
    dx, dy = x - reached * ux, y - reached * uy

    radius, albedo = _each(line.radius_m[drawn] * per_m), _each(line.albedo[drawn])
    if line.s_m is not None and style.mark_spacing_m > 0:
        s0, s1 = line.s_m[:-1][drawn], line.s_m[1:][drawn]
        off = style.from_mark((s0[:, None, None] + reached * _each((s1 - s0) / np.maximum(length, 1e-9))).astype(float))
        inside = (style.mark_length_m / 2 - np.abs(off)) * np.median(per_m) + 0.5
        painted = np.clip(inside, 0, 1).astype(np.float32)
        albedo = albedo + painted * (np.float32(style.mark_albedo) - albedo)
        if style.mark_radius_m > 0:
            radius = radius + painted * (_each(style.mark_radius_m * per_m) - radius)
    away = np.hypot(dx, dy)
    cover = np.where(reached == along_it, _soft(radius, away), _round(radius, away))  # round beyond an end
    cover = np.where(mine, cover, np.float32(0))
    firm = np.maximum(radius, np.float32(0.3))  # thinner than that, shading means nothing
    qx, qy = (dx / firm).astype(np.float32), (dy / firm).astype(np.float32)
    light = shade.on(qx, qy, albedo, line.specular, line.shininess)
    canvas.add(column, row, cover, light, np.broadcast_to(_each(depth), cover.shape))


def _past(column: NDArray[np.intp], row: NDArray[np.intp], joint: Floats, normal: Floats) -> Flags:
    """Whether pixels (m, p, p) lie beyond the bisector at a joint (m, 2); the same arithmetic for both bars that meet there, so that
    a pixel on it belongs to exactly one."""
    level = joint[:, 0] * normal[:, 0] + joint[:, 1] * normal[:, 1]
    beyond: Flags = column * normal[:, 0, None, None] + row * normal[:, 1, None, None] >= level[:, None, None]
    return beyond


def sphere_outline(camera: Camera, centre_m: Floats, radius_m: float, t_s: float) -> tuple[Floats, Floats]:
    """Outline of a sphere in the picture of time `t_s`: an ellipse.

    Returns
    -------
    beside : (2,) array
        Its middle, from the picture of the sphere's centre [px]: towards the picture's edge.
    axes : (2, 2) array
        Its half axes, as columns [px].

    Notes
    -----
    The cone from the lens touches the sphere in a circle. That circle's diameter through the optical axis is seen as one axis
    of the ellipse; the diameter across it is seen as a chord a little beside the middle, shorter than the other axis.
    """
    lens, forward, right = np.asarray(camera.position_m), camera.rotation[2], camera.rotation[0]
    ray = centre_m - lens
    distance = float(np.linalg.norm(ray))
    to_it = ray / distance
    shrink = 1 - (radius_m / distance) ** 2
    radial = forward - (forward @ to_it) * to_it
    if np.linalg.norm(radial) < 1e-6:
        radial = right - (right @ to_it) * to_it
    radial /= np.linalg.norm(radial)
    across = np.cross(to_it, radial)
    middle, reach = lens + shrink * ray, radius_m * shrink**0.5
    four = middle + reach * np.array([radial, -radial, across, -across])
    px = camera.project(np.vstack([four, centre_m]), t_s)
    centre = px[:2].mean(axis=0)
    axes = np.stack([px[0] - px[1], px[2] - px[3]], axis=1) / 2
    chord = np.linalg.norm(px[2:4].mean(axis=0) - centre) / np.linalg.norm(axes[:, 0])
    axes[:, 1] /= np.sqrt(1 - chord**2)
    return centre - px[4], axes


def paint_ball(canvas: Canvas, ball: Ball, centre: Floats, axes: Floats, depth: float, shade: Shade) -> None:
    """A sphere as the ellipse that its outline is; `axes` (2, 2) are conjugate half axes, as columns [px]."""
    if not _holds(canvas, centre[None], 300.0)[0]:
        return
    size = float(np.sqrt(abs(np.linalg.det(axes))))
    column, row = _patch(centre[None], float(np.hypot(axes[:, 0], axes[:, 1]).max()) + 2 * _EDGE_REACH)
    unit = np.stack([column - centre[0], row - centre[1]], axis=-1) @ np.linalg.inv(axes).T  # within 1: covered
    distance = np.linalg.norm(unit, axis=-1).astype(np.float32) * np.float32(size)
    cover = _round(np.full_like(distance, size), distance)
    left, _, right = np.linalg.svd(axes)
    turned = (unit @ (left @ right).T).astype(np.float32)  # the same in the picture's directions, for the light
    albedo = np.full_like(distance, ball.albedo)
    light = shade.on(turned[..., 0], turned[..., 1], albedo, ball.specular, 20.0)
    canvas.add(column, row, cover, light, np.full_like(distance, depth))
