"""From estimates and what each cause does to them to quantities with their budgets.

Each cause was pushed through the whole analysis at plus and minus one standard uncertainty; half the difference is its
part of each quantity (JCGM 100:2008, 5.1.3, note 2). Causes that bear one name are one line.
"""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from tracker.analysis.quantity import BudgetLine, Quantity, Shared, quantity
from tracker.analysis.tracks import Estimate

__all__ = ["Pushed", "make_quantities", "shrink_sentence"]


@dataclass(frozen=True, slots=True)
class Pushed:
    """One cause and the values of every quantity with it off by plus and by minus one standard uncertainty."""

    label: str
    u: float
    unit: str
    shared: Shared
    id: str
    plus: Mapping[str, float]
    minus: Mapping[str, float]
    dof: float = np.inf


def make_quantities(estimates: Mapping[str, Estimate], causes: Sequence[Pushed]) -> dict[str, Quantity]:
    """Combine scatter and causes.

    Parameters
    ----------
    estimates : mapping of str to Estimate
    causes : sequence of Pushed

    Returns
    -------
    dict of str to Quantity
        In the order of `estimates`.
    """
    made = {}
    for name, estimate in estimates.items():
        merged: dict[tuple[str, str], list[tuple[Pushed, float]]] = {}
        for cause in causes:
            part = _part(estimate.value, cause.plus.get(name, np.nan), cause.minus.get(name, np.nan))
            merged.setdefault((cause.label, cause.shared), []).append((cause, part))
        lines = [_line(group) for group in merged.values()]
        if estimate.u_random > 0:
            lines.append(
                BudgetLine(
                    "scatter of the frames",
                    estimate.u_random,
                    1.0,
                    "A",
                    max(estimate.dof, 1.0),
                    "run",
                    "",
                    estimate.unit,
                )
            )
        largest = max((abs(line.part) for line in lines), default=0.0)
        lines = [line for line in lines if abs(line.part) > 1e-4 * largest]
        made[name] = quantity(
            estimate.value, estimate.unit, lines, estimate.definition, estimate.window_s, extra=dict(estimate.extra)
        )
    return made


def _part(value: float, plus: float, minus: float) -> float:
    """Signed effect of one standard uncertainty; one side alone where the other could not be evaluated."""
    if np.isfinite(plus) and np.isfinite(minus):
        return 0.5 * (plus - minus)
    if np.isfinite(plus):
        return plus - value
    return value - minus if np.isfinite(minus) else 0.0


def _line(group: Sequence[tuple[Pushed, float]]) -> BudgetLine:
    cause, part = group[0]
    if len(group) == 1:
        return BudgetLine(cause.label, cause.u, part / cause.u, "B", cause.dof, cause.shared, cause.id, cause.unit)
    together = float(np.sqrt(sum(p**2 for _, p in group)))
    ids = sorted({one.id for one, _ in group})
    identity = ids[0] if len(ids) == 1 else hashlib.sha256(" ".join(ids).encode()).hexdigest()[:12]
    return BudgetLine(cause.label, 1.0, together, "B", cause.dof, cause.shared, identity, "1")


_ADVICE = {
    "board square": "measure the printed check bar and give u_square_m",
    "board offset": "hang the board in the plane of motion, or measure offset_m to half a millimetre",
    "board lean": "stand the board plumb and give u_lean_deg",
    "board yaw": "square the board to the plane of motion and give u_yaw_deg",
    "distance": "measure the distance from lens to plane with a tape and give u_distance_m",
    "lens": "calibrate the lens and name its file in camera.lens",
    "principal point": "calibrate the lens and name its file in camera.lens",
    "datum": "mark the datum more exactly, or at a larger picture scale",
    "vertical": "hang a plumb line in the picture",
    "level": "hang a plumb line in the picture",
    "out of the plane": "guide the line in one plane, and film from farther away",
    "capture rate": "check the capture rate against a lamp's flicker or a free drop",
    "readout": "measure the readout time of the camera's mode and give readout_s with its u",
    "scatter": "film nearer, with more light and a shorter exposure, or repeat the run",
    "axis": "light the line evenly from both sides",
    "light along": "light the line evenly from both sides",
    "corners": "use a larger board, sharp and evenly lit",
}


def shrink_sentence(item: Quantity) -> str:
    """What about the filming would shrink U most, as one sentence; empty where nothing stands out."""
    if not item.budget or item.u == 0:
        return ""
    line = item.budget[0]
    share = (line.part / item.u) ** 2
    without = item.U * np.sqrt(max(1 - share, 0.0))
    advice = next((text for key, text in _ADVICE.items() if key in line.source), "")
    if share < 0.2 or not advice:
        return ""
    gain = f"without it U falls from {item.U:.2g} to {without:.2g} {item.unit}"
    return f"Most of U comes from: {line.source}. To shrink it, {advice}; {gain}."
