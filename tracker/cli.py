"""The command line: reads arguments, shows progress, prints answers. Everything else is done elsewhere.

Exit codes: 0 measured; 2 bad input; 3 the footage cannot carry the measurement. A failure is one sentence on stderr.
"""

import json
import os
import sys
import tempfile
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Annotated, Any

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

from calibration.notice import BadInput, CannotMeasure
from tracker.progress import Progress as Tell
from tracker.progress import silent

__all__ = ["app", "main"]

app = typer.Typer(
    name="linefall",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    help="Measure moving chains and cables in slow-motion phone footage.\n\n"
    "Film a rig run beside a printed board, write a run sheet beside the clip, and run: linefall measure run-07.toml\n\n"
    "Exit codes: 0 measured, 2 bad input, 3 the footage cannot carry the measurement.",
)


def _version() -> str:
    try:
        return version("linefall")
    except PackageNotFoundError:
        return "not installed"


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"linefall {_version()}")
        raise typer.Exit


@app.callback()
def _root(
    show: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Show the version.")
    ] = False,
) -> None:
    """Options of every command."""


@app.command()
def measure(
    sheets: Annotated[list[Path], typer.Argument(help="Run sheets (.toml), one a clip.", metavar="SHEET...")],
    out: Annotated[
        Path | None,
        typer.Option(
            help="Result folder; with several sheets, the folder that holds theirs. Default: <sheet>-results beside the sheet."
        ),
    ] = None,
    overlay: Annotated[
        bool, typer.Option("--overlay/--no-overlay", help="Write overlay.mp4, the clip with what was followed.")
    ] = True,
    replace: Annotated[
        bool, typer.Option("--replace", help="Replace a result folder that is there; without it, it is kept.")
    ] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="One line a run instead of the table.")] = False,
) -> None:
    """Measure runs: clip and run sheet in, result folder out.

    Each run sheet names its clip, board, datum and test (see the sample sheets). The result folder holds result.json,
    summary.csv, frames.csv, overlay.mp4, report.html and plots/, and is written whole or not at all.
    """
    _each(sheets, lambda sheet: _measure_one(sheet, _folder_for(sheet, out, len(sheets)), overlay, replace, quiet))


@app.command()
def clock(
    clip: Annotated[Path, typer.Argument(help="A clip as the phone recorded it.", metavar="CLIP")],
    as_json: Annotated[bool, typer.Option("--json", help="The audit as JSON.")] = False,
) -> None:
    """Say what a clip's time stamps are worth, and what to write into the run sheet.

    Slow motion is stored three ways: with true stamps, stretched (240 stored as 30), or ramped. The audit says which,
    where the true rate comes from, and what is missing. Exit code 3: the true rate of capture cannot be told from the file.
    """
    from tracker.audit import audit_clip

    audit = audit_clip(clip)
    print(json.dumps(audit.as_dict(), indent=1, allow_nan=False) if as_json else "\n".join(audit.lines()))
    if audit.refusal is not None:
        raise audit.refusal


@app.command()
def board(
    out: Annotated[Path, typer.Option(help="File to write: .pdf or .svg.")],
    paper: Annotated[str, typer.Option(help="A4, A3 or Letter.")] = "A4",
    square_mm: Annotated[float, typer.Option(help="Side of a square in millimetres.")] = 25.0,
    inner_corners: Annotated[str, typer.Option(help="Inner corners each way, one fewer than squares.")] = "9x6",
) -> None:
    """Draw a checkerboard to print, with a 100 mm bar to measure after printing.

    Glue it to a flat plate, stand it plumb beside the motion, and copy the lines printed on it into the run sheet.
    """
    from tracker.boardsheet import write_board

    try:
        columns, rows = (int(part) for part in inner_corners.lower().split("x"))
    except ValueError:
        raise BadInput(f"--inner-corners is {inner_corners!r}.", "Write columns x rows, as 9x6.") from None
    sheet = write_board(out, paper, square_mm, (columns, rows))
    print(f"Wrote {out}: squares of {sheet.square:g} mm on {paper}. Print at 100 % and measure the 100 mm bar.")


def _folder_for(sheet: Path, out: Path | None, how_many: int) -> Path:
    default = sheet.with_name(f"{sheet.stem}-results")
    if out is None:
        return default
    return out if how_many == 1 else out / default.name


def _measure_one(sheet: Path, folder: Path, overlay: bool, replace: bool, quiet: bool) -> None:
    from tracker.measure import measure_run  # heavy libraries load only when they are needed
    from tracker.report.folder import refuse_existing, write_folder
    from tracker.report.terminal import one_line, prediction_lines, result_table, warning_lines

    if not replace:
        refuse_existing(folder)
    with _progress(sheet.name) as tell:
        measured = measure_run(sheet, progress=tell)
        write_folder(
            measured.result,
            folder,
            frames=measured.frames,
            sample=measured.sample,
            overlay=overlay,
            progress=tell,
            replace=replace,
        )
    screen, errors = _console(sys.stdout), _console(sys.stderr)
    if quiet:
        screen.print(one_line(measured.result, folder), soft_wrap=True, highlight=False, markup=False)
        return
    screen.print(result_table(measured.result))
    for line in prediction_lines(measured.result):
        screen.print(line, soft_wrap=True, highlight=False, markup=False)
    for line in warning_lines(measured.result):
        errors.print(line, soft_wrap=True, highlight=False, markup=False)
    screen.print(f"Report: {folder / 'report.html'}", soft_wrap=True, highlight=False, markup=False)


def _console(stream: Any) -> Console:
    # A width for pipes and files that no table of ours exceeds; NO_COLOR is rich's own care.
    return Console(file=stream, width=None if stream.isatty() else 120)


@contextmanager
def _progress(name: str) -> Iterator[Tell]:
    """A bar with the time left on stderr where stderr is a terminal, nothing elsewhere."""
    if not sys.stderr.isatty():
        yield silent
        return
    columns = (
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        TextColumn("{task.percentage:>3.0f} %"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(name, total=None)

        def tell(stage: str, done: int, total: int) -> None:
            bar.update(task, description=f"{name}: {stage}", completed=done, total=total or None)

        yield tell


def _each(paths: list[Path], work: Callable[[Path], None]) -> None:
    """Do the work for every path; a failure is a sentence and the rest go on. Exits with the gravest code."""
    worst = 0
    for path in paths:
        try:
            work(path)
        except (BadInput, CannotMeasure) as fault:
            says = str(fault)
            print(says if says.startswith(path.name) else f"{path.name}: {says}", file=sys.stderr)
            worst = max(worst, 3 if isinstance(fault, CannotMeasure) else 2)
    if worst:
        raise typer.Exit(worst)


def main() -> None:
    """Entry point of the console script: never a traceback."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(encoding="utf-8", errors="replace")  # Windows consoles and the C locale
    try:
        app()
    except KeyboardInterrupt:
        print("Stopped; nothing half-written is left behind.", file=sys.stderr)
        raise SystemExit(130) from None
    except (BadInput, CannotMeasure) as fault:
        print(fault, file=sys.stderr)
        raise SystemExit(3 if isinstance(fault, CannotMeasure) else 2) from None
    except Exception as error:  # the last net: a fault of ours must still be one sentence
        handle, name = tempfile.mkstemp(prefix="linefall-fault-", suffix=".txt")
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write("".join(traceback.format_exception(error)))
        print(
            f"Linefall failed in a way it should not ({type(error).__name__}). Details for its makers are in {name}.",
            file=sys.stderr,
        )
        raise SystemExit(1) from None


if __name__ == "__main__":
    main()
