"""Every cause of error as another way to see the same footage.

A `View` is one set of calibration and sheet values through which pixels become a result. A `Cause` is one
independent source of uncertainty with the view as it would be if that source were off by one standard uncertainty.
Pushing all causes through the same analysis gives the budget (JCGM 100:2008, 5.1.3 with numerical sensitivities,
5.1.3 note 2): nothing is counted twice, and what a constant offset does to an acceleration, nothing, comes out by
itself.
"""

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from calibration.clock import Clock
from calibration.plane import PARAMETERS, Plane
from tracker.analysis.quantity import Shared
from tracker.defaults import OUT_OF_PLANE_M
from tracker.measure.stage import Stage

__all__ = ["Cause", "InputU", "Nudge", "View", "causes_of", "first_view"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Nudge:
    """An error of following that all frames share: a steady offset and a slow bend over the window [px]."""

    column: float = 0.0
    row: float = 0.0
    bend_column: float = 0.0
    bend_row: float = 0.0

    def applied(self, points_px: Floats, phase: Floats) -> Floats:
        """Move points (n, 2); `phase` (n,) runs from -1 to 1 over the window."""
        bow = 1.0 - phase**2  # nothing at the ends, one in the middle
        moved = np.array(points_px, dtype=float)
        moved[:, 0] += self.column + self.bend_column * bow
        moved[:, 1] += self.row + self.bend_row * bow
        return moved


@dataclass(frozen=True, slots=True, eq=False)
class View:
    """One way to see the footage."""

    plane: Plane
    clock: Clock
    inputs: Mapping[str, float] = field(default_factory=dict)  # numbers of the sheet that the laws use, by key
    nudge: Nudge = Nudge()


@dataclass(frozen=True, slots=True, eq=False)
class Cause:
    """One independent source of uncertainty."""

    label: str
    u: float
    unit: str
    shared: Shared
    id: str
    view: Callable[[float], View]  # the view with this source off by so many standard uncertainties
    dof: float = np.inf


@dataclass(frozen=True, slots=True)
class InputU:
    """Standard uncertainty of one number that the laws use."""

    key: str
    u: float
    unit: str
    label: str
    shared: Shared = "run"


def first_view(stage: Stage, inputs: Mapping[str, float]) -> View:
    """The view with everything at its best estimate."""
    return View(stage.plane, stage.clock, dict(inputs))


def causes_of(stage: Stage, view: View, input_us: Iterable[InputU], bias_px: float, wander_px: float) -> list[Cause]:
    """All causes of error of a run.

    Parameters
    ----------
    stage : Stage
    view : View
        The best estimate.
    input_us : iterable of InputU
        Of the numbers in `view.inputs`.
    bias_px : float
        Standard uncertainty of the steady offset of what was followed from the true axis, in each coordinate [px].
    wander_px : float
        Standard uncertainty of its slow change along the path [px].

    Returns
    -------
    list of Cause
    """
    plane, clock = stage.plane, stage.clock
    found: list[Cause] = []

    def add(label: str, u: float, unit: str, shared: Shared, id: str, make: Callable[[float], View]) -> None:
        if u > 0:
            found.append(Cause(label, u, unit, shared, id, make))

    for number, source in enumerate(plane.sources):

        def seen_by(n: float, i: int = number) -> View:
            return replace(view, plane=plane.shifted(i, n))

        add(source.label, source.u, source.unit, source.shared, source.id, seen_by)
    half = _out_of_plane(stage)
    u_out = half / np.sqrt(3)
    add(
        "line out of the plane of motion",
        u_out,
        "m",
        "run",
        "",
        lambda n: replace(view, plane=toward_camera(plane, n * u_out)),
    )
    station = plane.sources[0].id if plane.sources else ""
    add(
        "capture rate",
        clock.u_rate,
        "1",
        "station",
        station,
        lambda n: replace(view, clock=clock.scaled(1 + n * clock.u_rate)),
    )
    add(
        "readout time of the picture", clock.u_readout_s, "s", "station", station,
        lambda n: replace(view, clock=clock.with_readout(clock.readout_s + n * clock.u_readout_s)),
    )  # fmt: skip
    add("place of the axis across", bias_px, "px", "run", "", lambda n: replace(view, nudge=Nudge(column=n * bias_px)))
    add("place of the axis in height", bias_px, "px", "run", "", lambda n: replace(view, nudge=Nudge(row=n * bias_px)))
    add(
        "light along the path, across",
        wander_px,
        "px",
        "run",
        "",
        lambda n: replace(view, nudge=Nudge(bend_column=n * wander_px)),
    )
    add(
        "light along the path, in height",
        wander_px,
        "px",
        "run",
        "",
        lambda n: replace(view, nudge=Nudge(bend_row=n * wander_px)),
    )
    for item in input_us:

        def with_input(n: float, key: str = item.key, u: float = item.u) -> View:
            return replace(view, inputs={**view.inputs, key: view.inputs[key] + n * u})

        add(item.label, item.u, item.unit, item.shared, item.key if item.shared == "site" else "", with_input)
    return found


def toward_camera(plane: Plane, metres: float) -> Plane:
    """The plane that motion ran in if it was nearer to the camera by `metres`; board and camera stay where they are."""
    theta = np.array(plane.theta)
    theta[PARAMETERS.index("offset")] += metres
    return replace(plane, theta=theta)


def _out_of_plane(stage: Stage) -> float:
    test = stage.file.sheet.test
    if test.out_of_plane_m is not None:
        return test.out_of_plane_m
    half = OUT_OF_PLANE_M.get(test.kind, 0.01)
    why = "half-range of the line towards or from the camera (design value of this test kind)"
    return stage.file.note_default("test.out_of_plane_m", half, "m", why)
