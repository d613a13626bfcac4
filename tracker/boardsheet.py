"""The printed reference board, drawn to the millimetre: a page as PDF or SVG, the work of ``linefall board``.

Everything is a rectangle in millimetres on the page; matplotlib writes it as vectors. A bar of 100 mm is printed beside
the pattern, because printers scale: measured after printing, it tells what the squares really are.
"""

from dataclasses import dataclass
from pathlib import Path

from matplotlib import rc_context
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from calibration.notice import BadInput

__all__ = ["PAPERS", "BoardSheet", "lay_out", "write_board"]

PAPERS = {
    "A4": (210.0, 297.0),
    "A3": (297.0, 420.0),
    "Letter": (215.9, 279.4),
}  # width and height [mm], ISO 216 and ANSI
MARGIN_MM = 8.0
FOOT_MM = 30.0  # for the bar and the words
BAR_MM = 100.0
MM = 1 / 25.4  # in inches


@dataclass(frozen=True, slots=True)
class BoardSheet:
    """A checkerboard laid out on a page; all in mm from the page's lower left corner."""

    paper: tuple[float, float]
    square: float
    inner_corners: tuple[int, int]  # columns and rows as they stand on the page
    corner: tuple[float, float]  # lower left of the pattern

    @property
    def dark(self) -> list[tuple[float, float]]:
        """Lower left corners of the dark squares."""
        columns, rows = self.inner_corners[0] + 1, self.inner_corners[1] + 1
        x, y = self.corner
        return [
            (x + self.square * i, y + self.square * j) for j in range(rows) for i in range(columns) if (i + j) % 2 == 0
        ]


def lay_out(paper: str, square_mm: float, inner_corners: tuple[int, int]) -> BoardSheet:
    """Place a checkerboard on a page, standing on whichever side fits.

    Parameters
    ----------
    paper : str
        "A4", "A3" or "Letter".
    square_mm : float
    inner_corners : (int, int)

    Returns
    -------
    BoardSheet

    Raises
    ------
    BadInput
        Unknown paper, or a pattern that does not fit; the sentence says what would.
    """
    if paper not in PAPERS:
        raise BadInput(f"--paper is {paper!r}.", f"Use one of {', '.join(PAPERS)}.")
    if min(inner_corners) < 3 or not square_mm > 0:
        raise BadInput(
            f"--inner-corners is {inner_corners[0]}x{inner_corners[1]} with squares of {square_mm:g} mm.",
            "Give three or more each way.",
        )
    width, height = PAPERS[paper]
    room = (width - 2 * MARGIN_MM, height - 2 * MARGIN_MM - FOOT_MM)
    for columns, rows in (tuple(sorted(inner_corners)), tuple(sorted(inner_corners, reverse=True))):
        across, up = square_mm * (columns + 1), square_mm * (rows + 1)
        if across <= room[0] and up <= room[1]:
            return BoardSheet(
                (width, height),
                square_mm,
                (columns, rows),
                ((width - across) / 2, MARGIN_MM + FOOT_MM + (room[1] - up) / 2),
            )
    few, many = sorted(inner_corners)
    largest = min(room[0] / (few + 1), room[1] / (many + 1))
    raise BadInput(
        f"{inner_corners[0]} x {inner_corners[1]} inner corners with squares of {square_mm:g} mm do not fit on {paper}.",
        f"Squares of up to {int(largest * 2) / 2:g} mm do; or take a larger paper.",
    )


def write_board(
    out: Path, paper: str = "A4", square_mm: float = 25.0, inner_corners: tuple[int, int] = (9, 6)
) -> BoardSheet:
    """Write a board as PDF or SVG.

    Parameters
    ----------
    out : Path
        Its ending says the format.
    paper, square_mm, inner_corners
        See `lay_out`.

    Returns
    -------
    BoardSheet

    Raises
    ------
    BadInput
        Neither .pdf nor .svg, a pattern that does not fit, or a file that cannot be written.
    """
    if out.suffix.lower() not in (".pdf", ".svg"):
        raise BadInput(f"--out is {out.name}.", "Name a .pdf or .svg file.")
    sheet = lay_out(paper, square_mm, inner_corners)
    width, height = sheet.paper
    figure = Figure(figsize=(width * MM, height * MM))
    axes = figure.add_axes((0, 0, 1, 1))
    axes.set_xlim(0, width)
    axes.set_ylim(0, height)
    axes.set_axis_off()
    for x, y in sheet.dark:
        axes.add_patch(Rectangle((x, y), sheet.square, sheet.square, facecolor="black", linewidth=0))
    _foot(axes, sheet)
    try:
        with rc_context({"svg.fonttype": "none", "svg.hashsalt": "linefall", "pdf.fonttype": 42}):
            figure.savefig(
                out,
                format=out.suffix[1:].lower(),
                metadata={"Date": None} if out.suffix.lower() == ".svg" else {"CreationDate": None},
            )
    except OSError as error:
        raise BadInput(f"{out} cannot be written: {error.strerror}.", "Name another file with --out.") from None
    return sheet


def _foot(axes: object, sheet: BoardSheet) -> None:
    """The check bar and what to do with it."""
    left = (sheet.paper[0] - BAR_MM) / 2
    add, text = axes.add_patch, axes.text  # type: ignore[attr-defined]
    add(Rectangle((left, MARGIN_MM + 18), BAR_MM, 2, facecolor="black", linewidth=0))
    for end in (left, left + BAR_MM - 0.4):
        add(Rectangle((end, MARGIN_MM + 15.5), 0.4, 7, facecolor="black", linewidth=0))
    columns, rows = sheet.inner_corners
    metres = sheet.square / 1000
    words = (
        "Print at 100 %, without scaling. Then measure this bar of 100 mm from outer edge to outer edge:",
        f"square_m = {metres:g} x (what you measured in mm) / 100.  Glue the sheet to a flat plate; stand it plumb.",
        f'[board]  kind = "checkerboard"  inner_corners = [{max(columns, rows)}, {min(columns, rows)}]  square_m = {metres:g}',
    )
    for line, row in zip(words, (12, 7.5, 3), strict=True):
        text(sheet.paper[0] / 2, MARGIN_MM + row, line, ha="center", va="center", fontsize=8.5)
