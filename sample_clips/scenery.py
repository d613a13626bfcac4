"""What stands still: wall, boards, boxes (bench, stand, beam), container, and the light on them.

The picture of it is traced once, in linear light: one ray a pixel where the scene is smooth, 36 where a surface or a printed
square ends within a pixel. Lengths in metres, world axes x right, y away from the camera, z up.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Board", "Box", "Container", "Light", "Print", "Scenery", "Wall"]

Floats = NDArray[np.float64]


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
    """A printed checkerboard on a flat sheet.

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
    things: "tuple[Board | Print | Box | Container, ...]" = ()


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
