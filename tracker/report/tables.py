"""frames.csv, summary.csv and result.json: what other programs read, at full precision.

The CSV files follow RFC 4180: comma, CRLF, quotes doubled, the same number of fields in every row; a field is empty
where nothing was measured. A text field that a spreadsheet would run as a formula gets an apostrophe in front (OWASP
ASVS 1.2.10); numbers are left alone. result.json is strict JSON; `stored.py` reads it back.
"""

import csv
import io
import math
import os
import re
from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np

from calibration.notice import Notice
from tracker.analysis.quantity import BudgetLine, Quantity
from tracker.report.names import quantities_of
from tracker.report.plain import as_json, sha256_of
from tracker.result import FRAME_COLUMNS, Prediction, Result

__all__ = ["FORMAT", "FORMAT_VERSION", "LIBRARIES", "document", "flag_text", "frames_csv", "result_json", "safe_text", "software",
           "summary_csv", "summary_row", "written_at"]  # fmt: skip

FORMAT = "linefall-result"
FORMAT_VERSION = 1
LIBRARIES = ("numpy", "scipy", "opencv-python", "av", "pandas", "matplotlib", "statsmodels", "pydantic")
"""Libraries that can move a figure; their versions stand in every result."""

_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n", "\0", "＝", "＋", "－", "＠")
_PLAIN_NUMBER = re.compile(r"[+-]?\d+(\.\d+)?([eE][+-]?\d+)?", re.ASCII)


def frames_csv(result: Result) -> str:
    """Text of frames.csv: the columns of the contract in their order, empty where not measured.

    Parameters
    ----------
    result : Result

    Returns
    -------
    str
        With CRLF line ends; write it with ``newline=""``.
    """
    table = result.frames
    columns = [_cells(table.get(name), name, len(table)) for name in FRAME_COLUMNS]
    return _csv(FRAME_COLUMNS, zip(*columns, strict=True))


def summary_row(result: Result) -> dict[str, Any]:
    """The one row of summary.csv: who, what, and value, u, U (95 %) and k of every quantity.

    The columns are those of the test kind whether measured or not, so that rows of one kind stack.
    """
    test = result.sheet.get("test", {})
    row: dict[str, Any] = {
        "batch": test.get("batch"), "specimen": test.get("specimen"), "kind": result.kind, "sheet": result.sheet_path.name,
        "clip": result.clip_path.name, "clip_sha256": result.clip_sha256,
    }  # fmt: skip
    known = quantities_of(result.kind)
    for name in (*known, *(extra for extra in result.quantities if extra not in known)):
        quantity = result.quantities.get(name)
        row[name] = None if quantity is None else quantity.value
        row[f"u_{name}"] = None if quantity is None else quantity.u
        row[f"U95_{name}"] = None if quantity is None else quantity.U
        row[f"k_{name}"] = None if quantity is None else quantity.k
    row["warnings"] = " ".join(dict.fromkeys(notice.code for notice in result.warnings))
    row["linefall_version"] = software()["linefall"]
    return row


def summary_csv(result: Result) -> str:
    """Text of summary.csv: header and one row."""
    row = summary_row(result)
    return _csv(tuple(row), [[_cell(value) for value in row.values()]])


def safe_text(text: str) -> str:
    """Text that no spreadsheet runs as a formula: an apostrophe goes in front where one would.

    A plain number stays as it is: -1.2 is no formula.
    """
    return f"'{text}" if text.startswith(_FORMULA_STARTS) and not _PLAIN_NUMBER.fullmatch(text) else text


def software() -> dict[str, str]:
    """Versions of Linefall and of the libraries that can move a figure."""
    return {name: _version(name) for name in ("linefall", *LIBRARIES)}


def written_at() -> str:
    """UTC time of writing as RFC 3339; SOURCE_DATE_EPOCH fixes it where a result must be the same to the byte."""
    epoch = os.environ.get("SOURCE_DATE_EPOCH", "")
    moment = datetime.fromtimestamp(int(epoch), UTC) if epoch.isdigit() else datetime.now(UTC)
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


def document(result: Result, folder: Path, files: Mapping[str, str] | None = None) -> dict[str, Any]:
    """Everything that is known of a run, as it stands in result.json.

    Parameters
    ----------
    result : Result
    folder : Path
        Where the result folder will stand; paths are given relative to it, so that a bench's folder can move whole.
    files : mapping of str to str, optional
        SHA-256 of the other files in the folder.

    Returns
    -------
    dict
        Not yet plain: `plain.as_json` makes it so.
    """
    return {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "written_at": written_at(),
        "software": software(),
        "kind": result.kind,
        "batch": result.sheet.get("test", {}).get("batch"),
        "specimen": result.sheet.get("test", {}).get("specimen"),
        "inputs": {
            "clip": _input(result.clip_path, folder, result.clip_sha256),
            "sheet": _input(result.sheet_path, folder, sha256_of(result.sheet_path)),
        },
        "settings": result.sheet,
        "defaults_used": result.defaults,
        "hand_edits": list(result.edits),
        "results": {name: _quantity(quantity) for name, quantity in result.quantities.items()},
        "predictions": [_prediction(item) for item in result.predictions],
        "warnings": [_notice(notice) for notice in result.warnings],
        "clock": result.clock,
        "plane": result.plane,
        "clip": result.clip,
        "scale_px_per_m": result.scale_px_per_m,
        "origin_px": result.origin_px,
        "model_curves": result.model_curves,
        "files": dict(files or {}),
    }


def result_json(result: Result, folder: Path, files: Mapping[str, str] | None = None) -> str:
    """Text of result.json; arguments as `document`."""
    return as_json(document(result, folder, files))


def _input(path: Path, folder: Path, sha256: str | None) -> dict[str, Any]:
    return {"file": path.name, "path": _relative(path, folder), "sha256": sha256}


def _relative(path: Path, folder: Path) -> str:
    try:
        return Path(os.path.relpath(path.absolute(), folder.absolute())).as_posix()
    except ValueError:  # another drive of Windows
        return path.absolute().as_posix()


def _quantity(quantity: Quantity) -> dict[str, Any]:
    contract = {
        "value": quantity.value, "unit": quantity.unit, "u": quantity.u, "U": quantity.U, "k": quantity.k,
        "dof": quantity.dof,  # null: infinite
        "interval": quantity.interval, "u_run": quantity.u_run, "window_s": quantity.window_s,
        "definition": quantity.definition, "budget": [_budget_line(line) for line in quantity.budget],
    }  # fmt: skip
    return {**{key: value for key, value in quantity.extra.items() if key not in contract}, **contract}


def _budget_line(line: BudgetLine) -> dict[str, Any]:
    return {
        "source": line.source, "id": line.id, "u": line.u, "unit": line.unit, "c": line.c, "kind": line.kind,
        "dof": line.dof,  # null: infinite
        "shared": line.shared,
    }  # fmt: skip


def _prediction(item: Prediction) -> dict[str, Any]:
    return {
        "name": item.name, "law": item.law, "value": item.value, "u": item.u, "unit": item.unit,
        "difference": item.difference, "u_difference": item.u_difference, "says": item.says,
    }  # fmt: skip


def _notice(notice: Notice) -> dict[str, str]:
    return {"code": notice.code, "says": notice.says, "damage": notice.damage, "remedy": notice.remedy}


def _version(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:
        return "from source"


def _cells(column: Any, name: str, rows: int) -> list[str]:
    if column is None:
        return [""] * rows
    if name == "flags":
        return [safe_text(flag_text(cell)) for cell in column]
    if name == "frame":
        return [str(int(cell)) for cell in column]
    return [_cell(float(cell)) for cell in np.asarray(column, dtype=float)]


def flag_text(cell: Any) -> str:
    """Flags of one frame as words separated by spaces; the table may hold text, a list, or nothing."""
    if cell is None or (isinstance(cell, float) and math.isnan(cell)):
        return ""
    return cell if isinstance(cell, str) else " ".join(str(flag) for flag in cell)


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float | np.integer | np.floating):
        number = float(value)
        if not math.isfinite(number):
            return ""
        return str(int(value)) if isinstance(value, int | np.integer) else repr(number)
    return safe_text(str(value))


def _csv(header: Iterable[str], rows: Iterable[Iterable[str]]) -> str:
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\r\n")
    writer.writerow(header)
    writer.writerows(rows)
    return text.getvalue()
