"""Find a thin line in one frame from nothing: where it starts, how it runs, where it leaves the picture.

Pixels that differ from the still scene along a thin ridge are collected (a soft shadow is broad and weak beside
the line, and falls below the line's own contrast), pieces are joined over small gaps, and the two ends are the
pixels that lie farthest apart along the line. The start is the end near the rim.
"""

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components, dijkstra
from scipy.spatial import cKDTree

__all__ = ["Path", "find_path"]

_FINE, _BROAD = 1.2, 41  # px: sigma that joins beads into a line, box that takes the broad shadow out
_SHARES = (0.25, 0.4, 0.6)  # of the line's contrast, tried in turn
_MOST_PIECES = 60
_MOST_BRANCHES = 0.35  # share of the pixels found that may lie off the line, in its shadow or at an edge of the scene
_LINK_COST = 3.0  # a pixel of gap costs as much as three of line


@dataclass(frozen=True, slots=True, eq=False)
class Path:
    """A line found in one frame.

    Attributes
    ----------
    points_px : (n, 2) float64 array
        Column and row of its ridge, one to one and a half pixels apart, from the start to the exit.
    width_px : float
        Typical width of the pixels that stand out.
    contrast : float
        Ridge height typical of the line, in grey levels.
    """

    points_px: NDArray[np.float64]
    width_px: float
    contrast: float


def find_path(
    difference: NDArray[np.float32],
    noise: float,
    origin_px: tuple[float, float],
    up: tuple[float, float] = (0.0, -1.0),
    gap_px: float = 45.0,
    doubt: NDArray[np.float32] | None = None,
) -> Path | None:
    """Find the line in a difference picture.

    Parameters
    ----------
    difference : (h, w) float32 array
        Frame minus still scene [grey levels], of either sign.
    noise : float
        Its standard deviation.
    origin_px : (column, row)
        The rim, near which the line starts.
    up : (column, row) direction
        Unit vector against gravity in the picture.
    gap_px : float
        Pieces nearer than this are joined.
    doubt : (h, w) float32 array, optional
        Size of difference that the still scene alone may leave there, at its edges [grey levels].

    Returns
    -------
    Path or None
        None where nothing thin, long and begun near the rim stands out: nothing is invented.
    """
    size = np.abs(difference)
    if doubt is not None:
        size = np.maximum(size - doubt, 0.0)
    ridge = _ridge(size)
    best, most = None, 0.0
    for share in _SHARES:  # what a shadow or a reflection adds is below the line's own contrast
        path = _at_share(ridge, noise, share, np.asarray(origin_px, float), np.asarray(up, float), gap_px)
        if path is None:
            continue
        column, row = path.points_px.astype(np.intp).T
        along = float(ridge[row, column].clip(0, path.contrast).sum())
        if along > 1.05 * most:  # a higher share only where it finds more of the line
            best, most = path, along
    return best


def _at_share(
    ridge: NDArray[np.float32], noise: float, share: float, origin: NDArray[np.float64], up: NDArray[np.float64],
    gap_px: float,
) -> Path | None:  # fmt: skip
    """The best plausible line among the pixels above a share of the contrast."""
    found = _pieces(ridge, noise, share)
    if found is None:
        return None
    rows, columns, labels, contrast = found
    points = np.column_stack([columns, rows]).astype(np.float64)
    graph = _graph(rows, columns, labels, ridge.shape, gap_px)
    _, group = connected_components(graph, directed=False)
    best: Path | None = None
    for g in np.argsort(-np.bincount(group))[:3]:
        members = np.nonzero(group == g)[0]
        path = _longest(graph, members, points, ridge[rows, columns], contrast, origin)
        path = _cut_below_rim(path, points, origin, up)
        length = float(np.hypot(*np.diff(points[path], axis=0).T).sum()) if path.size > 1 else 0.0
        aside, _ = cKDTree(points[path]).query(points[members])
        width = 4.0 * float(np.median(aside)) + 1.0  # of evenly spread distances up to half the width
        if (aside > max(1.5 * width, 5.0)).mean() > _MOST_BRANCHES:
            continue
        if not _plausible(points[path], length, width, origin, ridge.shape):
            continue
        if best is None or path.size > best.points_px.shape[0]:
            best = Path(points[path], width, contrast)
    return best


def _ridge(size: NDArray[np.float32]) -> NDArray[np.float32]:
    fine = cv2.GaussianBlur(size, (0, 0), _FINE)
    return np.asarray(fine - cv2.blur(size, (_BROAD, _BROAD)), dtype=np.float32)


def _pieces(
    ridge: NDArray[np.float32], noise: float, share: float
) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.intp], float] | None:
    """Rows, columns and piece numbers of the pixels on the line, and the line's contrast."""
    floor = max(3.0 * noise, 2.0)  # the blur has brought the noise down to about a quarter
    strong = ridge > floor
    if strong.sum() < 40:
        return None
    contrast = float(np.percentile(ridge[strong], 90))
    mask = (ridge > max(floor, share * contrast)).astype(np.uint8)
    count, label, stats, _ = cv2.connectedComponentsWithStats(mask, connectivity=8)
    area = stats[:, cv2.CC_STAT_AREA].copy()
    area[0] = 0
    keep = np.argsort(-area)[:_MOST_PIECES]
    keep = keep[area[keep] >= max(12, 0.002 * area.sum())]
    number = np.full(count, -1)
    number[keep] = np.arange(keep.size)
    rows, columns = np.nonzero(number[label] >= 0)
    if rows.size < 40 or rows.size > 0.05 * ridge.size:
        return None
    return rows, columns, number[label[rows, columns]], contrast


def _graph(
    rows: NDArray[np.intp], columns: NDArray[np.intp], labels: NDArray[np.intp], shape: tuple[int, int], gap_px: float
) -> coo_matrix:
    """Neighbouring pixels joined by their distance, neighbouring pieces by a dearer link."""
    index = np.full(shape, -1, np.int64)
    index[rows, columns] = np.arange(rows.size)
    padded = np.pad(index, 1, constant_values=-1)
    ends, lengths = [], []
    for dy, dx in ((0, 1), (1, 0), (1, 1), (1, -1)):
        other = padded[rows + 1 + dy, columns + 1 + dx]
        have = other >= 0
        ends.append(np.column_stack([np.nonzero(have)[0], other[have]]))
        lengths.append(np.full(int(have.sum()), np.hypot(dy, dx)))
    points = np.column_stack([columns, rows]).astype(float)
    pieces = [np.nonzero(labels == k)[0] for k in range(labels.max() + 1)]
    trees = [cKDTree(points[p]) for p in pieces]
    for a in range(len(pieces)):
        for b in range(a + 1, len(pieces)):
            small, large = (a, b) if pieces[a].size < pieces[b].size else (b, a)
            distance, at = trees[large].query(points[pieces[small]], distance_upper_bound=gap_px)
            nearest = int(np.argmin(distance))
            if np.isfinite(distance[nearest]):
                ends.append(np.array([[pieces[small][nearest], pieces[large][at[nearest]]]]))
                lengths.append(np.array([_LINK_COST * distance[nearest]]))
    pair, length = np.concatenate(ends), np.concatenate(lengths)
    return coo_matrix((length, (pair[:, 0], pair[:, 1])), shape=(rows.size, rows.size)).tocsr()


def _longest(
    graph: coo_matrix,
    members: NDArray[np.intp],
    points: NDArray[np.float64],
    height: NDArray[np.float32],
    contrast: float,
    origin: NDArray[np.float64],
) -> NDArray[np.intp]:
    """Node numbers of the path between the two ends farthest apart, along the ridge, from the end near the rim."""
    part = graph[members][:, members]

    def farthest(start: int) -> int:
        reach = dijkstra(part, directed=False, indices=start)
        return int(np.argmax(np.where(np.isfinite(reach), reach, -1.0)))

    one = farthest(int(np.argmax(height[members])))
    two = farthest(one)
    along = part.tocoo()
    dear = 1.0 / (0.1 + np.clip(height[members] / contrast, 0, 1))
    weighted = coo_matrix(
        (along.data * (dear[along.row] + dear[along.col]) / 2, (along.row, along.col)), shape=part.shape
    ).tocsr()
    start, end = (one, two) if _near(points[members[one]], origin) <= _near(points[members[two]], origin) else (two, one)
    _, before = dijkstra(weighted, directed=False, indices=start, return_predecessors=True)
    path = [end]
    while path[-1] != start:
        path.append(int(before[path[-1]]))
    return np.asarray(members[np.array(path[::-1])], dtype=np.intp)


def _near(point: NDArray[np.float64], origin: NDArray[np.float64]) -> float:
    return float(np.hypot(*(point - origin)))


def _cut_below_rim(
    path: NDArray[np.intp], points: NDArray[np.float64], origin: NDArray[np.float64], up: NDArray[np.float64]
) -> NDArray[np.intp]:
    """Drop what is seen of the line inside or before the container, below the level of the rim."""
    height = (points[path] - origin) @ up
    above = np.nonzero(height >= 0)[0]
    if above.size < 3 or height[0] >= 0 or _near(points[path[above[0]]], origin) > 0.5 * points.max():
        return path
    return path[above[0] :]


def _plausible(
    points: NDArray[np.float64], length: float, width: float, origin: NDArray[np.float64], shape: tuple[int, int]
) -> bool:
    """Long, thin, and begun near the rim."""
    if points.shape[0] < 20 or length < 0.08 * max(shape) or width > 0.12 * length:
        return False
    away = np.abs(points[0] - origin)
    return bool(away[0] <= 0.35 * shape[1] and away[1] <= 0.12 * shape[0])
