"""What the terminal shows, at a fixed width."""

import dataclasses
import io
from pathlib import Path

from rich.console import Console

from tracker.report.__main__ import main
from tracker.report.demo import demo
from tracker.report.terminal import one_line, prediction_lines, result_table, warning_lines


def shown(result: object, width: int = 80) -> str:
    console = Console(file=io.StringIO(), width=width, color_system=None)
    console.print(result_table(result))  # type: ignore[arg-type]
    return console.file.getvalue()  # type: ignore[attr-defined]


def test_quiet_success_is_one_line() -> None:
    assert one_line(demo("payout").result, Path("run-07-results")) == (
        "harrow-point-payout.toml: arc height above the rim 0.2137 m ± 0.0047 m (k = 2.0), "
        + str(Path("run-07-results") / "report.html")
    )
    nothing = dataclasses.replace(demo("payout", frames=12).result, quantities={})
    assert "nothing could be measured" in one_line(nothing, Path("r"))


def test_the_table_fits_eighty_columns_and_cuts_no_number() -> None:
    text = shown(demo("payout").result)
    assert max(len(row.rstrip()) for row in text.splitlines()) <= 80
    rows = [row.split() for row in text.splitlines()]
    assert ["pick-up", "coefficient", "0.2130", "0.1985", "to", "0.2225", "0.747", "to", "0.966"] in rows
    assert ["line", "speed", "3.297", "±", "0.033", "m/s", "2.0", "0.747", "to", "0.966"] in rows


def test_a_name_from_a_sheet_is_no_markup() -> None:
    made = demo("payout", frames=12).result
    sheet = {**made.sheet, "test": {"batch": "[red]", "specimen": "[/]"}}
    assert "[red] [/]" in shown(dataclasses.replace(made, sheet=sheet))


def test_warnings_are_sentences() -> None:
    lines = warning_lines(demo("payout", frames=24).result)
    assert lines[1] == (
        "Warning: The bead texture aliases from 0.58 m/s on. Line speed rests on the marks alone. "
        "Put marks on the line every 0.3 m, or film at 480 frames a second."
    )


def test_the_demo_command_writes_a_folder_and_says_where(tmp_path: Path, capsys: object) -> None:
    assert main([str(tmp_path / "d"), "--kind", "payout", "--frames", "12"]) == 0
    assert (tmp_path / "d" / "report.html").stat().st_size > 50_000
    assert main([str(tmp_path / "d"), "--kind", "payout", "--frames", "12"]) == 2
    out, err = capsys.readouterr()  # type: ignore[attr-defined]
    assert out.strip() == str(tmp_path / "d" / "report.html") and "exists already and is kept" in err


def test_what_the_laws_say_stands_below_the_table() -> None:
    lines = prediction_lines(demo("surface-drop", frames=24).result)
    assert lines
    assert all(line.startswith("By ") and "None" not in line for line in lines)
