"""What a whole run makes of changed clips and contradictory sheets: `python -m tests.studies.variants [WORD ...]`.

The shared clips with truth are measured as they are and changed: stored turned, in 10 bits, under flicker, shaken, with
frames lost and repeated, half-covered boards, sheets that contradict the footage. Each must come out right (every
headline inside U, places within 1.5 px RMS where the geometry is right), be refused, or carry a warning that the unchanged clip
does not have. What is wrong beyond U without such a warning is the one thing that must not happen: WRONG in the table.
Words choose the variants whose names hold one of them. Exit 1 where one is WRONG or ends in an unexpected error.
"""

import json
import math
import shutil
import sys
import tempfile
import time
import tomllib
import traceback
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from calibration.notice import BadInput, CannotMeasure
from sample_clips.encode import write_clip
from tests.accuracy import headline
from tests.footage import SHARED
from tracker.clip import Clip
from tracker.measure import measure_run
from tracker.result import Result

__all__ = ["VARIANTS", "Variant", "Verdict", "judge", "make"]

Gray = NDArray[np.uint8]
Floats = NDArray[np.float64]
RIGHT_PX = 1.5
REMOVE = None
Picture = Callable[[int, Gray], Gray]
Numbers = Callable[[int], list[int]]


@dataclass(frozen=True, slots=True)
class Variant:
    """One change of a shared clip or of its sheet."""

    name: str
    clip: str
    sheet: Mapping[str, Any] = field(default_factory=dict)  # dotted key to new value; None takes the key away
    picture: Picture | None = None
    shown: Numbers | None = None  # which frames of the original the clip shows, of so many
    stamps: Callable[[list[int]], list[int]] | None = None  # of these frames, in frame periods
    writing: Mapping[str, Any] = field(default_factory=dict)  # how the clip is written
    mirrored: bool = False  # world x changes its sign
    later_s: float = 0.0  # mid-exposure of the new stored row 0, which is time 0, after that of the old
    moved_px: tuple[float, float] = (0.0, 0.0)  # the sheet's origin against the true one
    board_clip: bool = False
    expect: str = "right"  # right, warned or refused; "warned" also allows a refusal, "right" also a warning
    code: str = ""  # of the warning or refusal that must be among them


@dataclass(frozen=True, slots=True)
class Verdict:
    """What came out."""

    outcome: str  # right, warned, refused, WRONG or ERROR
    says: str
    codes: tuple[str, ...] = ()
    worst: float = math.nan  # largest error of a headline over its U
    rms_px: float = math.nan
    seconds: float = 0.0
    result: Result | None = None


# --- changes of pictures ----------------------------------------------------------------------------------------------


def _clipped(picture: Any) -> Gray:
    return np.asarray(np.clip(np.rint(picture), 0, 255), dtype=np.uint8)


def _noisy(sigma: float) -> Picture:
    return lambda i, gray: _clipped(gray + np.random.default_rng(i).normal(0, sigma, gray.shape))


def _flicker(fps: float, readout_s: float, depth: float) -> Picture:
    """Lamps on 50 Hz mains: light pulses at 100 Hz; bands where the readout is not nothing."""

    def picture(i: int, gray: Gray) -> Gray:
        rows = np.arange(gray.shape[0])[:, None] / gray.shape[0]
        return _clipped(gray * (1 - depth + depth * np.sin(2 * np.pi * 100 * (i / fps + readout_s * rows))))

    return picture


def _shake(rms_px: float, roll_deg: float) -> Picture:
    """A hand: three slow sines across, in height and in roll; the first frame unmoved."""

    def picture(i: int, gray: Gray) -> Gray:
        t = i / 240.0
        dx = rms_px * 1.41 * np.sin(2 * np.pi * 3.1 * t)
        dy = rms_px * 1.41 * np.sin(2 * np.pi * 4.3 * t)
        height, width = gray.shape
        matrix = cv2.getRotationMatrix2D((width / 2, height / 2), roll_deg * np.sin(2 * np.pi * 2.2 * t), 1.0)
        matrix[:, 2] += (dx, dy)
        return np.asarray(cv2.warpAffine(gray, matrix, (width, height), flags=cv2.INTER_CUBIC, borderMode=cv2.BORDER_REPLICATE))

    return picture


def _cloth(i: int, gray: Gray, share: float = 0.5) -> Gray:
    """A grey cloth with folds over a share of the board, which is found by its corners."""
    out = gray.copy()
    x0, y0, x1, y1 = _board_box(gray)
    if share > 0:
        x1 = round(x0 + share * (x1 - x0))
    else:
        y1 = round(y0 - share * (y1 - y0))
    folds = 110 + 12 * np.sin(np.arange(x1 - x0) / 6.0)[None, :]
    out[y0:y1, x0:x1] = _clipped(np.broadcast_to(folds, (y1 - y0, x1 - x0)))
    return out


_BOXES: dict[int, tuple[int, int, int, int]] = {}


def _board_box(gray: Gray) -> tuple[int, int, int, int]:
    """Around the board of a picture of the clip at hand; sought once a clip size and kept, for the board stands still."""
    key = 0
    if key not in _BOXES:
        found, corners = cv2.findChessboardCornersSB(gray, (9, 6))
        if not found:
            found, corners = cv2.findChessboardCornersSB(gray, (6, 9))
        if not found:
            raise RuntimeError("variants: no board in the first picture of this clip")
        low, high = corners.reshape(-1, 2).min(axis=0), corners.reshape(-1, 2).max(axis=0)
        pad = (high - low).max() / 7
        x0, y0 = np.maximum(low - pad, 0).astype(int)
        x1, y1 = (high + pad).astype(int)
        _BOXES[key] = (int(x0), int(y0), int(x1), int(y1))
    return _BOXES[key]


def _without_board(i: int, gray: Gray) -> Gray:
    """The board taken away: the wall's grey beside it in its place."""
    out = gray.copy()
    x0, y0, x1, y1 = _board_box(gray)
    x0, y0, x1, y1 = max(x0 - 25, 0), max(y0 - 25, 0), x1 + 25, y1 + 25
    level = float(np.median(gray[max(y0 - 20, 0) : y0 + 1, x0:x1]))
    noise = np.random.default_rng(i).normal(0, 2, out[y0:y1, x0:x1].shape)
    out[y0:y1, x0:x1] = _clipped(level + noise)
    return out


def _blurred(i: int, gray: Gray) -> Gray:
    return np.asarray(cv2.GaussianBlur(gray, (0, 0), 1.5), dtype=np.uint8)


# --- the variants -----------------------------------------------------------------------------------------------------


def _without(*lost: int) -> Numbers:
    return lambda n: [i for i in range(n) if i not in lost]


def _repeating(*again: int) -> Numbers:
    """Frames that show the picture before them."""
    return lambda n: [i - 1 if i in again else i for i in range(n)]


def _from(first: int, last: int = 10**6) -> Numbers:
    return lambda n: list(range(first, min(n, last)))


def _as_it_was(shown: list[int]) -> list[int]:
    return [i - shown[0] for i in shown]


def _variants() -> Iterator[Variant]:
    for name in ("cable", "fountain", "drop", "held", "surface", "control"):
        yield Variant("as it is", name)
    # (1) how it is stored
    yield Variant("stored turned 180, readout reversed", "drop", {"clock.readout_s": -0.006}, later_s=0.006, writing={"quarter_turns": 2})
    yield Variant("stored turned 180, readout reversed", "surface", {"clock.readout_s": -0.005}, later_s=0.005,
                  writing={"quarter_turns": 2})
    yield Variant("stored turned 180, readout sign wrong", "drop", writing={"quarter_turns": 2}, expect="warned")
    # scanned along upright rows in truth: a scan across it cannot be made of these pictures, so the readout is not told
    yield Variant("stored turned 90", "fountain", {"clock.readout_s": REMOVE}, writing={"quarter_turns": 1})
    yield Variant("stored turned 270", "cable", {"clock.readout_s": REMOVE}, writing={"quarter_turns": 3})
    yield Variant("HEVC 10 bit", "held", writing={"codec": "hevc", "bits": 10})
    yield Variant("HEVC 10 bit full range", "fountain", writing={"codec": "hevc", "bits": 10, "full_range": True})
    yield Variant("full range", "drop", writing={"full_range": True})
    yield Variant("tag of the phone, sheet silent, stamps of 30", "surface", {"clock.capture_fps": REMOVE},
                  stamps=lambda s: [8 * k for k in range(len(s))], writing={"capture_fps_tag": 240.0})
    # (2) flicker
    for clip, fps, readout in (("cable", 120.0, 0.008), ("fountain", 240.0, 0.0055), ("drop", 240.0, 0.006), ("held", 240.0, 0.0045)):
        yield Variant("flicker 100 Hz, whole frames", clip, picture=_flicker(fps, 0.0, 0.12))
        yield Variant("flicker 100 Hz, bands", clip, picture=_flicker(fps, readout, 0.12))
    # (3) shake
    for clip in ("cable", "fountain", "drop", "surface"):
        yield Variant("shake 1 px", clip, picture=_shake(1.0, 0.03))
        yield Variant("shake 3 px", clip, picture=_shake(3.0, 0.06))
    # (4) frames lost or repeated behind good stamps
    yield Variant("one frame lost in the fall", "drop", shown=_without(60), expect="warned", code="frames-lost")
    yield Variant("three frames lost in the fall", "drop", shown=_without(60, 61, 62), expect="warned", code="frames-lost")
    yield Variant("two frames lost in the fall", "surface", shown=_without(40, 41), expect="warned", code="frames-lost")
    yield Variant("frames lost, stamps tell", "drop", shown=_without(60, 61), stamps=_as_it_was)
    yield Variant("two pictures repeated", "drop", shown=_repeating(50, 70), expect="warned", code="pictures-repeated")
    yield Variant("two pictures repeated", "surface", shown=_repeating(35, 50), expect="warned", code="pictures-repeated")
    yield Variant("two pictures repeated", "fountain", shown=_repeating(80, 120))  # compression left no noise to miss
    yield Variant("every fifth picture repeated", "control", shown=lambda n: [i - (i % 5 == 4) for i in range(n)],
                  expect="warned", code="pictures-repeated")
    # (5) the board
    yield Variant("cloth over half of the board", "cable", picture=_cloth, expect="warned")
    yield Variant("cloth over half of the board", "drop", picture=_cloth, expect="warned")
    yield Variant("cloth over the lower third of the board", "fountain", picture=lambda i, g: _cloth(i, g, -0.3), expect="warned")
    yield Variant("cloth over 15 % of the board", "drop", picture=lambda i, g: _cloth(i, g, 0.15), expect="warned")
    # (6) sheets that contradict
    for clip, fps in (("drop", 240.0), ("cable", 120.0), ("fountain", 240.0), ("held", 240.0)):
        yield Variant("capture_fps half", clip, {"clock.capture_fps": fps / 2}, expect="warned")
        yield Variant("capture_fps double", clip, {"clock.capture_fps": fps * 2}, expect="warned")
    yield Variant("square_m 2 % large", "drop", {"board.square_m": 0.0255}, expect="warned")
    yield Variant("square_m 2 % large", "fountain", {"board.square_m": 0.0255}, expect="warned")
    yield Variant("offset_m of the other sign", "drop", {"board.offset_m": -0.015}, expect="warned")
    yield Variant("offset_m of the other sign", "fountain", {"board.offset_m": -0.02}, expect="warned")
    yield Variant("inner_corners swapped", "cable", {"board.inner_corners": [6, 9]}, expect="warned")
    yield Variant("inner_corners swapped", "drop", {"board.inner_corners": [6, 9]}, expect="warned")
    yield Variant("inner_corners wrong", "drop", {"board.inner_corners": [8, 6]}, expect="warned")
    for clip, at in (("drop", (295.8, 226.21)), ("surface", (294.1, 139.25)), ("held", (299.54, 211.81)), ("cable", (215.67, 653.15)),
                     ("fountain", (309.48, 640.84))):  # fmt: skip
        yield Variant("origin_px 10 px off", clip, {"datum.origin_px": [at[0] + 7, at[1] - 7]}, moved_px=(7, -7), expect="warned")
    for clip, size in (("drop", 0.04), ("surface", 0.012), ("control", 0.012), ("held", 0.01)):
        yield Variant("end_mark_m 30 % large", clip, {"line.end_mark_m": 1.3 * size}, expect="warned")
        yield Variant("end_mark_m 30 % small", clip, {"line.end_mark_m": 0.7 * size}, expect="warned")
        yield Variant("end_mark_m absent", clip, {"line.end_mark_m": REMOVE})
    yield Variant("pitch 10 % large", "fountain", {"line.pitch_m": 0.00528}, expect="warned")
    yield Variant("pitch 10 % large, no marks", "fountain", {"line.pitch_m": 0.00528, "line.mark_spacing_m": REMOVE}, expect="warned")
    for clip, spacing in (("fountain", 0.2496), ("cable", 0.4)):
        yield Variant("mark spacing 5 % large", clip, {"line.mark_spacing_m": 1.05 * spacing}, expect="warned", code="marks-disagree")
        yield Variant("mark spacing half", clip, {"line.mark_spacing_m": 0.5 * spacing}, expect="warned")
        yield Variant("no mark spacing", clip, {"line.mark_spacing_m": REMOVE}, expect="warned")
    for clip in ("drop", "surface", "held", "cable", "fountain"):
        yield Variant("readout_s absent", clip, {"clock.readout_s": REMOVE})
        yield Variant("exposure_s absent", clip, {"clock.exposure_s": REMOVE})
        yield Variant("distance_m absent", clip, {"camera.distance_m": REMOVE})
    yield Variant("exposure_s ten times", "fountain", {"clock.exposure_s": 0.004}, expect="warned")
    for clip, kind in (("drop", "payout"), ("drop", "surface-drop"), ("drop", "held-drop"), ("surface", "payout"), ("surface", "free-drop"),
                       ("cable", "surface-drop"), ("fountain", "free-drop"), ("fountain", "drawn"), ("held", "edge-slide"),
                       ("held", "surface-drop"), ("cable", "drawn")):  # fmt: skip
        yield Variant(f"test.kind {kind}", clip, {"test.kind": kind}, expect="warned")
    # (7) the look
    for clip in ("cable", "fountain", "drop", "held", "surface"):
        yield Variant("negative", clip, picture=lambda i, g: np.asarray(255 - g, dtype=np.uint8))
        yield Variant("a third of the contrast", clip, picture=lambda i, g: _clipped(90 + (g.astype(float) - 90) / 3))
        yield Variant("noise of 6", clip, picture=_noisy(6.0))
        yield Variant("defocus of 1.5 px", clip, picture=_blurred)
    for clip, column in (("drop", 295.8), ("fountain", 309.48), ("cable", 215.67), ("held", 299.54)):
        row = {"drop": 226.21, "fountain": 640.84, "cable": 653.15, "held": 211.81}[clip]
        yield Variant("mirrored left to right", clip, {"datum.origin_px": [719 - column, row]}, mirrored=True,
                      picture=lambda i, g: np.ascontiguousarray(g[:, ::-1]))
    # (8) cut
    yield Variant("window_s cuts the run", "drop", {"clip.window_s": [0.15, 0.35]})
    yield Variant("window_s cuts the run", "surface", {"clip.window_s": [0.12, 0.3]})
    yield Variant("window_s cuts the run", "cable", {"clip.window_s": [0.5, 1.0]})
    yield Variant("window_s before the release", "drop", {"clip.window_s": [0.0, 0.08]}, expect="warned")
    yield Variant("released before the first frame", "drop", shown=_from(28))
    yield Variant("released before the first frame", "surface", shown=_from(26))
    yield Variant("released before the first frame", "held", shown=_from(26))
    yield Variant("running before the first frame", "fountain", shown=_from(120))
    yield Variant("ends in the fall", "drop", shown=_from(0, 70))
    yield Variant("ends in the fall", "surface", shown=_from(0, 50))
    yield Variant("ends in the fall", "held", shown=_from(0, 60))
    yield Variant("ends just after the release", "drop", shown=_from(0, 26), expect="warned")
    # (9) other boards and verticals
    yield Variant("board in its own clip, taken away", "drop", {"board.file": "scale.mp4"}, picture=_without_board, board_clip=True)
    yield Variant("board in its own clip, taken away", "cable", {"board.file": "scale.mp4"}, picture=_without_board, board_clip=True)
    yield Variant("board in its own clip, camera then moved 4 px", "cable", {"board.file": "scale.mp4"}, board_clip=True, expect="warned",
                  picture=lambda i, g: np.roll(_without_board(i, g), (3, 4), axis=(0, 1)))
    yield Variant("plumb line", "drop", {"datum.vertical": "plumb", "datum.plumb_px": [[600.0, 300.0], [600.0, 1000.0]]})
    yield Variant("plumb line 5 degrees off", "drop", {"datum.vertical": "plumb", "datum.plumb_px": [[600.0, 300.0], [661.0, 1000.0]]},
                  expect="warned")


VARIANTS: tuple[Variant, ...] = tuple(_variants())


# --- making and judging -----------------------------------------------------------------------------------------------


def make(variant: Variant, folder: Path) -> Path:
    """Write the variant's clip, sheet and truth into a folder; gives its run sheet."""
    source = SHARED / "clips" / variant.clip
    _BOXES.clear()
    with Clip(source / "clip.mp4") as clip:
        count, time_base, ticks = clip.frame_count, clip.time_base, clip.ticks
    shown = list(range(count)) if variant.shown is None else variant.shown(count)
    if variant.picture or variant.shown or variant.stamps or variant.writing:
        _write(variant, source, folder / "clip.mp4", shown, time_base, ticks)
    else:
        shutil.copyfile(source / "clip.mp4", folder / "clip.mp4")
    if variant.board_clip:
        _write_board(source, folder / "scale.mp4", time_base, ticks)
    sheet = tomllib.loads((source / "run.toml").read_text(encoding="utf-8"))
    for key, value in variant.sheet.items():
        table, name = key.split(".")
        if value is None:
            sheet[table].pop(name)
        else:
            sheet[table][name] = value
    (folder / "run.toml").write_text(_toml(sheet), encoding="utf-8")
    told = json.loads((source / "truth.json").read_text(encoding="utf-8"))
    _truth(variant, source, shown, float(told["scale_m_per_px"])).to_csv(folder / "truth.csv", index=False)
    first = float(pd.read_csv(source / "truth.csv")["t_s"].diff().median()) * shown[0]
    for key in ("release_s", "first_touch_s"):
        if isinstance(told.get(key), float):
            told[key] -= first + variant.later_s
    (folder / "truth.json").write_text(json.dumps(told), encoding="utf-8")
    return folder / "run.toml"


def _write(variant: Variant, source: Path, path: Path, shown: list[int], time_base: Fraction, ticks: NDArray[np.int64]) -> None:
    step = int(np.median(np.diff(ticks)))
    with Clip(source / "clip.mp4") as clip:
        kept = {i: gray.copy() for i, gray in clip.frames()}
    stamps = list(range(len(shown))) if variant.stamps is None else variant.stamps(shown)
    change: Picture = variant.picture or (lambda i, gray: gray)
    write_clip(path, (change(i, kept[i]) for i in shown), [step * k for k in stamps], time_base,
               **{"crf": 14.0, "preset": "ultrafast", **variant.writing})  # fmt: skip


def _write_board(source: Path, path: Path, time_base: Fraction, ticks: NDArray[np.int64]) -> None:
    step = int(np.median(np.diff(ticks)))
    with Clip(source / "clip.mp4") as clip:
        pictures = [gray.copy() for _, gray in clip.frames(0, 12)]
    write_clip(path, pictures, [step * k for k in range(len(pictures))], time_base, crf=14.0)


def _toml(sheet: dict[str, Any]) -> str:
    lines = []
    for table, values in sheet.items():
        lines.append(f"[{table}]")
        lines += [f"{key} = {json.dumps(value)}" for key, value in values.items()]
    return "\n".join(lines) + "\n"


def _truth(variant: Variant, source: Path, shown: list[int], metres_per_px: float) -> pd.DataFrame:
    """The truth of the frames shown: when they were taken, not when their stamps say, but from the first frame shown."""
    truth = pd.read_csv(source / "truth.csv").set_index("frame")
    period = float(truth["t_s"].diff().median())
    truth = truth.reindex(shown).reset_index(drop=True)
    truth.insert(0, "frame", np.arange(len(shown)))
    for column in ("t_s", "end_t_s"):
        truth[column] -= period * shown[0] + variant.later_s
    sign = -1.0 if variant.mirrored else 1.0
    for column in ("apex_x_m", "end_x_m"):
        truth[column] = sign * truth[column] - variant.moved_px[0] * metres_per_px
    for column in ("apex_z_m", "end_z_m"):
        truth[column] += variant.moved_px[1] * metres_per_px
    return truth


def judge(variant: Variant, folder: Path, usual: frozenset[str] = frozenset()) -> Verdict:
    """Make and measure a variant; `usual` are the codes of warnings that the unchanged clip has."""
    sheet = make(variant, folder)
    began = time.perf_counter()
    try:
        result = measure_run(sheet).result
    except (BadInput, CannotMeasure) as refusal:
        code = getattr(refusal, "code", "bad-input")
        return Verdict("refused", str(refusal), (code,), seconds=time.perf_counter() - began)
    except Exception:  # the study's very question: anything else is a traceback on a technician's screen
        return Verdict("ERROR", traceback.format_exc(limit=-3), seconds=time.perf_counter() - began)
    seconds = time.perf_counter() - began
    truth = pd.read_csv(folder / "truth.csv")
    told = json.loads((folder / "truth.json").read_text(encoding="utf-8"))
    ratios = {name: (value - goal) / big_u for name, value, big_u, goal in headline(result, truth, told)}
    name = max(ratios, key=lambda key: abs(ratios[key]), default="")
    worst = ratios.get(name, math.nan)
    rms = _rms_px(result, truth, float(told["scale_m_per_px"]))
    codes = tuple(w.code for w in result.warnings)
    right = bool(ratios) and abs(worst) <= 1 and not rms > RIGHT_PX
    warned = bool(set(codes) - usual)
    outcome = "right" if right else "warned" if warned else "WRONG"
    new = [w for w in result.warnings if w.code not in usual]
    says = f"{name} " + " | ".join(w.code for w in new)
    return Verdict(outcome, says, codes, worst, rms, seconds, result)


def _rms_px(result: Result, truth: pd.DataFrame, metres_per_px: float) -> float:
    seen = result.frames.set_index("frame").reindex(truth["frame"]).reset_index()
    point = "apex" if np.isfinite(truth["apex_z_m"]).any() else "end"
    error = np.stack([(seen[f"{point}_{a}_m"] - truth[f"{point}_{a}_m"]).to_numpy(float) for a in "xz"]) / metres_per_px
    error = error[:, np.isfinite(error).all(axis=0)]
    return float(np.sqrt((error**2).sum(axis=0).mean())) if error.size else math.nan


def main(words: list[str]) -> int:
    """Print the table."""
    chosen = [v for v in VARIANTS if not words or any(word in f"{v.clip}: {v.name}" for word in words)]
    usual: dict[str, frozenset[str]] = {}
    bad = 0
    for variant in chosen:
        if variant.clip not in usual:
            with tempfile.TemporaryDirectory() as place:
                usual[variant.clip] = frozenset(judge(Variant("as it is", variant.clip), Path(place)).codes)
        with tempfile.TemporaryDirectory() as place:
            verdict = judge(variant, Path(place), usual[variant.clip])
        missed = bool(variant.code) and variant.code not in verdict.codes and verdict.outcome != "refused"
        hurt = verdict.outcome in ("WRONG", "ERROR") or missed or (variant.expect == "right" and verdict.outcome != "right")
        bad += verdict.outcome in ("WRONG", "ERROR")
        numbers = f"{verdict.worst:+7.2f} U {verdict.rms_px:7.2f} px {verdict.seconds:5.1f} s"
        print(f"{'!' if hurt else ' '} {variant.clip + ': ' + variant.name:56s} {verdict.outcome:8s} {numbers}  {verdict.says}", flush=True)
    print(f"{len(chosen)} variants, {bad} wrong without a warning")
    return int(bad > 0)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
