"""How following a free end bears what films do to pictures: `python -m tests.studies.ends [clip ...]`.

The shared clips with truth are followed as they are and changed: noise, defocus, flicker, negative, mirrored, a hand that
shakes, a third of the light. For each a line says how many frames with truth were measured, the error about
its own mean and the mean itself, the largest error, how many frames were measured without truth or more than 3 px off
(both must be none: what is not sure must be left out), and the time.
"""

import csv
import sys
import time
import tomllib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from calibration.clock import Clock
from calibration.shake import ShakeMeter
from tests.footage import SHARED
from tracker.clip import Clip
from tracker.follow.background import Background
from tracker.follow.end import EndFollow, follow_end
from tracker.follow.hints import LineHints

__all__ = ["CLIPS", "VARIANTS", "Score", "study"]

CLIPS = ("drop", "held", "surface", "control")
OFF_PX = 3.0
Gray = NDArray[np.uint8]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Score:
    """How one variant went; errors in pixels, along columns and rows."""

    measured: float
    mean: Floats
    rms: Floats
    largest: float
    invented: int
    u: float
    bias: float
    ms: float
    flags: dict[str, int]


@dataclass(frozen=True, slots=True)
class Change:
    """A change of each frame, and where a place goes by it."""

    picture: Callable[[int, Gray], Gray]
    place: Callable[[int, Floats], Floats] = lambda index, px: px
    shaken: bool = False


def _same(index: int, gray: Gray) -> Gray:
    return gray


def _clipped(picture: Floats) -> Gray:
    return np.asarray(np.clip(np.rint(picture), 0, 255), dtype=np.uint8)


def _noisy(sigma: float) -> Change:
    def picture(index: int, gray: Gray) -> Gray:
        return _clipped(gray + np.random.default_rng(index).normal(0, sigma, gray.shape))

    return Change(picture)


def _flicker(index: int, gray: Gray) -> Gray:
    rows = np.arange(gray.shape[0])[:, None]
    return _clipped(gray * (0.85 + 0.1 * np.sin(2.6 * index + 2 * np.pi * rows / gray.shape[0])))


def _sway(index: int) -> Floats:
    return np.array([2.5 * np.sin(0.31 * index), 1.5 * np.sin(0.23 * index + 1.0) - 1.5 * np.sin(1.0)])


def _shaken(index: int, gray: Gray) -> Gray:
    dx, dy = _sway(index)
    matrix = np.array([[1.0, 0.0, dx], [0.0, 1.0, dy]])
    return np.asarray(cv2.warpAffine(gray, matrix, gray.shape[::-1], flags=cv2.INTER_CUBIC, borderMode=cv2.BORDER_REPLICATE))


VARIANTS: dict[str, Change] = {
    "as it is": Change(_same),
    "noise of 5 grey levels": _noisy(5.0),
    "noise of 10 grey levels": _noisy(10.0),
    "defocus of 1.5 px": Change(lambda index, gray: np.asarray(cv2.GaussianBlur(gray, (0, 0), 1.5), dtype=np.uint8)),
    "flicker of 10 %": Change(_flicker),
    "a third of the light": Change(lambda index, gray: _clipped(gray / 3.0)),
    "negative": Change(lambda index, gray: np.asarray(255 - gray, dtype=np.uint8)),
    "mirrored": Change(lambda index, gray: np.ascontiguousarray(gray[:, ::-1]),
                       lambda index, px: np.array([719.0, 0.0]) + px * np.array([-1.0, 1.0])),
    "a hand that shakes": Change(_shaken, shaken=True),
}  # fmt: skip


class _Scale:
    """Pixels as metres: the followers ask the plane for distances only."""

    def __init__(self, px_per_m: float, origin: tuple[float, float]) -> None:
        self.px_per_m, self.origin = px_per_m, np.array(origin)

    def to_metres(self, points_px: object) -> Floats:
        return np.asarray((np.asarray(points_px, dtype=float) - self.origin) * [1, -1] / self.px_per_m)

    def to_pixels(self, points_m: object) -> Floats:
        return np.asarray(np.asarray(points_m, dtype=float) * self.px_per_m * [1, -1] + self.origin)

    def scale_px_per_m(self, at_px: object) -> float:
        return self.px_per_m


def _number(text: str) -> float:
    return float(text) if text.strip() else float("nan")


def _truth(folder: Path) -> tuple[Floats, float]:
    """Column and row of the end in each frame, NaN outside, and pixels in a metre at the start."""
    with (folder / "truth_extra.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    px = np.array([[_number(r["end_px_x"]), _number(r["end_px_y"])] for r in rows])
    px[np.array([_number(r["inside"]) for r in rows]) != 1] = np.nan
    with (folder / "truth.csv").open(encoding="utf-8", newline="") as file:
        z = np.array([_number(r["end_z_m"]) for r in csv.DictReader(file)])
    fits = np.isfinite(z) & np.isfinite(px[:, 1]) & (z > -0.2)
    return px, -float(np.polyfit(z[fits], px[fits, 1], 2)[1])


def _follow(folder: Path, change: Change, px_per_m: float) -> tuple[EndFollow, float]:
    sheet = tomllib.loads((folder / "run.toml").read_text(encoding="utf-8"))
    with Clip(folder / "clip.mp4") as clip:
        count, rate = clip.frame_count, float(sheet["clock"]["capture_fps"])
        clock = Clock(np.arange(count) / rate, sheet["clock"]["readout_s"], 0.0, clip.stored_height, "down", 0.0, 0.0, rate, "", ())
        chosen = np.linspace(0, count - 1, 24).astype(int)
        samples = [change.picture(int(i), gray) for i, gray in zip(chosen, clip.sample(chosen), strict=True)]
        meter = ShakeMeter(samples[0]) if change.shaken else None
        background = Background.from_frames(samples, None if meter is None else [meter.measure(s) for s in samples])
        origin = change.place(0, np.array(sheet["datum"]["origin_px"]))
        hints = LineHints(
            kind=sheet["test"]["kind"], origin_px=(float(origin[0]), float(origin[1])),
            end_mark_px=sheet["line"]["end_mark_m"] * px_per_m, length_m=sheet["line"].get("length_m"),
            exposure_s=sheet["clock"]["exposure_s"], px_per_m=px_per_m, floor_px=sheet["datum"].get("floor_px"),
        )  # fmt: skip
        changed: Iterator[tuple[int, Gray]] = ((i, change.picture(i, gray)) for i, gray in clip.frames())
        frames = list(changed)  # so that decoding and changing do not count as following
        began = time.process_time()
        follow = follow_end(iter(frames), background, _Scale(px_per_m, hints.origin_px), clock, hints,
                            shake=None if meter is None else ShakeMeter(samples[0]))
        return follow, (time.process_time() - began) / count * 1e3


def study(clip: str, variant: str) -> Score:
    """Follow one clip under one change, and hold it against the truth.

    Raises
    ------
    FileNotFoundError
        The shared clips are not beside the checkout.
    """
    folder, change = SHARED / "clips" / clip, VARIANTS[variant]
    truth, px_per_m = _truth(folder)
    follow, ms = _follow(folder, change, px_per_m)
    # camera movement is undone in `px`, so the truth stays as it was but for a mirror
    true = np.array([truth[i] if change.shaken else change.place(int(i), truth[i]) for i in follow.frame])
    error = follow.px - true
    there, seen = np.isfinite(true).all(axis=1), np.isfinite(follow.px).all(axis=1)
    e = error[there & seen]
    counts: dict[str, int] = {}
    for flags in follow.flags:
        for flag in flags:
            counts[flag] = counts.get(flag, 0) + 1
    if not len(e):
        nothing = np.full(2, np.nan)
        return Score(0.0, nothing, nothing, np.nan, int((seen & ~there).sum()), np.nan, follow.bias_px, ms, counts)
    far = np.hypot(*(e - np.median(e, axis=0)).T)
    return Score(100.0 * len(e) / there.sum(), e.mean(axis=0), e.std(axis=0), float(far.max()),
                 int((seen & ~there).sum() + (far > OFF_PX).sum()), float(np.nanmedian(follow.u_px)), follow.bias_px, ms, counts)


def main(clips: list[str]) -> None:
    print("clip     variant                   measured     mean x, y [px]   rms x, y [px]   max  invented  u     u(bias)  ms/frame")
    for clip in clips or CLIPS:
        for variant in VARIANTS:
            s = study(clip, variant)
            print(f"{clip:8} {variant:24} {s.measured:7.1f} %   {s.mean[0]:+6.2f} {s.mean[1]:+6.2f}   {s.rms[0]:6.2f} {s.rms[1]:6.2f}  "
                  f"{s.largest:6.2f}  {s.invented:4d}   {s.u:5.3f}  {s.bias:5.2f}  {s.ms:6.2f}  {s.flags}", flush=True)


if __name__ == "__main__":
    cv2.setNumThreads(1)
    main(sys.argv[1:])
