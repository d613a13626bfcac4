"""Remake the sample clips with their sheets and truth, or check the committed ones against what the simulator makes now.

    python -m sample_clips [NAME...]            remake all, or those named
    python -m sample_clips --check [NAME...]    compare, change nothing
    python -m sample_clips --sheets [NAME...]   remake sheets and truth only, leave the clips
"""

import argparse
import json
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import av
import numpy as np
from numpy.typing import NDArray

from sample_clips.benches import BENCHES, GRAVITY, Bench, Made
from sample_clips.encode import write_clip
from sample_clips.render import Renderer
from sample_clips.scenery import Board
from sample_clips.truth import headline, metres_per_pixel, rows_of_truth, text_of

__all__ = ["FOLDER", "TEXTS", "check", "main", "remake", "texts", "write_frames"]

FOLDER = Path(__file__).parent
TEXTS = ("run.toml", "truth.csv", "truth.json", "scene.json")


# --- the small files --------------------------------------------------------------------------------------------------


def texts(bench: Bench) -> dict[str, str]:
    """Sheet, truth table, headline truths and scene of a bench, as file name to text."""
    made = bench.make()
    per_pixel = metres_per_pixel(bench.camera)
    rows = rows_of_truth(made.rig, bench.camera, bench.recording.frame_s, margin_px=bench.end_radius_m / per_pixel)
    truths = {
        **headline(made.rig, rows, window_s=made.window_s, gravity_mps2=GRAVITY),
        **made.truths,
        "gravity_mps2": GRAVITY,
        "scale_m_per_px": per_pixel,
        "end_cap_radius_m": bench.end_radius_m,
    }
    return {
        "run.toml": _toml(bench),
        "truth.csv": text_of(rows),
        "truth.json": json.dumps(_rounded(truths), indent=1) + "\n",
        "scene.json": json.dumps(_rounded(_scene(bench, made)), indent=1) + "\n",
        **bench.beside,
    }


def _toml(bench: Bench) -> str:
    def value(v: Any) -> str:
        if isinstance(v, str):
            return json.dumps(v, ensure_ascii=False)
        return "[" + ", ".join(value(each) for each in v) + "]" if isinstance(v, list) else repr(v)

    lines = ["# Invented data: Harrow Point line-test bench. " + bench.says]
    for name, table in bench.sheet.items():
        lines += ["", f"[{name}]", *(f"{key} = {value(v)}" for key, v in table.items())]
    return "\n".join(lines) + "\n"


def _scene(bench: Bench, made: Made) -> dict[str, Any]:
    """What the scene is, and under "hidden" what no technician could know."""
    recording, camera = bench.recording, bench.camera
    board = next(thing for thing in bench.scenery.things if isinstance(thing, Board))
    return {
        "name": bench.name, "clip": "clip.mp4", "test_kind": bench.kind, "says": bench.says, "measurable": bench.measurable,
        "frames": recording.frame_s.size, "fps_true": camera.fps, "time_base": str(recording.time_base),
        "upright_size": [camera.width, camera.height], "rotation_tag_deg": 90 * camera.quarter_turns,
        "hidden": {
            "camera": asdict(camera), "light": asdict(bench.scenery.light), "board": asdict(board), "style": asdict(bench.style),
            "wall_y_m": bench.scenery.wall.y_m, "release_s": made.rig.release_s,
        },
    }  # fmt: skip


def _rounded(thing: Any) -> Any:
    """Plain numbers with ten significant digits: enough, and the same on every machine."""
    if isinstance(thing, dict):
        return {key: _rounded(value) for key, value in thing.items()}
    if isinstance(thing, list | tuple):
        return [_rounded(value) for value in thing]
    if isinstance(thing, float | np.floating):
        return float(f"{float(thing):.10g}")
    return thing


# --- the clip ---------------------------------------------------------------------------------------------------------


def write_frames(bench: Bench, path: Path, *, progress: bool = False) -> int:
    """Render and encode a bench's clip; gives its size [byte]."""
    recording, camera = bench.recording, bench.camera
    renderer = Renderer(camera, bench.scenery, bench.motion(), bench.style, frame_s=recording.frame_s, seed=bench.seed)
    frames = renderer.frames(recording.bits)
    return write_clip(
        path, _told(frames, bench.name, recording.frame_s.size) if progress else frames, recording.ticks.tolist(),
        recording.time_base, codec=recording.codec, bits=recording.bits, full_range=recording.full_range,
        quarter_turns=camera.quarter_turns, mirrored=camera.mirrored, capture_fps_tag=recording.tag_fps, crf=recording.crf,
        tint=recording.tint,
    )  # fmt: skip


def _told(frames: Iterator[NDArray[Any]], name: str, total: int) -> Iterator[NDArray[Any]]:
    """The same frames, with a line on the screen that tells how far they are."""
    start = time.monotonic()
    for number, frame in enumerate(frames, start=1):
        if sys.stderr.isatty() or number % 50 == 0 or number == total:
            left = (time.monotonic() - start) / number * (total - number)
            print(f"\r{name}: frame {number} of {total}, {left:.0f} s left   ", end="", file=sys.stderr, flush=True)
        yield frame
    print(file=sys.stderr)


def remake(bench: Bench, folder: Path, *, clip: bool = True) -> None:
    """Write a bench's files into a folder of its name."""
    place = folder / bench.name
    place.mkdir(parents=True, exist_ok=True)
    for name, text in texts(bench).items():
        (place / name).write_text(text, encoding="utf-8", newline="\n")
    if clip:
        size = write_frames(bench, place / "clip.mp4", progress=True)
        print(f"{bench.name}: {size / 1e6:.2f} MB, {bench.recording.frame_s.size} frames")


# --- comparing --------------------------------------------------------------------------------------------------------


def check(bench: Bench, folder: Path, *, clip: bool = True) -> list[str]:
    """What differs between the files in a folder and what the simulator makes now.

    Numbers may differ by their last printed digits (other machines round otherwise); decoded frames by an RMS of one grey level.
    """
    place = folder / bench.name
    wrong = []
    for name, text in texts(bench).items():
        if not (place / name).exists():
            wrong.append(f"{bench.name}/{name} is missing; make it with: python -m sample_clips {bench.name}")
        elif not _same_text((place / name).read_text(encoding="utf-8"), text):
            wrong.append(f"{bench.name}/{name} differs from what the simulator makes now")
    if clip and not wrong:
        with TemporaryDirectory() as room:
            new = Path(room) / "clip.mp4"
            write_frames(bench, new, progress=True)
            wrong += _compare_frames(bench.name, place / "clip.mp4", new)
    return wrong


def _same_text(a: str, b: str) -> bool:
    """Equal word by word, numbers to 2e-7 or a ten-millionth."""
    split = [text.replace(",", " , ").replace("[", " [ ").replace("]", " ] ").split() for text in (a, b)]
    return len(split[0]) == len(split[1]) and all(p == q or _close(p, q) for p, q in zip(*split, strict=True))


def _close(p: str, q: str) -> bool:
    try:
        return abs(float(p) - float(q)) <= 2e-7 + 1e-7 * abs(float(q))
    except ValueError:
        return False


def _compare_frames(name: str, old: Path, new: Path) -> list[str]:
    worst, count = 0.0, 0
    with av.open(str(old)) as a, av.open(str(new)) as b:
        first, second = a.decode(video=0), b.decode(video=0)
        for p, q in zip(first, second, strict=False):
            if p.pts != q.pts:
                return [f"{name}/clip.mp4: frame {count} is stamped {p.pts}, now {q.pts}"]
            left, right = (f.to_ndarray(format="gray").astype(np.float32) for f in (p, q))
            worst = max(worst, float(np.sqrt(np.mean((left - right) ** 2))))
            count += 1
        if next(first, None) is not None or next(second, None) is not None:
            return [f"{name}/clip.mp4: other number of frames than now, more than {count}"]
    return [f"{name}/clip.mp4: frames differ by up to {worst:.2f} grey levels RMS"] if worst > 1 else []


# --- command ----------------------------------------------------------------------------------------------------------


def main(arguments: Sequence[str] | None = None) -> int:
    """The command; gives its exit code."""
    parser = argparse.ArgumentParser(prog="python -m sample_clips", description="Remake or check the sample clips.")
    parser.add_argument("name", nargs="*", help="scenes; all when none is named")
    parser.add_argument("--check", action="store_true", help="compare with the committed files, change nothing")
    parser.add_argument("--sheets", action="store_true", help="sheets and truth only, leave the clips")
    parser.add_argument("--into", type=Path, default=FOLDER, help="another folder than this package")
    asked = parser.parse_args(arguments)
    if unknown := [name for name in asked.name if name not in BENCHES]:
        print(f"No scene {unknown[0]!r}; there are {', '.join(BENCHES)}.", file=sys.stderr)
        return 2
    wrong: list[str] = []
    for name in asked.name or list(BENCHES):
        if asked.check:
            found = check(BENCHES[name], asked.into, clip=not asked.sheets)
            print(f"{name}: {'as made now' if not found else '; '.join(found)}")
            wrong += found
        else:
            remake(BENCHES[name], asked.into, clip=not asked.sheets)
    return 1 if wrong else 0
