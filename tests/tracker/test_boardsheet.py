"""The board to print: exact to the millimetre, found by our own finder, refused where it does not fit."""

import re

import numpy as np
import pytest

from calibration.board import BoardSpec, find_board
from calibration.notice import BadInput
from tests.tracker.test_cli import linefall, one_sentence
from tracker.boardsheet import PAPERS, lay_out, write_board

DPI = 100


def rastered(sheet):
    """The page as a grey picture, drawn from its list of squares."""
    scale = DPI / 25.4
    page = np.full((round(sheet.paper[1] * scale), round(sheet.paper[0] * scale)), 255, np.uint8)
    for x, y in sheet.dark:
        rows = slice(round((sheet.paper[1] - y - sheet.square) * scale), round((sheet.paper[1] - y) * scale))
        page[rows, round(x * scale) : round((x + sheet.square) * scale)] = 20
    return page


@pytest.mark.parametrize(("paper", "square"), [("A4", 25.0), ("A3", 35.0), ("Letter", 22.0)])
def test_the_page_is_found_as_the_board_it_says(paper, square):
    sheet = lay_out(paper, square, (9, 6))
    found = find_board(rastered(sheet), BoardSpec(inner_corners=(9, 6), square_m=square / 1000))
    assert len(found.corners_px) == 54
    assert found.square_px / DPI * 25.4 == pytest.approx(square, rel=0.005)


def test_the_svg_holds_squares_and_bar_in_millimetres(tmp_path):
    write_board(tmp_path / "board.svg", "A4", 25.0)
    text = (tmp_path / "board.svg").read_text(encoding="utf-8")
    width, height = (float(v) for v in re.search(r'viewBox="0 0 ([0-9.]+) ([0-9.]+)"', text).groups())
    assert width / 72 * 25.4 == pytest.approx(PAPERS["A4"][0], abs=0.01)
    assert height / 72 * 25.4 == pytest.approx(PAPERS["A4"][1], abs=0.01)
    sides = []
    for d in re.findall(r'd="(M [^"]+)"', text):
        x = np.array(re.findall(r"[ML] ([0-9.]+) ([0-9.]+)", d), float)
        sides.append(tuple(np.round(np.ptp(x, axis=0) / 72 * 25.4, 3)))
    assert sides.count((25.0, 25.0)) == 35  # of 10 x 7 squares half are dark
    assert (100.0, 2.0) in sides
    assert "square_m = 0.025" in text


def test_the_command_writes_a_pdf_and_refuses_what_does_not_fit(tmp_path):
    run = linefall("board", "--out", tmp_path / "board.pdf")
    assert run.returncode == 0, run.stderr
    assert (tmp_path / "board.pdf").read_bytes().startswith(b"%PDF")
    one_sentence(linefall("board", "--square-mm", "60", "--out", tmp_path / "b.pdf"), 2, "do not fit on A4", "Squares of up to")
    one_sentence(linefall("board", "--out", tmp_path / "b.png"), 2, ".pdf or .svg")
    with pytest.raises(BadInput, match="A4, A3, Letter"):
        lay_out("B5", 20, (9, 6))
