"""What is true in a clip: a row a frame, and the headline numbers.

A row holds the place of the end, or of the arc's apex, at the moment its own row of the picture is exposed. All is read from the
rig's own motion; no law of motion is used here. Columns are those of a result's `frames.csv`.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sample_clips.camera import Camera, truth_pixels
from sample_clips.rigs import Arcs, Ends, Runs

__all__ = ["COLUMNS", "headline", "metres_per_pixel", "quadratic", "rows_of_truth", "text_of"]

Floats = NDArray[np.float64]
Row = dict[str, float | int | str]
Rig = Ends | Runs

COLUMNS = (
    "frame", "t_s", "apex_x_m", "apex_z_m", "u_apex_z_m", "arc_width_m", "end_t_s", "end_x_m", "end_z_m", "u_end_z_m",
    "line_speed_mps", "u_line_speed_mps", "paid_out_m", "flags",
)  # fmt: skip


def metres_per_pixel(camera: Camera) -> float:
    """At the origin, along the picture's rows."""
    left, right = camera.project([[-0.001, 0, 0], [0.001, 0, 0]])
    return float(0.002 / np.linalg.norm(right - left))


# --- rows -------------------------------------------------------------------------------------------------------------


def rows_of_truth(rig: Rig, camera: Camera, frame_s: ArrayLike, *, margin_px: float = 0.0) -> list[Row]:
    """The truth of each frame.

    Parameters
    ----------
    rig : Ends or Runs
    camera : Camera
    frame_s : (n,) array_like
        Mid-exposure of stored row 0 of each frame [s].
    margin_px : float
        An end counts as seen when it lies so far inside the picture [px].

    Returns
    -------
    list of dict
        Column to value; what is not to be seen is left out.
    """
    times = np.asarray(frame_s, dtype=float)
    if isinstance(rig, Ends):
        return _end_rows(rig, camera, times, margin_px)
    if isinstance(rig, Arcs):
        return _arc_rows(rig, camera, times)
    return [
        {"frame": i, "t_s": t, "line_speed_mps": rig.speed(t), "paid_out_m": rig.paid_out(t)}
        for i, t in enumerate(times.tolist())
    ]


def _within(px: Floats, margin_px: float, camera: Camera) -> NDArray[np.bool_]:
    """Whether pixels (m, 2) lie inside the picture by a margin."""
    x, y = px[:, 0], px[:, 1]
    inside: NDArray[np.bool_] = (x >= margin_px) & (x <= camera.width - 1 - margin_px)
    return inside & (y >= margin_px) & (y <= camera.height - 1 - margin_px)


def _end_rows(rig: Ends, camera: Camera, frame_s: Floats, margin_px: float) -> list[Row]:
    px, t = truth_pixels(camera, rig.end, frame_s)
    place, speed = rig.end(t), np.linalg.norm(rig.end_velocity(t), axis=-1)
    over = rig.over(t)
    seen = _within(px, margin_px, camera) & ~over
    rows: list[Row] = []
    for i, start in enumerate(frame_s.tolist()):
        row: Row = {"frame": i, "t_s": start}
        if seen[i]:
            row |= {"end_t_s": t[i], "end_x_m": place[i, 0], "end_z_m": place[i, 2], "line_speed_mps": speed[i]}
        elif over[i]:
            row["flags"] = "over"
        else:
            row["flags"] = "end-out-of-picture"
        rows.append(row)
    return rows


def _arc_rows(rig: Arcs, camera: Camera, frame_s: Floats) -> list[Row]:
    px, t = truth_pixels(camera, lambda times: np.array([rig.apex(float(q)) for q in times]), frame_s, tolerance_s=1e-9)
    inside = _within(px, 0.0, camera)
    rows: list[Row] = []
    for i, when in enumerate(t.tolist()):
        row: Row = {"frame": i, "t_s": when, "line_speed_mps": rig.speed(when), "paid_out_m": rig.paid_out(when)}
        if inside[i]:
            x, _, z = rig.apex(when)
            row |= {"apex_x_m": x, "apex_z_m": z, "arc_width_m": rig.width(when)}
        else:
            row["flags"] = "apex-out-of-picture"
        rows.append(row)
    return rows


def text_of(rows: Sequence[Row]) -> str:
    """The table as CSV with seven decimals; what is not known is empty."""

    def cell(value: float | int | str | None) -> str:
        if value is None or isinstance(value, str):
            return value or ""
        if isinstance(value, int):
            return str(value)
        return "" if not np.isfinite(value) else f"{value:.7f}".replace("-0.0000000", "0.0000000")

    lines = [",".join(COLUMNS), *(",".join(cell(row.get(name)) for name in COLUMNS) for row in rows)]
    return "\n".join(lines) + "\n"


# --- headline ---------------------------------------------------------------------------------------------------------


def quadratic(t: Floats, z: Floats) -> float:
    """Downward acceleration [m/s^2] of the parabola that fits z(t) best, start place and start speed free."""
    return float(-2 * np.polynomial.Polynomial.fit(t - t.mean(), z, 2).convert().coef[2])


def headline(rig: Rig, rows: Sequence[Row], *, window_s: tuple[float, float], gravity_mps2: float) -> dict[str, Any]:
    """Headline truths in a window [s] of the rows' own times."""
    if isinstance(rig, Ends):
        return _of_end(rig, rows, window_s, gravity_mps2)
    return _of_run(rig, rows, window_s)


def _column(rows: Sequence[Row], name: str) -> Floats:
    return np.array([float(row.get(name, np.nan)) for row in rows])


def _of_end(rig: Ends, rows: Sequence[Row], window_s: tuple[float, float], gravity_mps2: float) -> dict[str, Any]:
    t, z = _column(rows, "end_t_s"), _column(rows, "end_z_m")
    within = (t >= window_s[0]) & (t <= window_s[1])
    acceleration = quadratic(t[within], z[within])
    fine = np.arange(rig.release_s, np.nanmax(t), 2e-5)
    speed = np.linalg.norm(rig.end_velocity(fine), axis=-1)
    width = max(1, round(1 / 120 / 2e-5))
    mean = np.convolve(speed, np.full(width, 1 / width), mode="valid") if speed.size > width else speed
    return {
        "release_s": rig.release_s,
        "window_s": list(window_s),
        "frames_in_window": int(within.sum()),
        "effective_acceleration_mps2": acceleration,
        "acceleration_ratio": acceleration / gravity_mps2,
        "peak_end_speed_mps": float(mean.max()),
        "peak_end_speed_instant_mps": float(speed.max()),
        "peak_speed_averaged_over_a_frame_mps": float(mean.max()),
        "end_point": "centre of the ball at the end",
    }


def _of_run(rig: Runs, rows: Sequence[Row], window_s: tuple[float, float]) -> dict[str, Any]:
    t = _column(rows, "t_s")
    within = (t >= window_s[0]) & (t <= window_s[1])
    found: dict[str, Any] = {
        "release_s": rig.release_s,
        "steady_window_s": list(window_s),
        "line_speed_mps": float(_column(rows, "line_speed_mps")[within].mean()),
        "length_paid_out_m": float(rows[-1]["paid_out_m"]),
    }
    if isinstance(rig, Arcs):
        z = _column(rows, "apex_z_m")
        found |= {
            "arc_height_m": float(np.nanmean(z[within])),
            "arc_height_drift_mps": float(np.polyfit(t[within], z[within], 1)[0]),
            "arc_width_m": float(np.nanmean(_column(rows, "arc_width_m")[within])),
            "length_paid_out_first_to_last_apex_m": float(rows[-1]["paid_out_m"]) - float(rows[0]["paid_out_m"]),
        }
    return found
