"""Follow the free end of a line, or a dropped object, through a clip.

Frames stream through once, and only a window around the expected place is looked at. The place is expected from the
last places alone, without a law of motion: what is measured must not lean on what is to be shown. Where the mark is
not seen, or something else might be taken for it, there is no place; it is searched for again, farther out with each
frame, and taken up when three frames in a row agree.
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from calibration.clock import Clock
from calibration.notice import Notice
from tracker.follow.background import Background
from tracker.follow.course import Course
from tracker.follow.eye import U_RADIUS, DiscEye, Eye, Sight, TipEye, View, blob_size
from tracker.follow.hints import LineHints
from tracker.follow.tip import LineEnd

__all__ = ["EndFollow", "follow_end"]

Floats = NDArray[np.float64]

_LINE_M = 0.004  # width of a line whose end carries no mark, to begin with [m]
_HALF_HIDDEN = 0.85  # of the usual share of the outline
_LARGEST_M = 0.15  # half of a window in which a dropped object of untold size is looked for [m]
_U_GUESSED = 0.06  # relative, of such a size
_FALLS = ("free-drop", "surface-drop")
_IN_A_ROW = 3  # frames that must agree before a mark that was lost counts as found
_PATIENCE = 12  # frames searched within reach of the last place; afterwards the whole picture, now and then
_EVERY = 4
_DOUBTED = 12  # frames in which other models of the look are tried
_FLOOR_PX = 0.10  # of the steady offset's u: compression, sharpening, pixels
_LEAST_TOLD = 0.5  # scatter may lower the fits' own u (which counts on an imperfect look) by this much at most
_SCATTER_REACH = 4  # frames to either side for the local cubic


class _Shake(Protocol):
    def measure(self, gray: NDArray[np.uint8]) -> Any: ...


class _Plane(Protocol):
    def to_metres(self, points_px: ArrayLike) -> Floats: ...


@dataclass(frozen=True, slots=True, eq=False)
class EndFollow:
    """An end followed through a clip; arrays over its frames.

    Attributes
    ----------
    frame : (n,) int array
    px : (n, 2) array
        Column and row of the end in the reference frame of the picture (camera movement undone); NaN where it was not
        measured.
    raw_px : (n, 2) array
        The same in the frame itself.
    u_px : (n,) array
        Standard uncertainty of a coordinate, independent from frame to frame.
    u_xy_px : (n, 2) array
        The same for column and row.
    t_s : (n,) array
        True time at which the end was seen, from its own row.
    speed_px_s : (n,) array
        From a local parabola over two frames to either side.
    diameter_px : (n,) array
        Of the mark as seen, or width of the line at its end.
    flags : tuple of tuple of str
        "end-still", "end-landed", "end-lost", "end-hidden", "end-ambiguous", "end-out-of-picture", "end-not-found",
        "shake-unknown".
    bias_px : float
        Standard uncertainty of a steady offset of the end, common to the clip, from one-sided light and size.
    wander_px : float
        Standard uncertainty of a slow change of that offset over the clip.
    light_px : (2,) array
        Centre of brightness minus end, on the mean: what an outline has kept out of the result.
    notices : tuple of Notice
    """

    frame: NDArray[np.int64]
    px: Floats
    raw_px: Floats
    u_px: Floats
    u_xy_px: Floats
    t_s: Floats
    speed_px_s: Floats
    diameter_px: Floats
    flags: tuple[tuple[str, ...], ...]
    bias_px: float
    wander_px: float
    light_px: Floats
    notices: tuple[Notice, ...]


@dataclass(slots=True, eq=False)
class _Kept:
    """What remains of one frame."""

    frame: int
    raw: Floats = field(default_factory=lambda: np.full(2, np.nan))
    px: Floats = field(default_factory=lambda: np.full(2, np.nan))
    u: Floats = field(default_factory=lambda: np.full(2, np.nan))
    diameter: float = np.nan
    light: Floats = field(default_factory=lambda: np.full(2, np.nan))
    doubt: Floats | None = None
    whole: float = np.nan
    found: bool = False  # after a loss
    flags: list[str] = field(default_factory=list)


def follow_end(
    frames: Iterable[tuple[int, NDArray[np.uint8]]],
    background: Background,
    plane: _Plane,
    clock: Clock,
    hints: LineHints,
    shake: _Shake | None = None,
    progress: Callable[[int], object] | None = None,
) -> EndFollow:
    """Follow the end named by `hints` through a clip.

    Parameters
    ----------
    frames : iterable of (int, (h, w) uint8 array)
        Index and grey upright picture, in order. Read once.
    background : Background
        The still scene.
    plane : Plane
        For the distance, from which a ball's outline off the axis follows; its places are not used.
    clock : Clock
    hints : LineHints
        `origin_px` is the end's place at the start; `end_mark_px` None follows the bare end of a line.
    shake : ShakeMeter, optional
        Takes camera movement out.
    progress : callable, optional
        Called with each frame's index.

    Returns
    -------
    EndFollow

    Notes
    -----
    Memory does not grow with the clip but for some dozen numbers a frame.
    """
    follower = _Follower(background, plane, clock, hints, shake)
    for index, gray in frames:
        if hints.window is None or hints.window[0] <= index < hints.window[1]:
            follower.step(index, gray)
        if progress is not None:
            progress(index)
    return follower.result()


class _Follower:
    """Goes from frame to frame."""

    def __init__(
        self, background: Background, plane: _Plane, clock: Clock, hints: LineHints, shake: _Shake | None
    ) -> None:
        self.background, self.clock, self.hints, self.shake = background, clock, hints, shake
        self.origin = np.asarray(hints.origin_px, dtype=float)
        self.period = clock.period_s
        self.way_s = hints.exposure_s if hints.exposure_s is not None else 0.25 * self.period
        self.plane = plane
        self.eye: Eye | None = None
        if hints.end_mark_px is not None:
            self.eye = self._disc_eye(max(float(hints.end_mark_px), 1.5))
        self.course = Course()
        self.kept: list[_Kept] = []
        self.lost = 0  # frames since the end was last seen
        self.gone = False
        self.last_sight = -1
        self.unfound = 0  # frames in which it was not found at first
        self.guessed_size: float | None = None

    def _disc_eye(self, size: float, u_size: float = U_RADIUS) -> DiscEye:
        distance = getattr(self.plane, "distance_m", None)
        focal = float(distance) * self.hints.px_per_m if distance is not None else np.inf
        at = self.clock.at(0, np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]]))
        u_way = 0.15 if self.hints.exposure_s is not None else 0.6
        slope = np.array([at[1] - at[0], at[2] - at[0]])
        return DiscEye(
            self.background, size, focal, slope, u_size=u_size, u_way=u_way, may_be_burnt=self.hints.kind != "edge-slide"
        )

    def _eye_without_size(self, view: View) -> Eye:
        """A dropped object of untold size is looked at; otherwise the end is that of a bare line."""
        if self.hints.kind == "free-drop":
            size = blob_size(self.background, view, view.to_frame(self.origin), _LARGEST_M * self.hints.px_per_m)
            if size is not None:
                self.guessed_size = size
                return self._disc_eye(size, _U_GUESSED)
        return TipEye(self.background, LineEnd(max(_LINE_M * self.hints.px_per_m, 1.5)))

    # --- one frame ----------------------------------------------------------------------------------------------

    def step(self, index: int, gray: NDArray[np.uint8]) -> None:
        kept = _Kept(index)
        self.kept.append(kept)
        motion = None
        if self.shake is not None:
            motion = self.shake.measure(gray)
            if not motion.ok:
                kept.flags.append("shake-unknown")
            if not motion.ok or motion.still:
                motion = None
        view = View.of(gray, self.background.gray, motion)
        if self.eye is None:
            self.eye = self._eye_without_size(view)
        sight = self._look(self.eye, index, view, kept)
        if sight is None:
            self.lost += 1
            return
        px = view.to_scene(sight.px)
        self.eye.accept(sight, view)
        self.course.add(float(self.clock.at(index, sight.px)), px)
        u_motion = 0.0 if motion is None or not np.isfinite(motion.u_px) else float(motion.u_px)
        kept.raw, kept.px, kept.u = sight.px, px, np.hypot(sight.u_px, u_motion)
        kept.diameter, kept.light, kept.whole, kept.found = sight.diameter_px, sight.light_px, sight.whole, self.lost > 0
        if self.last_sight < 0 or index - self.last_sight >= max(2, len(self.clock.frame_s) // _DOUBTED):
            velocity = self.course.at(self.course.t_s[-1])[1]
            kept.doubt, self.last_sight = self.eye.doubt(view, sight, velocity, self.way_s), index
        self.lost = 0

    def _look(self, eye: Eye, index: int, view: View, kept: _Kept) -> Sight | None:
        if not self.course.t_s:
            sight = self._first(eye, view)
            if sight is None:
                kept.flags.append("end-not-found")
            return sight
        h, w = view.gray.shape
        t = float(self.clock.at(index, view.to_frame(self.course.px[-1])))
        place, velocity, gate = self.course.at(t)
        if self.lost == 0:  # its own row is exposed at another time than the last one's
            t = float(self.clock.at(index, view.to_frame(place)))
            place, velocity, gate = self.course.at(t)
        at = view.to_frame(place)
        outside = bool((at < 0).any() or at[0] > w - 1 or at[1] > h - 1)
        if self.gone:
            kept.flags.append("end-out-of-picture")
            return None
        if self.lost < 3:
            sight = eye.near(view, at, velocity, gate, self.way_s) if not outside else None
            if sight is not None and self._inside(sight, view):
                return sight
        if self._leaves(at, velocity, outside, view, eye.size_px):
            self.gone = self.hints.kind in (*_FALLS, "edge-slide")
            kept.flags.append("end-out-of-picture")
            return None
        return self._seek(eye, view, t, at, velocity, gate, kept)

    def _inside(self, sight: Sight, view: View) -> bool:
        h, w = view.gray.shape
        return bool(0 <= sight.px[0] <= w - 1 and 0 <= sight.px[1] <= h - 1)

    def _leaves(self, at: Floats, velocity: Floats, outside: bool, view: View, size: float) -> bool:
        """It was moving out of the picture and is at its border, or beyond."""
        if outside:
            return True
        h, w = view.gray.shape
        ahead = at + np.sign(velocity) * 0.6 * size
        fast = float(np.hypot(*velocity)) * self.period > 1.0
        return fast and bool((ahead < 0).any() or ahead[0] > w - 1 or ahead[1] > h - 1)

    def _first(self, eye: Eye, view: View) -> Sight | None:
        """The end at its origin; anywhere, when the clip begins after the release or the origin is a table's edge."""
        sight = eye.first(view, view.to_frame(self.origin))
        self.unfound += sight is None
        elsewhere = self.hints.kind == "edge-slide" or self.kept[0].frame > self.hints.origin_frame
        if sight is not None or not elsewhere or not isinstance(eye, DiscEye) or self.unfound % _EVERY != 1:
            return sight
        found = [s for s in (eye.first(view, place) for place in eye.search(view)) if s is not None]
        return max(found, key=lambda s: float(s.px[1])) if found else None

    def _seek(
        self, eye: Eye, view: View, t: float, at: Floats, velocity: Floats, gate: float, kept: _Kept
    ) -> Sight | None:
        """Search around, farther out the longer it has not been seen."""
        size, last = eye.size_px, view.to_frame(self.course.px[-1])
        since = t - self.course.t_s[-1]
        if self.hints.kind in _FALLS:  # what falls goes on falling, or stops on its way: nowhere else is it looked for
            middle, reach = 0.5 * (at + last), 0.5 * float(np.hypot(*(at - last))) + min(gate, size) + size
        elif self.lost < _PATIENCE:
            step = float(np.hypot(*velocity)) * since
            reach = min(gate, 4 * size) + 2 * size + step
            middle = 0.5 * (at + last) if self.lost == 0 else last
            reach += 0.5 * float(np.hypot(*(at - last)))
        elif self.lost % _EVERY == 0:
            h, w = view.gray.shape
            middle, reach = np.array([(w - 1) / 2, (h - 1) / 2]), 0.5 * float(np.hypot(h, w))
        else:
            kept.flags.append("end-lost")
            return None
        found = [s for s in eye.seek(view, middle, last, since, reach, self.way_s) if self._inside(s, view)]
        if not found:
            kept.flags.append("end-hidden" if self.lost < 3 else "end-lost")
            return None
        if len(found) > 1 and found[1].quality > 0.9 * found[0].quality:
            near = sorted(found[:2], key=lambda sight: float(np.hypot(*(sight.px - at))))
            one, other = (float(np.hypot(*(sight.px - at))) for sight in near)
            if one > gate + 0.5 * size or other < 3 * one:
                kept.flags.append("end-ambiguous")
                return None
            return near[0]
        return found[0]

    # --- the clip -----------------------------------------------------------------------------------------------

    def result(self) -> EndFollow:
        if isinstance(self.eye, DiscEye) and self.eye.burnt is not None:
            _drop_scenery(self.kept, self.eye.size_px)
        _drop_short_finds(self.kept)
        _drop_half_hidden(self.kept)
        frame = np.array([k.frame for k in self.kept], dtype=np.int64)
        px, raw = _stacked([k.px for k in self.kept]), _stacked([k.raw for k in self.kept])
        u_xy = _stacked([k.u for k in self.kept])
        seen = np.asarray(np.isfinite(px).all(axis=1))
        t = np.full(len(frame), np.nan)
        t[seen] = self.clock.at(frame[seen], raw[seen])
        u_xy = u_xy * _scatter_over_told(t, px, u_xy)
        speed = _speeds(t, px)
        self._say_rest(px, speed)
        light = _stacked([k.light for k in self.kept])[seen]
        doubts = [k.doubt for k in self.kept if k.doubt is not None and np.isfinite(k.px).all()]
        bias, wander, mean_light = _doubt(light, np.array(doubts).reshape(-1, 2, 2))
        if isinstance(self.eye, TipEye) and light.size:  # a bare tip: how the end is cut is not known
            bias = float(np.hypot(bias, np.mean(np.hypot(light[:, 0], light[:, 1]))))
        return EndFollow(
            frame=frame, px=px, raw_px=raw, u_px=np.sqrt((u_xy**2).mean(axis=1)), u_xy_px=u_xy, t_s=t, speed_px_s=speed,
            diameter_px=np.array([k.diameter for k in self.kept]), flags=tuple(tuple(k.flags) for k in self.kept),
            bias_px=bias, wander_px=wander, light_px=mean_light, notices=self._notices(seen, bias),
        )  # fmt: skip

    def _say_rest(self, px: Floats, speed: Floats) -> None:
        """Flag the frames before the release and those in which it has come to rest below."""
        seen = np.asarray(np.isfinite(px).all(axis=1))
        if not seen.any():
            return
        fallen = px[:, 1] - px[seen][0, 1]
        slow = np.nan_to_num(speed, nan=np.inf) * self.period < 0.15
        moved = np.flatnonzero(seen & (np.abs(fallen) > 2.0))
        first = moved[0] if moved.size else len(px)
        lowest = float(np.nanmax(fallen))
        for i, kept in enumerate(self.kept):
            if seen[i] and i < first and slow[i]:
                kept.flags.append("end-still")
            if self.hints.kind == "surface-drop" and i > first and seen[i] and slow[i] and fallen[i] > 0.8 * lowest:
                kept.flags.append("end-landed")

    def _notices(self, seen: NDArray[np.bool_], bias: float) -> tuple[Notice, ...]:
        found: list[Notice] = []
        if not seen.any() and self.kept:
            found.append(
                Notice(
                    "end-not-found",
                    f"No end like that of the sheet is near column {self.origin[0]:.0f}, row {self.origin[1]:.0f}.",
                    "Nothing is measured.",
                    "Check datum.origin_px (the centre of the mark while it hangs) and line.end_mark_m (its diameter).",
                )
            )
        if self.guessed_size is not None:
            found.append(
                Notice(
                    "end-size-guessed",
                    f"The size of what falls is not given; it looks {self.guessed_size:.1f} px wide.",
                    "Its outline, and with it its place, is less certain.",
                    "Give line.end_mark_m or line.object_diameter_m.",
                )
            )
        if isinstance(self.eye, DiscEye) and self.eye.burnt is not None and seen.any():
            found.append(
                Notice(
                    "end-in-background",
                    "The end hangs still for so much of the clip that the background shows it.",
                    "Before the release its place rests on a guess of the wall behind it.",
                    "Start the camera less than a second before the release.",
                )
            )
        ambiguous = [k.frame for k in self.kept if "end-ambiguous" in k.flags]
        if ambiguous:
            found.append(
                Notice(
                    "end-ambiguous",
                    f"In {len(ambiguous)} frames (first {ambiguous[0]}) two things look like the end.",
                    "These frames are left empty.",
                    "Give the end a ball or tape that nothing else in the picture resembles.",
                )
            )
        lost = [k.frame for i, k in enumerate(self.kept) if not seen[i] and {"end-lost", "end-hidden"} & set(k.flags)]
        if lost:
            found.append(
                Notice(
                    "end-not-seen",
                    f"In {len(lost)} frames (first {lost[0]}) the end is hidden or was not found again.",
                    "These frames are left empty.",
                    "Shorten the exposure and choose a mark that stands out from wall and line.",
                )
            )
        return tuple(found)


def _stacked(items: list[Floats]) -> Floats:
    return np.array(items, dtype=float).reshape(len(items), 2)


def _drop_short_finds(kept: list[_Kept]) -> None:
    """Leave empty what was found after a loss and lost again before three frames agreed: it may have been another thing."""
    i = 0
    while i < len(kept):
        if not kept[i].found:
            i += 1
            continue
        end = i + 1
        while end < len(kept) and np.isfinite(kept[end].px).all() and not kept[end].found:
            end += 1
        if end - i < _IN_A_ROW and end < len(kept):
            for k in range(i, end):
                kept[k] = _emptied(kept[k])
        i = end


def _drop_scenery(kept: list[_Kept], size_px: float) -> None:
    """Leave all empty if what looked like the end is in the background and never went away: it is part of the scene."""
    px = _stacked([k.px for k in kept])
    if np.isfinite(px).any() and not (np.hypot(*(px - px[np.isfinite(px[:, 0])][0]).T) > 0.5 * size_px).any():
        kept[:] = [_Kept(k.frame, flags=[*k.flags, "end-not-found"]) for k in kept]


def _drop_half_hidden(kept: list[_Kept]) -> None:
    """Leave empty the frames next to a loss in which less of the outline was seen than usual: something covers it already."""
    whole = np.array([k.whole for k in kept])
    if not np.isfinite(whole).any():
        return
    usual = float(np.nanmedian(whole))
    hidden = [bool({"end-hidden", "end-lost"} & set(k.flags)) for k in kept]
    for step in (1, -1):
        for i in range(len(kept)) if step > 0 else range(len(kept) - 1, -1, -1):
            before = i - step
            if 0 <= before < len(kept) and hidden[before] and whole[i] < _HALF_HIDDEN * usual:
                kept[i] = _Kept(kept[i].frame, flags=[*kept[i].flags, "end-hidden"])
                hidden[i] = True


def _emptied(kept: _Kept) -> _Kept:
    return _Kept(kept.frame, flags=[*kept.flags, "end-lost"])


def _scatter_over_told(t: Floats, px: Floats, u: Floats) -> Floats:
    """Scatter of the places about local cubics over their own uncertainty, per coordinate: (2,).

    Each place is held against the cubic through its neighbours, itself left out. The median over the clip does not
    notice the few frames in which a whip is no cubic.
    """
    n, reach = len(t), _SCATTER_REACH
    ratios: list[Floats] = []
    for i in range(reach, n - reach):
        near = np.arange(i - reach, i + reach + 1)
        if not np.isfinite(t[near]).all():
            continue
        x = (t[near] - t[i]) / (t[near[-1]] - t[near[0]])
        basis = np.vander(x, 4)
        hat = basis @ np.linalg.pinv(basis)
        left = px[near[reach]] - hat[reach] @ px[near]
        ratios.append(np.abs(left) / np.sqrt(max(1 - hat[reach, reach], 1e-9)) / np.maximum(u[i], 1e-6))
    if len(ratios) < 8:
        return np.ones(2)
    return np.maximum(1.4826 * np.median(np.array(ratios), axis=0), _LEAST_TOLD)


def _speeds(t: Floats, px: Floats) -> Floats:
    out = np.full(len(t), np.nan)
    for i in range(len(t)):
        near = np.arange(max(i - 2, 0), min(i + 3, len(t)))
        near = near[np.isfinite(t[near])]
        if not np.isfinite(t[i]) or len(near) < 3:
            continue
        span = float(t[near[-1]] - t[near[0]])
        c = np.linalg.lstsq(np.vander((t[near] - t[i]) / span, 3, increasing=True), px[near], rcond=None)[0]
        out[i] = float(np.hypot(*c[1])) / span
    return out


def _doubt(light: Floats, doubts: Floats) -> tuple[float, float, Floats]:
    """Steady and slowly changing uncertainty of the offset [px], and the mean way from outline to brightness centre.

    Two things are asked of some frames: how far does the centre move when the look is described by other functions, and
    when the mark is larger by its uncertainty. That it is the same in all frames, or changes, is told by their scatter.
    """
    if not len(light):
        return float("nan"), float("nan"), np.full(2, np.nan)
    mean = np.asarray(np.median(light, axis=0))
    if not len(doubts):
        return _FLOOR_PX, _FLOOR_PX, mean
    moved = np.median(doubts, axis=0)
    scatter = 1.4826 * np.median(np.abs(doubts - moved), axis=0)
    bias = float(np.sqrt(_FLOOR_PX**2 + (moved**2).sum()))
    return bias, float(np.sqrt((scatter**2).sum() / 2)), mean
