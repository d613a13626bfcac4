"""Invented runs of the fictional Harrow Point line-test bench, to look at every page without a camera.

No clip stands behind these results: curves follow from formulas, scatter from a seeded generator, pictures are drawn
with NumPy. Nothing here is a measurement, and the result says so.
"""

import hashlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from calibration.notice import Notice
from tracker.analysis.quantity import BudgetLine, Quantity, quantity
from tracker.result import FRAME_COLUMNS, FrameMark, Prediction, Result

__all__ = ["DEMOS", "Demo", "demo"]

Floats = NDArray[np.float64]
FPS = 240.0
GRAVITY = 9.8123
INVENTED = Notice(
    "invented-data",
    "Every figure and picture of this result is invented for the fictional Harrow Point line-test bench.",
    "It shows what a report looks like and measures nothing.",
    "Measure a clip of your own: linefall measure run.toml",
)


@dataclass(frozen=True, slots=True, eq=False)
class Demo:
    """An invented result and the pictures that would belong to it."""

    result: Result
    frames: Callable[[], Iterator[tuple[int, NDArray[np.uint8]]]]


@dataclass(frozen=True, slots=True, eq=False)
class _Bench:
    """Where things stand in the picture."""

    size: tuple[int, int]  # width, height
    origin_px: tuple[float, float]
    px_per_m: float

    def to_px(self, x_m: Any, z_m: Any) -> Floats:
        """(…, 2) column, row."""
        column = self.origin_px[0] + self.px_per_m * np.asarray(x_m, dtype=float)
        row = self.origin_px[1] - self.px_per_m * np.asarray(z_m, dtype=float)
        return np.stack(np.broadcast_arrays(column, row), axis=-1)


def demo(kind: str = "payout", frames: int = 240, size: tuple[int, int] = (540, 960)) -> Demo:
    """An invented run.

    Parameters
    ----------
    kind : {"payout", "surface-drop"}
    frames : int
        How many frames, at 240 a second.
    size : (int, int)
        Width and height of the pictures.

    Returns
    -------
    Demo
    """
    return DEMOS[kind](frames, size)


def _payout(frames: int, size: tuple[int, int]) -> Demo:
    rng = np.random.default_rng(7)
    bench = _Bench(size, (round(0.42 * size[0], 1), 0.50 * size[1]), 0.95 * size[1])
    t = np.arange(frames) / FPS
    growth = 1 - np.exp(-t / (0.22 * t[-1]))
    height = 0.012 + 0.205 * growth + 0.002 * np.sin(17 * t)
    speed = 3.30 * (1 - np.exp(-t / (0.12 * t[-1])))
    sway = 0.004 * np.sin(9 * t)
    seen = ~((t > 0.41 * t[-1]) & (t < 0.44 * t[-1]))
    table = _empty_table(t)
    table["apex_x_m"] = np.where(seen, 0.045 + sway + rng.normal(0, 3e-4, frames), np.nan)
    table["apex_z_m"] = np.where(seen, height + rng.normal(0, 4e-4, frames), np.nan)
    table["u_apex_z_m"] = np.where(seen, 4e-4, np.nan)
    table["arc_width_m"] = np.where(seen, 2 * 0.016 * np.arccosh(1 + height / 0.032) + rng.normal(0, 6e-4, frames), np.nan)
    table["line_speed_mps"] = speed + rng.normal(0, 0.02, frames)
    table["u_line_speed_mps"] = 0.02
    table["paid_out_m"] = np.cumsum(speed) / FPS
    blurred = np.arange(frames) % 61 == 40
    table.loc[blurred, "apex_z_m"] += 0.006
    table["flags"] = np.where(blurred, "blurred-apex", np.where(seen, "", "line-lost"))

    window = (0.75 * t[-1], 0.97 * t[-1])
    inside = (t >= window[0]) & (t <= window[1])
    arc = float(np.nanmean(height[inside]))
    v = float(np.mean(speed[inside]))
    quantities = {
        "arc_height_m": quantity(
            arc, "m",
            (BudgetLine("board offset", 0.002, 0.61 * arc, "B", np.inf, "station", "5e1f", "m"),
             BudgetLine("square side", 5e-5, 40 * arc, "B", np.inf, "board", "a90c", "m"),
             BudgetLine("rim placed by hand", 1.5, 1 / bench.px_per_m, "B", np.inf, "run", "", "px"),
             BudgetLine("line out of plane", 0.0173, 0.45 * arc, "B", np.inf, "run", "", "m"),
             BudgetLine("scatter about its course", 2.1e-4, 1.0, "A", 11.0, "run", "", "m"),
             BudgetLine("lens distortion", 0.02, 0.03 * arc, "B", np.inf, "lens", "77d2", "1")),
            "Time mean of the height of the highest point of the line's axis above the rim.", window,
            extra={"drift_mps": 0.004},
        ),
        "line_speed_mps": quantity(
            v, "m/s",
            (BudgetLine("mark spacing", 0.0012, 4 * v, "B", np.inf, "run", "", "m"),
             BudgetLine("capture rate", 1e-4, v, "B", np.inf, "station", "5e1f", "1"),
             BudgetLine("scatter of mark passages", 0.006, 1.0, "A", 7.0, "run", "", "m/s")),
            "Rate at which line crosses the rim, time mean over its window.", window,
        ),
        "arc_width_m": quantity(
            0.0885, "m", (BudgetLine("board offset", 0.002, 0.05, "B", np.inf, "station", "5e1f", "m"),
                          BudgetLine("scatter about its course", 5e-4, 1.0, "A", 11.0, "run", "", "m")),
            "Distance between the legs at half the height of the apex, time mean.", window,
        ),
        "pickup_coefficient": quantity(
            0.213, "1", (BudgetLine("line speed", 0.021, 0.13, "B", np.inf, "run", "", "m/s"),
                         BudgetLine("pile depth", 0.01, 0.9, "B", np.inf, "run", "", "m")),
            "Push of the pile on the line divided by mass per length times speed squared.", window, interval=(0.1985, 0.2225),
        ),
        "length_paid_out_m": quantity(
            float(np.sum(speed) / FPS), "m", (BudgetLine("mark spacing", 0.0012, 8.0, "B", np.inf, "run", "", "m"),),
            "Length of line that crossed the rim.", (0.0, float(t[-1])),
        ),
    }  # fmt: skip
    predictions = (
        Prediction("line_speed_mps", "steady payout law, from arc height and pick-up", v + 0.021, 0.06, "m/s", -0.021, 0.064,
                   "The measured speed agrees with the steady payout law within its uncertainty."),
    )  # fmt: skip
    warnings = (
        INVENTED,
        Notice("texture-aliased", "The bead texture aliases from 0.58 m/s on.", "Line speed rests on the marks alone.",
               "Put marks on the line every 0.3 m, or film at 480 frames a second."),
        Notice("line-lost", f"The line was lost in {int((~seen).sum())} frames, where a lamp dazzles the lens.",
               "Those frames are left out; the window is not touched.", "Shade the lamp."),
    )  # fmt: skip
    slope = np.linspace(-1, 1, 160)
    marks = []
    for i in range(frames):
        if not seen[i]:
            marks.append(FrameMark(i, float(t[i]), flags=("line-lost",)))
            continue
        x, z = _arc(0.045 + sway[i], height[i], slope)
        every = np.arange(10 + int(v * i) % 30, 160, 30)
        marks.append(
            FrameMark(
                i, float(t[i]), bench.to_px(x, z).astype(np.float32),
                apex_px=_pair(bench.to_px(0.045 + sway[i], table["apex_z_m"][i])),
                marks_px=bench.to_px(x[every], z[every]).astype(np.float32),
                flags=("blurred-apex",) if blurred[i] else (),
            )
        )  # fmt: skip
    model = {"law_arc_height_m": np.column_stack([t[t > 0.3 * t[-1]], (0.012 + 0.205 * growth)[t > 0.3 * t[-1]]])}
    result = _result("payout", bench, quantities, predictions, warnings, table, tuple(marks), model, edits=(
        {"frame": 0, "point": "origin_px", "from": [225.1, 481.0], "to": [226.8, 480.0], "reason": "rim, not the near lip",
         "who": "invented technician"},
    ))  # fmt: skip

    def pictures() -> Iterator[tuple[int, NDArray[np.uint8]]]:
        wall, noise = _wall(bench, container=True), np.random.default_rng(11)
        for mark in marks:
            i = mark.frame
            x, z = _arc(0.045 + sway[i], height[i], np.linspace(-1, 1, 2400))
            yield i, _drawn(wall, bench.to_px(x, z), noise)

    return Demo(result, pictures)


def _surface_drop(frames: int, size: tuple[int, int]) -> Demo:
    rng = np.random.default_rng(8)
    bench = _Bench(size, (0.5 * size[0], 0.12 * size[1]), 0.62 * size[1])
    length, gap, pull = 0.80, 0.45, 0.08
    t = np.arange(frames) / FPS
    release = 0.05
    z = _landing_course(t + 0.002 - release, length, gap, pull)
    seen = z > -(length + gap) + 0.03
    touch = release + np.sqrt(2 * gap / GRAVITY)
    table = _empty_table(t)
    table["end_t_s"] = np.where(seen, t + 0.002, np.nan)
    table["end_x_m"] = np.where(seen, 0.002 * np.sin(3 * t) + rng.normal(0, 2e-4, frames), np.nan)
    table["end_z_m"] = np.where(seen, z + rng.normal(0, 3e-4, frames), np.nan)
    table["u_end_z_m"] = np.where(seen, 3e-4, np.nan)
    table["line_speed_mps"] = np.where(seen, -np.gradient(z, t) + rng.normal(0, 0.02, frames), np.nan)
    table["u_line_speed_mps"] = np.where(seen, 0.02, np.nan)
    table["flags"] = np.where(seen, "", "end-not-found")
    end = float(t[np.flatnonzero(z > -(gap + 0.75 * length))[-1]])
    window = (float(touch), end)
    quantities = {
        "effective_acceleration_mps2": quantity(
            10.221, "m/s2",
            (BudgetLine("board lean", 0.5, 0.062, "B", np.inf, "station", "5e1f", "deg"),
             BudgetLine("square side", 5e-5, 408.0, "B", np.inf, "board", "a90c", "m"),
             BudgetLine("scatter about the fit", 0.051, 1.0, "A", 31.0, "run", "", "m/s2"),
             BudgetLine("readout", 4e-4, 33.0, "B", np.inf, "station", "5e1f", "s"),
             BudgetLine("line out of plane", 0.0058, 4.4, "B", np.inf, "run", "", "m")),
            "Constant acceleration that best fits z(t) over the window, start place and speed free.", window,
            extra={"window_l_over_L": [1.0, 0.25]},
        ),
        "acceleration_ratio": quantity(
            1.0417, "1", (BudgetLine("effective acceleration", 0.075, 0.102, "B", 88.0, "run", "", "m/s2"),),
            "Effective acceleration divided by local gravity.", window,
        ),
        "landing_coefficient": quantity(
            0.079, "1", (BudgetLine("effective acceleration", 0.075, 0.16, "B", 88.0, "run", "", "m/s2"),),
            "Pull of the surface divided by mass per length times speed squared.", window,
        ),
        "lead_over_free_fall_s": quantity(
            0.0038, "s", (BudgetLine("scatter about the fit", 0.0004, 1.0, "A", 31.0, "run", "", "s"),),
            "Lead at the end of the window.", window, extra={"at_z_m": -1.05},
        ),
        "first_touch_s": quantity(
            float(touch), "s", (BudgetLine("length", 0.002, 0.3, "B", np.inf, "run", "", "m"),), "First touch.", None,
        ),
    }  # fmt: skip
    predictions = (
        Prediction("effective_acceleration_mps2", "free fall", GRAVITY, 0.0001, "m/s2", 10.221 - GRAVITY, 0.075,
                   "The top end ran 0.409 m/s² ahead of free fall, 5.5 times the standard uncertainty of the difference."),
    )  # fmt: skip
    falling = t + 0.002 >= touch
    fall = -gap - np.sqrt(2 * GRAVITY * gap) * (t + 0.002 - touch) - GRAVITY * (t + 0.002 - touch) ** 2 / 2
    curves = {
        "free_fall_z_m": np.column_stack([t + 0.002, fall])[falling & (t <= end)],
        "law_z_m": np.column_stack([t + 0.002, z])[falling & (t <= end)],
    }
    marks = tuple(
        FrameMark(
            i, float(t[i]),
            bench.to_px(0.0 * np.linspace(0, 1, 40), np.maximum(z[i] - length * np.linspace(0, 1, 40), -(length + gap))).astype(np.float32),
            end_px=_pair(bench.to_px(0.0, z[i])),
        ) if seen[i] else FrameMark(i, float(t[i]), flags=("end-not-found",))
        for i in range(frames)
    )  # fmt: skip
    result = _result("surface-drop", bench, quantities, predictions, (INVENTED,), table, marks, curves)

    def pictures() -> Iterator[tuple[int, NDArray[np.uint8]]]:
        wall, noise = _wall(bench, container=False), np.random.default_rng(12)
        floor = -(length + gap)
        for i in range(frames):
            s = np.linspace(0, length, 3000)
            points = bench.to_px(0.012 * np.sign(np.sin(s * 90)) * (s > 0.02), np.maximum(z[i] - s, floor))
            yield i, _drawn(wall, points, noise, ball=_pair(bench.to_px(0.0, max(z[i], floor))))

    return Demo(result, pictures)


DEMOS: dict[str, Callable[[int, tuple[int, int]], Demo]] = {"payout": _payout, "surface-drop": _surface_drop}


def _landing_course(t: Floats, length: float, gap: float, pull: float) -> Floats:
    """Height of the top end: free fall over the gap, then dv/dt = g + b v^2 / l (small steps, midpoint rule)."""
    z, v, now = 0.0, 0.0, 0.0
    out = np.zeros(len(t))
    step, floor = 1e-4, -(length + gap)

    def push(z: float, v: float) -> float:
        left = z - floor
        return GRAVITY + (pull * v**2 / max(left, 0.02) if -z > gap else 0.0)

    for i, moment in enumerate(t):
        while now < moment and z > floor:
            half_z, half_v = z - v * step / 2, v + push(z, v) * step / 2
            z, v, now = z - half_v * step, v + push(half_z, half_v) * step, now + step
        out[i] = max(z, floor)
    return out


def _arc(apex_x: float, height: float, along: Floats) -> tuple[Floats, Floats]:
    """Inverted catenary through the apex, from the rim up and far down on the right."""
    c = 0.016
    left, right = np.arccosh(1 + height / c), np.arccosh(1 + (height + 0.46) / c)
    u = np.interp(along, [-1, -0.4, 1], [-left, 0, right])
    return apex_x + c * u, height - c * (np.cosh(u) - 1)


def _pair(point: Any) -> tuple[float, float]:
    return float(point[0]), float(point[1])


def _empty_table(t: Floats) -> pd.DataFrame:
    table = pd.DataFrame({name: np.full(len(t), np.nan) for name in FRAME_COLUMNS})
    table["frame"], table["t_s"], table["flags"] = np.arange(len(t)), t, ""
    return table


def _result(
    kind: str, bench: _Bench, quantities: dict[str, Quantity], predictions: tuple[Prediction, ...],
    warnings: tuple[Notice, ...], table: pd.DataFrame, marks: tuple[FrameMark, ...], curves: dict[str, Floats],
    edits: tuple[dict[str, Any], ...] = (),
) -> Result:  # fmt: skip
    name = f"harrow-point-{kind}"
    sheet = {
        "clip": {"file": f"{name}.mp4"}, "clock": {"capture_fps": FPS, "readout_s": 0.004},
        "board": {"kind": "checkerboard", "inner_corners": [9, 6], "square_m": 0.025, "u_square_m": 5e-5, "offset_m": 0.06},
        "camera": {"distance_m": 2.2}, "datum": {"origin_px": list(bench.origin_px)},
        "line": {"kind": "ball chain (invented)", "length_m": 12.0}, "site": {"gravity_mps2": GRAVITY},
        "test": {"kind": kind, "batch": "B-0412", "specimen": "07"},
    }  # fmt: skip
    return Result(
        kind=kind, sheet=sheet, sheet_path=Path(f"{name}.toml"), clip_path=Path(f"{name}.mp4"),
        clip_sha256=hashlib.sha256(b"no clip stands behind invented data").hexdigest(), quantities=quantities,
        predictions=predictions, warnings=warnings, frames=table, marks=marks,
        clock={"capture_fps": FPS, "provenance": "run sheet, clock.capture_fps", "readout_s": 0.004, "u_readout_s": 0.0004,
               "scan": "down"},
        plane={"board": "checkerboard 9 x 6", "residual_px": 0.11, "vertical": "board", "offset_m": 0.06,
               "scale_mm_per_px": 1000 / bench.px_per_m},
        clip={"codec": "none (drawn)", "width": bench.size[0], "height": bench.size[1], "frames": len(table)},
        defaults={"datum.u_origin_px": {"amount": 1.5, "unit": "px", "why": "a point placed by hand on the picture"},
                  "camera.u_distance_m": {"amount": 0.044, "unit": "m", "why": "a tape to the lens"}},
        edits=edits, scale_px_per_m=bench.px_per_m, origin_px=bench.origin_px, model_curves=curves,
    )  # fmt: skip


def _wall(bench: _Bench, container: bool) -> Floats:
    """A wall in uneven light with a board on it, and a container below the rim."""
    width, height = bench.size
    column, row = np.meshgrid(np.arange(width), np.arange(height))
    wall = 118 + 26 * column / width - 30 * row / height
    side = 0.030 * bench.px_per_m
    left, top = 0.06 * width, 0.05 * height
    i, j = (column - left) // side, (row - top) // side
    on_board = (i >= 0) & (i < 6) & (j >= 0) & (j < 4)
    wall = np.where(on_board, np.where((i + j) % 2 == 0, 35.0, 215.0), wall)
    if container:
        x, y = bench.origin_px
        wall = np.where((abs(column - x) < 0.11 * width) & (row > y) & (row < y + 0.2 * height), 62.0, wall)
    return wall


def _drawn(
    wall: Floats, points: Floats, noise: np.random.Generator, ball: tuple[float, float] | None = None
) -> NDArray[np.uint8]:
    """Wall, the line's shadow, the line, sensor noise."""
    cover = _splat(points, wall.shape)
    shadow = np.roll(cover, (6, 14), axis=(0, 1))
    picture = wall * (1 - 0.35 * shadow) * (1 - cover) + 225 * cover
    if ball is not None:
        row, column = np.ogrid[: wall.shape[0], : wall.shape[1]]
        picture = np.where((column - ball[0]) ** 2 + (row - ball[1]) ** 2 < 36, 235.0, picture)
    grain = noise.standard_normal(wall.shape, dtype=np.float32) * 2.0
    return np.clip(picture + grain, 0, 255).astype(np.uint8)


def _splat(points: Floats, shape: tuple[int, ...]) -> Floats:
    """How much of each pixel a thin line covers: its points, smeared by a small binomial kernel."""
    column, row = np.rint(points[:, 0]).astype(int), np.rint(points[:, 1]).astype(int)
    inside = (column >= 2) & (column < shape[1] - 2) & (row >= 2) & (row < shape[0] - 2)
    cover = np.zeros(shape)
    cover[row[inside], column[inside]] = 1.0
    for axis in (0, 1):
        cover = (np.roll(cover, 1, axis) + 2 * cover + np.roll(cover, -1, axis)) / 4
    return np.minimum(1.6 * cover, 1.0)
