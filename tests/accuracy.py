"""Print how near the measured values come to the truth of clips with truth: ``python -m tests.accuracy [FOLDER...]``.

Without folders: the sample clips, and the clips beside the checkout (../shared/clips) where they are. Each clip is
measured from its run.toml; frames are compared one by one, headline quantities by error over U. The last lines count
how many of all headline intervals hold their truth, with the one-sided 1 % bound of the binomial law of 95 %.
"""

import json
import sys
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd
from scipy import stats

from calibration.notice import BadInput, CannotMeasure
from tracker.measure import measure_run
from tracker.result import Result

ROOT = Path(__file__).parents[1]
PLACES = (ROOT / "sample_clips", ROOT.parent / "shared" / "clips")
MEANS = {"arc_height_m": "apex_z_m", "arc_width_m": "arc_width_m", "line_speed_mps": "line_speed_mps"}


@dataclass
class Row:
    """What one clip gave."""

    name: str
    seconds: float = 0.0
    refusal: str = ""
    point: str = ""
    rms_px: float = np.nan
    shape_px: float = np.nan
    measured_pct: float = np.nan
    invented: int = 0
    speed_rms_pct: float = np.nan
    errors: dict[str, tuple[float, float, float]] = field(default_factory=dict)  # value, truth, U
    warnings: list[str] = field(default_factory=list)


def clips(arguments: list[str]) -> list[Path]:
    """Folders with a run sheet and a truth table."""
    places = [Path(a) for a in arguments] or [p for p in PLACES if p.is_dir()]
    found = []
    for place in places:
        found += [place] if (place / "run.toml").exists() else sorted(p.parent for p in place.glob("*/run.toml"))
    return found


def compare(folder: Path) -> Row:
    """Measure one clip and hold it against its truth."""
    row = Row(folder.name)
    began = time.perf_counter()
    try:
        result = measure_run(folder / "run.toml").result
    except (BadInput, CannotMeasure) as refusal:
        row.refusal, row.seconds = str(refusal), time.perf_counter() - began
        return row
    row.seconds = time.perf_counter() - began
    row.warnings = [w.code for w in result.warnings]
    truth = pd.read_csv(folder / "truth.csv")
    told = json.loads((folder / "truth.json").read_text(encoding="utf-8"))
    seen = result.frames.set_index("frame").reindex(truth["frame"]).reset_index()
    _places(row, seen, truth, float(told["scale_m_per_px"]))
    speed, true_speed = seen["line_speed_mps"].to_numpy(float), truth["line_speed_mps"].to_numpy(float)
    moving = np.isfinite(speed) & (true_speed > 0.2)
    if moving.any():
        row.speed_rms_pct = float(100 * np.sqrt(np.mean((speed[moving] / true_speed[moving] - 1) ** 2)))
    for name, value, big_u, goal in headline(result, truth, told):
        row.errors[name] = (value, goal, big_u)
    return row


def _places(row: Row, seen: pd.DataFrame, truth: pd.DataFrame, metres_per_px: float) -> None:
    for point in ("apex", "end"):
        z = truth[f"{point}_z_m"].to_numpy(float)
        if not np.isfinite(z).any():
            continue
        measured = seen[f"{point}_z_m"].to_numpy(float)
        both = np.isfinite(measured) & np.isfinite(z)
        error = np.stack(
            [seen[f"{point}_{axis}_m"].to_numpy(float) - truth[f"{point}_{axis}_m"].to_numpy(float) for axis in "xz"]
        )
        error = error[:, both] / metres_per_px
        row.point = point
        row.measured_pct = 100.0 * both.sum() / np.isfinite(z).sum()
        row.invented = int((np.isfinite(measured) & ~np.isfinite(z)).sum())
        if both.any():
            row.rms_px = float(np.sqrt((error**2).sum(axis=0).mean()))
            row.shape_px = float(np.sqrt(((error - error.mean(axis=1, keepdims=True)) ** 2).sum(axis=0).mean()))


def headline(result: Result, truth: pd.DataFrame, told: dict) -> list[tuple[str, float, float, float]]:
    """Name, value, U and truth of every quantity whose truth is known, in the result's own window."""
    found = []
    gravity = float(told["gravity_mps2"])
    for name, item in result.quantities.items():
        goal = np.nan
        t, window = truth["t_s"].to_numpy(float), item.window_s
        if name in MEANS and window is not None and np.isfinite(truth[MEANS[name]]).any():
            inside = (t >= window[0] - 1e-9) & (t <= window[1] + 1e-9)
            goal = float(truth[MEANS[name]][inside].mean())
        elif name == "length_paid_out_m" and window is not None:
            goal = float(np.diff(np.interp(window, t, truth["paid_out_m"]))[0])
        elif name == "measured_gravity_mps2":
            goal = gravity if "g_as_seen_mps2" not in told else float(told["g_as_seen_mps2"])
        elif name in ("effective_acceleration_mps2", "acceleration_ratio") and window is not None:
            goal = _acceleration(truth, window) / (gravity if name == "acceleration_ratio" else 1.0)
        elif name in (
            "pickup_coefficient",
            "landing_coefficient",
            "release_s",
            "first_touch_s",
            "growth_rate_per_s",
            "friction_coefficient",
        ):
            goal = float(told.get(name, np.nan))
        if np.isfinite(goal):
            found.append((name, item.value, item.U, goal))
    return found


def _acceleration(truth: pd.DataFrame, window: tuple[float, float]) -> float:
    t, z = truth["end_t_s"].to_numpy(float), truth["end_z_m"].to_numpy(float)
    inside = np.isfinite(t) & np.isfinite(z) & (t >= window[0] - 1e-9) & (t <= window[1] + 1e-9)
    return float(-2 * np.polyfit(t[inside] - t[inside].mean(), z[inside], 2)[0])


def show(row: Row) -> None:
    """One clip on the screen."""
    if row.refusal:
        print(f"{row.name}: refused in {row.seconds:.1f} s: {row.refusal}")
        return
    speed = "" if np.isnan(row.speed_rms_pct) else f", line speed {row.speed_rms_pct:.2f} % RMS"
    print(
        f"{row.name}: {row.point} {row.rms_px:.3f} px RMS ({row.shape_px:.3f} about its mean offset), {row.measured_pct:.1f} % of frames, "
        f"{row.invented} invented{speed}; {row.seconds:.1f} s; warnings: {', '.join(row.warnings) or 'none'}"
    )
    for name, (value, goal, big_u) in row.errors.items():
        print(f"    {name}: {value:.5g} ± {big_u:.2g}, truth {goal:.5g}, error/U {(value - goal) / big_u:+.2f}")


def main(arguments: list[str]) -> int:
    """Print the table; exit 1 where more intervals miss than chance allows, or one misses by more than 1.6 U."""
    rows = []
    for folder in clips(arguments):
        rows.append(compare(folder))
        show(rows[-1])
    ratios = np.array([(value - goal) / big_u for row in rows for value, goal, big_u in row.errors.values()])
    missed = int((np.abs(ratios) > 1).sum())
    allowed = int(stats.binom.ppf(0.99, ratios.size, 0.05)) if ratios.size else 0
    worst = float(np.abs(ratios).max()) if ratios.size else 0.0
    print(
        f"{ratios.size} headline quantities, {missed} outside U (at most {allowed} by the 1 % binomial bound), worst {worst:.2f} U"
    )
    return int(missed > allowed or worst > 1.6)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
