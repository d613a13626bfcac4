"""What one measured run is, before it becomes files. `measure` makes it; `report` and `batch` read it."""

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from calibration.notice import Notice
from tracker.analysis.quantity import Quantity

__all__ = ["FRAME_COLUMNS", "FrameMark", "Prediction", "Result"]

FRAME_COLUMNS = (
    "frame", "t_s", "apex_x_m", "apex_z_m", "u_apex_z_m", "arc_width_m", "end_t_s", "end_x_m", "end_z_m", "u_end_z_m",
    "line_speed_mps", "u_line_speed_mps", "paid_out_m", "flags",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Prediction:
    """What a law or free fall says a quantity should be, to stand beside the measured one."""

    name: str  # the quantity it is held against, such as "effective_acceleration_mps2"
    law: str  # "free fall", "energy-conserving fold", ...
    value: float
    u: float
    unit: str
    difference: float  # measured minus predicted
    u_difference: float  # errors common to both cancelled
    says: str  # one sentence: agrees within U, or by how much not


@dataclass(frozen=True, slots=True, eq=False)
class FrameMark:
    """What to draw on one frame, in pixels of the upright picture."""

    frame: int
    t_s: float  # the frame's own time
    line_px: NDArray[np.float32] | None = None  # (n, 2) column, row, in order along the line; NaN rows are gaps
    apex_px: tuple[float, float] | None = None
    end_px: tuple[float, float] | None = None
    marks_px: NDArray[np.float32] | None = None  # (m, 2) marks on the line that carry the speed
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class Result:
    """One measured run, whole."""

    kind: str  # test.kind
    sheet: dict[str, Any]  # the merged sheet as it was used, SI units
    sheet_path: Path
    clip_path: Path
    clip_sha256: str
    quantities: dict[str, Quantity]  # in order of importance, the headline first
    predictions: tuple[Prediction, ...]
    warnings: tuple[Notice, ...]
    frames: pd.DataFrame  # FRAME_COLUMNS
    marks: tuple[FrameMark, ...]  # one a frame, for the overlay
    clock: dict[str, Any]  # capture rate, provenance, readout, ... ready for result.json
    plane: dict[str, Any]  # scale, provenance, vertical, board residual, ... ready for result.json
    clip: dict[str, Any]  # codec, size, rotation, frames, ... ready for result.json
    defaults: dict[str, Any] = field(default_factory=dict)  # values the sheet left out and what was used instead
    edits: tuple[dict[str, Any], ...] = ()  # hand edits, each with frame, point, reason and who
    scale_px_per_m: float = np.nan  # along the picture's horizontal at the datum, for the overlay's scale bar
    origin_px: tuple[float, float] = (np.nan, np.nan)
    model_curves: dict[str, NDArray[np.float64]] = field(default_factory=dict)
    # name -> (n, 2) of time and value, to be drawn as lines: "free_fall_z_m", "law_z_m", "law_arc_height_m", ...
