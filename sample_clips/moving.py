"""What a motion tells the camera: the line, bars and balls at a moment, and what the line is made of."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["Ball", "Bars", "LineStyle", "Motion", "StrandLike"]

Floats = NDArray[np.float64]


class StrandLike(Protocol):
    """The line at one moment.

    The points go along the line no further apart than about 2 px (1.5 to 3 mm), s strictly increasing or decreasing along them;
    the polyline is taken as it is. s is the material coordinate: the same s is the same bead at all times. The number of points
    may differ from moment to moment (except for style "rods", where the points are the joints), but within one frame the ends must
    stay at the same s or lie out of sight: let the line run on into the container and out of the picture's bottom.
    """

    @property
    def points_m(self) -> Floats:
        """(n, 3), x right, y away from the camera, z up [m]."""

    @property
    def s_m(self) -> Floats:
        """(n,), material coordinate [m]."""

    @property
    def visible(self) -> NDArray[np.bool_]:
        """(n,), False where the line must not be drawn. What the container, bench or board hides is found by depth anyway."""


@dataclass(frozen=True, slots=True)
class Ball:
    """A sphere, such as the ball at a free end or a dropped object.

    Attributes
    ----------
    centre_m : array of 3 floats
        World [m].
    radius_m : float
        [m]
    albedo : float
        0 to 1.
    specular : float
        Strength of the highlight, in units of the lamp's light.
    """

    centre_m: Floats
    radius_m: float
    albedo: float = 0.1
    specular: float = 0.3


@dataclass(frozen=True, slots=True, eq=False)
class Bars:
    """Straight round bars with rounded ends: rods of a ladder, cords between them. The same bars in the same order at all times.

    Attributes
    ----------
    a_m, b_m : (n, 3) array
        Their ends, world [m].
    radius_m, albedo : (n,) array
        Radius [m], albedo.
    specular : float
        Strength of the highlight.
    """

    a_m: Floats
    b_m: Floats
    radius_m: Floats
    albedo: Floats
    specular: float = 0.1


class Motion(Protocol):
    """What moves, at any float time t [s] of the frames' clock, also a few milliseconds before the first and after the last frame.

    An object may lack any of these methods; what it lacks is not drawn.
    """

    def strand(self, t: float) -> StrandLike | None:
        """The line."""

    def discs(self, t: float) -> Sequence[Ball | tuple[Floats, float, float]]:
        """Balls, or (centre_m, radius_m, albedo); always as many, in the same order."""

    def bars(self, t: float) -> Bars | None:
        """Bars."""


@dataclass(frozen=True, slots=True)
class LineStyle:
    """What the line is made of.

    Attributes
    ----------
    kind : str
        "beads": balls at every multiple of the pitch in s, with a thin link between them. "cable": a smooth round line.
        "rods": straight bars from point to point of the strand, with a gap at each joint.
    radius_m : float
        Of bead, cable or rod [m].
    pitch_m : float
        Of the beads [m].
    link_radius_m : float
        Of the wire between beads [m]; 0: none.
    gap_m : float
        Left free at each end of a rod [m].
    mark_spacing_m, mark_length_m, mark_offset_m : float
        A mark covers s from offset + k spacing, less and plus half its length [m]; spacing 0: no marks.
    mark_radius_m : float
        Radius of what is marked [m]; 0: as the rest.
    albedo, mark_albedo : float
        0 to 1.
    specular : float
        Strength of the highlight, in units of the lamp's light.
    shininess : float
        Exponent of the highlight; larger is smaller.
    """

    kind: str = "beads"
    radius_m: float = 0.0016
    pitch_m: float = 0.0048
    link_radius_m: float = 0.0004
    gap_m: float = 0.0
    mark_spacing_m: float = 0.0
    mark_length_m: float = 0.0
    mark_offset_m: float = 0.0
    mark_radius_m: float = 0.0
    albedo: float = 0.6
    mark_albedo: float = 0.9
    specular: float = 0.5
    shininess: float = 12.0

    def __post_init__(self) -> None:
        if self.kind not in ("beads", "cable", "rods"):
            raise ValueError(f'LineStyle.kind: expected "beads", "cable" or "rods", got {self.kind!r}.')
        if self.kind == "beads" and not self.pitch_m > 0:
            raise ValueError(f"LineStyle.pitch_m: beads need a positive pitch, got {self.pitch_m}.")

    def marked(self, s_m: Floats) -> NDArray[np.bool_]:
        """Whether the line is marked at material coordinates `s_m`."""
        if self.mark_spacing_m <= 0:
            return np.zeros(np.shape(s_m), dtype=bool)
        return np.abs(self.from_mark(s_m)) <= self.mark_length_m / 2

    def from_mark(self, s_m: Floats) -> Floats:
        """Signed distance from the middle of the nearest mark [m]."""
        away: Floats = np.asarray(s_m) - self.mark_offset_m
        return away - self.mark_spacing_m * np.round(away / self.mark_spacing_m)
