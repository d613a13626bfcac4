"""The data dictionary: every file, column and key of a result folder, from the tables the program itself uses.

``python -m tracker.report.dictionary`` writes docs/data-dictionary.md; a test holds the page against the program.
"""

import argparse
import sys
from collections.abc import Iterable, Sequence
from pathlib import Path

from tracker.report.names import COLUMNS, KIND_LABELS, QUANTITIES
from tracker.report.tables import FORMAT, FORMAT_VERSION

__all__ = ["BUDGET_KEYS", "JSON_KEYS", "QUANTITY_KEYS", "SUMMARY_COLUMNS", "main", "markdown"]

PAGE = Path(__file__).resolve().parents[2] / "docs" / "data-dictionary.md"

FILES = {
    "result.json": "Everything: inputs, settings, versions, hand edits, results with their budgets, predictions, warnings.",
    "summary.csv": "One row: who was measured and every quantity with u, U and k.",
    "frames.csv": "One row a frame: places, widths, speeds, flags.",
    "overlay.mp4": "The clip with what was followed drawn over it (H.264, plays in a browser). Not there with `--no-overlay`.",
    "report.html": "The report: one file, opens without network, prints on A4.",
    "plots/": "Each plot as SVG and PNG, and a few frames of the overlay as PNG.",
}

JSON_KEYS = {
    "format": f'`"{FORMAT}"`.',
    "format_version": f"Whole number, {FORMAT_VERSION} now. It rises when a key changes its meaning; all older ones are read.",
    "written_at": "UTC, RFC 3339. Fixed by the environment variable SOURCE_DATE_EPOCH where results must be the same to the byte.",
    "software": "Versions of Linefall and of the libraries that can move a figure.",
    "kind": "Kind of test: " + ", ".join(f"`{kind}`" for kind in KIND_LABELS) + ".",
    "batch": "From the sheet, or null.",
    "specimen": "From the sheet, or null.",
    "inputs": "`clip` and `sheet`, each with `file` (name), `path` (relative to the result folder) and `sha256`.",
    "settings": "The run sheet as it was used, station sheet merged in, SI units.",
    "defaults_used": "What the sheet left out: value used, its unit and why.",
    "hand_edits": "Points moved by hand: frame, point, reason, who.",
    "results": "One object a quantity, headline first; keys below.",
    "predictions": "What a law says: `name` of the quantity, `law`, `value`, `u`, `unit`, `difference` (measured minus predicted), "
    "`u_difference` (errors in common left out), `says`.",
    "warnings": "Each with `code` (stable), `says`, `damage`, `remedy`.",
    "clock": "How frames became seconds: rate, provenance, readout.",
    "plane": "How pixels became metres: scale, provenance, attitude, residual.",
    "clip": "What the file is: codec, size, turns, frames.",
    "scale_px_per_m": "Pixels a metre along the horizontal at the datum.",
    "origin_px": "Datum in the upright picture, column and row.",
    "model_curves": "Curves drawn in the plots: lists of [time in s, value].",
    "files": "SHA-256 of the other files in the folder.",
}

QUANTITY_KEYS = {
    "value": "Best estimate.",
    "unit": 'Its unit: m, m/s, m/s2, s, 1/s; "1" for a number.',
    "u": "Standard uncertainty (k = 1).",
    "U": "Expanded uncertainty for 95 % coverage; with a lopsided interval its longer arm.",
    "k": "Coverage factor: Student's t for `dof` (JCGM 100:2008, G.3.2).",
    "dof": "Effective degrees of freedom (Welch-Satterthwaite); null: infinite.",
    "interval": "[low, high] that covers 95 %; may lie unevenly about the value.",
    "u_run": "Standard uncertainty that another run on the same station does not share.",
    "window_s": "[from, to] in true seconds from the first frame, or null.",
    "definition": "The measurand in one sentence.",
    "budget": "List of independent sources, largest part first; keys below.",
}

BUDGET_KEYS = {
    "source": "The source in words.",
    "id": "Hash of the thing shared; empty where nothing is. Equal ids have the very same error, so a comparison can cancel it.",
    "u": "Standard uncertainty of the source, in `unit`.",
    "unit": "Unit of `u`.",
    "c": "Signed sensitivity: change of the quantity per change of the source. The part of the source is c u.",
    "kind": "A: from scatter; B: from other knowledge.",
    "dof": "Degrees of freedom of `u`; null: infinite.",
    "shared": "What else has this very error: `run` (nothing else), `station`, `board`, `lens`, `site`.",
}

SUMMARY_COLUMNS = {
    "batch, specimen": "From the sheet.",
    "kind": "Kind of test.",
    "sheet, clip": "File names.",
    "clip_sha256": "Hash of the clip.",
    "NAME": "Value of the quantity NAME (list below). The columns are those of the kind of test, measured or not, so that rows stack.",
    "u_NAME": "Standard uncertainty.",
    "U95_NAME": "Expanded uncertainty, 95 %.",
    "k_NAME": "Coverage factor.",
    "warnings": "Codes of the warnings, separated by spaces.",
    "linefall_version": "Version that wrote the row.",
}


def markdown() -> str:
    """The whole page as Markdown."""
    parts = [
        "# Data dictionary",
        "Written by `python -m tracker.report.dictionary`; do not edit by hand.",
        "A result folder is written whole or not at all. World frame: origin at the datum, x to the right, z up against gravity, "
        "metres, in the plane of motion. Times are true seconds; t = 0 is the mid-exposure of stored row 0 of the first frame.",
        "## Files", _table(("file", "what it holds"), ((f"`{name}`", text) for name, text in FILES.items())),
        "## Quantities",
        "Names in `result.json` `results` and in `summary.csv`.",
        _table(
            ("name", "symbol", "unit", "meaning", "tests"),
            ((f"`{name}`", words.symbol, words.unit, words.meaning, ", ".join(words.kinds)) for name, words in QUANTITIES.items()),
        ),
        "## frames.csv",
        "RFC 4180, UTF-8, decimal point, full precision. A field is empty where nothing was measured: nothing is guessed.",
        _table(("column", "unit", "meaning"), ((f"`{name}`", column.unit, column.meaning) for name, column in COLUMNS.items())),
        "## summary.csv",
        "As frames.csv, one row. A text that a spreadsheet would run as a formula has an apostrophe in front of it.",
        _table(("column", "meaning"), ((f"`{name}`", text) for name, text in SUMMARY_COLUMNS.items())),
        "## result.json",
        "Strict JSON (RFC 8259): a number that is not finite is null.",
        _table(("key", "meaning"), ((f"`{name}`", text) for name, text in JSON_KEYS.items())),
        "### Keys of a quantity",
        "A quantity may have more keys of its own, such as `at_z_m` of a lead or the window as l/L.",
        _table(("key", "meaning"), ((f"`{name}`", text) for name, text in QUANTITY_KEYS.items())),
        "### Keys of a budget line",
        _table(("key", "meaning"), ((f"`{name}`", text) for name, text in BUDGET_KEYS.items())),
    ]  # fmt: skip
    return "\n\n".join(parts) + "\n"


def main(arguments: Sequence[str] | None = None) -> int:
    """Write the page."""
    parser = argparse.ArgumentParser(prog="python -m tracker.report.dictionary", description=__doc__)
    parser.add_argument("--out", type=Path, default=PAGE)
    page = parser.parse_args(arguments).out
    page.parent.mkdir(parents=True, exist_ok=True)
    page.write_text(markdown(), encoding="utf-8", newline="\n")
    print(page)
    return 0


def _table(head: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    lines = [head, ["---"] * len(head), *rows]
    return "\n".join("| " + " | ".join(cell.replace("|", "\\|") for cell in line) + " |" for line in lines)


if __name__ == "__main__":
    sys.exit(main())
