"""Hold a result folder against the truth of its sample clip.

    python -m sample_clips.score RESULT SCENE     exit 0: all kept, 1: something is not, 2: cannot be read

RESULT holds `frames.csv` and `result.json`; SCENE is a folder here, or its name. Three questions are answered apart, because one
number would mix them:

- followed: places per frame after the best shift, turn and scale are taken away: what following the line got wrong, in pixels;
- placed: that shift and scale, which board, lens and datum are to blame for; they belong into the stated uncertainty;
- stated: for each headline quantity, whether its stated interval holds the truth of the same window.
"""

import argparse
import csv
import json
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from sample_clips.truth import quadratic

__all__ = ["Line", "main", "score"]

Floats = NDArray[np.float64]
Table = dict[str, Floats]
FOLLOWED_PX = 0.3  # RMS
SPEED_SHARE, SPEED_MPS = 0.01, 0.02  # the larger one, RMS
_SLOW_MPS = 0.2  # slower lines have no speed to speak of


@dataclass(frozen=True, slots=True)
class Line:
    """One line of the score; `kept` is None where nothing is demanded."""

    what: str
    says: str
    kept: bool | None


def score(result: Path, scene: Path) -> list[Line]:
    """Compare a result folder with a scene folder.

    Raises
    ------
    OSError, ValueError
        A file is missing or is not what it should be.
    """
    truth, truths = _table(scene / "truth.csv"), json.loads((scene / "truth.json").read_text(encoding="utf-8"))
    found = json.loads((result / "result.json").read_text(encoding="utf-8"))
    got = _on_frames(_table(result / "frames.csv"), truth["frame"])
    lines: list[Line] = []
    for name, clock in (("apex", "t_s"), ("end", "end_t_s")):
        if np.isfinite(truth[f"{name}_z_m"]).any():
            lines += _places(name, clock, got, truth, float(truths["scale_m_per_px"]))
    if np.isfinite(truth["paid_out_m"]).any():
        lines.append(_speeds(got, truth))
    for name, quantity in found.get("results", {}).items():
        if isinstance(quantity, dict) and quantity.get("value") is not None:
            expected = _expected(name, quantity, truth, truths)
            if expected is not None:
                lines.append(_stated(name, quantity, expected))
    return lines


# --- reading ----------------------------------------------------------------------------------------------------------


def _table(path: Path) -> Table:
    with path.open(newline="", encoding="utf-8-sig") as file:
        rows = list(csv.DictReader(file))
    if not rows:
        raise ValueError(f"{path} holds no rows.")
    names = [name for name in rows[0] if name and name != "flags"]
    return {name: np.array([float(row[name]) if row[name].strip() else np.nan for row in rows]) for name in names}


def _on_frames(table: Table, frames: Floats) -> Table:
    row_of = {int(f): i for i, f in enumerate(table["frame"])}
    rows = np.array([row_of.get(int(f), -1) for f in frames])
    return {name: np.where(rows >= 0, values[rows], np.nan) for name, values in table.items()}


# --- places and speeds ------------------------------------------------------------------------------------------------


def _curve(t: Floats, values: Floats) -> CubicSpline:
    known = np.isfinite(t) & np.isfinite(values)
    return CubicSpline(t[known], values[known])


def _places(name: str, clock: str, got: Table, truth: Table, per_pixel: float) -> list[Line]:
    known = np.isfinite(truth[f"{name}_z_m"])
    have = known & np.isfinite(got[f"{name}_z_m"]) & np.isfinite(got[f"{name}_x_m"])
    invented = int((~known & np.isfinite(got[f"{name}_z_m"])).sum())
    share = have.sum() / known.sum()
    seen = f"{100 * share:.0f} % of {known.sum()} frames measured, {invented} where nothing is to be seen"
    lines = [Line(f"{name} measured", seen, None)]
    if have.sum() < 8:
        return [*lines, Line(f"{name} followed", "too few frames", False)]
    t = np.where(np.isfinite(got[clock]), got[clock], truth[clock])[have]  # truth is moved to the result's own times
    axes = ("x", "z")
    there = np.stack([_curve(truth[clock], truth[f"{name}_{axis}_m"])(t) for axis in axes], axis=1)
    here = np.stack([got[f"{name}_{axis}_m"][have] for axis in axes], axis=1)
    shift = (here - there).mean(axis=0)
    rest, scale = _after_similarity(here, there)
    rms = float(np.sqrt((rest**2).sum(axis=1).mean())) / per_pixel
    worst = float(np.linalg.norm(rest, axis=1).max()) / per_pixel
    about = float(np.sqrt((((here - there - shift) ** 2).sum(axis=1)).mean())) / per_pixel
    lines.append(Line(f"{name} followed", f"RMS {rms:.3f} px, worst {worst:.2f} px", rms <= FOLLOWED_PX))
    moved = f"shift {shift[0] / per_pixel:+.2f}, {shift[1] / per_pixel:+.2f} px"
    placed = f"{moved}, scale {100 * (scale - 1):+.3f} %, RMS about the shift {about:.3f} px"
    return [*lines, Line(f"{name} placed", placed, None)]


def _after_similarity(here: Floats, there: Floats) -> tuple[Floats, float]:
    """What is left of places (n, 2) after the best shift, turn and scale of the true ones, and that scale.

    A scale can be told only from places that spread; those that stay within a few millimetres keep their size.
    """
    p, q = here - here.mean(axis=0), there - there.mean(axis=0)
    if np.sqrt((q**2).sum(axis=1).mean()) < 0.02:
        return p - q, 1.0
    a, b = p[:, 0] + 1j * p[:, 1], q[:, 0] + 1j * q[:, 1]
    turn = np.vdot(b, a) / np.vdot(b, b)
    rest = a - turn * b
    return np.stack([rest.real, rest.imag], axis=1), float(abs(turn))


def _speeds(got: Table, truth: Table) -> Line:
    v, real = got["line_speed_mps"], truth["line_speed_mps"]
    compared = np.isfinite(v) & (real > _SLOW_MPS)
    if not compared.any():
        return Line("line speed", "not measured", None)
    error = (v - real)[compared]
    allowed = np.maximum(SPEED_SHARE * real[compared], SPEED_MPS)
    rms = float(np.sqrt(np.mean((error / real[compared]) ** 2)))
    far = int((np.abs(error) > 0.05 * real[compared]).sum())
    says = f"{compared.sum()} frames, RMS {100 * rms:.2f} %, {far} frames beyond 5 %"
    return Line("line speed", says, bool(np.sqrt(np.mean((error / allowed) ** 2)) <= 1))


# --- headline quantities ----------------------------------------------------------------------------------------------


def _window(quantity: Mapping[str, Any]) -> tuple[float, float] | None:
    window = quantity.get("window_s")
    if not isinstance(window, Sequence) or len(window) != 2 or None in window:
        return None
    return float(window[0]), float(window[1])


def _expected(name: str, quantity: Mapping[str, Any], truth: Table, truths: Mapping[str, Any]) -> float | None:
    """The truth of a quantity, in the window that the result states for it; None where there is none."""
    window = _window(quantity)
    column = {"arc_height_m": "apex_z_m", "arc_width_m": "arc_width_m", "line_speed_mps": "line_speed_mps"}.get(name)
    if column is not None:
        return _mean(column, window, truth)
    if name in ("effective_acceleration_mps2", "acceleration_ratio"):
        if window is None:
            return None
        t, z = truth["end_t_s"], truth["end_z_m"]
        if window[0] < np.nanmin(t) - 0.01 or window[1] > np.nanmax(t) + 0.01:
            return None  # there is no truth for all of it
        within = np.isfinite(z) & (t >= window[0] - 1e-6) & (t <= window[1] + 1e-6)
        if within.sum() < 5:
            return None
        return quadratic(t[within], z[within]) / (1 if name.startswith("eff") else truths["gravity_mps2"])
    if name == "length_paid_out_m" and window is not None and np.isfinite(truth["paid_out_m"]).any():
        gone = _curve(truth["t_s"], truth["paid_out_m"])
        return float(gone(window[1]) - gone(window[0]))
    if name == "lead_over_free_fall_s":
        return _lead(quantity, truth, truths)
    value = truths.get(name)
    return float(value) if isinstance(value, int | float) else None


def _mean(column: str, window: tuple[float, float] | None, truth: Table) -> float | None:
    t, values = truth["t_s"], truth[column]
    if window is None or not np.isfinite(truth["paid_out_m"]).any():
        return None
    within = (t >= window[0] - 1e-6) & (t <= window[1] + 1e-6) & np.isfinite(values)
    return float(values[within].mean()) if within.any() else None


def _lead(quantity: Mapping[str, Any], truth: Table, truths: Mapping[str, Any]) -> float | None:
    at = quantity.get("at_z_m", quantity.get("extra", {}).get("at_z_m") if isinstance(quantity.get("extra"), dict) else None)
    touch = truths.get("first_touch_s")
    if at is None or touch is None:
        return None
    path = _curve(truth["end_t_s"], truth["end_z_m"])
    later = [float(t) for t in path.solve(float(at), extrapolate=False) if t > touch]
    if not later:
        return None
    g, z0, v0 = float(truths["gravity_mps2"]), float(path(touch)), -float(path(touch, 1))
    return float((np.sqrt(v0 * v0 + 2 * g * (z0 - float(at))) - v0) / g - (later[0] - touch))


def _stated(name: str, quantity: Mapping[str, Any], expected: float) -> Line:
    value, wide = float(quantity["value"]), quantity.get("U")
    low, high = quantity.get("interval") or ((value - wide, value + wide) if wide is not None else (value, value))
    says = f"{value:.6g}, stated {low:.6g} to {high:.6g}, true {expected:.6g}"
    return Line(name, says, bool(low <= expected <= high))


# --- command ----------------------------------------------------------------------------------------------------------


def main(arguments: Sequence[str] | None = None) -> int:
    """The command; gives its exit code."""
    parser = argparse.ArgumentParser(prog="python -m sample_clips.score", description="Hold a result against a sample clip's truth.")
    parser.add_argument("result", type=Path)
    parser.add_argument("scene", help="a scene's folder, or its name here")
    asked = parser.parse_args(arguments)
    scene = Path(asked.scene)
    try:
        lines = score(asked.result, scene if (scene / "truth.csv").exists() else Path(__file__).parent / asked.scene)
    except (OSError, ValueError, KeyError) as trouble:
        print(f"Cannot score {asked.result}: {trouble}", file=sys.stderr)
        return 2
    for line in lines:
        print(f"{ {True: 'kept', False: 'NOT KEPT', None: ''}[line.kept]:9s}{line.what:32s}{line.says}")
    return 1 if any(line.kept is False for line in lines) else 0


if __name__ == "__main__":
    sys.exit(main())
