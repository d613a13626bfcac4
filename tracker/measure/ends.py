"""Free drop, surface drop, held drop, edge slide: the end is followed, its track analysed, its budget made."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from calibration.notice import CannotMeasure, Notice
from tracker.analysis import edge_slide, free_drop, held_drop, surface_drop
from tracker.analysis.budget import make_quantities
from tracker.analysis.kinematics import local_state
from tracker.analysis.quantity import Quantity
from tracker.analysis.tracks import Evaluation, Track
from tracker.follow.end import EndFollow, follow_end
from tracker.measure.outcome import HEADLINE, HEADLINE_WORDS, Outcome, empty_frames, notices_of, predicted, push
from tracker.measure.stage import Stage
from tracker.measure.steps import StepWatch, lost_notice, repeat_notice, without_repeats
from tracker.measure.views import InputU, View, causes_of, first_view
from tracker.progress import Progress
from tracker.result import FrameMark, Prediction

__all__ = ["measure_end"]

Floats = NDArray[np.float64]
_State = tuple[float, float, float, float]  # place, speed and their standard uncertainties
@dataclass(frozen=True, slots=True)
class _Fixed:
    """Window and first touch of the best estimate, as places among the frames: shifted views keep them."""

    first: int
    last: int
    touch: float | None  # as a fractional index among the frames


def measure_end(stage: Stage, tell: Progress) -> Outcome:
    """Measure one run of a kind in which an end is followed.

    Parameters
    ----------
    stage : Stage
    tell : Progress

    Returns
    -------
    Outcome

    Raises
    ------
    CannotMeasure
        The end is not seen, or too little of its fall.
    """
    kind = stage.file.sheet.test.kind
    total = stage.end_frame - stage.first_frame
    watch = StepWatch(stage.clip.frames(stage.first_frame, stage.end_frame))
    follow = follow_end(
        watch, stage.background, stage.plane, stage.clock, stage.hints, shake=stage.shake,
        progress=lambda index: tell("following the end", index - stage.first_frame + 1, total),
    )  # fmt: skip
    _refuse_unseen(stage, follow)
    repeated = watch.repeated()
    follow = without_repeats(follow, repeated)
    tell("uncertainty", 0, 0)
    view = first_view(stage, _inputs(stage))
    track = _track(follow, view, None)
    best = _evaluate(stage, kind, view, track, None)
    if HEADLINE[kind] not in best.estimates:
        reason = best.absent.get(HEADLINE[kind], "the end does not fall within the clip")
        raise CannotMeasure(
            f"{stage.file.path.name}: no {HEADLINE_WORDS[kind]} can be given: {reason}.",
            "Film the whole run, from rest before the release to the end of the fall, with the end in the picture throughout.",
            "headline-absent",
        )
    fixed = _fixed(track, best)

    def values(seen: View) -> Mapping[str, float]:
        shifted = _track(follow, seen, fixed)
        found = _evaluate(stage, kind, seen, shifted, fixed).estimates
        return {name: estimate.value for name, estimate in found.items()}

    causes = causes_of(stage, view, _input_us(stage), follow.bias_px, follow.wander_px)
    quantities = make_quantities(best.estimates, push(values, causes))
    quantities = {HEADLINE[kind]: quantities.pop(HEADLINE[kind]), **quantities}
    predictions = _predictions(stage, kind, quantities)
    return Outcome(
        quantities=quantities,
        predictions=predictions,
        notices=(*follow.notices, *_step_notices(stage, follow, repeated), *notices_of(best), *_drop_check(kind, quantities, predictions)),
        frames=_table(stage, follow, track),
        marks=_marks(stage, follow),
        curves=best.curves,
        absent=best.absent,
    )


def _refuse_unseen(stage: Stage, follow: EndFollow) -> None:
    seen = np.isfinite(follow.px).all(axis=1)
    name = stage.file.path.name
    if seen.sum() < 8:
        raise CannotMeasure(
            f"{name}: the end was seen in {int(seen.sum())} of {seen.size} frames.",
            "Check datum.origin_px (the release point) and line.end_mark_m; mark the end with a ball or tape that stands out.",
            "end-never-seen",
        )
    way = np.nanmax(follow.px[:, 1]) - np.nanmin(follow.px[:, 1])
    if way < 8:
        raise CannotMeasure(
            f"{name}: the end moves by {way:.1f} px in the whole clip, so nothing falls in it.",
            "Film the release and the fall, or check datum.origin_px (the release point) and clip.window_s.",
            "nothing-falls",
        )


def _step_notices(stage: Stage, follow: EndFollow, repeated: NDArray[np.intp]) -> tuple[Notice, ...]:
    name, speeds = stage.file.clip_path.name, follow.speed_px_s / stage.plane.scale_px_per_m()
    fastest = float(np.nanmax(speeds)) if np.isfinite(speeds).any() else np.nan
    return (
        *repeat_notice(name, stage.clock, repeated, fastest),
        *lost_notice(name, stage.clock, follow, fastest),
    )


def _inputs(stage: Stage) -> dict[str, float]:
    sheet = stage.file.sheet
    known = {
        "gravity": stage.gravity,
        "length_m": sheet.line.length_m,
        "drop_height_m": sheet.test.drop_height_m,
        "landing_rise_m": sheet.test.landing_rise_m,
        "diameter_m": sheet.line.object_diameter_m,
        "mass_kg": sheet.line.object_mass_kg,
        "drag_coefficient": free_drop.DRAG_COEFFICIENT,
    }
    return {key: float(value) for key, value in known.items() if value is not None}


def _input_us(stage: Stage) -> list[InputU]:
    sheet, file = stage.file.sheet, stage.file
    us = [InputU("gravity", stage.u_gravity, "m/s2", "local gravity", "site")]
    kind = sheet.test.kind
    if kind != "free-drop" and sheet.line.length_m is not None:
        us.append(InputU("length_m", file.u("line.length_m", sheet.line.length_m), "m", "length of the line"))
    if kind == "surface-drop" and sheet.test.drop_height_m is not None:
        us.append(InputU("drop_height_m", file.u("test.drop_height_m"), "m", "drop height", "station"))
        us.append(InputU("landing_rise_m", file.u("test.landing_rise_m"), "m", "rise of the landed heap"))
    if kind == "free-drop" and sheet.line.object_diameter_m is not None and sheet.line.object_mass_kg is not None:
        us.append(InputU("drag_coefficient", 0.2 * free_drop.DRAG_COEFFICIENT, "1", "drag coefficient"))
    return us


def _track(follow: EndFollow, view: View, fixed: _Fixed | None) -> Track:
    """The end on the plane of motion as a view has it."""
    count = follow.frame.size
    phase = np.linspace(-1.0, 1.0, count)
    if fixed is not None and fixed.last > fixed.first:
        phase = (np.arange(count) - fixed.first) / (fixed.last - fixed.first) * 2.0 - 1.0
        phase = np.clip(phase, -1.0, 1.0)
    metres = view.plane.to_metres(view.nudge.applied(follow.px, phase))
    times = view.clock.at(follow.frame, follow.raw_px)
    return Track(times, metres[:, 0], metres[:, 1], follow.u_xy_px[:, 1] / view.plane.scale_px_per_m())


def _fixed(track: Track, best: Evaluation) -> _Fixed:
    count = track.t_s.size
    known = np.flatnonzero(np.isfinite(track.t_s))
    window = best.window_s
    if window is None or known.size == 0:
        return _Fixed(0, count - 1, None)
    inside = known[(track.t_s[known] >= window[0] - 1e-9) & (track.t_s[known] <= window[1] + 1e-9)]
    touch = best.estimates.get("first_touch_s")
    place = None if touch is None else float(np.interp(touch.value, track.t_s[known], known))
    return _Fixed(int(inside[0]), int(inside[-1]), place)


def _evaluate(stage: Stage, kind: str, view: View, track: Track, fixed: _Fixed | None) -> Evaluation:
    window: tuple[float, float] | None = None
    touch: float | None = None
    if fixed is not None:
        window = (float(track.t_s[fixed.first]), float(track.t_s[fixed.last]))
        if fixed.touch is not None:
            known = np.flatnonzero(np.isfinite(track.t_s))
            touch = float(np.interp(fixed.touch, known, track.t_s[known]))
    given = view.inputs
    gravity = given["gravity"]
    if kind == "free-drop":
        drag = given["drag_coefficient"]
        return free_drop.evaluate(
            track, free_drop.FreeDropSetup(gravity, given.get("diameter_m"), given.get("mass_kg"), drag, window)
        )
    if kind == "surface-drop":
        height = given.get("drop_height_m", _height_from_picture(stage, view))
        setup = surface_drop.SurfaceDropSetup(
            gravity, given.get("length_m"), height, given["landing_rise_m"], window, touch
        )
        return surface_drop.evaluate(track, setup)
    if kind == "held-drop":
        return held_drop.evaluate(track, held_drop.HeldDropSetup(gravity, given.get("length_m"), window))
    return edge_slide.evaluate(track, edge_slide.EdgeSlideSetup(gravity, given.get("length_m"), window))


def _height_from_picture(stage: Stage, view: View) -> float | None:
    """Release point to the floor, where the floor is marked in the picture and no tape was given."""
    floor = stage.file.sheet.datum.floor_px
    return None if floor is None else -float(view.plane.to_metres(np.asarray(floor))[1])


def _predictions(stage: Stage, kind: str, quantities: dict[str, Quantity]) -> tuple[Prediction, ...]:
    found: list[Prediction] = []
    add: Callable[[Prediction], None] = found.append
    g, u_g = stage.gravity, stage.u_gravity
    if (item := quantities.get("measured_gravity_mps2")) is not None:
        add(predicted(item, "measured_gravity_mps2", "local gravity", g, u_g, "measured gravity"))
    elif (item := quantities.get("effective_acceleration_mps2")) is not None:
        add(predicted(item, "effective_acceleration_mps2", "free fall", g, u_g, "effective acceleration"))
    if (item := quantities.get("lead_over_free_fall_s")) is not None:
        add(predicted(item, "lead_over_free_fall_s", "free fall", 0.0, 0.0, "arrival at the window's end"))
    if kind == "held-drop" and (item := quantities.get("fold_coefficient")) is not None:
        add(predicted(item, "fold_coefficient", "the energy-conserving fold", 1.0, 0.0, "fold coefficient"))
    length = stage.file.sheet.line.length_m
    if kind == "edge-slide" and length is not None and (item := quantities.get("growth_rate_per_s")) is not None:
        u = 0.5 * float(np.sqrt(g / length)) * stage.file.u("line.length_m", length) / length
        add(
            predicted(
                item, "growth_rate_per_s", "sliding without friction", float(np.sqrt(g / length)), u, "growth rate"
            )
        )
    return tuple(found)


def _drop_check(kind: str, quantities: dict[str, Quantity], predictions: tuple[Prediction, ...]) -> tuple[Notice, ...]:
    """What a free drop proves, or what its disagreement usually means."""
    item = quantities.get("measured_gravity_mps2")
    if kind != "free-drop" or item is None or not predictions:
        return ()
    check = predictions[0]
    if abs(check.difference) <= item.k * check.u_difference:
        return ()
    ratio = item.value / check.value
    return (
        Notice(
            "drop-check-failed",
            f"Measured gravity is {100 * (ratio - 1):+.2f} % off local gravity, more than U.",
            f"Either lengths are {100 * (ratio - 1):+.1f} % wrong or times {-50 * (ratio - 1):+.1f} %: accelerations of this "
            "station are wrong by the former.",
            "Scale: check square_m, offset_m and distance_m against a tape, and the board's lean. Clock: check capture_fps. "
            "A light object also falls short by drag.",
        ),
    )


def _table(stage: Stage, follow: EndFollow, track: Track) -> pd.DataFrame:
    table = empty_frames(np.arange(stage.first_frame, stage.end_frame))
    at = follow.frame - stage.first_frame
    table["t_s"] = stage.clock.frame_s[stage.first_frame : stage.end_frame]
    table.loc[at, "end_t_s"] = track.t_s
    table.loc[at, "end_x_m"] = track.x_m
    table.loc[at, "end_z_m"] = track.z_m
    table.loc[at, "u_end_z_m"] = track.u_m
    table.loc[at, "flags"] = [" ".join(_faults(flags)) for flags in follow.flags]
    speed, u_speed = _speeds(track)
    table.loc[at, "line_speed_mps"] = speed
    table.loc[at, "u_line_speed_mps"] = u_speed
    return table


def _faults(flags: tuple[str, ...]) -> tuple[str, ...]:
    """Flags that a person should look at: an end that hangs still before its release is as it should be."""
    return tuple(flag for flag in flags if flag != "end-still")


UNRESOLVED = 0.5  # of the mean speed: a change of the velocity from one frame to the next that no smoothing may hide


def _speeds(track: Track) -> tuple[Floats, Floats]:
    """Speed of the end, frame by frame, with its standard uncertainty.

    From a local cubic over five frames to either side where motion allows it, that is where a parabola over two frames
    to either side says the same; from that parabola where not, half the difference in u. Empty where the velocity
    changes too much from one frame to the next, as in a whip: what a smoother gives there is not the end's speed.
    """
    across = replace(track, z_m=track.x_m)
    speed, u = np.full(track.t_s.size, np.nan), np.full(track.t_s.size, np.nan)
    whipping = _whipping(track)
    for i in np.flatnonzero(np.isfinite(track.z_m) & np.isfinite(track.t_s) & ~whipping):
        at = float(track.t_s[i])
        wide = _speed(local_state(across, at, reach=5), local_state(track, at, reach=5))
        narrow = _speed(local_state(across, at, reach=2, degree=2), local_state(track, at, reach=2, degree=2))
        if wide is None or narrow is None:
            continue
        apart = abs(wide[0] - narrow[0])
        if apart <= 2 * float(np.hypot(wide[1], narrow[1])) and not whipping[max(0, i - 5) : i + 6].any():
            speed[i], u[i] = wide
        else:
            speed[i], u[i] = narrow[0], float(np.hypot(narrow[1], 0.5 * apart))
    return speed, u


def _whipping(track: Track) -> NDArray[np.bool_]:
    """Frames about which the velocity changes by more than half of itself, beyond what the noise of places can do."""
    step = np.stack([np.diff(track.x_m), np.diff(track.z_m)], axis=1) / np.diff(track.t_s)[:, None]
    change = np.hypot(*(step[1:] - step[:-1]).T)
    mean = 0.5 * (np.hypot(*step[1:].T) + np.hypot(*step[:-1].T))
    noise = float(np.nanmedian(track.u_m)) / float(np.nanmedian(np.diff(track.t_s)))
    wild = (change > UNRESOLVED * mean) & (change > 10 * noise) & (mean > 20 * noise)
    out = np.zeros(track.t_s.size, dtype=bool)
    for shift in (0, 1, 2):  # a frame and its two neighbours
        out[shift : shift + wild.size] |= wild
    return out


def _speed(side: _State | None, down: _State | None) -> tuple[float, float] | None:
    if side is None or down is None:
        return None
    speed = float(np.hypot(side[1], down[1]))
    u = float(np.hypot(down[1] * down[3], side[1] * side[3])) / speed if speed > 0 else down[3]
    return speed, u


def _marks(stage: Stage, follow: EndFollow) -> tuple[FrameMark, ...]:
    marks = []
    for frame, point, flags in zip(follow.frame, follow.raw_px, follow.flags, strict=True):
        end = (float(point[0]), float(point[1])) if np.isfinite(point).all() else None
        marks.append(FrameMark(int(frame), float(stage.clock.frame_s[frame]), end_px=end, flags=_faults(flags)))
    return tuple(marks)
