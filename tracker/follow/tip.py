"""Where a thin line ends, when no ball or tape marks its free end.

First roughly: among the pixels that differ from the still scene, an end is a place whose ring of surroundings the line
crosses once, where it would cross it twice anywhere else along itself. Then closely: a band of the line's width, bent
a little, cut off square at its end, is laid over the picture as the camera would draw it (blurred by the lens, and
along the way the end went during the exposure), and its end, direction, bend and width are moved by Gauss-Newton
steps until the picture is explained; the light on the line is left free (a constant, and slopes across and along
it), which keeps one-sided light out of the place (variable projection: Golub & Pereyra, SIAM J. Numer. Anal. 10, 413
(1973)). Tukey's biweight lets beads, gaps and whatever lies near count for little. An end that explains the picture
no better than a line that goes on, or that is not there, is no end: then there is no answer.

Coordinates are (column, row) of the frame, centre of the top-left pixel = (0, 0).
"""

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

__all__ = ["LineEnd", "TipFit", "find_tip", "fit_tip", "tip_candidates"]

Floats = NDArray[np.float64]

_STEP_PX = 0.75  # the way during the exposure is laid in steps of at most this
_LONG = 4.0  # how far back along the line the band is compared, in widths
_LEAST_LONG_PX = 8.0
_U_CUT = 0.1  # of the width: a square end, a round one and half a bead differ by about this
_EXPLAINS = 0.7  # least share of the difference that a sure end explains
_ENDS = 2.0  # how much worse, relatively, a line of another length must be
_AHEAD = 0.08  # largest share of the pixels straight ahead that may look like the line
_CONTRAST = 4.0  # least contrast [noise]
_SQRT_2PI = np.sqrt(2.0 * np.pi)


@dataclass(frozen=True, slots=True)
class LineEnd:
    """A line near its free end, as the camera draws it.

    Attributes
    ----------
    width_px : float
        Across the line.
    u_width : float
        Its relative standard uncertainty: 0.3 when guessed, 0.03 when learned from frames before.
    soft_px : float
        Standard deviation of the blur across an edge, the pixel's own included [px].
    pitch_px : float or None
        Repeat length of its texture in the picture: beads and links are then light and dark along it [px].
    """

    width_px: float
    u_width: float = 0.3
    soft_px: float = 0.7
    pitch_px: float | None = None


@dataclass(frozen=True, slots=True, eq=False)
class TipFit:
    """The end of a line in one frame.

    Attributes
    ----------
    point : (2,) array
        Last point of the line's axis: column and row [px].
    cov : (2, 2) array
        Its covariance from the residuals, independent from frame to frame [px^2].
    bias_px : float
        Standard uncertainty, along the line and common to all frames, from not knowing how the end is cut.
    direction : (2,) array
        Unit vector along the line, out of its end.
    bend : float
        Curvature of the axis at its end [1/px].
    width_px : float
    contrast : float
        Line less scene [grey levels]; negative for a dark line.
    rms : float
        Robust standard deviation of the residuals [grey levels].
    ends : float
        How clearly it ends there: least of SSE(line goes on) / SSE and SSE(line ends earlier) / SSE over the pixels that
        tell the two apart, less one.
    explains : float
        Share of what the scene alone leaves unexplained, next to the end, that the line explains.
    ok : bool
    """

    point: Floats
    cov: Floats
    bias_px: float
    direction: Floats
    bend: float
    width_px: float
    contrast: float
    rms: float
    ends: float
    explains: float
    ok: bool


def tip_candidates(
    difference: NDArray[Any], corner: tuple[int, int], near: Floats, width_px: float, noise: float, *,
    reach_px: float = np.inf, most: int = 4
) -> list[tuple[Floats, Floats]]:
    """Places where a line seems to end, nearest to `near` first.

    Parameters
    ----------
    difference : (h, w) array
        Patch of the frame less the still scene [grey levels].
    corner : (int, int)
        Column and row of its top-left pixel.
    near : (2,) array
        Where the end is expected [px].
    width_px, noise : float
        Of the line, and of a pixel of the difference.
    reach_px : float
        How far from `near` an end may lie.
    most : int
        How many to give at most.

    Returns
    -------
    list of (point (2,), direction (2,))
        The direction points out of the end. Empty where nothing stands out of the noise.
    """
    smooth = cv2.GaussianBlur(np.abs(np.asarray(difference, dtype=np.float32)), (0, 0), max(0.6, 0.3 * width_px))
    h, w = smooth.shape
    y, x = np.mgrid[0:h, 0:w]
    away = np.hypot(x + corner[0] - near[0], y + corner[1] - near[1])
    inside = away < reach_px + 2.0 * width_px
    # |noise| smoothed over n pixels has a mean of 0.8 and a spread of 0.6/sqrt(n) sigmas
    floor = noise * (0.8 + 4.0 * 0.6 / max(1.0, width_px))
    top = float(np.percentile(smooth[inside], 99.0)) if inside.any() else 0.0
    bright = float(np.sort(smooth[inside])[-max(1, int(width_px**2)) :].mean()) if inside.any() else 0.0
    level = max(floor, 0.4 * max(top, bright))
    gap = round(width_px) | 1
    bridge = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (gap, gap))
    line = cv2.morphologyEx((smooth > level).astype(np.uint8), cv2.MORPH_CLOSE, bridge)
    return _ends(np.asarray(line, dtype=np.uint8), corner, away, width_px, reach_px, most)


def _ends(line: NDArray[np.uint8], corner: tuple[int, int], away: NDArray[Any], width_px: float, reach_px: float,
          most: int) -> list[tuple[Floats, Floats]]:
    """Ends of a drawn line: places whose ring it crosses once."""
    h, w = line.shape
    radius = 2.0 * width_px + 2.0
    count = max(24, int(2 * np.pi * radius))
    angle = 2 * np.pi * np.arange(count) / count
    around = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    ring = np.rint(radius * around).astype(np.intp)
    margin = int(np.ceil(radius)) + 1
    padded = np.pad(line, margin, mode="edge")  # a line that leaves the patch does not end there
    rows, columns = np.nonzero(line.astype(bool) & (away < reach_px))
    if len(rows) == 0:
        return []
    seen = padded[rows[:, None] + margin + ring[:, 1], columns[:, None] + margin + ring[:, 0]].astype(np.int8)
    crossings = (np.diff(seen, axis=1, append=seen[:, :1]) == 1).sum(axis=1)
    share = seen.mean(axis=1)
    lone = (crossings == 1) & (share < 0.4)
    if not lone.any():
        return []
    ends = np.zeros_like(line)
    ends[rows[lone], columns[lone]] = 1
    number, labels = cv2.connectedComponents(ends)
    back = seen[lone] @ around  # (m, 2): towards the line
    label = labels[rows[lone], columns[lone]]
    found = []
    for k in range(1, number):
        mine = np.flatnonzero(label == k)
        inward = back[mine].sum(axis=0)
        inward /= max(float(np.hypot(*inward)), 1e-9)
        at = np.stack([columns[lone][mine], rows[lone][mine]], axis=1).astype(float)
        along = at @ -inward
        tip = at[along >= along.max() - 1.0].mean(axis=0)
        if 1 <= tip[0] < w - 2 and 1 <= tip[1] < h - 2:
            found.append((float(away[int(tip[1]), int(tip[0])]), tip + np.array(corner, dtype=float), -inward))
    found.sort(key=lambda item: item[0])
    return [(point, direction) for _, point, direction in found[:most]]


@dataclass(slots=True, eq=False)
class _Band:
    """The pixels near an end, (n,) each, and the parameters of the band: column, row, angle, bend, half width."""

    x: Floats
    y: Floats
    seen: Floats
    scene: Floats
    soft: float
    way: Floats
    params: Floats
    pitch: float | None = None

    def cover(self, end_at: float = 0.0) -> tuple[Floats, Floats, Floats, Floats]:
        """Cover (n,), its derivatives (5, n) by the parameters, and places along and across (n,).

        `end_at` moves the end along the line: infinity lets the line go on.
        """
        px, py, angle, bend, half = self.params
        ex, ey = np.cos(angle), np.sin(angle)
        steps = max(1, int(np.ceil(np.hypot(*self.way) / _STEP_PX)))
        at = ((np.arange(steps) + 0.5) / steps - 0.5)[:, None]
        dx, dy = self.x - px - at * self.way[0], self.y - py - at * self.way[1]
        u = dx * ex + dy * ey
        across = dy * ex - dx * ey
        behind = np.minimum(u, 0.0)
        v = across - 0.5 * bend * behind**2
        s = self.soft
        upper, lower, end = (half - v) / s, (half + v) / s, (end_at - u) / s
        wide = ndtr(upper) - ndtr(-lower)
        long = ndtr(end)
        bell_up, bell_low = np.exp(-0.5 * upper**2) / (_SQRT_2PI * s), np.exp(-0.5 * lower**2) / (_SQRT_2PI * s)
        bell_end = np.exp(-0.5 * end**2) / (_SQRT_2PI * s)
        d_v = long * (bell_low - bell_up)
        d_u = -wide * bell_end - d_v * bend * behind
        d_angle = d_u * across - d_v * u
        slopes = np.stack([
            (-d_u * ex + d_v * ey).mean(axis=0), (-d_u * ey - d_v * ex).mean(axis=0), d_angle.mean(axis=0),
            (-0.5 * d_v * behind**2).mean(axis=0), (long * (bell_up + bell_low)).mean(axis=0),
        ])  # fmt: skip
        return (wide * long).mean(axis=0), slopes, u.mean(axis=0), v.mean(axis=0)

    def lights(self, cover: Floats, u: Floats, v: Floats) -> Floats:
        """Ways in which line and scene can be lit, as they are covered, (k, n): scene, 1, line, across, along, texture."""
        half = self.params[4]
        across = np.clip(v / half, -1.0, 1.0)
        back = np.clip(-u / (2.0 * half), 0.0, _LONG)
        rows = [(1.0 - cover) * self.scene, 1.0 - cover, cover, cover * across, cover * back]
        if self.pitch is not None:
            phase = (2 * np.pi / self.pitch) * u
            rows += [cover * np.cos(phase), cover * np.sin(phase)]
        return np.stack(rows)

    def step(self, light: Floats, v: Floats) -> Floats:
        """Line less scene (n,), texture and slope along it left out."""
        across = np.clip(v / self.params[4], -1.0, 1.0)
        return np.asarray(light[2] + light[3] * across - light[0] * self.scene - light[1])


def _solved(rows: Floats, values: Floats, weight: Floats, precision: Floats | None = None,
            pull: Floats | None = None) -> tuple[Floats, Floats]:
    weighted = rows * weight
    normal = weighted @ rows.T
    flat = normal.ravel()[:: len(normal) + 1]
    flat *= 1.0 + 1e-9  # each row in its own units: an even scene makes two of them the same
    flat += 1e-12
    right = weighted @ values
    if precision is not None and pull is not None:
        flat += precision
        right = right + precision * pull
    return np.asarray(np.linalg.solve(normal, right), dtype=float), normal


def _scale(left: Floats, noise: float) -> float:
    size = np.abs(left)
    return max(noise, 1.4826 * float(np.partition(size, len(size) // 2)[len(size) // 2]))


def fit_tip(
    seen: NDArray[Any],
    scene: NDArray[Any],
    corner: tuple[int, int],
    start: Floats,
    direction: Floats,
    line: LineEnd,
    *,
    way: Floats | None = None,
    noise: float = 1.0,
    steps: int = 10,
) -> TipFit | None:
    """Lay a band with an end over the picture, from a start that is good to about a width.

    Parameters
    ----------
    seen, scene : (h, w) arrays
        Patch of the frame, and what it would show without the line [grey levels].
    corner : (int, int)
        Column and row of the patch's top-left pixel.
    start, direction : (2,) arrays
        Roughly the end, and roughly the direction out of it.
    line : LineEnd
    way : (2,) array, optional
        The way that the end goes during the exposure [px].
    noise : float
        Standard deviation of a pixel [grey levels].
    steps : int
        Gauss-Newton steps at most.

    Returns
    -------
    TipFit or None
        None where the steps ran away or the patch holds too little of the line.
    """
    way = np.zeros(2) if way is None else np.asarray(way, dtype=float)
    start = np.asarray(start, dtype=float)
    expected = np.array([start[0], start[1], np.arctan2(direction[1], direction[0]), 0.0, 0.5 * line.width_px])
    band = _near(seen, scene, corner, expected, line, way)
    if band is None:
        return None
    sigma = np.array([np.inf, np.inf, np.inf, 0.1 / line.width_px, line.u_width * 0.5 * line.width_px])
    most = np.array([line.width_px, line.width_px, 0.4, 0.05, 0.2 * line.width_px])
    weight, size = np.ones_like(band.seen), np.inf
    light: Floats | None = None
    scale = noise
    for step in range(steps):
        cover, slopes, u, v = band.cover()
        lights = band.lights(cover, u, v)
        if light is None:
            light = _solved(lights, band.seen, weight)[0]
            left = band.seen - light @ lights
            weight = np.maximum(1.0 - (left / (9.4 * _scale(left, noise))) ** 2, 0.0) ** 2
            light = _solved(lights, band.seen, weight)[0]
        k = len(lights)
        rows = np.concatenate([lights, band.step(light, v) * slopes])
        precision = np.concatenate([np.zeros(k), (scale / sigma) ** 2])
        pull = np.concatenate([np.zeros(k), expected - band.params])
        solution = _solved(rows, band.seen, weight, precision, pull)[0]
        left = band.seen - solution @ rows
        scale = _scale(left, noise)
        weight = np.maximum(1.0 - (left / ((9.4 if step < 2 else 4.685) * scale)) ** 2, 0.0) ** 2
        light, move = solution[:k], np.clip(solution[k:], -most, most)
        if not np.isfinite(move).all():
            return None
        band.params = band.params + move
        band.params[4] = max(band.params[4], 0.25)
        size = float(np.hypot(*move[:2]))
        if float(np.hypot(*(band.params[:2] - start))) > 3.0 * line.width_px + 3.0:
            return None
        if step >= 3 and size < 0.01:
            break
        if step in (1, 3):  # what belongs to the end is known better now
            again = _near(seen, scene, corner, band.params, line, way)
            if again is None:
                return None
            band, weight, light = again, np.ones_like(again.seen), None
    return _judged(band, weight, noise, size < 0.1)


def _near(seen: NDArray[Any], scene: NDArray[Any], corner: tuple[int, int], params: Floats, line: LineEnd,
          way: Floats) -> _Band | None:
    """The pixels that can tell of an end at these parameters."""
    h, w = seen.shape
    width, blur = 2.0 * float(params[4]), 0.5 * float(np.hypot(*way))
    e = np.array([np.cos(params[2]), np.sin(params[2])])
    back = max(_LONG * width, _LEAST_LONG_PX) + blur
    front, side = 1.5 * width + 4.0 + blur + (line.pitch_px or 0.0), 1.2 * width + 3.0 + blur
    far = back + side
    cx, cy = params[0] - corner[0], params[1] - corner[1]
    x0, x1 = max(0, int(cx - far)), min(w, int(np.ceil(cx + far)) + 1)
    y0, y1 = max(0, int(cy - far)), min(h, int(np.ceil(cy + far)) + 1)
    if x1 - x0 < 4 or y1 - y0 < 4:
        return None
    yy, xx = np.mgrid[y0:y1, x0:x1].astype(float)
    u = (xx - cx) * e[0] + (yy - cy) * e[1]
    v = (yy - cy) * e[0] - (xx - cx) * e[1] - 0.5 * params[3] * np.minimum(u, 0.0) ** 2
    take = (u > -back) & (u < front) & (np.abs(v) < side)
    if take.sum() < 30 or not (u[take].min() < -0.7 * back and u[take].max() > 0.5 * front):
        return None  # cut by the picture's border
    part = (slice(y0, y1), slice(x0, x1))
    return _Band(xx[take] + corner[0], yy[take] + corner[1], np.asarray(seen[part], float)[take],
                 np.asarray(scene[part], float)[take], line.soft_px, way, np.array(params, dtype=float), line.pitch_px)


def _judged(band: _Band, weight: Floats, noise: float, ok: bool) -> TipFit:
    """Quality and covariance at the solution."""
    cover, slopes, u, v = band.cover()
    lights = band.lights(cover, u, v)
    light = _solved(lights, band.seen, weight)[0]
    left = band.seen - light @ lights
    scale = _scale(left, noise)
    width = 2.0 * band.params[4]
    # the same light on a line that goes on, and on one that ends a width earlier
    ends = np.inf
    for end_at in (1e6, -max(width, 2.0)):
        other = band.cover(end_at)[0]
        other_left = band.seen - light @ band.lights(other, np.minimum(u, 0.0), v)
        tells = np.abs(other - cover) > 0.3 * cover.max()  # a thin or much blurred line covers no pixel wholly
        tells &= u < 1.5 * width + 2.0
        if not tells.any():
            return TipFit(*_nothing(band))
        floor = noise**2 * tells.sum()
        ends = min(ends, float((other_left[tells] ** 2).sum()) / max(float((left[tells] ** 2).sum()), floor) - 1.0)
    beside = np.abs(u) < 2.0 * width + 2.0
    bare = band.seen - light[0] * band.scene - light[1]
    contrast = band.step(light, v)
    design = np.concatenate([lights, contrast * slopes])
    normal = _solved(design, band.seen, weight)[1]
    freedom = max(float(weight.sum()) - len(normal), 1.0)
    k = len(lights)
    cov = np.asarray(np.linalg.pinv(normal)[k : k + 2, k : k + 2], dtype=float) * float((weight * left**2).sum()) / freedom
    on_line = cover > 0.5 * cover.max()
    mean = float(contrast[on_line].mean()) if on_line.any() else 0.0
    # more of the same beyond the end, a bead past a gap say, and it is no end
    ahead = (np.abs(v) < max(band.params[4], 1.0)) & (u > max(0.5 * width, 2.0 * band.soft) + 0.5 * float(np.hypot(*band.way)))
    if not ahead.any() or float((left[ahead] * contrast[ahead] > 0.35 * mean**2).mean()) > _AHEAD:
        ends = 0.0
    return TipFit(
        point=band.params[:2].copy(), cov=cov, bias_px=_U_CUT * width,
        direction=np.array([np.cos(band.params[2]), np.sin(band.params[2])]), bend=float(band.params[3]), width_px=width,
        contrast=mean, rms=scale, ends=ends,
        explains=1.0 - float((left[beside] ** 2).sum()) / max(float((bare[beside] ** 2).sum()), 1e-9),
        ok=ok and bool(np.isfinite(cov).all()),
    )  # fmt: skip


def _nothing(band: _Band) -> tuple[Any, ...]:
    nan = np.full((2, 2), np.nan)
    return band.params[:2].copy(), nan, np.nan, np.full(2, np.nan), np.nan, np.nan, 0.0, np.nan, 0.0, 0.0, False


def find_tip(
    seen: NDArray[Any],
    scene: NDArray[Any],
    corner: tuple[int, int],
    near: Floats,
    line: LineEnd,
    *,
    way: Floats | None = None,
    noise: float = 1.0,
    reach_px: float = np.inf,
    contrast: float | None = None,
) -> TipFit | None:
    """Find the free end of a line near a place.

    Parameters
    ----------
    seen, scene : (h, w) arrays
        Patch of the frame, and what it would show without the line, in the frame's light [grey levels].
    corner : (int, int)
        Column and row of the patch's top-left pixel.
    near : (2,) array
        Where the end is expected [px].
    line : LineEnd
    way : (2,) array, optional
        The way that the end is expected to go during the exposure [px].
    noise : float
        Standard deviation of a pixel [grey levels].
    reach_px : float
        How far from `near` it may be.
    contrast : float, optional
        Line less scene in frames before: an end much fainter is a shadow's, one of another sign another thing's.

    Returns
    -------
    TipFit or None
        The clearest end within reach; None where no end is sure.
    """
    difference = np.asarray(seen, dtype=np.float32) - np.asarray(scene, dtype=np.float32)
    best, best_score = None, 0.0
    drawn = line.width_px + (0.0 if way is None else 0.5 * float(np.hypot(*way)))  # what is blurred is wider, or longer
    for point, direction in tip_candidates(difference, corner, near, drawn, noise, reach_px=reach_px):
        fit = fit_tip(seen, scene, corner, point, direction, line, way=way, noise=noise)
        if fit is None or not _sure(fit, line, noise, contrast):
            continue
        distance = float(np.hypot(*(fit.point - near)))
        if distance > reach_px:
            continue
        score = fit.explains / (1.0 + distance / max(3.0 * line.width_px, 10.0))
        if score > best_score:
            best, best_score = fit, score
    return best


def _sure(fit: TipFit, line: LineEnd, noise: float, contrast: float | None) -> bool:
    """Whether this is an end, of this line, as far as the picture can say."""
    if not fit.ok or fit.explains < _EXPLAINS or fit.ends < _ENDS or abs(fit.contrast) < _CONTRAST * noise:
        return False
    if not 1 - 3 * line.u_width < fit.width_px / line.width_px < 1 + 3 * line.u_width:
        return False
    if float(np.sqrt(np.trace(fit.cov))) > 1.0:
        return False
    return contrast is None or 0.5 < fit.contrast / contrast < 2.0
