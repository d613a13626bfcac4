"""What the terminal shows of a result: one line, or a small table and the warnings as sentences."""

from pathlib import Path

from rich.box import SIMPLE
from rich.table import Table
from rich.text import Text

from tracker.report.figures import columns, is_lopsided, k_text, line, with_unit
from tracker.report.names import name_of, show_unit
from tracker.report.wording import compact
from tracker.result import Result

__all__ = ["one_line", "prediction_lines", "result_table", "warning_lines"]


def one_line(result: Result, folder: Path) -> str:
    """Quiet success: run, headline quantity with U and k, where the report is."""
    report = folder / "report.html"
    for name, quantity in result.quantities.items():  # the headline stands first
        return f"{result.sheet_path.name}: {line(name, quantity)}, {report}"
    return f"{result.sheet_path.name}: nothing could be measured, {report}"


def result_table(result: Result) -> Table:
    """Quantities of a run with U, k and window, in order of importance."""
    table = Table(title=Text(_title(result)), title_justify="left", title_style="bold", header_style="bold", box=SIMPLE)
    table.add_column("quantity", min_width=20)
    table.add_column("value", justify="right", no_wrap=True)
    table.add_column("± U or interval", justify="right", no_wrap=True)
    table.add_column("unit", no_wrap=True)
    table.add_column("k", justify="right", no_wrap=True)
    table.add_column("window / s", justify="right", no_wrap=True)
    for name, quantity in result.quantities.items():
        value, spread = columns(quantity)
        window = "" if quantity.window_s is None else "{:.3f} to {:.3f}".format(*quantity.window_s)
        even = bool(spread) and not is_lopsided(quantity)
        k = k_text(quantity.k) if even else ""
        spread = f"± {spread}" if even else spread
        table.add_row(Text(name_of(name, quantity.unit).label), value, spread, show_unit(quantity.unit), k, window)
    return table


def prediction_lines(result: Result) -> list[str]:
    """What each law says, and how the measured value stands to it."""
    lines = []
    for one in result.predictions:
        value = with_unit(compact(one.value, 5), one.unit)
        lines.append(f"By {one.law}: {name_of(one.name, one.unit).label} {value}. {one.says}")
    return lines


def warning_lines(result: Result) -> list[str]:
    """Each warning as one sentence for stderr."""
    return [f"Warning: {notice.sentence()}" for notice in result.warnings]


def _title(result: Result) -> str:
    test = result.sheet.get("test", {})
    who = " ".join(str(test[key]) for key in ("batch", "specimen") if test.get(key))
    return f"{result.sheet_path.name}: {result.kind}" + (f", {who}" if who else "")
