"""What is used where a sheet is silent, and why. Every default that a run uses is listed in its result."""

from dataclasses import dataclass

__all__ = ["DEFAULT_U", "OUT_OF_PLANE_M", "Default"]


@dataclass(frozen=True, slots=True)
class Default:
    """One default: an amount, absolute or relative to the value it belongs to."""

    amount: float
    relative: bool
    unit: str
    why: str


DEFAULT_U: dict[str, Default] = {
    "board.square_m": Default(
        0.003, True, "m", "paper prints are 0.1 to 0.5 % off and grow with damp (common practice, no source)"
    ),
    "board.offset_m": Default(0.003, False, "m", "a tape held between board and line"),
    "board.lean_deg": Default(0.5, False, "deg", "a board stood upright by eye or with a small level"),
    "board.yaw_deg": Default(0.5, False, "deg", "a board squared to the bench by eye"),
    "camera.distance_m": Default(0.02, True, "m", "a tape to the lens whose nodal point is not marked"),
    "datum.origin_px": Default(1.5, False, "px", "a point placed by hand on the picture"),
    "datum.floor_px": Default(1.5, False, "px", "a point placed by hand on the picture"),
    "datum.vertical": Default(0.3, False, "deg", "a board levelled with a bubble"),
    "datum.plumb_px": Default(0.7, False, "px", "two points placed by hand on a plumb line"),
    "clock.capture_fps": Default(1e-4, True, "1/s", "quartz clocks of phones (common practice, no source)"),
    "clock.readout_s": Default(
        0.1, True, "s", "a phone's own readout figure was seen up to 36 % off; most agree within 2 %"
    ),
    "clock.exposure_s": Default(0.2, True, "s", "automatic exposure wanders"),
    "line.pitch_m": Default(0.005, True, "m", "ten pitches measured with a rule"),
    "line.mark_spacing_m": Default(0.005, True, "m", "marks put on by hand"),
    "line.end_mark_m": Default(0.02, True, "m", "calliper on a ball or tape"),
    "line.length_m": Default(0.003, True, "m", "a tape along a line that is not quite taut"),
    "line.object_diameter_m": Default(0.01, True, "m", "calliper"),
    "line.object_mass_kg": Default(0.01, True, "kg", "kitchen scale"),
    "line.mass_per_length_kg_per_m": Default(0.01, True, "kg/m", "a length weighed"),
    "test.drop_height_m": Default(0.003, False, "m", "tape from rim to floor"),
    "test.pile_depth_m": Default(0.01, False, "m", "a pile has no sharp top"),
    "test.landing_rise_m": Default(0.005, False, "m", "a heap has no sharp top"),
    "site.gravity_mps2": Default(1e-4, False, "m/s2", "a value from a gravity survey or table"),
    "site.latitude_deg": Default(
        5e-4, False, "m/s2", "real gravity departs from normal by up to 1e-3 m/s2 (common practice, no source)"
    ),
    "site.height_m": Default(20.0, False, "m", "a map"),
}

OUT_OF_PLANE_M: dict[str, float] = {"payout": 0.03, "drawn": 0.03}
"""Half-range of the line towards or from the camera [m] by test kind; 0.01 for the others (design, section 3)."""
