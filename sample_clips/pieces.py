"""From a motion to pieces that can be followed through a frame: points with fixed labels at each knot of time.

A line is cut at fixed material coordinates (beads at multiples of the pitch, a cable every 1.6 px), a bar into short lengths, a ball
is its centre.
"""

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from sample_clips.camera import Camera
from sample_clips.moving import Ball, Bars, LineStyle, Motion, StrandLike
from sample_clips.rolling import Knots

__all__ = ["Beads", "Line", "gather"]

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

_PIECE_PX = 1.6  # length of the straight pieces of a smooth line
_ROD_PIECE_PX = 5.0  # of a straight bar, each at its own row's time


class Line(NamedTuple):
    """Points to be joined by round bars, at the knots."""

    points_m: Floats  # (k, m, 3)
    shown: Flags  # (k, m)
    joined: Flags  # (m - 1,), whether a point and its next are parts of one bar
    radius_m: Floats  # (m - 1,)
    albedo: Floats  # (m - 1,)
    specular: float
    shininess: float
    s_m: Floats | None  # (m,), where marks are to be painted
    area_m2: Floats  # (m,), what each point stands for in the shadow


class Beads(NamedTuple):
    """Balls small enough to be seen as circles, at the knots."""

    points_m: Floats  # (k, m, 3)
    shown: Flags  # (k, m)
    radius_m: Floats  # (m,)
    albedo: Floats  # (m,)
    area_m2: Floats  # (m,)


def _material(strands: Sequence[StrandLike], s: Floats) -> tuple[Floats, Flags]:
    """Places (k, m, 3) and visibility (k, m) of material coordinates s (m,); beyond the ends straight on, and not shown."""
    places, shown = np.empty((len(strands), s.size, 3)), np.empty((len(strands), s.size), dtype=bool)
    for k, strand in enumerate(strands):
        own, points, visible = np.asarray(strand.s_m, dtype=float), np.asarray(strand.points_m), np.asarray(strand.visible)
        if own[0] > own[-1]:
            own, points, visible = own[::-1], points[::-1], visible[::-1]
        if own.size < 2 or not (np.diff(own) > 0).all():
            raise ValueError("strand: s_m must run strictly one way over at least two points.")
        for axis in range(3):
            places[k, :, axis] = np.interp(s, own, points[:, axis])
        for outside, end, inner in ((s < own[0], 0, 1), (s > own[-1], -1, -2)):
            slope = (points[end] - points[inner]) / (own[end] - own[inner])
            places[k, outside] = points[end] + (s[outside] - own[end])[:, None] * slope
        slack = 1e-9 * max(1.0, float(np.abs(own).max()))
        inside = (s >= own[0] - slack) & (s <= own[-1] + slack)
        shown[k] = inside & (np.interp(s, own, visible.astype(float)) > 0.5)
    return places, shown


def _in_view(camera: Camera, knots: Knots, strands: Sequence[StrandLike]) -> tuple[float, float] | None:
    """Smallest and largest s of what is in or near the picture at the first, middle or last knot: material runs through it."""
    times = knots.times
    spans = [_span(camera, strands[k], float(times[k])) for k in (0, knots.middle, knots.number - 1)]
    seen = [span for span in spans if span is not None]
    return (min(low for low, _ in seen), max(high for _, high in seen)) if seen else None


def _span(camera: Camera, strand: StrandLike, t: float) -> tuple[float, float] | None:
    px = camera.project(strand.points_m, t)
    with np.errstate(invalid="ignore"):
        near = (np.abs(px[:, 0] - camera.width / 2) < camera.width / 2 + 60) & (
            np.abs(px[:, 1] - camera.height / 2) < camera.height / 2 + 60
        )
    if not near.any():
        return None
    around = near | np.r_[near[1:], False] | np.r_[False, near[:-1]]
    s = np.asarray(strand.s_m)[around]
    return float(s.min()), float(s.max())


def _cable(camera: Camera, knots: Knots, strands: Sequence[StrandLike], style: LineStyle) -> Line | None:
    middle = strands[knots.middle]
    view = _in_view(camera, knots, strands)
    if view is None:
        return None
    nearest = float(camera.to_camera(middle.points_m)[:, 2].min())
    step = _PIECE_PX * max(nearest, 0.05) / camera.fx
    s = step * np.arange(np.floor(view[0] / step), np.ceil(view[1] / step) + 1)
    ends = float(np.min(middle.s_m)), float(np.max(middle.s_m))
    s = np.unique(np.clip(s, *ends))
    if s.size < 2:
        return None
    places, shown = _material(strands, s)
    m = s.size
    return Line(
        places, shown, np.ones(m - 1, dtype=bool), np.full(m - 1, style.radius_m), np.full(m - 1, style.albedo),
        style.specular, style.shininess, s, np.full(m, 2 * style.radius_m * step),
    )  # fmt: skip


def _bead_chain(camera: Camera, knots: Knots, strands: Sequence[StrandLike], style: LineStyle) -> tuple[Beads, Line] | None:
    view = _in_view(camera, knots, strands)
    if view is None:
        return None
    s = style.pitch_m * np.arange(np.floor(view[0] / style.pitch_m), np.ceil(view[1] / style.pitch_m) + 1)
    places, shown = _material(strands, s)
    marked = style.marked(s)
    radius = np.where(marked & (style.mark_radius_m > 0), style.mark_radius_m, style.radius_m)
    link = max(style.pitch_m - 2 * style.radius_m, 0.0)
    area = np.pi * radius**2 + 2 * style.link_radius_m * link
    beads = Beads(places, shown, radius, np.where(marked, style.mark_albedo, style.albedo), area)

    # links run from surface to surface: each bead gives the two ends of its wires
    ahead = np.diff(places, axis=1)
    ahead /= np.maximum(np.linalg.norm(ahead, axis=-1, keepdims=True), 1e-12)
    ends = np.empty((places.shape[0], 2 * (s.size - 1), 3))
    ends[:, 0::2] = places[:, :-1] + 0.9 * radius[:-1, None] * ahead
    ends[:, 1::2] = places[:, 1:] - 0.9 * radius[1:, None] * ahead
    both = np.repeat(shown[:, :-1] & shown[:, 1:], 2, axis=1)
    n = ends.shape[1]
    joined = np.arange(n - 1) % 2 == 0 if style.link_radius_m > 0 else np.zeros(n - 1, dtype=bool)
    links = Line(
        ends, both, joined, np.full(n - 1, style.link_radius_m), np.full(n - 1, 0.7 * style.albedo), 0.0, 1.0, None,
        np.zeros(n),
    )  # fmt: skip
    return beads, links


def _rods_as_bars(strand: StrandLike, style: LineStyle) -> Bars:
    """Bars from joint to joint, each end short of its joint by the gap."""
    points = np.asarray(strand.points_m, dtype=float)
    along = np.diff(points, axis=0)
    along /= np.maximum(np.linalg.norm(along, axis=1, keepdims=True), 1e-12)
    middle = (np.asarray(strand.s_m)[1:] + np.asarray(strand.s_m)[:-1]) / 2
    marked = style.marked(middle)
    radius = np.where(marked & (style.mark_radius_m > 0), style.mark_radius_m, style.radius_m)
    radius = np.where(np.asarray(strand.visible)[1:] & np.asarray(strand.visible)[:-1], radius, 0.0)
    inset = (style.gap_m + radius)[:, None] * along  # the rounded end reaches one radius further
    albedo = np.where(marked, style.mark_albedo, style.albedo)
    return Bars(points[:-1] + inset, points[1:] - inset, radius, albedo, style.specular)


def _bars(camera: Camera, bars: Sequence[Bars], shininess: float) -> Line | None:
    """Bars at the knots, cut into short pieces so that each piece has its own row's time."""
    first = bars[0]
    count = first.radius_m.size
    if any(b.radius_m.size != count for b in bars):
        raise ValueError("bars: the same bars must be given, in the same order, at all times.")
    if count == 0:
        return None
    length = np.linalg.norm(first.b_m - first.a_m, axis=1)
    depth = np.maximum(camera.to_camera(first.a_m)[:, 2], 0.05)
    pieces = np.maximum(1, np.ceil(length * camera.fx / depth / _ROD_PIECE_PX)).astype(int)
    owner = np.repeat(np.arange(count), pieces + 1)
    share = np.concatenate([np.linspace(0, 1, n + 1) for n in pieces])
    places = np.stack([b.a_m[owner] + share[:, None] * (b.b_m - b.a_m)[owner] for b in bars])
    shown = np.stack([b.radius_m[owner] > 0 for b in bars])
    joined = owner[1:] == owner[:-1]
    area = 2 * first.radius_m[owner] * length[owner] / pieces[owner]
    return Line(places, shown, joined, first.radius_m[owner[:-1]], first.albedo[owner[:-1]], first.specular, shininess, None, area)


def gather(
    camera: Camera, knots: Knots, motion: Motion, style: LineStyle
) -> tuple[list[Line], Beads | None, list[Ball], Floats]:
    """Ask the motion at the knots: lines, beads, the balls of the middle knot and all balls' centres (k, n, 3)."""
    lines: list[Line] = []
    beads: Beads | None = None
    strands = [motion.strand(float(t)) for t in knots.times] if hasattr(motion, "strand") else []
    given = [s for s in strands if s is not None]
    if given and len(given) == len(strands):
        if style.kind == "cable":
            cable = _cable(camera, knots, given, style)
            lines += [cable] if cable is not None else []
        elif style.kind == "rods":
            rods = _bars(camera, [_rods_as_bars(s, style) for s in given], style.shininess)
            lines += [rods] if rods is not None else []
        elif (both := _bead_chain(camera, knots, given, style)) is not None:
            beads, links = both
            lines.append(links)
    sets = [motion.bars(float(t)) for t in knots.times] if hasattr(motion, "bars") else []
    some = [b for b in sets if b is not None]
    if some and len(some) == len(sets):
        loose = _bars(camera, some, style.shininess)
        lines += [loose] if loose is not None else []
    rounds = [_as_balls(motion.discs(float(t))) for t in knots.times] if hasattr(motion, "discs") else []
    if not rounds or not rounds[0]:
        return lines, beads, [], np.empty((0, 0, 3))
    centres = np.array([[ball.centre_m for ball in balls] for balls in rounds], dtype=float)
    return lines, beads, rounds[knots.middle], centres


def _as_balls(discs: "Sequence[Ball | tuple[Floats, float, float]]") -> list[Ball]:
    return [d if isinstance(d, Ball) else Ball(np.asarray(d[0], dtype=float), float(d[1]), float(d[2])) for d in discs]
