"""The result folder, written whole or not at all.

Everything is written into a folder beside the wanted one and moved into place in one step, so that nobody ever sees
half a result. A result that is to be replaced is set aside only once the new one is complete.
"""

import contextlib
import errno
import shutil
import time
import uuid
from collections.abc import Callable, Iterable, Iterator, Sequence
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from calibration.notice import BadInput
from tracker.progress import Progress, silent
from tracker.report.overlay import Still, pick_stills, still, write_overlay
from tracker.report.page import page
from tracker.report.plain import sha256_of
from tracker.report.plots import draw
from tracker.report.stored import is_result_folder
from tracker.report.tables import frames_csv, result_json, summary_csv
from tracker.result import Result

__all__ = ["Frames", "Sample", "refuse_existing", "write_folder"]

Frames = Callable[[], Iterable[tuple[int, NDArray[np.uint8]]]]
"""Called once, gives number and upright grey picture of each frame in order."""

Sample = Callable[[list[int]], Sequence[NDArray[np.uint8]]]
"""Gives the upright grey pictures of frames by number, such as ``Clip.sample``."""

_FULL = {errno.ENOSPC, getattr(errno, "EDQUOT", errno.ENOSPC), errno.EFBIG}
_HELD_TRIES = 6  # a virus scanner or an open player holds a file on Windows for a moment
_HELD_PAUSE_S = 0.15


def refuse_existing(out: Path) -> None:
    """Refuse early what `write_folder` would refuse after the work was done.

    Raises
    ------
    BadInput
        The folder exists, or a file has its name.
    """
    if out.is_dir():
        raise BadInput(
            f"{out} exists already and is kept.", "Name another folder with --out, or give --replace to replace it."
        )
    if out.exists() or out.is_symlink():
        raise BadInput(f"{out} is a file, not a folder.", "Name another result folder with --out.")


def write_folder(
    result: Result,
    out: Path,
    *,
    frames: Frames | None = None,
    sample: Sample | None = None,
    overlay: bool = True,
    progress: Progress | None = None,
    replace: bool = False,
) -> Path:
    """Write a result folder, whole or not at all.

    Parameters
    ----------
    result : Result
    out : Path
        The folder to make; folders above it are made too.
    frames : callable, optional
        Gives the clip's frames for the overlay video and the stills.
    sample : callable, optional
        Gives single frames by number; used for the stills where no overlay is written.
    overlay : bool
        Whether to write the overlay video, the only part that needs every frame.
    progress : callable, optional
        Told the stage, what is done, and what there is to do.
    replace : bool
        Replace a result folder that is there. A folder that holds no result is never replaced.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    BadInput
        The folder exists, cannot be made, or the disk is full. Nothing half-written stays, and what was there before
        is there still.
    """
    _refuse(out, replace)
    room = out.with_name(f".{out.name}.part-{uuid.uuid4().hex[:8]}")
    try:
        with _said_plainly(out):
            room.mkdir(parents=True)
            _fill(room, result, out, frames if overlay else None, sample, progress or silent)
            _move_into_place(room, out)
    finally:
        shutil.rmtree(room, ignore_errors=True)
    return out


def _refuse(out: Path, replace: bool) -> None:
    if replace and out.is_dir():
        if not is_result_folder(out) and any(out.iterdir()):
            raise BadInput(
                f"{out} holds no result of Linefall and is not replaced.", "Name another folder with --out, or empty it yourself."
            )
        return
    refuse_existing(out)


def _fill(
    room: Path, result: Result, out: Path, frames: Frames | None, sample: Sample | None, tell: Progress
) -> None:  # fmt: skip
    tell("tables", 0, 0)
    _write_text(room / "frames.csv", frames_csv(result))
    _write_text(room / "summary.csv", summary_csv(result))
    stills: tuple[Still, ...] = ()
    if frames is not None:
        stills = write_overlay(result, frames(), room / "overlay.mp4", tell)
    elif sample is not None:
        stills = _sampled_stills(result, sample)
    tell("plots", 0, 0)
    plots = draw(result)
    (room / "plots").mkdir()
    for plot in plots:
        _write_text(room / "plots" / f"{plot.stem}.svg", plot.svg)
        (room / "plots" / f"{plot.stem}.png").write_bytes(plot.png)
    for one in stills:
        (room / "plots" / f"{one.stem}.png").write_bytes(cv2.imencode(".png", one.picture)[1].tobytes())
    tell("report", 0, 0)
    _write_text(room / "report.html", page(result, plots, stills, has_overlay=frames is not None))
    # result.json comes last: it holds the hashes of all the others.
    hashes = {path.relative_to(room).as_posix(): sha256_of(path) or "" for path in sorted(room.rglob("*")) if path.is_file()}
    _write_text(room / "result.json", result_json(result, out, hashes))


def _sampled_stills(result: Result, sample: Sample) -> tuple[Still, ...]:
    picks = pick_stills(result)
    numbers = sorted({number for number, _ in picks.values()})
    pictures = dict(zip(numbers, sample(numbers), strict=True))
    return tuple(still(result, stem, number, words, pictures[number]) for stem, (number, words) in picks.items())


def _write_text(path: Path, text: str) -> None:
    with path.open("w", encoding="utf-8", newline="") as file:
        file.write(text)


def _move_into_place(room: Path, out: Path) -> None:
    """The last step, one rename; an older result steps aside for it and comes back where it fails."""
    if not out.exists():
        _rename(room, out)
        return
    aside = out.with_name(f".{out.name}.old-{uuid.uuid4().hex[:8]}")
    _rename(out, aside)
    try:
        _rename(room, out)
    except BaseException:
        _rename(aside, out)
        raise
    shutil.rmtree(aside, ignore_errors=True)


def _rename(old: Path, new: Path) -> None:
    for _ in range(_HELD_TRIES - 1):
        with contextlib.suppress(PermissionError):
            old.rename(new)
            return
        time.sleep(_HELD_PAUSE_S)
    old.rename(new)


@contextlib.contextmanager
def _said_plainly(out: Path) -> Iterator[None]:
    """Turns what the disk says into a sentence for a technician."""
    try:
        yield
    except OSError as fault:
        reason = fault.strerror or str(fault)
        if fault.errno in _FULL:
            raise BadInput(
                f"{out}: the disk is full ({_free(out)} free); nothing was kept of this result.",
                "Make room there, or name a folder on another disk with --out.",
            ) from fault
        if isinstance(fault, PermissionError):
            raise BadInput(
                f"{out} cannot be written: {reason}.",
                "Close programs that have its files open, or name a folder that is yours to write with --out.",
            ) from fault
        raise BadInput(f"{out} cannot be written: {reason}.", "Name another folder with --out.") from fault


def _free(out: Path) -> str:
    for folder in out.absolute().parents:
        if folder.exists():
            return f"{shutil.disk_usage(folder).free / 1e6:.0f} MB"
    return "nothing"
