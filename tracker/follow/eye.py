"""How an end is seen in one frame: a round mark by its outline, a bare line by its tip. Following is in `end.py`."""

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import Any, Protocol

import cv2
import numpy as np
from numpy.typing import NDArray

from tracker.follow.background import Background, Region
from tracker.follow.disc import BLUR, RADIUS, SOFT, Disc, disc_looks, look_spread, roundness
from tracker.follow.layer import Belief, LayerFit, Patch, fit_layer
from tracker.follow.tip import LineEnd, find_tip

__all__ = ["U_RADIUS", "DiscEye", "Eye", "Sight", "TipEye", "View", "blob_size"]

Floats = NDArray[np.float64]

U_RADIUS = 0.007  # relative: a caliper on the mark, the board's scale at the mark's place
U_ORIGIN_PX = 1.5  # a technician's click
_SOFT, _U_SOFT = 0.8, 0.6  # blur of an edge by lens and pixel, before it is known [px]
_SOFT_KEPT = 0.08  # how much it may change from frame to frame, relative
_GRID = 40  # the light of a frame is read off about so many columns and rows
_SURE_PX = 1.2  # a place foretold closer than this is a good enough start
_PLAIN_EDGE, _PLAIN_MISFIT = 0.6, 1.8  # of a fit that is plainly right
_LEAST_CONTRAST = 8.0  # grey levels, to begin with: compressed walls are quieter than they are true
_EXPLAINS = ((0.85, np.inf), (0.75, 3.0), (0.5, 2.0))  # a fit explains so much, or less with residuals so small
_RIVAL = 1.05  # times the least cost: such a fit might as well be the right one
_USUAL = 0.1  # weight of it in each frame
_SEEK_MOST = 5  # candidates looked at closely


@dataclass(frozen=True, slots=True, eq=False)
class View:
    """One frame and what is known of it.

    Attributes
    ----------
    gray : (h, w) uint8 array
    motion : Motion or None
        Camera movement; None where it stands still.
    gain : float
        Its light over the background's.
    """

    gray: NDArray[np.uint8]
    motion: Any
    gain: float

    @classmethod
    def of(cls, gray: NDArray[np.uint8], scene: NDArray[np.float32], motion: Any) -> "View":
        """Read the light off a sparse grid: the median ratio to the scene, which the moving thing does not sway."""
        h, w = gray.shape
        rows, columns = slice(2, h, max(1, h // _GRID)), slice(2, w, max(1, w // _GRID))
        seen, still = gray[rows, columns], scene[rows, columns]
        good = (still > 20) & (still < 245) & (seen > 5) & (seen < 250)
        gain = float(np.median(seen[good] / still[good])) if good.sum() > 50 else 1.0
        return cls(gray, motion, gain)

    def to_frame(self, px: Floats) -> Floats:
        """From the still scene's pixels to this frame's."""
        return px if self.motion is None else np.asarray(self.motion.apply(px))

    def to_scene(self, px: Floats) -> Floats:
        """From this frame's pixels to the still scene's."""
        return px if self.motion is None else np.asarray(self.motion.undo(px))


@dataclass(frozen=True, slots=True, eq=False)
class Sight:
    """An end seen in one frame.

    Attributes
    ----------
    px : (2,) array
        In this frame.
    u_px : (2,) array
        Standard uncertainty of column and row from this frame's own noise.
    diameter_px : float
    light_px : (2,) array
        Centre of brightness minus centre of the outline.
    quality : float
        0 to 1.
    whole : float
        Share of the outline that was seen and agreed.
    keep : object
        What the eye remembers when this sight is accepted.
    """

    px: Floats
    u_px: Floats
    diameter_px: float
    light_px: Floats
    quality: float
    whole: float
    keep: Any


class Eye(Protocol):
    """A way of seeing an end."""

    @property
    def size_px(self) -> float: ...

    def first(self, view: View, near: Floats) -> Sight | None: ...
    def near(self, view: View, place: Floats, velocity: Floats, gate_px: float, way_s: float) -> Sight | None: ...
    def seek(self, view: View, place: Floats, last: Floats, since_s: float, reach_px: float, way_s: float) -> list[Sight]: ...
    def accept(self, sight: Sight, view: View) -> None: ...
    def doubt(self, view: View, sight: Sight, velocity: Floats, way_s: float) -> Floats: ...


def _region(centre: Floats, half: float, shape: tuple[int, ...]) -> Region | None:
    """Pixels within `half` of a place, clipped to the picture; None where next to nothing is left."""
    x0, x1 = max(0, int(np.floor(centre[0] - half))), min(shape[1], int(np.ceil(centre[0] + half)) + 1)
    y0, y1 = max(0, int(np.floor(centre[1] - half))), min(shape[0], int(np.ceil(centre[1] + half)) + 1)
    return (x0, y0, x1, y1) if x1 - x0 >= 4 and y1 - y0 >= 4 else None


@dataclass(frozen=True, slots=True, eq=False)
class _Settled:
    """The best fit, and how far others lie from it that are nearly as good [px]: where things overlap there are several."""

    fit: LayerFit
    spread: Floats


@dataclass(slots=True, eq=False)
class DiscEye:
    """Sees a ball or a round mark of known diameter.

    Attributes
    ----------
    background : Background
    size_px : float
        Diameter.
    focal_px : float
        Focal length, for the outline of a sphere off the axis; infinite where unknown.
    time_slope : (2,) array
        How much later pixels to the right and farther down are exposed [s/px].
    """

    background: Background
    size_px: float
    focal_px: float
    time_slope: Floats
    u_size: float = U_RADIUS
    u_way: float = 0.15  # relative, of the way during the exposure
    belief: Belief | None = None
    level: float = 100.0  # of the look, to say how much one-sided light may change it [grey levels]
    may_be_burnt: bool = True  # the mark may hang still for most of the clip at the place first looked at
    given: Background = field(init=False)  # as it came; `background` may be mended where it shows the mark
    burnt: NDArray[np.bool_] | None = None  # where the background shows the mark itself, in the scene's pixels

    def __post_init__(self) -> None:
        self.given = self.background

    @property
    def radius(self) -> float:
        return self.size_px / 2

    @property
    def _looks(self) -> int:
        return disc_looks(self.radius)

    # --- seeing -----------------------------------------------------------------------------------------------

    def first(self, view: View, near: Floats) -> Sight | None:
        """The mark where the sheet says that it hangs; its look is not known yet."""
        reach = max(4 * U_ORIGIN_PX, 0.35 * self.radius)
        self._notice_burnt_in(view, near)
        self.may_be_burnt &= self.burnt is not None  # where it once stood out from the scene, an empty place is empty
        patch = self._patch(view, near, 1.1 * self.radius + reach + 4)
        if patch is None:
            return None
        away = np.hypot(patch.x - near[0], patch.y - near[1])
        core = patch.seen[away < 0.6 * self.radius]
        look = np.zeros(self._looks)
        look[0] = float(np.median(core))
        around = float(np.median(patch.scene[(away > self.radius + 1) & (patch.trust > 0)]))
        self.level = max(float(look[0]), abs(float(look[0]) - around))
        spread = look_spread(self._looks, self.level)
        best, cost = None, np.inf
        for start in _starts(near, min(reach, 0.5 * self.radius + 1)):
            p = np.array([*start, self.radius, _SOFT, 0.0, 0.0])
            sigma = np.array([np.inf, np.inf, self.u_size * self.radius, _U_SOFT, 0.05, 0.05])
            for soften in ((2.0, 1.0, 0.5, 0.0, 0.0, 0.0), (0.5, 0.0, 0.0, 0.0)):
                fit = fit_layer(patch, self._disc(view, start, np.zeros(2)), Belief(p, sigma, look, spread), soften=soften, reach=reach + 2)
                if fit is not None and fit.cost < cost:
                    best, cost = fit, fit.cost
        if best is None or float(np.hypot(*(best.p[:2] - near))) > reach:
            return None
        return self._sight(best, view, np.zeros(2)) if self._good(best, patch, None, view.gray.shape) else None

    def near(self, view: View, place: Floats, velocity: Floats, gate_px: float, way_s: float) -> Sight | None:
        """The mark close to where it is expected."""
        assert self.belief is not None
        way = velocity * way_s
        starts = [place]
        if gate_px > _SURE_PX:  # not foretold closely enough to begin there
            starts = self._candidates(view, place, min(gate_px, 3 * self.size_px), way)[:2] or starts
        best: _Settled | None = None
        for start in starts:
            found = self._settle(view, start, velocity, way, min(gate_px, _SURE_PX))
            if found is not None and (best is None or found.fit.explained > best.fit.explained):
                best = found
        if best is None or float(np.hypot(*(best.fit.p[:2] - place))) > max(3 * gate_px, self.radius):
            return None
        return self._sight(best.fit, view, best.spread)

    def _settle(self, view: View, start: Floats, velocity: Floats, way: Floats, gate: float,
                strict: bool = False) -> "_Settled | None":
        """The best fit from one start, and its patch; from all around it, where the first try is not plainly right."""
        patch = self._patch(view, start, 1.08 * self.radius + 4 + gate + 0.5 * float(np.hypot(*way)))
        if patch is None:
            return None
        disc, belief = self._disc(view, start, velocity), self._expected(view, start, way, gate)
        reach = 0.5 * self.radius + 2 + gate
        fit = fit_layer(patch, disc, belief, soften=(0.4, 0.0, 0.0), reach=reach)
        tried = [] if fit is None else [fit]
        if fit is None or not self._good(fit, patch, belief, view.gray.shape) or fit.edge < _PLAIN_EDGE or fit.misfit > _PLAIN_MISFIT:
            for other_start in _starts(start if fit is None else fit.p[:2], min(0.6 * self.radius, 4.0)):
                p = belief.p.copy()
                p[:2] = other_start
                other = fit_layer(patch, disc, replace(belief, p=p), soften=(0.7, 0.3, 0.0, 0.0, 0.0), reach=reach)
                if other is not None:
                    tried.append(other)
        tried = [one for one in tried if self._good(one, patch, belief, view.gray.shape, strict)]
        if not tried:
            return None
        best = min(tried, key=lambda one: one.cost)
        rivals = np.array([one.p[:2] for one in tried if one.cost < _RIVAL * best.cost])
        spread = np.sqrt(((rivals - best.p[:2]) ** 2).mean(axis=0))
        return _Settled(best, spread) if float(np.hypot(*spread)) < max(0.25 * self.radius, 0.5) else None

    def seek(self, view: View, place: Floats, last: Floats, since_s: float, reach_px: float, way_s: float) -> list[Sight]:
        """All that look like the mark within reach, best first."""
        assert self.belief is not None
        found: list[Sight] = []
        for start in self._candidates(view, place, reach_px, np.zeros(2)):
            velocity = (start - last) / max(since_s, 1e-6)
            way = velocity * way_s
            one = self._settle(view, start, velocity, way, float(np.hypot(*way)) + 2.0, strict=True)
            if one is not None:
                found.append(self._sight(one.fit, view, one.spread))
        found.sort(key=lambda sight: -sight.quality)
        apart: list[Sight] = []
        for sight in found:
            if all(float(np.hypot(*(sight.px - other.px))) > 0.5 * self.radius for other in apart):
                apart.append(sight)
        return apart

    def accept(self, sight: Sight, view: View) -> None:
        """Remember the look, and what the mark uncovers where the background is not known."""
        fit: LayerFit = sight.keep
        jitter = (0.02 * fit.contrast + 0.5) ** 2 * np.eye(self._looks) + 0.02**2 * np.outer(fit.look, fit.look)
        p = fit.p.copy()
        p[RADIUS] = self.radius
        look, cov = fit.look / view.gain, fit.look_cov / view.gain**2 + jitter
        if self.belief is not None:  # what lamps make likely is said again: jitter would forget it
            usual = np.linalg.inv(look_spread(self._looks, self.level))
            usual[0, 0] = 0.0
            precision = np.linalg.inv(cov)
            cov = np.linalg.inv(precision + _USUAL * usual)
            look = cov @ (precision @ look)
        self.belief = Belief(p, fit.p, look, cov)
        if self.burnt is not None and self.burnt.any():
            self._uncover(view, sight)

    # --- what the fit is told -----------------------------------------------------------------------------------

    def _disc(self, view: View, place: Floats, velocity: Floats) -> Disc:
        h, w = view.gray.shape
        middle = np.array([(w - 1) / 2, (h - 1) / 2])
        return Disc(self._looks, roundness(velocity, self.time_slope, place - middle, self.focal_px))

    def _expected(self, view: View, place: Floats, way: Floats, gate: float) -> Belief:
        assert self.belief is not None
        length = float(np.hypot(*way))
        p = np.array([*place, self.radius, self.belief.p[SOFT], *way])
        u_way = 0.05 + self.u_way * length + (0.3 * gate if length > 0.5 * self.radius else 0.0)
        sigma = np.array([np.inf, np.inf, self.u_size * self.radius, _SOFT_KEPT * self.belief.p[SOFT], u_way, u_way])
        return Belief(p, sigma, self.belief.look * view.gain, self.belief.look_cov * view.gain**2)

    def _patch(self, view: View, centre: Floats, half: float) -> Patch | None:
        region = _region(centre, half, view.gray.shape)
        if region is None:
            return None
        x0, y0, x1, y1 = region
        scene = self.background.expected(view.gray.shape, region, view.motion).astype(float)
        sigma = self.background.sigma(scene).astype(float)
        y, x = np.mgrid[y0:y1, x0:x1].astype(float)
        trust = np.ones_like(x)
        if self.burnt is not None and self.burnt.any():
            at = np.rint(view.to_scene(np.stack([x, y], axis=-1))).astype(np.intp)
            h, w = self.burnt.shape
            trust[self.burnt[np.clip(at[..., 1], 0, h - 1), np.clip(at[..., 0], 0, w - 1)]] = 0.05
        away = np.hypot(x - centre[0], y - centre[1])
        stride = int(np.clip(self.radius / 8, 1, 6))
        if stride > 1:  # the inside of a large disc tells little of its place: one pixel of many will do
            trust[(away < self.radius - 6) & ((x % stride > 0) | (y % stride > 0))] = 0.0
        trust[away > half + 0.5] = 0.0
        return Patch(x, y, view.gray[y0:y1, x0:x1].astype(float), scene * view.gain, sigma, trust)

    # --- judging ------------------------------------------------------------------------------------------------

    def _good(self, fit: LayerFit, patch: Patch, belief: Belief | None, shape: tuple[int, ...],
              strict: bool = False) -> bool:
        """Whether this is the mark, as far as the picture can say."""
        h, w = shape
        inside = _share_inside(fit.p[:2], self.radius, (w, h))
        if inside < 0.5 or fit.cover < 0.5 or fit.edge < 0.25:
            return False
        softest = max(1.6, 0.35 * self.radius) if belief is None else 1.5 * float(belief.p[SOFT]) + 0.5
        if abs(fit.p[RADIUS] / self.radius - 1) > max(0.06, 4 * self.u_size) or fit.p[SOFT] > softest:
            return False
        if max(fit.p_cov[0, 0], fit.p_cov[1, 1]) > (0.2 * self.radius) ** 2:
            return False
        noise = float(np.median(patch.sigma))
        least = (3.0 if strict else 2.0) if belief is not None else 5.0 if self.burnt is None else 10.0
        if fit.contrast < max(least * noise, _LEAST_CONTRAST if belief is None else 0.5 * _LEAST_CONTRAST):
            return False
        if belief is None:  # nothing is known yet: only what is plainly a disc
            plain = (fit.misfit < 2.5 and fit.explained > 0.75) or (fit.misfit < 4.0 and fit.explained > 0.88 and fit.edge > 0.4)
            return plain and (self.burnt is None or (fit.misfit < 1.8 and fit.explained > 0.9 and min(fit.edge, fit.cover) > 0.7))
        if strict and (fit.edge < 0.4 or fit.explained < 0.7):
            return False
        if not any(fit.explained > share and fit.misfit < most for share, most in _EXPLAINS):
            return False
        return _look_differs(fit.look, belief.look) < 0.2 * max(abs(float(belief.look[0])), fit.contrast) + 6 * noise

    def _sight(self, fit: LayerFit, view: View, spread: Floats) -> Sight:
        h, w = view.gray.shape
        from_middle = fit.p[:2] - np.array([(w - 1) / 2, (h - 1) / 2])
        squeeze = (self.radius / self.focal_px) ** 2  # a sphere's outline is centred a little farther out than its centre
        told = np.sqrt(np.diag(fit.p_cov)[:2]) * max(fit.misfit, 1.0) / np.sqrt(fit.edge)
        return Sight(
            px=fit.p[:2] - squeeze * from_middle, u_px=np.hypot(told, spread), diameter_px=2 * float(fit.p[RADIUS]),
            light_px=_light_shift(fit, self.radius), quality=fit.cover * max(fit.explained, 0.0),
            whole=min(fit.cover, fit.edge), keep=fit,
        )  # fmt: skip

    def doubt(self, view: View, sight: Sight, velocity: Floats, way_s: float) -> Floats:
        """How far the centre moves (2, 2) when the look is described by other functions, and when the radius is one sigma larger [px]."""
        assert self.belief is not None
        fit: LayerFit = sight.keep
        centre = fit.p[:2]
        way = velocity * way_s
        patch = self._patch(view, centre, 1.08 * self.radius + 5 + 0.5 * float(np.hypot(*way)))
        belief = self._expected(view, centre, way, 1.0)
        moved = np.zeros((2, 2))
        if patch is None:
            return moved
        other_looks = {9: 4, 4: 1, 1: 4}[self._looks]
        disc = self._disc(view, centre, velocity)
        look = np.zeros(other_looks)
        look[0] = belief.look[0]
        if min(other_looks, self._looks) > 1:
            look[1:4] = belief.look[1:4]
        told = Belief(belief.p, belief.p_sigma, look, look_spread(other_looks, self.level))
        larger = belief.p.copy()
        larger[RADIUS] *= 1 + self.u_size
        sigma = belief.p_sigma.copy()
        sigma[RADIUS] = 1e-3 * self.radius
        for row, (shape, one) in enumerate(
            ((replace(disc, looks=other_looks), told), (disc, Belief(larger, sigma, belief.look, belief.look_cov)))
        ):
            other = fit_layer(patch, shape, one, soften=(0.3, 0.0, 0.0), reach=2.0)
            if other is not None:
                moved[row] = other.p[:2] - centre
        return moved

    # --- searching ----------------------------------------------------------------------------------------------

    def _candidates(self, view: View, place: Floats, reach: float, way: Floats) -> list[Floats]:
        """Places where the mark explains the picture better than the bare scene does, best first.

        The difference of the two sums of squares, for every place at once, by correlation: around the mark the scene
        is taken as level, under it as what it is.
        """
        assert self.belief is not None
        k = int(np.ceil(self.radius + 1.5 + 0.5 * float(np.hypot(*way))))
        region = _region(place, reach + k, view.gray.shape)
        if region is None:
            return []
        x0, y0, x1, y1 = region
        scene = self.background.expected(view.gray.shape, region, view.motion) * np.float32(view.gain)
        left = view.gray[y0:y1, x0:x1] - scene
        v, u = np.mgrid[-k : k + 1, -k : k + 1].astype(float)
        drawn = Disc(self._looks, np.eye(2)).draw(
            np.array([0.0, 0.0, self.radius, 0.6, *way]), u.ravel(), v.ravel(), self.belief.look
        )
        cover = drawn.basis[0].reshape(u.shape).astype(np.float32)
        colour = (self.belief.look @ drawn.basis).reshape(u.shape).astype(np.float32) * np.float32(view.gain)
        # (left)^2 - (left + cover scene - colour)^2, summed, the scene being level over the mark
        level = cv2.filter2D(scene, cv2.CV_32F, cover / cover.sum(), borderType=cv2.BORDER_REFLECT)
        on_cover = cv2.filter2D(left, cv2.CV_32F, cover, borderType=cv2.BORDER_REFLECT)
        on_colour = cv2.filter2D(left, cv2.CV_32F, colour, borderType=cv2.BORDER_REFLECT)
        square = float((cover**2).sum()) * level**2 - 2 * float((cover * colour).sum()) * level + float((colour**2).sum())
        gain = 2 * on_colour - 2 * level * on_cover - square
        gain[gain < 0.3 * square] = 0.0
        y, x = np.mgrid[y0:y1, x0:x1]
        gain[np.hypot(x - place[0], y - place[1]) > reach + 1] = 0.0
        found: list[Floats] = []
        while len(found) < _SEEK_MOST:
            row, column = np.unravel_index(int(np.argmax(gain)), gain.shape)
            if gain[row, column] <= 25 * self.background.noise**2:
                break
            found.append(np.array([x0 + column, y0 + row], dtype=float))
            n = int(np.ceil(self.radius))
            gain[max(0, row - n) : row + n + 1, max(0, column - n) : column + n + 1] = 0.0
        return found

    def search(self, view: View) -> list[Floats]:
        """Places in the whole picture where something differs from the scene on a disc and not on the ring around it."""
        scene = self.background.expected(view.gray.shape, None, view.motion) * np.float32(view.gain)
        left = np.minimum(np.abs(view.gray - scene), np.float32(60.0))
        k = int(np.ceil(1.5 * self.radius + 2))
        v, u = np.mgrid[-k : k + 1, -k : k + 1]
        rho = np.hypot(u, v)
        disc, ring = rho <= self.radius, (rho > self.radius + 1) & (rho <= 1.5 * self.radius + 2)
        kernel = (disc / disc.sum() - ring / ring.sum()).astype(np.float32)
        score = cv2.filter2D(left, cv2.CV_32F, kernel, borderType=cv2.BORDER_REFLECT)
        found: list[Floats] = []
        n = int(np.ceil(self.size_px))
        while len(found) < _SEEK_MOST:
            row, column = np.unravel_index(int(np.argmax(score)), score.shape)
            if score[row, column] < 3 * self.background.noise:
                break
            found.append(np.array([column, row], dtype=float))
            score[max(0, row - n) : row + n + 1, max(0, column - n) : column + n + 1] = 0.0
        return found

    # --- a background that shows the mark -----------------------------------------------------------------------

    def _notice_burnt_in(self, view: View, near: Floats) -> None:
        """A mark that hangs still for most of the clip may stand in the background: then the scene there is not known.

        What it is there is guessed from around, and replaced by what the mark uncovers when it falls.
        """
        self.burnt = None
        self.background = self.given
        region = _region(near, self.radius + 3, view.gray.shape)
        if region is None or not self.may_be_burnt:
            return
        x0, y0, x1, y1 = region
        left = view.gray[y0:y1, x0:x1] - self.background.expected(view.gray.shape, region, view.motion) * np.float32(view.gain)
        y, x = np.mgrid[y0:y1, x0:x1]
        core = np.hypot(x - near[0], y - near[1]) < 0.8 * self.radius
        if float(np.mean(np.abs(left[core]) > 4 * self.background.noise)) > 0.25:
            return
        at = view.to_scene(near)
        h, w = self.background.gray.shape
        rows, columns = np.mgrid[0:h, 0:w]
        self.burnt = np.hypot(columns - at[0], rows - at[1]) < self.radius + 3
        clean = self.background.gray.copy()
        half = int(self.radius + 12)
        a, b = max(0, int(at[1]) - half), max(0, int(at[0]) - half)
        part = np.clip(clean[a : a + 2 * half, b : b + 2 * half], 0, 255).astype(np.uint8)
        hole = self.burnt[a : a + 2 * half, b : b + 2 * half].astype(np.uint8)
        clean[a : a + 2 * half, b : b + 2 * half] = cv2.inpaint(part, hole, 5, cv2.INPAINT_TELEA)
        self.background = replace(self.background, gray=clean)

    def _uncover(self, view: View, sight: Sight) -> None:
        assert self.burnt is not None
        rows, columns = np.nonzero(self.burnt)
        at = view.to_frame(np.stack([columns, rows], axis=1).astype(float))
        free = np.hypot(at[:, 0] - sight.px[0], at[:, 1] - sight.px[1]) > self.radius + 4 + float(np.hypot(*sight.keep.p[BLUR])) / 2
        # not by the mark's own trembling, and not beside where it still hangs
        moved = float(np.hypot(*(view.to_scene(sight.px) - np.array([columns.mean(), rows.mean()]))))
        if not free.any() or moved < 5:
            return
        rows, columns = rows[free], columns[free]
        at = np.clip(np.rint(at[free]).astype(np.intp), 0, np.array(view.gray.shape[::-1]) - 1)
        self.background.gray[rows, columns] = view.gray[at[:, 1], at[:, 0]] / view.gain
        self.burnt[rows, columns] = False


def _starts(near: Floats, reach: float) -> Iterator[Floats]:
    """The place itself, then around it."""
    for dx, dy in ((0, 0), (-1, 0), (1, 0), (0, -1), (0, 1)):
        yield near + 0.5 * reach * np.array([dx, dy], dtype=float)


def _share_inside(centre: Floats, radius: float, size: tuple[int, int]) -> float:
    """Share of a square around a disc that lies in a picture of this width and height."""
    share = 1.0
    for at, length in zip(centre, size, strict=True):
        share *= float(np.clip(min(at + radius, length - 0.5) - max(at - radius, -0.5), 0, None)) / (2 * radius)
    return share


def _light_shift(fit: LayerFit, radius: float) -> Floats:
    """Centre of brightness minus centre of the outline [px].

    A slope of the look over a disc moves its centre of mass by radius/4 times slope over mean.
    """
    if fit.look.size == 1:
        return np.zeros(2)
    mean = fit.look[0] + 2 / 3 * fit.look[3] + (0.5 * fit.look[8] if fit.look.size == 9 else 0.0)
    return np.asarray(fit.look[1:3] * radius / 4 / max(abs(float(mean)), 1.0))


def _look_differs(one: Floats, other: Floats) -> float:
    """Root mean square over a disc, about, of the difference of two looks [grey levels]."""
    d = one - other
    if d.size == 1:
        return abs(float(d[0]))
    share = np.array([1.0, 0.25, 0.25, 0.5]) if d.size == 4 else np.array([1, 0.25, 0.25, 0.5, 0.04, 0.1, 0.1, 0.17, 0.33])
    mean = float(d[0] + (2 / 3) * d[3] + (0.5 * d[8] if d.size == 9 else 0.0))
    return float(np.sqrt(mean**2 + (share[1] * d[1] ** 2 + share[2] * d[2] ** 2)))


def blob_size(background: Background, view: View, near: Floats, reach: float) -> float | None:
    """Diameter [px] of what differs from the scene at a place, if it is about as wide as it is high; else None.

    Half of the largest difference is taken as its edge; the diameter is that of a disc of the same area.
    """
    region = _region(near, reach, view.gray.shape)
    if region is None:
        return None
    x0, y0, x1, y1 = region
    scene = background.expected(view.gray.shape, region, view.motion) * np.float32(view.gain)
    left = cv2.GaussianBlur(np.abs(view.gray[y0:y1, x0:x1] - scene), (0, 0), 0.7)
    top = float(np.percentile(left, 99.5))
    if top < 6 * background.noise:
        return None
    for share in (0.5, 0.25):  # of a shaded ball parts are as bright as the wall
        _, _, stats, centres = cv2.connectedComponentsWithStats((left > max(share * top, 4 * background.noise)).astype(np.uint8))
        if len(stats) < 2:
            continue
        away = np.hypot(centres[1:, 0] + x0 - near[0], centres[1:, 1] + y0 - near[1])
        k = 1 + int(np.argmin(away))
        width, height, area = (float(stats[k, i]) for i in (cv2.CC_STAT_WIDTH, cv2.CC_STAT_HEIGHT, cv2.CC_STAT_AREA))
        diameter = float(np.sqrt(4 * area / np.pi))
        compact = area / (width * height) > 0.6 and 0.6 < width / height < 1.6
        if compact and 3.0 <= diameter < 1.2 * reach and away[k - 1] < 0.5 * diameter + 4 * U_ORIGIN_PX:
            return diameter
    return None


@dataclass(slots=True, eq=False)
class TipEye:
    """Sees the free end of a line that carries no mark."""

    background: Background
    line: LineEnd
    contrast: float | None = None

    @property
    def size_px(self) -> float:
        return self.line.width_px

    def first(self, view: View, near: Floats) -> Sight | None:
        return self._see(view, near, np.zeros(2), 4 * U_ORIGIN_PX + 2 * self.line.width_px)

    def near(self, view: View, place: Floats, velocity: Floats, gate_px: float, way_s: float) -> Sight | None:
        return self._see(view, place, velocity * way_s, gate_px + self.line.width_px)

    def seek(self, view: View, place: Floats, last: Floats, since_s: float, reach_px: float, way_s: float) -> list[Sight]:
        sight = self._see(view, place, (place - last) / max(since_s, 1e-6) * way_s, reach_px)
        return [] if sight is None else [sight]

    def accept(self, sight: Sight, view: View) -> None:
        width, contrast = sight.keep
        self.contrast = contrast / view.gain if self.contrast is None else 0.9 * self.contrast + 0.1 * contrast / view.gain
        self.line = replace(self.line, width_px=0.9 * self.line.width_px + 0.1 * width, u_width=max(0.05, 0.9 * self.line.u_width))

    def doubt(self, view: View, sight: Sight, velocity: Floats, way_s: float) -> Floats:
        return np.zeros((2, 2))

    def _see(self, view: View, place: Floats, way: Floats, reach: float) -> Sight | None:
        region = _region(place, reach + 8 * self.line.width_px + 12, view.gray.shape)
        if region is None:
            return None
        x0, y0, x1, y1 = region
        scene = self.background.expected(view.gray.shape, region, view.motion) * np.float32(view.gain)
        fit = find_tip(
            view.gray[y0:y1, x0:x1], scene, (x0, y0), place, self.line, way=way, noise=self.background.noise,
            reach_px=reach, contrast=None if self.contrast is None else self.contrast * view.gain,
        )  # fmt: skip
        if fit is None:
            return None
        return Sight(
            px=fit.point, u_px=np.sqrt(np.diag(fit.cov)), diameter_px=fit.width_px, light_px=fit.bias_px * fit.direction,
            quality=fit.explains, whole=1.0, keep=(fit.width_px, fit.contrast),
        )  # fmt: skip
