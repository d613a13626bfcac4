"""Payout and drawn line: the line is followed, its arc and speed analysed, their budget made."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from calibration.notice import CannotMeasure, Notice
from tracker.analysis import drawn, payout
from tracker.analysis.budget import make_quantities
from tracker.analysis.quantity import Quantity
from tracker.analysis.tracks import Evaluation, PayoutTrack
from tracker.follow.payout import PayoutFollow, PayoutFrame, follow_payout
from tracker.measure.outcome import HEADLINE, HEADLINE_WORDS, Outcome, empty_frames, notices_of, predicted, push
from tracker.measure.stage import Stage
from tracker.measure.steps import REPEATED, StepWatch, repeat_notice
from tracker.measure.views import InputU, View, causes_of, first_view
from tracker.progress import Progress
from tracker.result import FrameMark, Prediction

__all__ = ["measure_arc"]

Floats = NDArray[np.float64]
SCALE_NODES = 40


@dataclass(frozen=True, slots=True, eq=False)
class _Seen:
    """What was followed, as arrays over the frames, still in pixels where that can be."""

    frame: NDArray[np.intp]
    apex_px: Floats  # (n, 2), camera movement undone
    apex_raw_px: Floats  # (n, 2), in the frame itself: its row tells its time
    legs_px: Floats  # (n, 2, 2), camera movement undone
    u_apex_m: Floats
    radius_m: Floats
    radius_u_m: Floats
    reference_px: Floats  # (m, 2) points along a typical line, for its scale
    row_speed: Floats  # (n,) mean speed of the line along the scan where it was read [px/s], signed


def measure_arc(stage: Stage, tell: Progress) -> Outcome:
    """Measure one payout or drawn line.

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
        The line is not seen, its arc leaves the picture, or its speed has no carrier.
    """
    kind = stage.file.sheet.test.kind
    total = stage.end_frame - stage.first_frame
    watch = StepWatch(stage.clip.frames(stage.first_frame, stage.end_frame))
    follow = follow_payout(
        watch, stage.background, stage.plane, stage.clock, stage.hints,
        shake=stage.shake, progress=lambda index: tell("following the line", index - stage.first_frame + 1, total),
    )  # fmt: skip
    _refuse_unseen(stage, follow)
    repeated = watch.repeated()
    tell("uncertainty", 0, 0)
    seen = _seen(stage, follow)
    view = first_view(stage, _inputs(stage))
    track = _track(seen, follow, view, view)
    best = _evaluate(kind, view, track, None)
    _refuse_headless(stage, kind, best, follow)
    fixed = _fixed(track, best)

    def values(other: View) -> Mapping[str, float]:
        shifted = _track(seen, follow, other, view)
        window = (float(shifted.t_s[fixed[0]]), float(shifted.t_s[fixed[1]]))
        return {name: e.value for name, e in _evaluate(kind, other, shifted, window).estimates.items()}

    causes = causes_of(stage, view, _input_us(stage), follow.bias_px, 0.25 * follow.bias_px)
    quantities = make_quantities(best.estimates, push(values, causes))
    if HEADLINE[kind] in quantities:
        quantities = {HEADLINE[kind]: quantities.pop(HEADLINE[kind]), **quantities}
    return Outcome(
        quantities=quantities,
        predictions=_predictions(stage, quantities),
        notices=(*follow.notices, *_repeats(stage, follow, repeated), *notices_of(best), *_mark_notice(stage, follow)),
        frames=_table(stage, follow, track, repeated),
        marks=_marks(stage, follow),
        curves=best.curves,
        absent=best.absent,
    )


def _refuse_unseen(stage: Stage, follow: PayoutFollow) -> None:
    name = stage.file.path.name
    flags = [flag for frame in follow.frames for flag in frame.flags]
    lost = flags.count("line-lost")
    if lost > 0.8 * len(follow.frames):
        raise CannotMeasure(
            f"{name}: the line was seen in {len(follow.frames) - lost} of {len(follow.frames)} frames.",
            "Check datum.origin_px (the rim); light the line so that it stands out from a plain wall, and keep the exposure short.",
            "line-never-seen",
        )
    leaves = flags.count("arc-leaves-picture")
    if stage.file.sheet.test.kind == "payout" and leaves > 0.5 * len(follow.frames):
        raise CannotMeasure(
            f"{name}: the arc leaves the picture in {leaves} of {len(follow.frames)} frames.",
            "Aim the camera higher or film from farther away, so that the whole arc stays in the picture.",
            "arc-leaves-picture",
        )


def _refuse_headless(stage: Stage, kind: str, best: Evaluation, follow: PayoutFollow) -> None:
    if HEADLINE[kind] in best.estimates or (kind == "payout" and "line_speed_mps" in best.estimates):
        return
    reason = best.absent.get(HEADLINE[kind], "too little was followed")
    raise CannotMeasure(
        f"{stage.file.path.name}: no {HEADLINE_WORDS[kind]} can be given: {reason}. {follow.speed.basis}",
        "Put tape marks on the line at a known spacing (line.mark_spacing_m), or film faster with a shorter exposure.",
        "headline-absent",
    )


def _repeats(stage: Stage, follow: PayoutFollow, repeated: NDArray[np.intp]) -> tuple[Notice, ...]:
    speeds = follow.speed.v_mps
    fastest = float(np.nanmax(speeds)) if np.isfinite(speeds).any() else np.nan
    return repeat_notice(stage.file.clip_path.name, stage.clock, repeated, fastest)


def _inputs(stage: Stage) -> dict[str, float]:
    test = stage.file.sheet.test
    known = {"gravity": stage.gravity, "drop_height_m": test.drop_height_m, "landing_rise_m": test.landing_rise_m}
    if test.pile_depth_m is not None:
        known["pile_start_m"], known["pile_end_m"] = test.pile_depth_m
    return {key: float(value) for key, value in known.items() if value is not None}


def _input_us(stage: Stage) -> list[InputU]:
    test, file = stage.file.sheet.test, stage.file
    us = [InputU("gravity", stage.u_gravity, "m/s2", "local gravity", "site")]
    if test.kind != "payout" or test.pile_depth_m is None:
        return us
    u_pile = file.u("test.pile_depth_m")
    us += [
        InputU("pile_start_m", u_pile, "m", "depth of the pile at the start"),
        InputU("pile_end_m", u_pile, "m", "depth of the pile at the end"),
    ]
    if test.drop_height_m is not None:
        us.append(InputU("drop_height_m", file.u("test.drop_height_m"), "m", "drop height", "station"))
        us.append(InputU("landing_rise_m", file.u("test.landing_rise_m"), "m", "rise of the landed heap"))
    return us


def _seen(stage: Stage, follow: PayoutFollow) -> _Seen:
    frames = follow.frames
    apex = np.array([frame.apex_plane_px for frame in frames], dtype=float).reshape(-1, 2)
    legs = np.array([frame.legs_plane_px for frame in frames], dtype=float).reshape(-1, 2, 2)
    with_line = [frame for frame in frames if np.isfinite(frame.line_px).all(axis=1).sum() > SCALE_NODES]
    reference = np.zeros((0, 2))
    if with_line:
        late = with_line[int(0.8 * (len(with_line) - 1))].line_px
        late = late[np.isfinite(late).all(axis=1)]
        reference = late[np.linspace(0, len(late) - 1, SCALE_NODES).astype(int)].astype(float)
    return _Seen(
        frame=np.array([frame.frame for frame in frames], dtype=np.intp),
        apex_px=apex,
        apex_raw_px=np.array([frame.apex_px for frame in frames], dtype=float).reshape(-1, 2),
        legs_px=legs,
        u_apex_m=np.array([frame.u_apex_m for frame in frames]),
        radius_m=np.array([frame.radius_m for frame in frames]),
        radius_u_m=np.array([frame.u_radius_m for frame in frames]),
        reference_px=reference,
        row_speed=_row_speeds(stage, follow),
    )


def _row_speeds(stage: Stage, follow: PayoutFollow) -> Floats:
    """How fast the line runs along the scan, on average over where it was read [px/s]; signed as the rows count."""
    rising = {"down": 1.0, "up": -1.0, "right": 1.0, "left": -1.0}[stage.clock.scan]
    axis = 1 if stage.clock.scan in ("down", "up") else 0
    speeds = []
    for frame, v in zip(follow.frames, follow.speed.v_mps, strict=True):
        line = frame.line_px[np.isfinite(frame.line_px).all(axis=1)]
        if len(line) < 4 or not np.isfinite(v):
            speeds.append(0.0)
            continue
        length = float(np.hypot(*np.diff(line, axis=0).T).sum())
        share = float(line[-1, axis] - line[0, axis]) / max(length, 1.0)
        speeds.append(rising * share * float(v) * stage.hints.px_per_m)
    return np.array(speeds)


def _track(seen: _Seen, follow: PayoutFollow, view: View, nominal: View) -> PayoutTrack:
    """Arc and speed as a view has them; the speed is carried over by how the view changes lengths and times along the line."""
    plane, clock = view.plane, view.clock
    phase = np.linspace(-1.0, 1.0, seen.frame.size)
    apex = plane.to_metres(view.nudge.applied(seen.apex_px, phase))
    legs = plane.to_metres(seen.legs_px)
    times = clock.at(seen.frame, seen.apex_raw_px)
    missing = ~np.isfinite(times)
    times[missing] = clock.at(seen.frame[missing], np.broadcast_to(plane.origin_px, (int(missing.sum()), 2)))
    stretch = 1.0
    if view is not nominal and len(seen.reference_px):
        stretch = _length(plane.to_metres(seen.reference_px)) / _length(nominal.plane.to_metres(seen.reference_px))
    pace = nominal.clock.period_s / clock.period_s
    late = (clock.readout_s - nominal.clock.readout_s) / max(clock.rows - 1, 1)
    factor = stretch * pace * (1.0 - late * seen.row_speed)
    return PayoutTrack(
        t_s=times,
        apex_z_m=apex[:, 1],
        u_apex_m=seen.u_apex_m,
        width_m=np.hypot(*(legs[:, 1] - legs[:, 0]).T),
        radius_m=seen.radius_m * stretch,
        speed_mps=np.where(follow.speed.verdict == "sure", follow.speed.v_mps, np.nan) * factor,
        u_speed_mps=follow.speed.u_v_mps * factor,
        paid_out_m=follow.speed.paid_out_m * stretch * float(np.mean(1.0 - late * seen.row_speed)),
    )


def _length(points_m: Floats) -> float:
    return float(np.hypot(*np.diff(points_m, axis=0).T).sum())


def _fixed(track: PayoutTrack, best: Evaluation) -> tuple[int, int]:
    window = best.window_s or (float(np.nanmin(track.t_s)), float(np.nanmax(track.t_s)))
    inside = np.flatnonzero((track.t_s >= window[0] - 1e-9) & (track.t_s <= window[1] + 1e-9))
    return int(inside[0]), int(inside[-1])


def _evaluate(kind: str, view: View, track: PayoutTrack, window: tuple[float, float] | None) -> Evaluation:
    if kind == "drawn":
        return drawn.evaluate(track, drawn.DrawnSetup(window))
    given = view.inputs
    setup = payout.PayoutSetup(
        gravity=given["gravity"], drop_height_m=given.get("drop_height_m"), pile_start_m=given.get("pile_start_m"),
        pile_end_m=given.get("pile_end_m"), landing_rise_m=given["landing_rise_m"], window_s=window,
    )  # fmt: skip
    return payout.evaluate(track, setup)


def _predictions(stage: Stage, quantities: dict[str, Quantity]) -> tuple[Prediction, ...]:
    """A line that is neither pushed at the pile nor pulled at the floor pays out at v = sqrt(g h1) without an arc."""
    item, height = quantities.get("line_speed_mps"), stage.file.sheet.test.drop_height_m
    if stage.file.sheet.test.kind != "payout" or item is None or height is None:
        return ()
    pile = float(np.mean(stage.file.sheet.test.pile_depth_m or (0.0, 0.0)))
    plain = float(np.sqrt(stage.gravity * (height - pile)))
    u = 0.5 * plain * stage.file.u("test.drop_height_m") / height
    return (predicted(item, "line_speed_mps", "a steady payout without push or pull", plain, u, "line speed"),)


def _mark_notice(stage: Stage, follow: PayoutFollow) -> tuple[Notice, ...]:
    """The line's own marks are a second scale in its own plane."""
    speed, spacing = follow.speed, stage.file.sheet.line.mark_spacing_m
    if spacing is None or not np.isfinite(speed.mark_ratio):
        return ()
    u_spacing = stage.file.u("line.mark_spacing_m", spacing) / spacing
    u_scale = float(np.sqrt(sum((s - 1) ** 2 for s in _scale_shifts(stage))))
    u = float(np.hypot(np.hypot(u_spacing, speed.u_mark_ratio), u_scale))
    off = speed.mark_ratio - 1.0
    if abs(off) <= 2 * u:
        return ()
    return (
        Notice(
            "marks-disagree",
            f"The line's marks, {1e3 * spacing:.4g} mm apart by the sheet, measure {100 * off:+.2f} % on the board's scale, "
            f"more than 2 u of {200 * u:.2f} %.",
            f"Lengths and speeds of this run may be {100 * off:+.1f} % off.",
            "Measure mark_spacing_m again, and check that the board's offset_m and square_m are right.",
        ),
    )


def _scale_shifts(stage: Stage) -> list[float]:
    here = stage.plane.scale_px_per_m()
    return [here / stage.plane.shifted(i).scale_px_per_m() for i in range(len(stage.plane.sources))]


def _table(stage: Stage, follow: PayoutFollow, track: PayoutTrack, repeated: NDArray[np.intp]) -> pd.DataFrame:
    table = empty_frames(np.arange(stage.first_frame, stage.end_frame))
    at = np.array([frame.frame for frame in follow.frames]) - stage.first_frame
    table["t_s"] = stage.clock.frame_s[stage.first_frame : stage.end_frame]
    table.loc[at, "t_s"] = track.t_s
    table.loc[at, "apex_x_m"] = [frame.apex_m[0] for frame in follow.frames]
    table.loc[at, "apex_z_m"] = [frame.apex_m[1] for frame in follow.frames]
    table.loc[at, "u_apex_z_m"] = track.u_apex_m
    table.loc[at, "arc_width_m"] = track.width_m
    table.loc[at, "line_speed_mps"] = track.speed_mps
    table.loc[at, "u_line_speed_mps"] = np.where(np.isfinite(track.speed_mps), track.u_speed_mps, np.nan)
    table.loc[at, "paid_out_m"] = track.paid_out_m
    flags = [(*frame.flags, REPEATED) if frame.frame in repeated else frame.flags for frame in follow.frames]
    table.loc[at, "flags"] = [" ".join(each) for each in flags]
    return table


def _marks(stage: Stage, follow: PayoutFollow) -> tuple[FrameMark, ...]:
    return tuple(_mark(stage, frame) for frame in follow.frames)


def _mark(stage: Stage, frame: PayoutFrame) -> FrameMark:
    apex = (float(frame.apex_px[0]), float(frame.apex_px[1])) if np.isfinite(frame.apex_px).all() else None
    marks = frame.marks_px if len(frame.marks_px) else None
    return FrameMark(
        frame=frame.frame, t_s=float(stage.clock.frame_s[frame.frame]), line_px=frame.line_px if len(frame.line_px) else None,
        apex_px=apex, marks_px=None if marks is None else np.asarray(marks, dtype=np.float32), flags=frame.flags,
    )  # fmt: skip
