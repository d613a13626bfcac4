"""What every quantity and every column is called, in which unit, and what it means.

One table, from which the screen, the plots, the report page, the CSV files and the data dictionary take their words.
"""

from dataclasses import dataclass

__all__ = ["COLUMNS", "KIND_LABELS", "QUANTITIES", "Column", "Name", "name_of", "quantities_of", "show_unit"]


@dataclass(frozen=True, slots=True)
class Name:
    """One result quantity in words."""

    label: str  # as in a sentence
    symbol: str  # an underscore starts a subscript: "v_max"
    unit: str  # SI, spelt as in result.json; "1" for a number
    meaning: str  # the measurand in one sentence
    kinds: tuple[str, ...]  # test kinds that can have it


@dataclass(frozen=True, slots=True)
class Column:
    """One column of frames.csv in words."""

    unit: str
    meaning: str


KIND_LABELS: dict[str, str] = {
    "payout": "payout from a container",
    "surface-drop": "drop onto a surface",
    "held-drop": "drop with one end held",
    "edge-slide": "slide over an edge",
    "free-drop": "free drop",
    "drawn": "line drawn from a container",
}

_DROPS = ("surface-drop", "held-drop", "free-drop")

QUANTITIES: dict[str, Name] = {
    "arc_height_m": Name(
        "arc height above the rim", "h", "m",
        "Time mean, over its window, of the height of the highest point of the line's axis above the rim.", ("payout",),
    ),
    "arc_width_m": Name(
        "arc width at half its height", "w", "m",
        "Distance between the rising and the falling leg at half the height of the apex, time mean over its window.",
        ("payout",),
    ),
    "line_speed_mps": Name(
        "line speed", "v", "m/s",
        "Rate at which line crosses the rim (payout, drawn), time mean over its window; in the other tests the speed of the "
        "free or top end.", ("payout", "drawn", "surface-drop", "held-drop", "edge-slide"),
    ),
    "effective_acceleration_mps2": Name(
        "effective acceleration", "a_eff", "m/s2",
        "Constant acceleration, downwards positive, that best fits z(t) over its window with start place and start speed left "
        "free (unweighted quadratic).", _DROPS,
    ),
    "acceleration_ratio": Name(
        "acceleration against local gravity", "a_eff/g", "1", "Effective acceleration divided by local gravity.", _DROPS,
    ),
    "acceleration_ratio_station": Name(
        "acceleration against the station's free drop", "a_eff/g_drop", "1",
        "Effective acceleration divided by the acceleration of a free drop measured at the same station, so that scale and "
        "clock cancel.", ("surface-drop", "held-drop"),
    ),
    "pickup_coefficient": Name(
        "pick-up coefficient", "a", "1",
        "Push of the pile on the line at pick-up divided by mass per length times line speed squared.", ("payout",),
    ),
    "landing_coefficient": Name(
        "landing coefficient", "b", "1",
        "Pull of the landing place on the line divided by mass per length times landing speed squared.",
        ("payout", "surface-drop"),
    ),
    "lead_over_free_fall_s": Name(
        "lead over free fall", "t_lead", "s",
        "Time by which the line is ahead of free fall at the end of its window; free fall starts with the place and speed "
        "fitted at first touch.", ("surface-drop",),
    ),
    "peak_end_speed_mps": Name(
        "peak speed of the free end", "v_peak", "m/s", "Largest mean speed of the free end over 1/120 s.", ("held-drop",),
    ),
    "measured_gravity_mps2": Name(
        "gravity measured by the fall", "g_m", "m/s2",
        "Acceleration of the falling object, corrected for drag where its diameter and mass are given.", ("free-drop",),
    ),
    "length_paid_out_m": Name(
        "length paid out", "s", "m", "Length of line that crossed the rim in its window.", ("payout", "drawn"),
    ),
    "fold_coefficient": Name(
        "fold coefficient", "k_fold", "1",
        "Parameter of the fold's law of motion: 0 inelastic (free fall), 1 energy-conserving.", ("held-drop",),
    ),
    "friction_coefficient": Name(
        "friction coefficient", "μ", "1", "Sliding friction of the line on table and edge, as fitted by the named law.",
        ("edge-slide",),
    ),
    "growth_rate_per_s": Name(
        "growth rate", "γ", "1/s", "Rate of the exponential growth of the overhang.", ("edge-slide",),
    ),
    "speed_ripple": Name(
        "speed ripple", "r", "1", "Standard deviation of the line speed within its window divided by its mean.", ("drawn",),
    ),
    "snag_count": Name("snags", "n", "1", "Number of snag events in the window.", ("drawn",)),
    "release_s": Name(
        "time of release", "t_rel", "s", "True time, from the first frame, at which the motion starts.",
        ("payout", "surface-drop", "held-drop", "edge-slide", "free-drop", "drawn"),
    ),
    "first_touch_s": Name(
        "time of first touch", "t_touch", "s", "True time, from the first frame, at which the line first touches the surface.",
        ("surface-drop", "payout"),
    ),
}  # fmt: skip

COLUMNS: dict[str, Column] = {
    "frame": Column("1", "Number of the frame in the clip, from 0, in the order in which frames are shown."),
    "t_s": Column("s", "True time: of the apex in a payout, else of the frame (mid-exposure of its stored row 0)."),
    "apex_x_m": Column("m", "Place of the apex of the line's axis, right of the datum."),
    "apex_z_m": Column("m", "Height of the apex of the line's axis above the datum (the rim in a payout)."),
    "u_apex_z_m": Column("m", "Standard uncertainty of apex_z_m, this frame's independent part only."),
    "arc_width_m": Column("m", "Distance between the legs at half the height of the apex."),
    "end_t_s": Column("s", "True time of the end, stamped with its own picture row."),
    "end_x_m": Column("m", "Place of the free end (or dropped object), right of the datum."),
    "end_z_m": Column("m", "Height of the free end (or dropped object) above the datum."),
    "u_end_z_m": Column("m", "Standard uncertainty of end_z_m, this frame's independent part only."),
    "line_speed_mps": Column("m/s", "Speed of line across the rim (payout, drawn), else speed of the free or top end."),
    "u_line_speed_mps": Column("m/s", "Standard uncertainty of line_speed_mps, this frame's independent part only."),
    "paid_out_m": Column("m", "Length of line that crossed the rim since release."),
    "flags": Column("", "What is odd about this frame, as words joined by hyphens, separated by spaces."),
}
_SHOWN_UNITS = {"m/s2": "m/s²", "m/s^2": "m/s²", "1": "", "kg/m": "kg/m", "1/s": "s⁻¹", "deg": "°"}


def name_of(quantity: str, unit: str = "1") -> Name:
    """Words for a quantity; one that the table does not know speaks for itself.

    Parameters
    ----------
    quantity : str
        As in ``result.json``, ``"arc_height_m"``.
    unit : str
        Unit to assume where the table does not know it.

    Returns
    -------
    Name
    """
    known = QUANTITIES.get(quantity)
    return known or Name(quantity.replace("_", " "), quantity, unit, "", tuple(KIND_LABELS))


def quantities_of(kind: str) -> tuple[str, ...]:
    """Names of all quantities that a test of this kind can have, in the order of the table."""
    return tuple(name for name, words in QUANTITIES.items() if kind in words.kinds)


def show_unit(unit: str) -> str:
    """Unit as people write it: ``m/s2`` becomes m/s², the unit one becomes nothing."""
    return _SHOWN_UNITS.get(unit, unit)
