"""One run sheet in, one result out."""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from calibration.notice import Notice
from tracker.clip import Clip
from tracker.measure.arcs import measure_arc
from tracker.measure.ends import measure_end
from tracker.measure.outcome import Outcome
from tracker.measure.stage import Stage, set_stage
from tracker.progress import Progress, silent
from tracker.result import Result
from tracker.sheet import SheetFile, load_sheet

__all__ = ["Measured", "measure_run"]

Gray = NDArray[np.uint8]


@dataclass(frozen=True, slots=True, eq=False)
class Measured:
    """A result, with ways back to the pictures it came from."""

    result: Result
    frames: Callable[[], Iterator[tuple[int, Gray]]]  # the frames measured, once more
    sample: Callable[[list[int]], Sequence[Gray]]  # single frames by number


def measure_run(sheet: Path | SheetFile, progress: Progress = silent) -> Measured:
    """Measure the run that a sheet describes.

    Parameters
    ----------
    sheet : Path or SheetFile
    progress : Progress

    Returns
    -------
    Measured

    Raises
    ------
    BadInput
        Sheet or clip are wrong; one sentence says what and what to do.
    CannotMeasure
        The footage cannot carry the measurement; one sentence says why and how to shoot it again.
    """
    file = sheet if isinstance(sheet, SheetFile) else load_sheet(sheet)
    with Clip(file.clip_path) as clip:
        stage = set_stage(file, clip, progress)
        work = measure_arc if file.sheet.test.kind in ("payout", "drawn") else measure_end
        outcome = work(stage, progress)
        result = _result(stage, outcome)
    first, end = stage.first_frame, stage.end_frame
    return Measured(
        result, lambda: _again(file.clip_path, first, end), lambda indices: _sampled(file.clip_path, indices)
    )


def _again(path: Path, first: int, end: int) -> Iterator[tuple[int, Gray]]:
    with Clip(path) as clip:
        yield from clip.frames(first, end)


def _sampled(path: Path, indices: list[int]) -> Sequence[Gray]:
    with Clip(path) as clip:
        return clip.sample(indices)


def _result(stage: Stage, outcome: Outcome) -> Result:
    file, clock = stage.file, stage.clock
    notices = [*stage.clip.notices, *stage.notices, *outcome.notices]  # a clip's damage shows as it is read
    return Result(
        kind=file.sheet.test.kind,
        sheet=file.sheet.model_dump(mode="json", exclude_none=True) | {"u": _given_us(file)},
        sheet_path=file.path,
        clip_path=file.clip_path,
        clip_sha256=stage.clip.sha256(),
        quantities=outcome.quantities,
        predictions=outcome.predictions,
        warnings=_once(notices),
        frames=outcome.frames,
        marks=outcome.marks,
        clock={
            "capture_fps": clock.capture_fps,
            "provenance": clock.provenance,
            "u_rate": clock.u_rate,
            "readout_s": clock.readout_s,
            "u_readout_s": clock.u_readout_s,
            "scan": clock.scan,
            "u_stamp_s": clock.u_stamp_s,
            "span_s": float(clock.frame_s[-1]),
        },
        plane={**stage.plane.describe(), "gravity_mps2": stage.gravity, "u_gravity_mps2": stage.u_gravity},
        clip=stage.clip.describe(),
        defaults={
            "used": {key: {"value": d.amount, "unit": d.unit, "why": d.why} for key, d in file.used_defaults.items()},
            "not_given": dict(outcome.absent),
        },
        scale_px_per_m=stage.plane.scale_px_per_m(),
        origin_px=file.sheet.datum.origin_px,
        model_curves=dict(outcome.curves),
    )


def _given_us(file: SheetFile) -> dict[str, float]:
    """Standard uncertainties that the sheet states, by key."""
    tables = ("clip", "clock", "board", "camera", "datum", "line", "test", "site")
    return {f"{table}.{key}": u for table in tables for key, u in getattr(file.sheet, table).uncertainties.items()}


def _once(notices: list[Notice]) -> tuple[Notice, ...]:
    """Each warning once, in the order in which it came up."""
    return tuple(dict.fromkeys(notices))
