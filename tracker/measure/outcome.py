"""What following and analysing one run gave, before it is put together as a result; and what all kinds share in making it."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from calibration.notice import CannotMeasure, Notice
from tracker.analysis.budget import Pushed
from tracker.analysis.quantity import Quantity
from tracker.analysis.tracks import Evaluation, Finding
from tracker.measure.views import Cause, View
from tracker.result import FRAME_COLUMNS, FrameMark, Prediction

__all__ = ["HEADLINE", "HEADLINE_WORDS", "Outcome", "empty_frames", "notices_of", "predicted", "push"]

Floats = NDArray[np.float64]

HEADLINE = {
    "payout": "arc_height_m",
    "drawn": "line_speed_mps",
    "free-drop": "measured_gravity_mps2",
    "surface-drop": "effective_acceleration_mps2",
    "held-drop": "effective_acceleration_mps2",
    "edge-slide": "growth_rate_per_s",
}
"""What a run of a kind is made for; without it there is no result."""

HEADLINE_WORDS = {
    "payout": "arc height",
    "drawn": "line speed",
    "free-drop": "gravity",
    "surface-drop": "effective acceleration",
    "held-drop": "effective acceleration",
    "edge-slide": "growth rate",
}


@dataclass(frozen=True, slots=True, eq=False)
class Outcome:
    """One run, followed and analysed."""

    quantities: dict[str, Quantity]
    predictions: tuple[Prediction, ...]
    notices: tuple[Notice, ...]
    frames: pd.DataFrame
    marks: tuple[FrameMark, ...]
    curves: dict[str, Floats] = field(default_factory=dict)
    absent: Mapping[str, str] = field(default_factory=dict)


def push(evaluate: Callable[[View], Mapping[str, float]], causes: Sequence[Cause]) -> list[Pushed]:
    """Evaluate every cause at plus and minus one standard uncertainty.

    A view in which the footage cannot be read at all (beyond the horizon) gives nothing on that side.
    """

    def values(cause: Cause, n: float) -> Mapping[str, float]:
        try:
            return evaluate(cause.view(n))
        except CannotMeasure:
            return {}

    return [Pushed(c.label, c.u, c.unit, c.shared, c.id, values(c, 1.0), values(c, -1.0), c.dof) for c in causes]


def notices_of(evaluation: Evaluation) -> tuple[Notice, ...]:
    """Findings of the analysis in the words of a result."""
    return tuple(_notice(finding) for finding in evaluation.findings)


def _notice(finding: Finding) -> Notice:
    return Notice(finding.code, finding.says, finding.damage, finding.remedy)


def empty_frames(numbers: NDArray[np.intp]) -> pd.DataFrame:
    """The frames table with its columns, nothing measured yet."""
    table = pd.DataFrame({name: np.full(numbers.size, np.nan) for name in FRAME_COLUMNS})
    table["frame"] = numbers
    table["flags"] = ""
    return table


def predicted(
    measured: Quantity, name: str, law: str, value: float, u: float, label: str, cancelled: float = 0.0
) -> Prediction:
    """Hold a measured quantity against what a law says.

    Parameters
    ----------
    measured : Quantity
    name : str
        Of the quantity.
    law : str
        Where the value comes from: "free fall".
    value, u : float
        What it says, and its standard uncertainty.
    label : str
        What is compared, for the sentence: "effective acceleration".
    cancelled : float
        Variance that both have in common and that does not count in the difference.

    Returns
    -------
    Prediction
    """
    difference, unit = measured.value - value, measured.unit.replace("m/s2", "m/s²")
    u_difference = float(np.sqrt(max(measured.u**2 + u**2 - 2 * cancelled, 0.0)))
    reach = measured.k * u_difference
    relative = f" ({100 * difference / value:+.2f} %)" if value else ""
    if abs(difference) <= reach:
        says = f"The {label} agrees with {law} within U: {difference:+.3g} {unit}{relative} against {reach:.2g} {unit}."
    else:
        side = "above" if difference > 0 else "below"
        says = f"The {label} lies {abs(difference):.3g} {unit}{relative} {side} {law}, more than U of {reach:.2g} {unit}."
    return Prediction(name, law, value, u, measured.unit, difference, u_difference, says)
