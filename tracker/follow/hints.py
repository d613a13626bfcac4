"""What the sheet tells the followers: where to look, how large things are, how fast they can be."""

from dataclasses import dataclass

__all__ = ["LineHints"]


@dataclass(frozen=True, slots=True)
class LineHints:
    """Facts that a technician knows before the first frame is followed.

    Attributes
    ----------
    kind : str
        The sheet's `test.kind`.
    origin_px : (float, float)
        Column and row in the upright picture: the rim in a payout, in a drop the release point, which is the centre of
        the end mark while it still hangs.
    origin_frame : int
        The frame in which it was clicked.
    end_mark_px : float or None
        Diameter of the ball or mark at the free end, or of the dropped object [px].
    pitch_m, mark_spacing_m, length_m : float or None
        Repeat length of the texture, distance of marks put on by hand, length of the line [m].
    exposure_s : float or None
    px_per_m : float
        Scale in the plane of motion at the datum.
    gravity_mps2 : float
    floor_px : (float, float) or None
        A point of the floor or table, in the plane of motion.
    window : (int, int) or None
        First frame, and one past the last, in which to follow; None follows all.
    """

    kind: str
    origin_px: tuple[float, float]
    origin_frame: int = 0
    end_mark_px: float | None = None
    pitch_m: float | None = None
    mark_spacing_m: float | None = None
    length_m: float | None = None
    exposure_s: float | None = None
    px_per_m: float = 1000.0
    gravity_mps2: float = 9.80665
    floor_px: tuple[float, float] | None = None
    window: tuple[int, int] | None = None
