"""The data dictionary says what the program writes."""

from pathlib import Path

from tracker.report.demo import demo
from tracker.report.dictionary import BUDGET_KEYS, FILES, JSON_KEYS, PAGE, QUANTITY_KEYS, markdown
from tracker.report.folder import write_folder
from tracker.report.tables import document, summary_row
from tracker.result import FRAME_COLUMNS


def test_the_page_is_current() -> None:
    assert PAGE.read_text(encoding="utf-8") == markdown(), "run python -m tracker.report.dictionary"


def test_every_key_that_is_written_is_told_and_no_other(tmp_path: Path) -> None:
    made = demo("payout", frames=12, size=(90, 160))
    content = document(made.result, tmp_path)
    assert set(content) == set(JSON_KEYS)
    width = content["results"]["arc_width_m"]
    assert set(width) == set(QUANTITY_KEYS) and set(width["budget"][0]) == set(BUDGET_KEYS)
    out = write_folder(made.result, tmp_path / "r", frames=made.frames)
    assert {path.name + ("/" if path.is_dir() else "") for path in out.iterdir()} == set(FILES)


def test_every_column_and_quantity_is_told() -> None:
    page = markdown()
    row = summary_row(demo("payout", frames=12, size=(90, 160)).result)
    for name in (*FRAME_COLUMNS, "batch", "specimen", "clip_sha256", *(name for name in row if not name.startswith(("u_", "U95_", "k_")))):
        assert name in page, name
