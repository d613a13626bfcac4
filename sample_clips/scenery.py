"""What stands still: wall, boards, boxes (bench, stand, beam), container, and the light on them.

The picture of it is traced once, in linear light: one ray a pixel where the scene is smooth, 53 where a surface or a printed
square ends within a pixel. Lengths in metres, world axes x right, y away from the camera, z up.
"""

from dataclasses import dataclass
from typing import NamedTuple

import cv2
import numpy as np
from numpy.typing import NDArray

from sample_clips.camera import Camera

__all__ = ["Board", "Box", "Container", "Light", "Print", "Scenery", "Still", "Wall", "trace"]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
_RAYS, _TURN = 53, 20  # a lattice of prime order: rays in a pixel with an edge, 53 different places along rows, columns, diagonals
_CLOSE_M = 0.015  # surfaces this near in depth hide a line together


@dataclass(frozen=True, slots=True)
class Light:
    """One lamp, far away, and the room's even light.

    Attributes
    ----------
    towards : tuple of 3 floats
        Direction from the scene towards the lamp; any length. (-1, -1, 1): from the left, front and above.
    ambient, lamp : float
        Light on a surface from the room, and from the lamp on a surface that faces it.
    softness : float
        Angular radius of the lamp [rad]: a shadow's edge is blurred by this times its throw.
    """

    towards: tuple[float, float, float] = (-0.6, -0.8, 0.6)
    ambient: float = 0.45
    lamp: float = 0.55
    softness: float = 0.06

    @property
    def direction(self) -> Floats:
        """(3,) unit vector towards the lamp."""
        d = np.asarray(self.towards, dtype=float)
        unit: Floats = d / np.linalg.norm(d)
        return unit


@dataclass(frozen=True, slots=True)
class Wall:
    """The back wall, the plane y = `y_m`.

    Attributes
    ----------
    y_m : float
        Its distance behind the plane of motion [m].
    albedo : float
        Mean, 0 to 1.
    texture : float
        RMS of its cloudy unevenness, relative.
    grain : float
        RMS of its fine grain (millimetres), relative.
    seed : int
        Of both.
    """

    y_m: float = 0.4
    albedo: float = 0.35
    texture: float = 0.05
    grain: float = 0.01
    seed: int = 0


@dataclass(frozen=True, slots=True)
class Board:
    """A printed checkerboard on a flat sheet; the print's first square, before turning the upper left one, is black.

    Attributes
    ----------
    inner_corners : tuple of 2 ints
        (columns, rows) of inner corners, as the sheet of the run says.
    square_m : float
        [m]
    centre_m : tuple of 3 floats
        Middle of the sheet [m]; its y is the board's offset behind the plane of motion.
    turn_deg : float
        Turn of the print in its own plane, clockwise as the camera sees it [degree]; 90 stands a landscape board upright.
    lean_deg : float
        The top leans away from the camera [degree].
    yaw_deg : float
        The right edge is further from the camera [degree]; turned about the vertical after the lean.
    margin_m : float
        White round the print [m].
    white, black : float
        Albedos.
    """

    inner_corners: tuple[int, int] = (9, 6)
    square_m: float = 0.025
    centre_m: tuple[float, float, float] = (0.2, 0.0, -0.1)
    turn_deg: float = 0.0
    lean_deg: float = 0.0
    yaw_deg: float = 0.0
    margin_m: float = 0.015
    white: float = 0.85
    black: float = 0.06

    @property
    def axes(self) -> Floats:
        """(3, 3): unit vectors along the columns, along the rows (downwards), and into the board, away from the camera."""
        return _sheet_axes(self.turn_deg, self.lean_deg, self.yaw_deg)

    @property
    def size_m(self) -> tuple[float, float]:
        """Of the sheet, along its columns and its rows [m]."""
        return tuple((n + 1) * self.square_m + 2 * self.margin_m for n in self.inner_corners)  # type: ignore[return-value]

    def corners_world(self) -> Floats:
        """(columns x rows, 3): the inner corners, row by row of the print [m]."""
        columns, rows = self.inner_corners
        u = (np.arange(columns) - (columns - 1) / 2) * self.square_m
        v = (np.arange(rows) - (rows - 1) / 2) * self.square_m
        vv, uu = np.meshgrid(v, u, indexing="ij")
        places: Floats = np.asarray(self.centre_m) + uu.reshape(-1, 1) * self.axes[0] + vv.reshape(-1, 1) * self.axes[1]
        return places


@dataclass(frozen=True, slots=True, eq=False)
class Print:
    """A flat sheet with any grey picture on it: a coded board, a run card, a label.

    Attributes
    ----------
    picture : (h, w) uint8 array
        255 is white paper, 0 black ink.
    width_m : float
        Of the sheet [m]; its height follows from the picture's shape.
    centre_m, turn_deg, lean_deg, yaw_deg, white, black
        As of a `Board`.
    """

    picture: NDArray[np.uint8]
    width_m: float
    centre_m: tuple[float, float, float]
    turn_deg: float = 0.0
    lean_deg: float = 0.0
    yaw_deg: float = 0.0
    white: float = 0.85
    black: float = 0.06

    @property
    def axes(self) -> Floats:
        """As `Board.axes`."""
        return _sheet_axes(self.turn_deg, self.lean_deg, self.yaw_deg)

    @property
    def size_m(self) -> tuple[float, float]:
        """Of the sheet [m]."""
        return self.width_m, self.width_m * self.picture.shape[0] / self.picture.shape[1]


@dataclass(frozen=True, slots=True)
class Box:
    """A box along the world's axes: bench top, leg, board stand, support beam.

    Attributes
    ----------
    low_m, high_m : tuple of 3 floats
        Its lowest and highest x, y, z [m].
    albedo : float
        0 to 1.
    """

    low_m: tuple[float, float, float]
    high_m: tuple[float, float, float]
    albedo: float = 0.4


@dataclass(frozen=True, slots=True)
class Container:
    """An open round vessel with its axis upright: a truncated cone without a lid.

    Attributes
    ----------
    rim_centre_m : tuple of 3 floats
        Middle of the rim [m].
    rim_radius_m, base_radius_m, height_m : float
        [m]
    albedo : float
        0 to 1.
    """

    rim_centre_m: tuple[float, float, float] = (0.0, 0.0, 0.0)
    rim_radius_m: float = 0.06
    base_radius_m: float = 0.045
    height_m: float = 0.13
    albedo: float = 0.7


Sheet = Board | Print
Thing = Board | Print | Box | Container


@dataclass(frozen=True, slots=True)
class Scenery:
    """All that stands still.

    Attributes
    ----------
    wall : Wall
    light : Light
    things : tuple of Board, Print, Box or Container
        The nearest is seen; each throws a soft shadow on the wall.
    """

    wall: Wall = Wall()
    light: Light = Light()
    things: tuple[Thing, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class Still:
    """The traced picture of a scenery, upright, without lens blur, exposure and vignetting.

    Attributes
    ----------
    light : (h, w) float32
        Linear radiance: albedo times light.
    front : (h, w) float32
        Share of the pixel covered by the nearest thing before the wall.
    depth_m : (h, w) float32
        Depth of that thing along the optical axis; infinite where there is none.
    direct : (h, w) float32
        Share of the light on the wall that comes straight from the lamp, what a shadow takes away; 0 where things hide it.
    """

    light: Singles
    front: Singles
    depth_m: Singles
    direct: Singles


def _sheet_axes(turn_deg: float, lean_deg: float, yaw_deg: float) -> Floats:
    """(3, 3): along the columns, down the rows, and away from the camera, of a sheet with this attitude."""
    turn, lean, yaw = np.deg2rad([turn_deg, lean_deg, yaw_deg])
    right, down, away = np.array([1.0, 0, 0]), np.array([0, 0, -1.0]), np.array([0, 1.0, 0])
    columns = np.cos(turn) * right + np.sin(turn) * down
    rows = -np.sin(turn) * right + np.cos(turn) * down
    by_lean = np.array([[1, 0, 0], [0, np.cos(lean), np.sin(lean)], [0, -np.sin(lean), np.cos(lean)]])
    by_yaw = np.array([[np.cos(yaw), -np.sin(yaw), 0], [np.sin(yaw), np.cos(yaw), 0], [0, 0, 1]])
    axes: Floats = np.stack([columns, rows, away]) @ (by_yaw @ by_lean).T
    return axes


# --- tracing ----------------------------------------------------------------------------------------------------------


class _Hits(NamedTuple):
    """What rays meet: all (m,)."""

    depth: Floats  # along the optical axis [m], infinite: nothing
    light: Floats  # radiance
    label: NDArray[np.int32]  # of the piece of surface; where it changes there is an edge
    direct: Floats  # see Still


def trace(scenery: Scenery, camera: Camera) -> Still:
    """The still picture a camera sees, by ray casting.

    Parameters
    ----------
    scenery : Scenery
    camera : Camera
        Its geometry only; its shake is left out.

    Returns
    -------
    Still

    Notes
    -----
    A pixel is an average over its square: 53 rays where an edge runs through it or a neighbour, else one. They lie on a
    lattice of prime order, so that an edge along rows, columns or diagonals is resolved to 1/53 px, where a square grid would give 1/7.
    """
    height, width = camera.height, camera.width
    row, column = np.mgrid[0:height, 0:width].astype(float)
    ideal = camera.undistort(np.stack([column, row], axis=-1))
    by_column, by_row = np.gradient(ideal, axis=1), np.gradient(ideal, axis=0)
    light, front = np.empty((height, width)), np.zeros((height, width))
    depth, direct = np.empty((height, width)), np.empty((height, width))
    label = np.empty((height, width), dtype=np.int32)

    caster = _Caster(scenery, camera)
    once = caster.cast(ideal.reshape(-1, 2))
    for picture, values in ((light, once.light), (depth, once.depth), (label, once.label), (direct, once.direct)):
        picture[...] = values.reshape(height, width)
    front[label >= 16] = 1.0
    depth[label < 16] = np.inf

    kernel = np.ones((3, 3), np.uint8)
    as_float = label.astype(np.float32)
    edge = cv2.dilate(as_float, kernel) != cv2.erode(as_float, kernel)
    number = np.arange(_RAYS)
    sub = np.stack([(number + 0.5) / _RAYS, (number * _TURN % _RAYS + 0.5) / _RAYS], axis=-1) - 0.5
    rows, columns = np.nonzero(edge)
    for part in np.array_split(np.arange(rows.size), max(1, rows.size // 20000)):
        at = (rows[part], columns[part])
        rays = ideal[at][:, None] + by_column[at][:, None] * sub[:, :1] + by_row[at][:, None] * sub[:, 1:]
        many = caster.cast(rays.reshape(-1, 2))
        near = np.where(many.label >= 16, many.depth, np.inf).reshape(-1, len(sub))
        nearest = near.min(axis=1)
        light[at] = many.light.reshape(-1, len(sub)).mean(axis=1)
        direct[at] = many.direct.reshape(-1, len(sub)).mean(axis=1)
        depth[at] = nearest
        front[at] = (near <= np.where(np.isfinite(nearest), nearest + _CLOSE_M, -1.0)[:, None]).mean(axis=1)
    return Still(*(picture.astype(np.float32) for picture in (light, front, depth, direct)))


class _Caster:
    """Rays of one camera into one scenery."""

    def __init__(self, scenery: Scenery, camera: Camera) -> None:
        self.scenery, self.camera = scenery, camera
        self.origin = np.asarray(camera.position_m, dtype=float)
        self.turn = camera.rotation
        self.paint = _WallPaint(scenery, camera)

    def cast(self, ideal: Floats) -> _Hits:
        """Nearest hits of ideal directions (m, 2)."""
        rays = np.concatenate([ideal, np.ones((ideal.shape[0], 1))], axis=1) @ self.turn
        hits = self.paint.hits(self.origin, rays)
        for number, thing in enumerate(self.scenery.things, start=1):
            depth, albedo, normal, face = _meet(thing, self.origin, rays)
            nearer = depth < hits.depth
            if not nearer.any():
                continue
            light = albedo[nearer] * _lit(self.scenery.light, normal[nearer])
            hits.depth[nearer], hits.light[nearer], hits.direct[nearer] = depth[nearer], light, 0.0
            hits.label[nearer] = 16 * number + face[nearer]
        return hits


def _lit(light: Light, normal: Floats) -> Floats:
    """Light (m,) on surfaces with these normals (m, 3)."""
    lit: Floats = light.ambient + light.lamp * np.maximum(normal @ light.direction, 0.0)
    return lit


def _meet(thing: Thing, origin: Floats, rays: Floats) -> tuple[Floats, Floats, Floats, NDArray[np.int32]]:
    """Depth (m,), albedo (m,), normal (m, 3) and face (m,) where rays meet a thing; infinite depth where they do not."""
    if isinstance(thing, Box):
        return _meet_box(thing, origin, rays)
    if isinstance(thing, Container):
        return _meet_container(thing, origin, rays)
    return _meet_sheet(thing, origin, rays)


def _meet_sheet(sheet: Sheet, origin: Floats, rays: Floats) -> tuple[Floats, Floats, Floats, NDArray[np.int32]]:
    along, down, into = sheet.axes
    from_centre = origin - np.asarray(sheet.centre_m)
    slope = rays @ into
    depth = np.full(rays.shape[0], np.inf)
    np.divide(-(from_centre @ into), slope, out=depth, where=np.abs(slope) > 1e-9)
    depth[depth <= 0] = np.inf
    reach = np.where(np.isfinite(depth), depth, 0.0)
    u = from_centre @ along + reach * (rays @ along)
    v = from_centre @ down + reach * (rays @ down)
    size_u, size_v = sheet.size_m
    depth[(np.abs(u) > size_u / 2) | (np.abs(v) > size_v / 2)] = np.inf
    ink = _board_ink(sheet, u, v) if isinstance(sheet, Board) else _print_ink(sheet, u, v)
    albedo = sheet.white + (sheet.black - sheet.white) * ink
    normal = np.broadcast_to(-into, rays.shape)
    return depth, albedo, normal, np.rint(7 * ink).astype(np.int32)


def _board_ink(board: Board, u: Floats, v: Floats) -> Floats:
    columns, rows = board.inner_corners
    i, j = np.floor(u / board.square_m + (columns + 1) / 2), np.floor(v / board.square_m + (rows + 1) / 2)
    printed = (i >= 0) & (i <= columns) & (j >= 0) & (j <= rows)
    ink: Floats = np.where(printed & ((i + j) % 2 == 0), 1.0, 0.0)
    return ink


def _print_ink(sheet: Print, u: Floats, v: Floats) -> Floats:
    height, width = sheet.picture.shape
    size_u, size_v = sheet.size_m
    column, row = (u / size_u + 0.5) * width - 0.5, (v / size_v + 0.5) * height - 0.5
    return 1.0 - _bilinear(sheet.picture, column, row) / 255.0


def _meet_box(box: Box, origin: Floats, rays: Floats) -> tuple[Floats, Floats, Floats, NDArray[np.int32]]:
    """Slabs: the ray is inside the box between the last entry and the first exit of its three slabs."""
    safe = np.where(np.abs(rays) < 1e-12, 1e-12, rays)
    low, high = (np.asarray(box.low_m) - origin) / safe, (np.asarray(box.high_m) - origin) / safe
    enter, leave = np.minimum(low, high), np.maximum(low, high)
    axis = enter.argmax(axis=1)
    depth = enter.max(axis=1)
    depth = np.where((depth < leave.min(axis=1)) & (depth > 0), depth, np.inf)
    normal = np.zeros_like(rays)
    each = np.arange(rays.shape[0])
    sign = -np.sign(rays[each, axis])
    normal[each, axis] = sign
    face = (2 * axis + (sign > 0)).astype(np.int32)
    return depth, np.full(rays.shape[0], box.albedo), normal, face


def _meet_container(cup: Container, origin: Floats, rays: Floats) -> tuple[Floats, Floats, Floats, NDArray[np.int32]]:
    """Quadratic of a cone; the nearer root is the outside (face 0), the further, seen over the rim, the inside (face 1)."""
    taper = (cup.rim_radius_m - cup.base_radius_m) / cup.height_m
    p = origin - np.asarray(cup.rim_centre_m)
    radius = cup.rim_radius_m + taper * p[2]
    a = rays[:, 0] ** 2 + rays[:, 1] ** 2 - (taper * rays[:, 2]) ** 2
    b = rays[:, 0] * p[0] + rays[:, 1] * p[1] - taper * radius * rays[:, 2]
    c = p[0] ** 2 + p[1] ** 2 - radius**2
    root = np.sqrt(np.maximum(b * b - a * c, 0.0))
    depth, face = np.full(rays.shape[0], np.inf), np.zeros(rays.shape[0], dtype=np.int32)
    for number, t in ((1, (-b + root) / a), (0, (-b - root) / a)):  # the nearer last, so that it wins
        z = p[2] + t * rays[:, 2]
        good = (b * b > a * c) & (t > 0) & (z <= 0) & (z >= -cup.height_m)
        depth[good], face[good] = t[good], number
    reach = np.where(np.isfinite(depth), depth, 0.0)
    place = p + reach[:, None] * rays
    out = np.stack([place[:, 0], place[:, 1], -taper * np.hypot(place[:, 0], place[:, 1])], axis=1)
    out /= np.maximum(np.linalg.norm(out, axis=1, keepdims=True), 1e-12)
    normal = np.where(face[:, None] == 1, -out, out)
    albedo = np.where(face == 1, 0.6, 1.0) * cup.albedo  # the inside sees less of the room
    return depth, albedo, normal, face


# --- the wall ---------------------------------------------------------------------------------------------------------


class _WallPaint:
    """The wall's unevenness and the soft shadows that things throw on it."""

    def __init__(self, scenery: Scenery, camera: Camera) -> None:
        self.wall, self.light = scenery.wall, scenery.light
        rng = np.random.default_rng(self.wall.seed)
        self.clouds = _clouds(rng, self.wall.texture)
        self.grain = 1 + self.wall.grain * cv2.GaussianBlur(rng.standard_normal((2000, 1500), dtype=np.float32), (0, 0), 0.8) * 2.8
        self.cell_m = 0.004
        edge = np.linspace(0, 1, 9)
        rim = np.concatenate([np.stack([edge, 0 * edge], 1), np.stack([edge, 0 * edge + 1], 1)])
        rim = np.concatenate([rim, rim[:, ::-1]]) * [camera.width - 1, camera.height - 1]
        rays = camera.rays(rim)
        if (rays[:, 1] <= 0).any() or self.wall.y_m <= camera.position_m[1]:
            raise ValueError("Scenery.wall: the camera must see the wall in its whole picture; put the wall behind the rig.")
        seen = np.asarray(camera.position_m) + rays * ((self.wall.y_m - camera.position_m[1]) / rays[:, 1])[:, None]
        self.low = seen[:, [0, 2]].min(axis=0) - 0.3
        self.shadow = self._shadows(scenery, seen[:, [0, 2]].max(axis=0) + 0.3)

    def _shadows(self, scenery: Scenery, high: Floats) -> Singles:
        """Share of the lamp that reaches each cell of the wall."""
        shape = np.ceil((high - self.low) / self.cell_m).astype(int)[::-1] + 1
        share = np.ones(shape, dtype=np.float32)
        towards = scenery.light.direction
        if towards[1] >= -0.05:  # the lamp stands beside or behind: it throws nothing on this wall
            return share
        for thing in scenery.things:
            corners = _silhouette(thing)
            throw = (self.wall.y_m - corners[:, 1]) / -towards[1]
            on_wall = corners - throw[:, None] * towards
            cells = (on_wall[:, [0, 2]] - self.low) / self.cell_m
            dark = np.zeros(shape, dtype=np.float32)
            hull = cv2.convexHull(cells.astype(np.float32))
            cv2.fillConvexPoly(dark, np.rint(hull * 16).astype(np.int32), 1.0, cv2.LINE_8, 4)
            spread = scenery.light.softness * max(float(throw.mean()), 0.02) / 2 / self.cell_m
            share *= 1 - cv2.GaussianBlur(dark, (0, 0), max(spread, 0.5))
        return np.clip(share, 0, 1)

    def hits(self, origin: Floats, rays: Floats) -> _Hits:
        depth = (self.wall.y_m - origin[1]) / rays[:, 1]
        x, z = origin[0] + depth * rays[:, 0], origin[2] + depth * rays[:, 2]
        paint = _bilinear(self.clouds, (x + 4) / 0.05, (z + 5) / 0.05)
        paint *= _bilinear(self.grain, (x + 3) / 0.004, (z + 4) / 0.004)
        shadow = _bilinear(self.shadow, (x - self.low[0]) / self.cell_m, (z - self.low[1]) / self.cell_m)
        direct = self.light.lamp * max(-float(self.light.direction[1]), 0.0) * shadow
        total = self.light.ambient + direct
        return _Hits(depth, self.wall.albedo * paint * total, np.zeros(depth.size, dtype=np.int32), direct / total)


def _clouds(rng: np.random.Generator, rms: float) -> Singles:
    """Smooth relative unevenness with mean 1, 8 m by 10 m in cells of 0.05 m: octaves of 1.6 m to 0.1 m."""
    total = np.zeros((200, 160), dtype=np.float32)
    for octave in range(5):
        n = 5 * 2**octave
        coarse = rng.standard_normal((n + n // 4, n), dtype=np.float32)
        total += cv2.resize(coarse, (160, 200), interpolation=cv2.INTER_CUBIC) * 0.55**octave
    total = (total - total.mean()) / total.std()
    uneven: Singles = 1 + np.float32(rms) * np.clip(total, -2.5, 2.5)
    return uneven


def _silhouette(thing: Thing) -> Floats:
    """Points (n, 3) whose hull, along any direction, is the thing's outline."""
    if isinstance(thing, Box):
        ends = np.array([thing.low_m, thing.high_m])
        return np.array([[ends[i, 0], ends[j, 1], ends[k, 2]] for i in (0, 1) for j in (0, 1) for k in (0, 1)])
    if isinstance(thing, Container):
        angle = np.linspace(0, 2 * np.pi, 24, endpoint=False)
        ring = np.stack([np.cos(angle), np.sin(angle), 0 * angle], axis=1)
        base = np.asarray(thing.rim_centre_m) - [0, 0, thing.height_m]
        rim = np.asarray(thing.rim_centre_m) + thing.rim_radius_m * ring
        return np.concatenate([rim, base + thing.base_radius_m * ring])
    u, v = np.array(thing.size_m) / 2
    along, down, _ = thing.axes
    corners: Floats = np.array([su * u * along + sv * v * down for su in (-1, 1) for sv in (-1, 1)])
    corners += np.asarray(thing.centre_m)
    return corners


def _bilinear(picture: NDArray[np.uint8] | Singles, column: Floats, row: Floats) -> Floats:
    """Values (m,) of a picture at places (m,) in its pixels; outside, the border goes on."""
    height, width = picture.shape
    c, r = np.clip(column, 0, width - 1.000001), np.clip(row, 0, height - 1.000001)
    i, j = c.astype(np.intp), r.astype(np.intp)
    fc, fr = c - i, r - j
    i1, j1 = np.minimum(i + 1, width - 1), np.minimum(j + 1, height - 1)
    top = picture[j, i] * (1 - fc) + picture[j, i1] * fc
    bottom = picture[j1, i] * (1 - fc) + picture[j1, i1] * fc
    mixed: Floats = top * (1 - fr) + bottom * fr
    return mixed
