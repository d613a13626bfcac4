"""The Okabe-Ito set in a fixed role per thing, and the contrast by which a colour may carry text or lines.

Colour never stands alone: every thing has its own marker or dash as well. Yellow is for areas only.
"""

__all__ = ["OKABE_ITO", "ROLES", "contrast", "rgb"]

OKABE_ITO: dict[str, str] = {
    "black": "#000000",
    "orange": "#E69F00",
    "sky": "#56B4E9",
    "green": "#009E73",
    "yellow": "#F0E442",
    "blue": "#0072B2",
    "vermilion": "#D55E00",
    "purple": "#CC79A7",
}

ROLES: dict[str, str] = {
    "measured": OKABE_ITO["black"],  # points
    "law": OKABE_ITO["blue"],  # solid line
    "free fall": OKABE_ITO["vermilion"],  # dashed line
    "other model": OKABE_ITO["green"],  # dash-dotted line
    "excluded": OKABE_ITO["purple"],  # hollow
    "window": OKABE_ITO["yellow"],  # area
    "line": OKABE_ITO["orange"],  # in the picture, always with a dark edge
    "apex": OKABE_ITO["sky"],  # diamond
    "end": OKABE_ITO["yellow"],  # ring: an area with a dark edge, never a line on white
    "mark": OKABE_ITO["green"],  # square
}


def rgb(colour: str) -> tuple[int, int, int]:
    """Red, green and blue, 0 to 255, of ``#rrggbb``."""
    red, green, blue = bytes.fromhex(colour.removeprefix("#"))
    return red, green, blue


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours, 1 to 21 (WCAG 2.2, relative luminance)."""
    light, dark = sorted((_luminance(one), _luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def _luminance(colour: str) -> float:
    parts = [part / 255 for part in rgb(colour)]
    linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]
