"""What a result says, in words for a technician: the headline number, whether it agrees with what was expected, and what that means."""

import math
from dataclasses import dataclass

from tracker.report.figures import is_lopsided, k_text, value_text
from tracker.report.names import name_of
from tracker.result import Prediction, Result

__all__ = ["AGREES_WITHIN", "Verdict", "agrees", "times_u", "verdict"]

AGREES_WITHIN = 2.0
"""A difference of so many of its standard uncertainties is still called agreement (about 95 %)."""


@dataclass(frozen=True, slots=True)
class Verdict:
    """The answer of a run."""

    label: str  # of the headline quantity
    number: str  # value, U and unit
    coverage: str  # what U is
    finding: str  # against what was expected, one sentence
    meaning: str  # what that means, and what it does not mean
    agrees: bool | None  # None: nothing to compare with


def verdict(result: Result) -> Verdict:
    """The answer of a run in words.

    Parameters
    ----------
    result : Result

    Returns
    -------
    Verdict
    """
    for name, quantity in result.quantities.items():  # the headline stands first
        label, number = name_of(name, quantity.unit).label, value_text(quantity)
        coverage = "95 % interval" if is_lopsided(quantity) else f"U at 95 %, k = {k_text(quantity.k)}"
        if not quantity.U > 0:
            coverage = ""
        break
    else:
        return Verdict("nothing could be measured", "no number", "", "See the warnings for what is missing.", "", None)
    main = _main_prediction(result)
    if main is None:
        return Verdict(label, number, coverage, "No law or free fall is set against this number.", _ALONE.get(result.kind, ""), None)
    return Verdict(label, number, coverage, main.says, _meaning(result.kind, main), agrees(main))


def agrees(item: Prediction) -> bool:
    """Whether measured and predicted agree within the uncertainty of their difference."""
    return abs(item.difference) <= AGREES_WITHIN * item.u_difference


def times_u(item: Prediction) -> str:
    """How large the difference is, in its own standard uncertainties."""
    if not (math.isfinite(item.difference) and item.u_difference > 0):
        return "not known"
    return f"{abs(item.difference) / item.u_difference:.1f}"


def _main_prediction(result: Result) -> Prediction | None:
    """The one against free fall or local gravity if there is one, else the first."""
    for item in result.predictions:
        if "free fall" in item.law or "gravity" in item.law:
            return item
    return result.predictions[0] if result.predictions else None


def _meaning(kind: str, item: Prediction) -> str:
    if agrees(item):
        return _AGREES.get(kind, "")
    faster = item.difference > 0
    return _DIFFERS.get((kind, faster), "")


_ALONE = {
    "payout": "The number stands by itself. It holds for this line, this container and this drop height.",
    "drawn": "The number stands by itself. It holds for this line and this container at the set speed.",
}

_AGREES = {
    "payout": "Arc and speed fit together as the law asks. Other container shapes and drop heights are not covered by this run.",
    "surface-drop": "Within this uncertainty the surface does not pull the line. A smaller pull than U would not be seen.",
    "held-drop": "The free end falls as a loose body would, within this uncertainty.",
    "free-drop": "Scale and clock of this station are right together, within this uncertainty. Neither is proved alone.",
    "edge-slide": "The line slides as the named law says, within this uncertainty.",
    "drawn": "The line runs as set, within this uncertainty.",
}

_DIFFERS = {
    ("surface-drop", True): "The line runs ahead of free fall: the part that has landed pulls on the part that still falls. "
    "A paired drop without landing shows whether the surface alone is the cause.",
    ("surface-drop", False): "The line lags behind free fall. Look for drag, a snag at the release, or a board that leans.",
    ("held-drop", True): "The free end is faster than free fall: the fold hands its energy on to the falling part.",
    ("held-drop", False): "The free end is slower than free fall. Look for drag, a snag at the release, or a board that leans.",
    ("free-drop", True): "Scale or clock of this station is off: lengths read too long or times too short. Check square side, board "
    "offset and capture rate before other runs of this station are believed.",
    ("free-drop", False): "Scale or clock of this station is off: lengths read too short or times too long. Check square side, board "
    "offset and capture rate before other runs of this station are believed; drag also slows a light object.",
    ("payout", True): "Arc and speed do not fit together as the law asks. The arc may still be growing; see the predictions below.",
    ("payout", False): "Arc and speed do not fit together as the law asks. The arc may still be growing; see the predictions below.",
    ("edge-slide", True): "The line slides faster than the named law says.",
    ("edge-slide", False): "The line slides slower than the named law says.",
    ("drawn", True): "The line runs faster than set.",
    ("drawn", False): "The line runs slower than set.",
}
