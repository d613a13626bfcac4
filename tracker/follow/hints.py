"""What the sheet tells the followers: where to look, how large things are, how fast they can be."""

from dataclasses import dataclass

__all__ = ["LineHints"]


@dataclass(frozen=True, slots=True)
class LineHints:
    """Facts that a technician knows before the first frame is followed."""

    kind: str  # test.kind
    origin_px: tuple[float, float]  # rim (payout) or release point (drop), upright picture
    origin_frame: int = 0
    end_mark_px: float | None = None  # diameter of the ball or mark at the free end
    pitch_m: float | None = None
    mark_spacing_m: float | None = None
    length_m: float | None = None
    exposure_s: float | None = None
    px_per_m: float = 1000.0  # at the datum
    gravity_mps2: float = 9.80665
    floor_px: tuple[float, float] | None = None
