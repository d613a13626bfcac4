"""Sets the stage of one run: clip, clock, plane, background and what the sheet says of the line.

Nothing is followed here. Every room below is asked once, in the order clip, clock, board, plane, background, and
what it has to say is gathered.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from calibration.board import BoardFind, BoardSpec, find_in_frames
from calibration.clock import Clock, make_clock
from calibration.lens import Lens
from calibration.notice import BadInput, CannotMeasure, Notice
from calibration.plane import Plane, fit_plane
from calibration.shake import ShakeMeter, moving_parts
from tracker.clip import Clip
from tracker.follow.background import Background
from tracker.follow.hints import LineHints
from tracker.measure.gravity import local_gravity
from tracker.progress import Progress
from tracker.sheet import SheetFile

__all__ = ["Stage", "set_stage"]

SAMPLED_FRAMES = 24
"""Frames from which background and board are taken: a moving line covers any one pixel in few of them."""

NO_BACKGROUND = Notice(
    "camera-movement-unknown",
    "The still background has too little structure to tell whether the camera moved.",
    "A camera that moves by a pixel moves every place by a pixel.",
    "Use a tripod, and leave something with corners in the picture: a poster, tape crosses on the wall.",
)

POSSIBLE_FOCAL = (0.35, 6.0)
"""Focal lengths of cameras, in lengths of the picture's longer side: from a phone's widest to a long telephoto."""

BOARD_FRAMES = 6
"""Of these, frames in which the board is sought; their median beats noise and a line that crosses it."""


@dataclass(frozen=True, slots=True, eq=False)
class Stage:
    """What is known before the first frame is followed."""

    file: SheetFile
    clip: Clip
    clock: Clock
    plane: Plane
    find: BoardFind | None
    background: Background
    shake: ShakeMeter
    hints: LineHints
    gravity: float
    u_gravity: float
    first_frame: int
    end_frame: int  # one past the last
    notices: tuple[Notice, ...]


def set_stage(file: SheetFile, clip: Clip, tell: Progress) -> Stage:
    """Calibrate one run.

    Parameters
    ----------
    file : SheetFile
    clip : Clip
        Open.
    tell : Progress

    Returns
    -------
    Stage

    Raises
    ------
    BadInput
        Sheet and clip contradict each other.
    CannotMeasure
        No board, no clock, an empty window.
    """
    sheet = file.sheet
    tell("clock", 0, 0)
    clock = _clock(file, clip)
    first, end = _frames_of_window(file, clock, clip.frame_count)
    _refuse_points_outside(file, clip)
    tell("background", 0, 0)
    sampled = clip.sample(spread(first, end, SAMPLED_FRAMES))
    shake = ShakeMeter(sampled[0], moving_parts(sampled))
    unsteady = () if shake.ok else (NO_BACKGROUND,)
    background = Background.from_frames(sampled, [shake.measure(picture) for picture in sampled])
    tell("board", 0, 0)
    find, plane = _plane(file, clip, sampled)
    gravity, u_gravity = local_gravity(file)
    hints = _hints(file, clip, plane, gravity)
    notices = (*clock.notices, *(find.notices if find is not None else ()), *plane.notices)
    return Stage(
        file,
        clip,
        clock,
        plane,
        find,
        background,
        shake,
        hints,
        gravity,
        u_gravity,
        first,
        end,
        (*notices, *unsteady, *_card_notice(sheet.test)),
    )


def spread(first: int, end: int, how_many: int) -> list[int]:
    """Frame numbers spread evenly over [first, end), each once."""
    return sorted({int(i) for i in np.linspace(first, end - 1, min(how_many, end - first))})


def _clock(file: SheetFile, clip: Clip) -> Clock:
    table = file.sheet.clock
    fps = table.capture_fps
    u_fps = file.sheet.clock.uncertainties.get("capture_fps")
    try:
        return make_clock(
            clip.ticks,
            clip.time_base,
            capture_fps=fps,
            tag_fps=clip.tag_fps,
            readout_s=table.readout_s,
            u_readout_s=None if table.readout_s is None else file.u("clock.readout_s", table.readout_s),
            u_capture_fps=u_fps,
            stored_size=(clip.stored_width, clip.stored_height),
            quarter_turns=clip.quarter_turns,
            mirrored=clip.mirrored,
            name=clip.path.name,
        )
    except BadInput as fault:
        raise BadInput(f"{file.path.name}: {fault.says}", fault.remedy) from None


def _frames_of_window(file: SheetFile, clock: Clock, frame_count: int) -> tuple[int, int]:
    window = file.sheet.clip.window_s
    if window is None:
        return 0, frame_count
    inside = np.flatnonzero((clock.frame_s >= window[0]) & (clock.frame_s <= window[1]))
    if len(inside) < 2:
        last = float(clock.frame_s[-1])
        raise BadInput(
            f"{file.path.name}: clip.window_s is {list(window)}, but the clip runs from 0 to {last:.3f} s of true time: "
            f"{len(inside)} frames lie inside.",
            "Write a window inside the clip, in true seconds from the first frame.",
        )
    return int(inside[0]), int(inside[-1]) + 1


def _refuse_points_outside(file: SheetFile, clip: Clip) -> None:
    datum = file.sheet.datum
    points = {"origin_px": datum.origin_px, "floor_px": datum.floor_px}
    for key, point in points.items():
        if point is None or (-0.5 <= point[0] <= clip.width - 0.5 and -0.5 <= point[1] <= clip.height - 0.5):
            continue
        raise BadInput(
            f"{file.path.name}: datum.{key} is {list(point)}, outside the upright picture of {clip.width} x {clip.height}.",
            "Give column and row in the upright picture, as a player shows it.",
        )


def _plane(file: SheetFile, clip: Clip, sampled: list[NDArray[np.uint8]]) -> tuple[BoardFind | None, Plane]:
    sheet, board = file.sheet, file.sheet.board
    spec = BoardSpec(
        kind=board.kind,
        inner_corners=board.inner_corners,
        square_m=board.square_m if board.square_m is not None else 1.0,
        dictionary=board.dictionary,
        marker_m=board.marker_m,
        marks_m=tuple(board.marks_m or ()),
        marks_px=tuple(board.marks_px or ()),
    )
    pictures = _board_pictures(file, clip, sampled)
    find = _find(spec, pictures, file, clip)
    u_square = file.u("board.square_m", spec.square_m)
    plumb = sheet.datum.vertical == "plumb"
    vertical: Any = sheet.datum.plumb_px if plumb else "board"
    distance = sheet.camera.distance_m
    plane = fit_plane(
        find,
        spec,
        size=(clip.width, clip.height),
        origin_px=sheet.datum.origin_px,
        distance_m=distance,
        u_distance_m=None if distance is None else file.u("camera.distance_m", distance),
        lens=_lens(file),
        offset_m=board.offset_m,
        u_offset_m=file.u("board.offset_m"),
        lean_deg=board.lean_deg,
        u_lean_deg=file.u("board.lean_deg"),
        yaw_deg=board.yaw_deg,
        u_yaw_deg=file.u("board.yaw_deg"),
        u_square_m=u_square,
        u_origin_px=file.u("datum.origin_px"),
        vertical=vertical,
        u_vertical_deg=file.u("datum.vertical"),
        u_plumb_px=file.u("datum.plumb_px") if plumb else 0.7,
        station=_station(file),
    )
    _refuse_impossible_lens(file, find, spec, (clip.width, clip.height))
    return find, plane


def _refuse_impossible_lens(file: SheetFile, find: BoardFind, spec: BoardSpec, size: tuple[int, int]) -> None:
    """Square and distance together say what lens the camera has; one that no phone has means that one of them is wrong."""
    distance = file.sheet.camera.distance_m
    if distance is None or find.along_line:
        return
    focal = find.square_px / spec.square_m * (distance + file.sheet.board.offset_m)
    share = focal / max(size)
    if POSSIBLE_FOCAL[0] <= share <= POSSIBLE_FOCAL[1]:
        return
    raise BadInput(
        f"{file.path.name}: board.square_m = {spec.square_m:g} with camera.distance_m = {distance:g} would need a focal length of "
        f"{share:.2f} picture lengths, where cameras have {POSSIBLE_FOCAL[0]:g} to {POSSIBLE_FOCAL[1]:g}.",
        f"One of the two is wrong by a factor of about {_factor(share):.2g}: both are in metres.",
    )


def _factor(share: float) -> float:
    usual = 1.0  # picture lengths: between a wide and a normal phone lens
    return usual / share if share < usual else share / usual


def _board_pictures(file: SheetFile, clip: Clip, sampled: list[NDArray[np.uint8]]) -> list[NDArray[np.uint8]]:
    name = file.sheet.board.file
    if name is None:
        return [sampled[i] for i in spread(0, len(sampled), BOARD_FRAMES)]
    with Clip(file.beside(name)) as scale:
        if (scale.width, scale.height) != (clip.width, clip.height):
            raise BadInput(
                f"{file.path.name}: board.file {name} is {scale.width} x {scale.height}, the clip is {clip.width} x {clip.height}.",
                "Film the board with the same camera, mode and zoom, without touching the camera.",
            )
        return scale.sample(spread(0, scale.frame_count, BOARD_FRAMES))


def _find(spec: BoardSpec, pictures: list[NDArray[np.uint8]], file: SheetFile, clip: Clip) -> BoardFind:
    name = file.sheet.board.file or clip.path.name
    try:
        return find_in_frames(pictures, spec)
    except CannotMeasure as refusal:
        raise CannotMeasure(f"{name}: {refusal.says}", refusal.remedy, refusal.code) from None
    except BadInput as fault:
        raise BadInput(f"{file.path.name}: {fault.says}", fault.remedy) from None


def _station(file: SheetFile) -> str:
    """Name of the station whose camera stays: runs that pull in one station sheet share its errors."""
    return "" if file.station is None else str(file.beside(file.station))


def _lens(file: SheetFile) -> Lens | None:
    if file.sheet.camera.lens is None:
        return None
    from tracker.lensfile import read_lens

    return read_lens(file.beside(file.sheet.camera.lens))


def _hints(file: SheetFile, clip: Clip, plane: Plane, gravity: float) -> LineHints:
    sheet = file.sheet
    scale = plane.scale_px_per_m(sheet.datum.origin_px)
    mark = sheet.line.end_mark_m or sheet.line.object_diameter_m
    return LineHints(
        kind=sheet.test.kind,
        origin_px=sheet.datum.origin_px,
        origin_frame=sheet.datum.origin_frame,
        end_mark_px=None if mark is None else mark * scale,
        pitch_m=sheet.line.pitch_m,
        mark_spacing_m=sheet.line.mark_spacing_m,
        length_m=sheet.line.length_m,
        exposure_s=sheet.clock.exposure_s,
        px_per_m=scale,
        gravity_mps2=gravity,
        floor_px=sheet.datum.floor_px,
    )


def _card_notice(test: Any) -> tuple[Notice, ...]:
    missing = [name for name in ("batch", "specimen") if getattr(test, name) is None]
    if not missing:
        return ()
    return (
        Notice(
            "no-specimen",
            f"The sheet does not say test.{' or test.'.join(missing)}.",
            "The run cannot be compared batch against batch.",
            f"Write [test] {missing[0]} in the sheet.",
        ),
    )
