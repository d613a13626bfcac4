"""The run sheet's manual, made from the program's own tables: ``python -m tracker.manual`` writes docs/run-sheet.md."""

from pathlib import Path

from tracker.defaults import DEFAULT_U, OUT_OF_PLANE_M
from tracker.sheet import Bench, bench_of, sections

__all__ = ["manual"]

MEANING = {
    "clip.file": "The clip, relative to the sheet.",
    "clip.window_s": "Which part of it, `[from, to]` in true seconds from the first frame. Absent: all of it.",
    "clock.capture_fps": "True rate of capture, frames per second. Absent: from the file's stamps or tag, and the result says which.",
    "clock.readout_s": "Time from the first to the last row of the picture as stored; negative where it scans the other way. Absent: "
    "anything up to a frame period of either sign, in U.",
    "clock.exposure_s": "Exposure of one row.",
    "board.kind": '`"checkerboard"`, `"charuco"` or `"marks"`.',
    "board.inner_corners": "Inner corners, `[columns, rows]`; the board may stand on either side.",
    "board.square_m": "Side of one square.",
    "board.marker_m": "Side of one marker (charuco).",
    "board.dictionary": 'Marker dictionary (charuco), as `"DICT_5X5_100"`.',
    "board.offset_m": "How far the board is BEHIND the plane of motion, seen from the camera. In front: negative.",
    "board.lean_deg": "The board's top leans away from the camera, against the plane of motion.",
    "board.yaw_deg": "The board's right side is turned away from the camera, against the plane of motion.",
    "board.file": "A clip of the board filmed in the plane of motion and taken away, the camera untouched.",
    "board.marks_m": "Places of marks along a line (marks).",
    "board.marks_px": "Their pixels, `[[column, row], ...]` (marks). The scale then holds along that line only.",
    "camera.lens": "A lens file from a lens calibration. Absent: what phone lenses may have is in U.",
    "camera.distance_m": "Lens to plane of motion, square to the plane.",
    "datum.origin_px": "Column and row, upright picture: the rim's middle in a payout, the release point in a drop.",
    "datum.origin_frame": "In which frame it was read.",
    "datum.floor_px": "A point of the floor below the motion, in the plane of motion. Else give `test.drop_height_m`.",
    "datum.vertical": '`"board"`: the board stands plumb. `"plumb"`: a plumb line is in the picture.',
    "datum.plumb_px": "Two pixels on the plumb line.",
    "line.kind": "Free text.",
    "line.pitch_m": "Repeat length of the line's texture: bead to bead.",
    "line.mark_spacing_m": "Distance of marks put on by hand.",
    "line.end_mark_m": "Diameter of a ball or tape at the free end; the end is then its centre.",
    "line.length_m": "Whole length of the line.",
    "line.mass_per_length_kg_per_m": "Mass per length.",
    "line.object_diameter_m": "Diameter of a dropped object, for drag.",
    "line.object_mass_kg": "Its mass.",
    "test.kind": "`payout`, `surface-drop`, `held-drop`, `edge-slide`, `free-drop` or `drawn`.",
    "test.drop_height_m": "Rim, or release point, to the floor.",
    "test.pile_depth_m": "Rim down to the pile at start and end, `[start, end]`: the payout laws count from the pile.",
    "test.landing_rise_m": "How far the landed heap rises.",
    "test.out_of_plane_m": "Half-range of the line towards or from the camera.",
    "test.batch": "Batch.",
    "test.specimen": "Specimen.",
    "site.gravity_mps2": "Local gravity.",
    "site.latitude_deg": "Geodetic latitude, where gravity is not given.",
    "site.height_m": "Height above the sea, with the latitude.",
    "site.drop_check": "Result folder of a free drop on the same station.",
}


def manual() -> str:
    """The manual as Markdown."""
    lines = [
        "# The run sheet",
        "",
        "<!-- made by: python -m tracker.manual -->",
        "A run sheet is a TOML file beside the clip. Units are SI and stand in the key. A key that is not listed here is an error",
        "that names the nearest known one. Any number may carry its standard uncertainty (k = 1) as `u_<key>` in the same table.",
        '`station = "bench-2.toml"` at the top pulls in a station sheet, a run sheet of what stays while the camera stays; the run',
        "sheet wins key by key.",
        "",
    ]
    for table, model in sections().items():
        lines += [f"## [{table}]", "", (model.__doc__ or "").splitlines()[0], "", "| key | meaning | a bench has |", "|---|---|---|"]
        for key in model.model_fields:
            if key != "uncertainties":
                lines.append(f"| `{key}` | {MEANING[f'{table}.{key}']} | {_range(bench_of(model, key))} |")
        lines.append("")
    lines += [
        "## [limits]",
        "",
        "`arc_height_m = { max = 0.45 }`: also `min`, `rule` (`guarded` or `simple`), `guard_r`, `applies_to` (`run`, `batch-mean`,",
        "`tolerance`), for any quantity of the result.",
        "",
        "## What is used where a `u_<key>` is absent",
        "",
        "Every one that a run used stands in its `result.json` under `defaults` and in its report.",
        "",
        "| key | standard uncertainty | why |",
        "|---|---|---|",
    ]
    for key, default in DEFAULT_U.items():
        amount = f"{100 * default.amount:g} % of the value" if default.relative else f"{default.amount:g} {default.unit}"
        lines.append(f"| `{key}` | {amount} | {default.why} |")
    others = ", ".join(f"{half:g} m for {kind}" for kind, half in OUT_OF_PLANE_M.items())
    lines += ["", f"`test.out_of_plane_m`, where absent: {others}, 0.01 m for the other kinds (half-range, rectangular).", ""]
    lines += [
        "## Exit codes",
        "",
        "| code | meaning |",
        "|---|---|",
        "| 0 | measured |",
        "| 2 | bad input: one sentence on stderr with file, key, what was found and what to do |",
        "| 3 | the footage cannot carry the measurement: what is missing, and how to shoot it again |",
        "",
    ]
    return "\n".join(lines)


def _range(bench: Bench | None) -> str:
    return "" if bench is None else f"{bench.low:g} to {bench.high:g}"


if __name__ == "__main__":
    path = Path(__file__).parents[1] / "docs" / "run-sheet.md"
    path.write_text(manual(), encoding="utf-8", newline="\n")
    print(f"Wrote {path.name}.")
