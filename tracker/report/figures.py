"""Numbers as people read them: U to two significant digits, the value to the same decimal place.

The rule is JCGM 100:2008, 7.2.6: an uncertainty is given to at most two significant digits and the estimate is rounded
to agree with it. Files keep full precision; this is for sentences, tables, pictures and plots. Rounding is done on the
shortest decimal that stands for the number, so that 0.0305 is rounded as it is written.
"""

import math
from decimal import ROUND_HALF_EVEN, ROUND_HALF_UP, Decimal

from tracker.analysis.quantity import BudgetLine, Quantity
from tracker.report.names import name_of, show_unit

__all__ = [
    "columns", "is_lopsided", "k_text", "line", "number", "part_text", "percent", "places_for", "rounded", "value_text", "with_unit",
]  # fmt: skip

LOPSIDED = 0.1
"""Arms of an interval that differ by more than this part of the longer one are given separately."""


def places_for(big_u: float, digits: int = 2) -> int:
    """Decimal places at which an uncertainty has so many significant digits; negative left of the point.

    Parameters
    ----------
    big_u : float
        Finite and above 0.
    digits : int
        Significant digits wanted.

    Returns
    -------
    int

    Notes
    -----
    Carrying counts: 0.0996 to two digits is 0.10, two places.
    """
    exact = Decimal(repr(float(big_u)))
    places = digits - 1 - exact.adjusted()
    carried = exact.quantize(Decimal(1).scaleb(-places), rounding=ROUND_HALF_UP)
    return digits - 1 - carried.adjusted()


def number(value: float, places: int) -> str:
    """Plain decimal with so many places, zeros kept; negative places round left of the point.

    A value that rounds to nothing is given without a minus sign.
    """
    return _plain(value, places, ROUND_HALF_EVEN)


def rounded(value: float, big_u: float, digits: int = 2) -> tuple[str, str]:
    """Value and uncertainty rounded to belong together.

    Parameters
    ----------
    value, big_u : float
        In the same unit; the uncertainty may be standard or expanded.
    digits : int
        Significant digits of the uncertainty, 2 by JCGM 100:2008, 7.2.6.

    Returns
    -------
    (str, str)
        The uncertainty is empty where it is zero or not known; the value then has six significant digits.
    """
    if not math.isfinite(value):
        return "not measured", ""
    if not math.isfinite(big_u) or big_u <= 0:
        return _six(value), ""
    places = places_for(big_u, digits)
    return number(value, places), _plain(big_u, places, ROUND_HALF_UP)


def columns(quantity: Quantity) -> tuple[str, str]:
    """Value and its U, without units, for a table; a lopsided interval takes the place of U as ``0.198 to 0.222``."""
    if math.isfinite(quantity.value) and is_lopsided(quantity):
        arms = [abs(end - quantity.value) for end in quantity.interval]
        places = places_for(min(arm for arm in arms if arm > 0))
        low, high = (number(end, places) for end in quantity.interval)
        return number(quantity.value, places), f"{low} to {high}"
    return rounded(quantity.value, quantity.U)


def value_text(quantity: Quantity) -> str:
    """Value, U and unit: ``0.2085 m ± 0.0031 m``; a lopsided interval is given by its ends."""
    value, spread = columns(quantity)
    if not math.isfinite(quantity.value):
        return value
    if is_lopsided(quantity):
        return f"{with_unit(value, quantity.unit)}, interval {with_unit(spread, quantity.unit)}"
    if not spread:
        exact = quantity.U == 0
        return with_unit(value, quantity.unit) + ("" if exact else " (uncertainty not known)")
    return f"{with_unit(value, quantity.unit)} ± {with_unit(spread, quantity.unit)}"


def line(name: str, quantity: Quantity) -> str:
    """One quantity as one line: ``arc height above the rim 0.2085 m ± 0.0031 m (k = 2.0)``.

    Parameters
    ----------
    name : str
        As in ``result.json``.
    quantity : Quantity

    Returns
    -------
    str
    """
    text = f"{name_of(name, quantity.unit).label} {value_text(quantity)}"
    if not math.isfinite(quantity.value) or not quantity.U > 0:
        return text
    return f"{text} (95 %)" if is_lopsided(quantity) else f"{text} (k = {k_text(quantity.k)})"


def is_lopsided(quantity: Quantity) -> bool:
    """Whether the interval's arms differ so much that one U would mislead."""
    low, high = quantity.interval
    arms = (quantity.value - low, high - quantity.value)
    if not all(math.isfinite(arm) for arm in arms) or max(arms) <= 0:
        return False
    return abs(arms[1] - arms[0]) > LOPSIDED * max(arms)


def k_text(k: float) -> str:
    """Coverage factor with one decimal place."""
    return f"{k:.1f}" if math.isfinite(k) else "not known"


def part_text(part: float, unit: str) -> str:
    """One budget line's part of the result, sign kept, two significant digits."""
    if not math.isfinite(part):
        return "not known"
    if part == 0:
        return with_unit("0", unit)
    return with_unit(number(part, places_for(abs(part))), unit)


def percent(line: BudgetLine, u: float) -> str:
    """Share of one budget line in the variance of the result."""
    share = 100.0 * line.part**2 / u**2 if u > 0 else math.nan
    if not math.isfinite(share):
        return ""
    return "< 1 %" if share < 1 else f"{share:.0f} %"


def with_unit(text: str, unit: str) -> str:
    """Number, space, unit (SI Brochure 5.4.3); nothing after a pure number."""
    shown = show_unit(unit)
    if not shown:
        return text
    return f"{text}{shown}" if shown == "°" else f"{text} {shown}"


def _plain(value: float, places: int, rounding: str) -> str:
    if not math.isfinite(value):
        return "not known"
    # Quantize to the place, then write without an exponent: 1.2E+3 is no plain number.
    cut = Decimal(repr(float(value))).quantize(Decimal(1).scaleb(-places), rounding=rounding)
    return format(abs(cut) if cut == 0 else cut, "f")


def _six(value: float) -> str:
    text = format(Decimal(f"{value:.5e}").normalize(), "f")
    return "0" if text in {"-0", "0"} else text
