"""Find the reference board in a grey picture: corners to a fraction of a pixel, each with its place on the board.

A search for the pattern (OpenCV's checkerboard and ArUco finders) only has to say which corner is which. Their
places are then refined where the grey gradients around a corner all point at it (Foerstner & Guelch 1987, as in
`cv2.cornerSubPix`), in a window that stays inside the neighbouring squares, on an enlarged picture where the
squares are small. The finder of sectors alone (`findChessboardCornersSB`) is up to 0.14 px off on pictures with
known corners, refined it is 0.05 px.

The grid is told as the PICTURE sees the board: `grid[:, 0]` counts to the right, `grid[:, 1]` downwards, however
the board is turned, so a 9 x 6 board standing on its short side gives 6 across and 9 high.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any, Literal, cast

import cv2
import numpy as np
from numpy.typing import ArrayLike, NDArray

from calibration.notice import BadInput, CannotMeasure, Notice

__all__ = ["BoardFind", "BoardSpec", "combine", "find_board", "find_in_frames", "marks_board"]

Points = NDArray[np.float64]
Gray = NDArray[np.uint8]

U_CORNER_FLOOR_PX = 0.03  # no finder is trusted beyond this: its bias does not show in any residual
SMALLEST_SQUARE_PX = 10.0  # below it neighbouring corners blur into each other
SMALL_SQUARE_PX = 16.0
WORKING_SQUARE_PX = 40.0  # squares are enlarged to about this before they are refined
GAP = 0.4  # how far, in squares, a refining window may reach: beyond half a square neighbouring edges drag it


@dataclass(frozen=True, slots=True)
class BoardSpec:
    """What board to look for.

    Attributes
    ----------
    kind : {"checkerboard", "charuco", "marks"}
    inner_corners : (int, int)
        Columns and rows of inner corners, in either posture of the board.
    square_m : float
        Side of a square [m].
    dictionary : str, optional
        Name of the marker dictionary, as "DICT_5X5_100" (charuco).
    marker_m : float, optional
        Side of a marker [m] (charuco).
    marks_m : tuple of float
        Places of the marks along their line [m] (marks).
    marks_px : tuple of (float, float)
        Column and row of each mark [px] (marks).
    """

    kind: Literal["checkerboard", "charuco", "marks"] = "checkerboard"
    inner_corners: tuple[int, int] = (9, 6)
    square_m: float = 0.025
    dictionary: str | None = None
    marker_m: float | None = None
    marks_m: tuple[float, ...] = ()
    marks_px: tuple[tuple[float, float], ...] = ()

    def __post_init__(self) -> None:
        if self.kind == "marks":
            if len(self.marks_m) < 2 or len(self.marks_m) != len(self.marks_px):
                raise BadInput(
                    f"A board of kind marks needs two or more marks, found {len(self.marks_m)} marks_m "
                    f"and {len(self.marks_px)} marks_px.", "Give as many places in metres as points in pixels.")
            return
        columns, rows = self.inner_corners
        if min(columns, rows) < 3:
            raise BadInput(f"board.inner_corners is [{columns}, {rows}].",
                           "Give the inner corners, three or more each way: a board of 10 x 7 squares has [9, 6].")
        if not self.square_m > 0:
            raise BadInput(f"board.square_m is {self.square_m}.", "Give the side of a square in metres.")
        if self.kind == "charuco" and (self.dictionary is None or not 0 < (self.marker_m or 0) < self.square_m):
            raise BadInput(f"A charuco board has dictionary {self.dictionary!r} and marker_m {self.marker_m}.",
                           "Give the dictionary's name and the marker's side, smaller than the square's.")


@dataclass(frozen=True, slots=True, eq=False)
class BoardFind:
    """A board as found in a picture.

    Attributes
    ----------
    corners_px : (n, 2) array
        Column and row of each corner [px].
    grid : (n, 2) int array
        Its place on the board counted in squares, to the right and down as the picture sees it.
    points_m : (n, 2) array
        The same in metres, to the right and down, from the middle of what was found.
    u_px : float
        Standard uncertainty of one coordinate of one corner, independent of the others [px].
    notices : tuple of Notice
    along_line : bool
        True for marks: the scale is known along one line only.
    """

    corners_px: Points
    grid: NDArray[np.int_]
    points_m: Points
    u_px: float
    notices: tuple[Notice, ...] = ()
    along_line: bool = False
    frames: int = 1
    square_px: float = field(default=0.0)  # median distance of neighbouring corners

    def __post_init__(self) -> None:
        n = len(self.corners_px)
        for name, dtype in (("corners_px", float), ("grid", int), ("points_m", float)):
            value = np.array(getattr(self, name), dtype=dtype)
            if value.shape != (n, 2) or not np.isfinite(value).all():
                raise ValueError(f"BoardFind.{name}: expected ({n}, 2) finite numbers, got shape {value.shape}.")
            value.flags.writeable = False
            object.__setattr__(self, name, value)

    @property
    def shape(self) -> tuple[int, int]:
        """Corners across and high, as the picture sees the board."""
        across, high = np.ptp(self.grid, axis=0) + 1
        return int(across), int(high)


def find_board(gray: Gray, spec: BoardSpec, *, only_one: bool = True) -> BoardFind:
    """Find the board in one picture.

    Parameters
    ----------
    gray : (h, w) uint8 array
        The upright picture.
    spec : BoardSpec
        What to look for.
    only_one : bool
        Look for a second board of the same kind and refuse if there is one.

    Returns
    -------
    BoardFind

    Raises
    ------
    CannotMeasure
        The board is not in the picture, is too small, or there are two.
    """
    if spec.kind == "marks":
        return marks_board(spec)
    _check_picture(gray)
    if spec.kind == "charuco":
        pixels, cells = _search_charuco(gray, spec)
        partial = len(pixels) < spec.inner_corners[0] * spec.inner_corners[1]
        gap = 0.5 * (1 - (spec.marker_m or 0.0) / spec.square_m)
    else:
        pixels, cells, partial = _search_checkerboard(gray, spec)
        gap = GAP
    square_px = _square_px(pixels, cells)
    if square_px < SMALLEST_SQUARE_PX:
        raise CannotMeasure(
            f"The board's squares are {square_px:.1f} px in the picture; {SMALLEST_SQUARE_PX:.0f} px is the least.",
            "Go nearer, zoom in, or print larger squares.", "board-too-small")
    pixels = _refine(gray, pixels, cells, gap)
    pixels, cells, dropped = _without_outliers(*_as_the_picture_sees(pixels, cells))
    find = _judge(pixels, cells, spec, partial or dropped > 0)
    if only_one and spec.kind == "checkerboard":
        _refuse_second(gray, find, spec)
    return find


def find_in_frames(grays: Sequence[Gray], spec: BoardSpec) -> BoardFind:
    """Find the board in several pictures of one camera and combine them.

    The pattern is searched once and only refined in the other pictures, where the board has moved by less than
    a third of a square; a picture in which that fails is searched anew, and left out if the board is not in it.

    Parameters
    ----------
    grays : sequence of (h, w) uint8 arrays
    spec : BoardSpec

    Returns
    -------
    BoardFind
        In the frame of the first picture in which the board was found.

    Raises
    ------
    CannotMeasure
        The board is in none of them, or as `find_board`.
    """
    if spec.kind == "marks":
        return marks_board(spec)
    finds: list[BoardFind] = []
    reason: CannotMeasure | None = None
    misses = 0
    for gray in grays:
        try:
            find = _find_again(gray, finds[-1], spec) if finds else None
            if find is None and misses < 3:  # a full search that fails is slow
                find = find_board(gray, spec, only_one=not finds)
        except CannotMeasure as error:
            if error.code == "board-ambiguous":
                raise
            reason, find = error, None
            misses += 1
        if find is not None:
            finds.append(find)
    if not finds:
        raise reason or CannotMeasure("There is no picture to look for the board in.", "Give a clip with frames.")
    return combine(finds)


def combine(finds: Sequence[BoardFind]) -> BoardFind:
    """Combine the same board from several pictures of one camera.

    Where the camera moved between them (by more than 0.1 px) each find is first shifted onto the first one.

    Parameters
    ----------
    finds : sequence of BoardFind

    Returns
    -------
    BoardFind
        Median places of the corners seen in more than half of the pictures. `u_px` is what remains against a
        smooth map of the board, or the scatter over pictures, whichever is larger: the scatter of still pictures
        alone says nothing of the finder's bias.

    Raises
    ------
    CannotMeasure
        Nothing to combine.
    """
    if not finds:
        raise CannotMeasure("The board was found in no picture.", "Film the board, whole, sharp and lit.",
                            "board-not-found")
    first = finds[0]
    if len(finds) == 1 or first.along_line:
        return first
    cells = sorted({(int(i), int(j)) for find in finds for i, j in find.grid}, key=lambda cell: (cell[1], cell[0]))
    index = {cell: n for n, cell in enumerate(cells)}
    stack = np.full((len(finds), len(cells), 2), np.nan)
    for n, find in enumerate(finds):
        stack[n, [index[int(i), int(j)] for i, j in find.grid]] = find.corners_px
    seen = np.isfinite(stack[..., 0])
    keep = seen.sum(axis=0) > 0.5 * len(finds)
    stack, cells_kept = stack[:, keep], np.array(cells)[keep]
    if keep.sum() < 6:
        return first
    notices = {notice.code: notice for find in finds for notice in find.notices}
    shift = np.nanmedian(stack - np.nanmedian(stack, axis=0), axis=1)
    moved = float(np.sqrt((shift**2).sum(axis=1).mean()))
    if moved > 0.1:
        stack = stack - (shift - shift[0])[:, None]
    if moved > 0.5:
        notices["board-moved"] = Notice(
            "board-moved", f"The board, or the camera, moved by {moved:.1f} px RMS over {len(finds)} pictures.",
            "Its corners were shifted onto the first picture.", "Put the phone on a tripod.")
    places = np.nanmedian(stack, axis=0)
    scatter = 1.4826 * np.nanmedian(np.abs(stack - places))
    u_time = 1.2533 * float(scatter) / np.sqrt(len(finds))
    u_px = max(U_CORNER_FLOOR_PX, _roughness(places, cells_kept)[0], u_time)
    scale = _pitch_m(first)
    return replace(first, corners_px=places, grid=cells_kept, points_m=_centred(cells_kept) * scale, u_px=u_px,
                   notices=tuple(notices.values()), frames=len(finds), square_px=_square_px(places, cells_kept))


def marks_board(spec: BoardSpec, u_px: float = 1.0) -> BoardFind:
    """Marks pointed at by hand, on one line, as a board.

    Parameters
    ----------
    spec : BoardSpec
        With `marks_m` and `marks_px`.
    u_px : float
        Standard uncertainty of a pointed coordinate [px].

    Returns
    -------
    BoardFind
        With `along_line` true.

    Raises
    ------
    BadInput
        Two marks coincide, or the marks do not lie on one line in their stated order.
    """
    pixels, places = np.array(spec.marks_px, dtype=float), np.array(spec.marks_m, dtype=float)
    order = np.argsort(places)
    pixels, places = pixels[order], places[order]
    if (np.diff(places) <= 0).any():
        raise BadInput("Two marks have the same place in board.marks_m.", "Give each mark its own place in metres.")
    direction = pixels[-1] - pixels[0]
    length = float(np.hypot(*direction))
    if length < 50:
        raise BadInput(f"The marks span {length:.0f} px in the picture.",
                       "Use marks further apart: 50 px is the least, half of the picture is good.")
    direction = direction / length
    if ((along := pixels @ direction)[1:] <= along[:-1]).any():
        raise BadInput("The marks do not follow each other in the picture as they do in board.marks_m.",
                       "Check the order of marks_px.")
    # The places as the picture sees them: to the right or down, whichever is nearer.
    axis = int(abs(direction[1]) > abs(direction[0]))
    if direction[axis] < 0:
        pixels, places = pixels[::-1], -places[::-1]
    points_m = np.zeros((len(places), 2))
    points_m[:, axis] = places - places.mean()
    grid = np.zeros((len(places), 2), dtype=int)
    grid[:, axis] = np.arange(len(places))
    notice = Notice("scale-along-one-line", "The scale comes from marks along one line.",
                    "Across that line, and away from it, the scale is taken to be the same: a camera that is not "
                    "square to the plane of motion is not seen.", "Film a checkerboard in the plane of motion.")
    return BoardFind(pixels, grid, points_m, u_px, (notice,), True, 1, length / (len(places) - 1))


# --- the search ------------------------------------------------------------------------------------------------------


def _check_picture(gray: Gray) -> None:
    if gray.ndim != 2 or gray.dtype != np.uint8 or min(gray.shape) < 60:
        raise ValueError(f"gray: expected an upright (h, w) uint8 picture, got {gray.dtype} of shape {gray.shape}.")


def _cells(across: int, high: int) -> NDArray[np.int_]:
    rows, columns = np.mgrid[0:high, 0:across]
    return np.stack([columns.ravel(), rows.ravel()], axis=1)


def _views(gray: Gray) -> list[tuple[Gray, float]]:
    """Pictures to search in, quickest first, each with its enlargement."""
    even = cv2.createCLAHE(clipLimit=4.0, tileGridSize=(8, 8)).apply(gray)  # a board half in shadow
    views = [(_resized(gray, 0.5), 0.5)] if min(gray.shape) > 700 else []
    views += [(gray, 1.0), (cast(Gray, even), 1.0)]
    if max(gray.shape) <= 2000:
        views.append((_resized(gray, 2.0), 2.0))
    return views


def _resized(gray: Gray, factor: float) -> Gray:
    how = cv2.INTER_AREA if factor < 1 else cv2.INTER_CUBIC
    return cast(Gray, cv2.resize(gray, None, fx=factor, fy=factor, interpolation=how))


def _search_checkerboard(gray: Gray, spec: BoardSpec) -> tuple[Points, NDArray[np.int_], bool]:
    """Corners and their cells, in the finder's own posture; True where a part of the board is hidden."""
    size = spec.inner_corners
    plain = cv2.CALIB_CB_ADAPTIVE_THRESH | cv2.CALIB_CB_NORMALIZE_IMAGE | cv2.CALIB_CB_FAST_CHECK
    found, corners = cv2.findChessboardCorners(gray, size, flags=plain)  # milliseconds, where it works
    if found and _is_board(_unscaled(corners, 1.0), _cells(*size), 0.15):
        return _unscaled(corners, 1.0), _cells(*size), False
    views = _views(gray)
    quick, thorough = cv2.CALIB_CB_NORMALIZE_IMAGE, cv2.CALIB_CB_NORMALIZE_IMAGE | cv2.CALIB_CB_EXHAUSTIVE
    tries = [(picture, factor, flags) for flags in (quick, thorough) for picture, factor in views if factor <= 1]
    tries += [(picture, factor, quick) for picture, factor in views if factor > 1]
    for picture, factor, flags in tries:
        found, corners = cv2.findChessboardCornersSB(picture, size, flags=flags)
        if found and _is_board(pixels := _unscaled(corners, factor), _cells(*size), 0.15):
            return pixels, _cells(*size), False
    best = None
    for picture, factor in views:
        best = best or _largest_part(picture, factor)
    wanted = f"{size[0]} x {size[1]}"
    if best is not None:
        across, high = np.ptp(best[1], axis=0) + 1
        if sorted((across, high)) > sorted(size) and (max(across, high) > max(size) or min(across, high) > min(size)):
            raise CannotMeasure(
                f"A checkerboard with at least {across} x {high} inner corners was found; the sheet says {wanted}.",
                "Count the inner corners (one fewer than squares each way) and correct board.inner_corners.",
                "board-ambiguous")
        if across * high >= 0.3 * size[0] * size[1] and min(across, high) >= 3:
            return *best, True
    raise CannotMeasure(
        f"No checkerboard with {wanted} inner corners was found in the picture.",
        "Check board.inner_corners (one fewer than squares each way); show the whole board with a white margin, "
        "sharp, evenly lit, squares of 12 px or more, tilted by less than 40 degrees.", "board-not-found")


def _largest_part(picture: Gray, factor: float) -> tuple[Points, NDArray[np.int_]] | None:
    """The largest grid that grows from a small seed: a board that is partly hidden, or of another size."""
    best = None
    for seed in ((4, 4), (3, 3)):
        found, corners, meta = cv2.findChessboardCornersSBWithMeta(
            picture, seed, flags=cv2.CALIB_CB_NORMALIZE_IMAGE | cv2.CALIB_CB_EXHAUSTIVE | cv2.CALIB_CB_LARGER)
        if found:
            high, across = meta.shape[:2]
            pixels, cells = _unscaled(corners, factor), _cells(across, high)
            if _is_board(pixels, cells, 0.15) and (best is None or len(pixels) > len(best[0])):
                best = (pixels, cells)
    return best


def _search_charuco(gray: Gray, spec: BoardSpec) -> tuple[Points, NDArray[np.int_]]:
    columns, rows = spec.inner_corners
    name = str(spec.dictionary).upper()
    if not name.startswith("DICT_"):
        name = f"DICT_{name}"
    code = getattr(cv2.aruco, name, None)
    if not isinstance(code, int):
        raise BadInput(f"board.dictionary is {spec.dictionary!r}, which is no marker dictionary.",
                       "Write it as it was printed, for example DICT_5X5_100.")
    best: tuple[Points, NDArray[np.int_]] | None = None
    markers = 0
    for factor in (1.0, 2.0):
        picture = gray if factor == 1.0 else _resized(gray, factor)
        for size in {(columns + 1, rows + 1), (rows + 1, columns + 1)}:
            for older in (False, True):  # which of the two colours the first square has changed with OpenCV 4.6
                board = cv2.aruco.CharucoBoard(size, spec.square_m, float(spec.marker_m or 0),
                                               cv2.aruco.getPredefinedDictionary(code))
                board.setLegacyPattern(older)
                corners, ids, _, marker_ids = cv2.aruco.CharucoDetector(board).detectBoard(picture)
                markers = max(markers, 0 if marker_ids is None else len(marker_ids))
                if ids is None or len(ids) < 6:
                    continue
                numbers = np.asarray(ids).ravel()
                cells = np.stack([numbers % (size[0] - 1), numbers // (size[0] - 1)], axis=1).astype(int)
                pixels = _unscaled(corners, factor)
                if _is_board(pixels, cells, 0.15) and (best is None or len(pixels) > len(best[0])):
                    best = (pixels, cells)
        if best is not None and len(best[0]) > 0.5 * columns * rows:
            break
    if best is None or min(np.ptp(best[1], axis=0)) < 1:
        raise CannotMeasure(
            f"No charuco board with {columns} x {rows} inner corners of {name} was found: {markers} of its markers "
            "were read.", "Check inner_corners, dictionary, square_m and marker_m; show the board sharp, evenly lit, "
            "with squares of 20 px or more.", "board-not-found")
    return best


def _unscaled(pixels: ArrayLike, factor: float) -> Points:
    """(n, 2) from an enlarged picture back: pixel centres, not their edges, are whole numbers."""
    return (np.asarray(pixels, dtype=float).reshape(-1, 2) + 0.5) / factor - 0.5


def _homography(cells: NDArray[Any], pixels: Points) -> Points | None:
    matrix, _ = cv2.findHomography(cells.astype(float), pixels)
    return None if matrix is None else np.asarray(matrix, dtype=float)


def _is_board(pixels: Points, cells: NDArray[np.int_], share: float) -> bool:
    """Do the corners lie on a regular grid, within a share of a square?"""
    matrix = _homography(cells, pixels)
    if matrix is None:
        return False
    seen = cv2.perspectiveTransform(cells[None].astype(float), matrix)[0]
    return bool(np.hypot(*(seen - pixels).T).max() < share * _square_px(pixels, cells) + 1.0)


def _square_px(pixels: Points, cells: NDArray[np.int_]) -> float:
    """Median distance of neighbouring corners."""
    place = {(int(i), int(j)): p for (i, j), p in zip(cells, pixels, strict=True)}
    lengths = [float(np.hypot(*(place[i + 1, j] - p))) for (i, j), p in place.items() if (i + 1, j) in place]
    lengths += [float(np.hypot(*(place[i, j + 1] - p))) for (i, j), p in place.items() if (i, j + 1) in place]
    return float(np.median(lengths)) if lengths else 0.0


def _refine(gray: Gray, pixels: Points, cells: NDArray[np.int_], gap: float) -> Points:
    """Refine each corner in the largest window that, seen on the board, stays within `gap` squares of it.

    A window that reaches a neighbouring edge drags the corner along by a good part of a pixel, and on a tilted
    board that happens in one direction first: so the window is chosen corner by corner.
    """
    square_px = _square_px(pixels, cells)
    low = np.floor(pixels.min(axis=0) - square_px - 4).astype(int).clip(0)
    high = np.ceil(pixels.max(axis=0) + square_px + 5).astype(int)
    cut = np.ascontiguousarray(gray[low[1]:high[1], low[0]:high[0]])
    factor = float(np.clip(np.ceil(WORKING_SQUARE_PX / square_px), 1, 4)) if square_px < 24 else 1.0
    picture = cut if factor == 1.0 else _resized(cut, factor)
    halves = np.floor(gap * _reach_px(pixels, cells) * factor).clip(2, 12).astype(int)
    seeds = ((pixels - low + 0.5) * factor - 0.5).astype(np.float32).reshape(-1, 1, 2)
    refined = seeds.copy()
    stop = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 60, 1e-4)
    for half in np.unique(halves):
        these = halves == half
        refined[these] = cv2.cornerSubPix(picture, seeds[these].copy(), (int(half),) * 2, (-1, -1), stop)
    moved = np.hypot(*(refined - seeds).reshape(-1, 2).T)
    refined[moved > 0.3 * square_px * factor] = seeds[moved > 0.3 * square_px * factor]
    return np.asarray(_unscaled(refined.reshape(-1, 2), factor) + low, dtype=float)


def _reach_px(pixels: Points, cells: NDArray[np.int_]) -> NDArray[np.float64]:
    """Half side of the upright pixel window at each corner whose own corners lie one square away on the board."""
    matrix = _homography(cells, pixels)
    if matrix is None:
        return np.full(len(cells), _square_px(pixels, cells))
    at = np.c_[cells.astype(float), np.ones(len(cells))] @ matrix.T
    steps = (matrix[None, :2, :2] - (at[:, :2] / at[:, 2:])[..., None] * matrix[2, :2]) / at[:, 2, None, None]
    return np.asarray(1.0 / np.abs(np.linalg.inv(steps)).sum(axis=2).max(axis=1), dtype=float)


def _as_the_picture_sees(pixels: Points, cells: NDArray[np.int_]) -> tuple[Points, NDArray[np.int_]]:
    """Turn the grid by quarter turns until it counts to the right and down; order by row, then column."""
    middle = cells - cells.mean(axis=0)
    along, *_ = np.linalg.lstsq(np.c_[middle, np.ones(len(cells))], pixels, rcond=None)  # px per step of each index
    if abs(along[0, 0]) * abs(along[1, 1]) < abs(along[0, 1]) * abs(along[1, 0]):
        cells, along = cells[:, ::-1], along[[1, 0, 2]]
    signs = np.array([np.sign(along[0, 0]), np.sign(along[1, 1])]).astype(int)
    cells = cells * signs
    cells = cells - cells.min(axis=0)
    order = np.lexsort((cells[:, 0], cells[:, 1]))
    return pixels[order], cells[order]


def _centred(cells: NDArray[np.int_]) -> Points:
    return np.asarray(cells - 0.5 * (cells.min(axis=0) + cells.max(axis=0)), dtype=float)


def _pitch_m(find: BoardFind) -> float:
    wide = np.ptp(find.grid, axis=0).argmax()
    return float(np.ptp(find.points_m[:, wide]) / np.ptp(find.grid[:, wide]))


def _roughness(pixels: Points, cells: NDArray[np.int_]) -> tuple[float, float]:
    """What is left of the corners beside a smooth map of the grid, and beside a homography alone [px, one coordinate].

    The smooth map is the homography and a polynomial of the third degree, which takes up lens and bent sheet alike:
    what is left is the finder's own.
    """
    matrix = _homography(cells, pixels)
    if matrix is None:
        return np.inf, np.inf
    rest = pixels - cv2.perspectiveTransform(cells[None].astype(float), matrix)[0]
    n = len(pixels)
    plain = float(np.sqrt((rest**2).sum() / max(2 * n - 8, 1)))
    scale = np.abs(_centred(cells)).max(axis=0).clip(1)
    u, v = (_centred(cells) / scale).T
    basis = np.stack([u**i * v**j for i in range(4) for j in range(4 - i)], axis=1)
    if n < 24 or min(np.ptp(cells, axis=0)) < 3:
        return plain, plain
    rough = rest - basis @ np.linalg.lstsq(basis, rest, rcond=None)[0]
    return float(np.sqrt((rough**2).sum() / (2 * n - 20))), plain


def _rest(pixels: Points, cells: NDArray[np.int_], good: NDArray[np.bool_]) -> Points:
    """(n, 2), what is left of all corners beside a smooth map fitted to the good ones [px]."""
    matrix = _homography(cells[good], pixels[good])
    if matrix is None:
        return np.zeros_like(pixels)
    rest = pixels - cv2.perspectiveTransform(cells[None].astype(float), matrix)[0]
    u, v = (_centred(cells) / np.abs(_centred(cells)).max(axis=0).clip(1)).T
    basis = np.stack([np.ones_like(u), u, v, u * u, u * v, v * v], axis=1)
    return np.asarray(rest - basis @ np.linalg.lstsq(basis[good], rest[good], rcond=None)[0], dtype=float)


def _without_outliers(pixels: Points, cells: NDArray[np.int_]) -> tuple[Points, NDArray[np.int_], int]:
    """Leave out corners that something in front of the board has dragged away: at most a quarter of them."""
    good = np.ones(len(pixels), dtype=bool)
    if len(pixels) < 16:
        return pixels, cells, 0
    for _ in range(6):
        size = np.hypot(*_rest(pixels, cells, good).T)
        limit = max(5.0 * float(np.median(size[good])) / 1.1774, 0.3)
        kept = size < limit
        if (kept == good).all() or kept.sum() < 0.75 * len(pixels):
            break
        good = kept
    return pixels[good], cells[good], int((~good).sum())


def _judge(pixels: Points, cells: NDArray[np.int_], spec: BoardSpec, partial: bool) -> BoardFind:
    """Make the find, with its own uncertainty and what has to be said about it."""
    square_px = _square_px(pixels, cells)
    rough, _ = _roughness(pixels, cells)
    if rough > max(0.12 * square_px, 1.5):
        raise CannotMeasure(
            f"What was found does not lie on the grid of a board: its corners are {rough:.1f} px off.",
            "Check board.inner_corners, and show the board flat, sharp and unhidden.", "board-not-found")
    notices = []
    if square_px < SMALL_SQUARE_PX:
        notices.append(Notice("board-small", f"The board's squares are only {square_px:.0f} px in the picture.",
                              f"Its corners are good to {max(rough, U_CORNER_FLOOR_PX):.2f} px.",
                              "Go nearer, zoom in, or print larger squares."))
    if partial:
        notices.append(Notice("board-partly-hidden", f"Only {len(pixels)} inner corners of the "
                              f"{spec.inner_corners[0]} x {spec.inner_corners[1]} board were found clear.",
                              "The scale is from those.", "Keep the board clear of the line, the rig and the edge."))
    return BoardFind(pixels, cells, _centred(cells) * spec.square_m, max(rough, U_CORNER_FLOOR_PX), tuple(notices),
                     False, 1, square_px)


def _find_again(gray: Gray, before: BoardFind, spec: BoardSpec) -> BoardFind | None:
    """The board of the picture before, refined in this one; None where it is not there any more."""
    gap = GAP if spec.kind == "checkerboard" else 0.5 * (1 - (spec.marker_m or 0.0) / spec.square_m)
    pixels = _refine(gray, np.array(before.corners_px), before.grid, gap)
    moved = pixels - before.corners_px
    shift = np.median(moved, axis=0)
    if np.hypot(*shift) > 0.25 * before.square_px or np.abs(moved - shift).max() > max(0.08 * before.square_px, 1.0):
        return None
    rough, _ = _roughness(pixels, before.grid)
    if rough > max(2.5 * before.u_px, 0.15):
        return None
    return replace(before, corners_px=pixels, u_px=max(rough, U_CORNER_FLOOR_PX))


def _refuse_second(gray: Gray, find: BoardFind, spec: BoardSpec) -> None:
    """Two boards of the same kind: which of them is meant cannot be known."""
    rest = gray.copy()
    hull = cv2.convexHull(find.corners_px.astype(np.float32)).reshape(-1, 2)
    middle = hull.mean(axis=0)
    across, high = find.shape
    wider = middle + (hull - middle) * (1 + 3.0 / min(across, high))
    cv2.fillConvexPoly(rest, np.round(wider).astype(np.int32), int(np.median(gray)))
    factor = 1.0 if find.square_px < 20 else 0.5  # quick: a board too small for this is no rival
    found, corners = cv2.findChessboardCornersSB(_resized(rest, factor), spec.inner_corners, flags=cv2.CALIB_CB_NORMALIZE_IMAGE)
    if found and _is_board(pixels := _unscaled(corners, factor), _cells(*spec.inner_corners), 0.15):
        first, second = middle, pixels.mean(axis=0)
        raise CannotMeasure(
            f"There are two boards with {spec.inner_corners[0]} x {spec.inner_corners[1]} inner corners, at column "
            f"{first[0]:.0f}, row {first[1]:.0f} and at column {second[0]:.0f}, row {second[1]:.0f}.",
            "Leave one board in the picture.", "board-ambiguous")
