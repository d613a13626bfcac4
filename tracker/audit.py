"""What a clip's time stamps are worth, in words that a technician understands: the work of ``linefall clock``."""

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from calibration.clock import Clock, make_clock
from calibration.notice import CannotMeasure, Notice
from tracker.clip import Clip

__all__ = ["Audit", "audit_clip"]


@dataclass(frozen=True, slots=True, eq=False)
class Audit:
    """A clip's clock, looked at without a run sheet."""

    clip: dict[str, Any]  # as Clip.describe
    clock: Clock | None  # None where the true rate cannot be told
    refusal: CannotMeasure | None
    notices: tuple[Notice, ...]
    step_ms: tuple[float, float, float]  # smallest, median and largest step between stamps

    def lines(self) -> list[str]:
        """The audit as sentences."""
        c = self.clip
        turned = f", shown turned by {90 * int(c['quarter_turns'])} degrees clockwise" if c["quarter_turns"] else ""
        low, usual, high = self.step_ms
        lines = [
            f"Picture: {c['width']} x {c['height']} upright, {c['codec']}, {c['bit_depth']} bit{turned}.",
            f"Stamps: {c['frames']} frames over {c['stamp_span_s']:.4f} s of stored time, in ticks of {c['time_base']} s; steps of "
            f"{low:.2f} to {high:.2f} ms, {usual:.2f} ms usual.",
            "Capture-rate tag: " + (f"{c['capture_rate_tag_per_s']:g} per second." if c["capture_rate_tag_per_s"] else "none."),
        ]
        if self.clock is not None:
            clock = self.clock
            lines += [
                f"True rate: {clock.capture_fps:.6g} frames per second, from {clock.provenance}.",
                f"True time: {float(clock.frame_s[-1]):.4f} s from first to last frame, known to {100 * clock.u_rate:.2g} % (k = 1).",
                f"Rows are read {_SCAN[clock.scan]} in the upright picture; how long that takes no file says: give clock.readout_s.",
                f"For the run sheet: [clock] capture_fps = {clock.capture_fps:.6g}",
            ]
        lines += [f"Warning: {notice.sentence()}" for notice in self.notices]
        return lines

    def as_dict(self) -> dict[str, Any]:
        """For ``--json``."""
        clock = self.clock
        return {
            "clip": self.clip,
            "steps_ms": {"smallest": self.step_ms[0], "usual": self.step_ms[1], "largest": self.step_ms[2]},
            "clock": None
            if clock is None
            else {
                "capture_fps": clock.capture_fps,
                "u_rate": clock.u_rate,
                "provenance": clock.provenance,
                "span_s": float(clock.frame_s[-1]),
                "u_stamp_s": clock.u_stamp_s,
                "scan": clock.scan,
            },
            "refusal": None if self.refusal is None else {"says": self.refusal.says, "remedy": self.refusal.remedy},
            "warnings": [{"code": n.code, "says": n.says, "damage": n.damage, "remedy": n.remedy} for n in self.notices],
        }


_SCAN = {"down": "from the top down", "up": "from the bottom up", "left": "from right to left", "right": "from left to right"}


def audit_clip(path: Path) -> Audit:
    """Look at a clip's time stamps.

    Parameters
    ----------
    path : Path

    Returns
    -------
    Audit

    Raises
    ------
    BadInput
        No file, not a video, sound only.
    CannotMeasure
        Damaged beyond use.
    """
    with Clip(path) as clip:
        steps = np.diff(np.asarray(clip.ticks, dtype=float)) * float(clip.time_base) * 1e3
        step_ms = (float(steps.min()), float(np.median(steps)), float(steps.max())) if steps.size else (0.0, 0.0, 0.0)
        clock, refusal = None, None
        try:
            clock = make_clock(
                clip.ticks, clip.time_base, tag_fps=clip.tag_fps, stored_size=(clip.stored_width, clip.stored_height),
                quarter_turns=clip.quarter_turns, mirrored=clip.mirrored, name=path.name,
            )  # fmt: skip
        except CannotMeasure as why:
            refusal = why
        notices = (*clip.notices, *(clock.notices if clock is not None else ()))
        return Audit(clip.describe(), clock, refusal, notices, step_ms)
