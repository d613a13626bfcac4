"""Follow a payout, or a line drawn from a container, through a clip: arc and line speed, frame by frame.

Frames stream through once. Of each there remain the axis (thinned), the arc's figures, sights of marks and one
complex number per pitch of texture; at the end the sights become the speed at the rim, and the profiles gathered
along the way tell by how much one-sided light had moved the axis.
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.ndimage import uniform_filter1d
from scipy.signal import savgol_filter

from calibration.clock import Clock
from calibration.notice import Notice
from tracker.follow.along import Along, along_line, carried_jump, jitter
from tracker.follow.arc import Arc, measure_arc
from tracker.follow.background import Background
from tracker.follow.centreline import Centreline, LineFollower
from tracker.follow.marks import MarkSight, MarkTrack, follow_marks, see_marks
from tracker.follow.profile import SideLight, side_light
from tracker.follow.speed import SpeedSeries, TextureSteps, speed_series
from tracker.follow.texture import TexturePhases, displacement_modulo_pitch, texture_phases

__all__ = ["PayoutFollow", "PayoutFrame", "follow_payout"]

Floats = NDArray[np.float64]

_THIN = 3  # every third point of the axis is kept
_NODE_PX = 12  # the plane is evaluated this often along the line
_BLURRED = 0.8  # of a pitch travelled during the exposure: the texture is as good as gone
_GLIMPSE_FRAMES = (6, 12)  # a tenth of the clip, but no fewer and no more
_DOUBT_FRAMES = 15
_U_RIM_PX = 0.8  # of the rim's crossing along the line in one frame: half a pixel of height where the line is flat
_U_CARRIED_PX, _U_MOVED = 0.05, 0.4  # of the coordinate carried to the next frame, and per pixel that the line moved
_NAN2 = np.full(2, np.nan)


class _Plane(Protocol):
    def to_metres(self, points_px: ArrayLike) -> Floats: ...


class _Hints(Protocol):
    @property
    def origin_px(self) -> tuple[float, float]: ...
    @property
    def pitch_m(self) -> float | None: ...
    @property
    def mark_spacing_m(self) -> float | None: ...
    @property
    def exposure_s(self) -> float | None: ...
    @property
    def kind(self) -> str: ...


@dataclass(frozen=True, slots=True, eq=False)
class PayoutFrame:
    """What one frame shows.

    Attributes
    ----------
    frame : int
    line_px : (n, 2) float32 array
        Axis from the rim to the exit; NaN where it was not seen. Empty where the line was lost.
    u_line_px : (n,) float32 array
        Standard uncertainty across the line, independent part [px].
    apex_px, apex_m : (2,) arrays
        Highest point of the axis in the picture, and its x and z [m]; NaN where it was not measured.
    u_apex_m : float
        Standard uncertainty of its z, this frame's independent part [m].
    apex_t_s : float
        True time at which it was seen [s].
    width_m, radius_m, u_radius_m : float
        Distance of the legs at half the apex's height, radius of curvature at the top [m].
    legs_px : (2, 2) array
        The two places of the width.
    apex_plane_px, legs_plane_px : (2,) and (2, 2) arrays
        The same places with the camera's movement taken out: what the plane maps to metres.
    marks_px : (m, 2) array
        Marks followed, in this frame.
    flags : tuple of str
        "line-lost", "arc-leaves-picture", "gap-at-apex", "no-arc", "blurred-texture", "speed-ambiguous".
    """

    frame: int
    line_px: NDArray[np.float32]
    u_line_px: NDArray[np.float32]
    apex_px: Floats
    apex_m: Floats
    u_apex_m: float
    apex_t_s: float
    width_m: float
    radius_m: float
    u_radius_m: float
    legs_px: Floats
    apex_plane_px: Floats
    legs_plane_px: Floats
    marks_px: Floats
    flags: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class PayoutFollow:
    """A payout followed through a clip.

    Attributes
    ----------
    frames : tuple of PayoutFrame
    speed : SpeedSeries
        Per frame, at the apex's time (where there is none, at the time the rim was seen).
    shift_px : (2,) array
        One-sided light had moved the axis by this vector's part across the line; it is taken out [px].
    bias_px : float
        Standard uncertainty of what is left of it, common to the clip, across the line [px].
    width_px : float
        Width of the line in the picture.
    polarity : str
        "lighter", "darker" or "both": against the scene behind it.
    notices : tuple of Notice
    """

    frames: tuple[PayoutFrame, ...]
    speed: SpeedSeries
    shift_px: Floats
    bias_px: float
    width_px: float
    polarity: str
    notices: tuple[Notice, ...]


@dataclass(slots=True, eq=False)
class _Kept:
    """What remains of one frame while the clip streams by."""

    frame: int
    motion: Any = None
    arc: Arc | None = None
    u_apex_m: float = np.nan
    sights: list[MarkSight] = field(default_factory=list)
    flags: list[str] = field(default_factory=list)
    line_px: NDArray[np.float32] = field(default_factory=lambda: np.zeros((0, 2), np.float32))
    u_line_px: NDArray[np.float32] = field(default_factory=lambda: np.zeros(0, np.float32))
    jump_m: float = np.nan
    doubt_m: float = np.nan
    moved_px: float = np.nan
    lighter: float = np.nan


def follow_payout(
    frames: Iterable[tuple[int, NDArray[np.uint8]]],
    background: Background,
    plane: _Plane,
    clock: Clock,
    hints: _Hints,
    shake: Any = None,
    progress: Callable[[int], None] | None = None,
) -> PayoutFollow:
    """Follow a payout or a drawn line.

    Parameters
    ----------
    frames : iterable of (index, (h, w) uint8 array)
        Upright luma frames in order.
    background : Background
    plane : Plane
    clock : Clock
    hints : LineHints
        Datum, pitch, mark spacing, exposure and kind, as far as the sheet states them.
    shake : ShakeMeter, optional
        Its `measure(gray)` gives each frame's camera movement.
    progress : callable, optional
        Called with the index of each frame done.

    Returns
    -------
    PayoutFollow
        Always: where nothing was found all frames say so.
    """
    reader = _Reader(background, plane, clock, hints)
    for index, gray in frames:
        motion = None if shake is None else shake.measure(gray)
        if motion is not None and not getattr(motion, "ok", True):
            motion = None
        reader.read(index, gray, motion)
        if progress is not None:
            progress(index)
    return reader.result()


class _Reader:
    """Holds the follower and what is kept of the frames read so far."""

    def __init__(self, background: Background, plane: _Plane, clock: Clock, hints: _Hints) -> None:
        self.background, self.plane, self.clock, self.hints = background, plane, clock, hints
        self.px_per_m, up = _scale_and_up(plane, hints.origin_px)
        repeat = None if hints.pitch_m is None else hints.pitch_m * self.px_per_m
        self.follower = LineFollower(background, (float(hints.origin_px[0]), float(hints.origin_px[1])), repeat, up)
        self.up = np.asarray(up)
        self.average_px = repeat if repeat is not None else max(3.0, 0.004 * self.px_per_m)
        self.kept: list[_Kept] = []
        self.steps: list[tuple[float, float, float, float, int]] = []
        self.last: tuple[int, TexturePhases] | None = None
        self.last_along: tuple[int, Along] | None = None

    def read(self, index: int, gray: NDArray[np.uint8], motion: Any) -> None:
        kept = _Kept(index, motion)
        self.kept.append(kept)
        line = self.follower.follow(index, gray, motion)
        if line is None:
            kept.flags.append("line-lost")
            self.last = self.last_along = None
            return
        points = line.points_px
        place = points if motion is None else np.asarray(motion.undo(points))
        metres = _metres(self.plane, place)
        self._arc(kept, line, points, place, metres, gray.shape)
        self._along(kept, index, line, place, metres)
        keep = points[::_THIN].astype(np.float32)
        keep[~line.seen[::_THIN]] = np.nan
        kept.line_px, kept.u_line_px = keep, line.u_px[::_THIN].astype(np.float32)
        kept.moved_px = float(np.sqrt(np.mean(line.move_px**2)))
        kept.lighter = float(np.mean(line.brightness > 0))

    def _arc(
        self, kept: _Kept, line: Centreline, points: Floats, place: Floats, metres: Floats, shape: tuple[int, ...]
    ) -> None:
        inside = (points >= 1).all(axis=1) & (points[:, 0] <= shape[1] - 2) & (points[:, 1] <= shape[0] - 2)
        top = int(np.argmax(metres[:, 1]))
        if not inside[max(top - 3, 0) : top + 4].all() or (top in (0, len(points) - 1) and points[top, 1] < 6):
            kept.flags.append("arc-leaves-picture")
            return
        arc = measure_arc(points, metres, line.seen, line.u_px / self.px_per_m)
        if arc is None:
            kept.flags.append("no-arc")
            return
        if arc.bridged:
            kept.flags.append("gap-at-apex")
        kept.arc, kept.u_apex_m = arc, arc.u_apex_m

    def _along(self, kept: _Kept, index: int, line: Centreline, place: Floats, metres: Floats) -> None:
        """Marks and texture in the coordinate along the line."""
        points = line.points_px
        t = self.clock.at(index, points)
        frame_s = self.clock.frame_s
        period = float(frame_s[index] - frame_s[index - 1]) if index > 0 else self.clock.period_s
        tangent = np.gradient(metres, axis=0)
        pixel = np.hypot(tangent[:, 0], tangent[:, 1]) / np.maximum(np.hypot(*np.gradient(points, axis=0).T), 1e-9)
        normal = np.column_stack([-tangent[:, 1], tangent[:, 0]]) / np.maximum(np.hypot(*tangent.T), 1e-12)[:, None]
        move = line.move_px * pixel
        touched = round(0.5 * (self.follower.width_px + self.average_px)) + 1
        here = along_line(metres, move, normal, t, period, touched)
        sigma = here.sigma_m
        kept.doubt_m = here.doubt_m
        if self.last_along is not None and self.last_along[0] == index - 1:
            kept.jump_m = carried_jump(self.last_along[1], here, move, normal)
        self.last_along = (index, here)
        column = np.clip(np.rint(place[:, 0]).astype(np.intp), 0, self.background.gray.shape[1] - 1)
        row = np.clip(np.rint(place[:, 1]).astype(np.intp), 0, self.background.gray.shape[0] - 1)
        shown = line.brightness + self.background.gray[row, column]
        spacing = self.hints.mark_spacing_m
        window = 0.7 * spacing * self.px_per_m if spacing else 120.0
        where = np.arange(sigma.size)
        for at, height, length in see_marks(shown, line.seen, self.average_px, min(window, sigma.size / 2)):
            if not 0.75 * length + self.average_px < at < sigma.size - 1 - 0.75 * length - self.average_px:
                continue  # cut by the rim or by the border, its middle is not the mark's
            spot = np.array([np.interp(at, where, points[:, 0]), np.interp(at, where, points[:, 1])])
            u = 0.3 + 2.0 * self.background.noise * np.sqrt(max(length, 1.0)) / max(abs(height), 1.0)
            kept.sights.append(
                MarkSight(
                    index, at, spot, float(np.interp(at, where, sigma)), float(np.interp(at, where, t)), height,
                    u / self.px_per_m,
                )
            )  # fmt: skip
        if self.hints.pitch_m is None:
            return
        late = t - frame_s[index]
        now = texture_phases(line.brightness, sigma, late, line.seen, self.hints.pitch_m, self.average_px)
        if self.last is not None and self.last[0] == index - 1:
            step, u_step, mean_late = displacement_modulo_pitch(self.last[1], now, self.hints.pitch_m)
            self.steps.append(
                (step, u_step, frame_s[index - 1] + mean_late, frame_s[index] + mean_late, len(self.kept) - 1)
            )
        self.last = (index, now)

    # at the end -----------------------------------------------------------------------------------------------------

    def result(self) -> PayoutFollow:
        kept = self.kept
        _drop_glimpses(kept)
        first = kept[0].frame if kept else 0
        frame_s = self.clock.frame_s[first : first + len(kept)] if kept else np.zeros(1)
        at_s = np.array([self._time(k) for k in kept])
        light = side_light(self.follower.pool) if self.follower.pool is not None else SideLight.unknown()
        tracks = self._tracks(frame_s)
        speed = self._speed(tracks, frame_s, at_s)
        _scatter_of_apexes(kept, at_s)
        marks = _marks_by_frame(tracks)
        frames = tuple(self._frame(k, t, light, marks, speed, i) for i, (k, t) in enumerate(zip(kept, at_s, strict=True)))
        lighter = np.nanmedian([k.lighter for k in kept]) if any(np.isfinite(k.lighter) for k in kept) else 0.5
        polarity = "lighter" if lighter > 0.9 else "darker" if lighter < 0.1 else "both"
        return PayoutFollow(
            frames, speed, light.vector_px, light.u_px, self.follower.width_px, polarity, self._notices(kept, speed, tracks)
        )

    def _time(self, kept: _Kept) -> float:
        point = self.hints.origin_px if kept.arc is None else kept.arc.apex_px
        return float(self.clock.at(kept.frame, np.asarray(point, float)))

    def _tracks(self, frame_s: Floats) -> list[MarkTrack]:
        if len(self.kept) < 3:
            return []
        first = self.kept[0].frame
        late = self._jitter()
        sights = [
            [replace(s, frame=s.frame - first, sigma_m=s.sigma_m - off) for s in k.sights]
            for k, off in zip(self.kept, late, strict=True)
        ]
        return follow_marks(sights, frame_s, self.hints.mark_spacing_m)

    def _jitter(self) -> Floats:
        jumps = np.array([k.jump_m for k in self.kept])
        u = np.hypot(_U_CARRIED_PX, _U_MOVED * np.array([k.moved_px for k in self.kept])) / self.px_per_m
        return jitter(jumps, u, _U_RIM_PX / self.px_per_m)

    def _speed(self, tracks: list[MarkTrack], frame_s: Floats, at_s: Floats) -> SpeedSeries:
        texture = None
        if self.steps and self.hints.pitch_m is not None:
            step, u, a, b, number = (np.array(x) for x in zip(*self.steps, strict=True))
            late = self._jitter()
            k = number.astype(np.intp)
            step = step - (late[k] - late[k - 1])
            texture = TextureSteps(step, u, a, b, self.hints.pitch_m)
        rest = [k.moved_px for k in self.kept[1:6]]
        at_rest = len(rest) > 0 and bool(np.all(np.array(rest) < 0.1))
        speed = speed_series(
            tracks, texture, frame_s, at_s, spacing_m=self.hints.mark_spacing_m, at_rest_first=at_rest
        )
        doubt = _pace_of(np.array([k.doubt_m for k in self.kept]), frame_s)
        return replace(speed, u_v_mps=np.hypot(speed.u_v_mps, doubt))

    def _frame(
        self, kept: _Kept, t: float, light: SideLight, marks: dict[int, list[Floats]], speed: SpeedSeries, i: int
    ) -> PayoutFrame:
        flags = list(kept.flags)
        v = float(speed.v_mps[i])
        pitch, exposure = self.hints.pitch_m, self.hints.exposure_s
        if pitch and exposure and abs(v) * exposure > _BLURRED * pitch:
            flags.append("blurred-texture")
        if speed.verdict[i] == "ambiguous":
            flags.append("speed-ambiguous")
        line = kept.line_px + light.across(kept.line_px).astype(np.float32) if len(kept.line_px) > 8 else kept.line_px
        at = np.array(marks.get(i, [])).reshape(-1, 2)
        arc = kept.arc
        if arc is None:
            return PayoutFrame(
                kept.frame, line, kept.u_line_px, _NAN2, _NAN2, np.nan, t, np.nan, np.nan, np.nan,
                np.full((2, 2), np.nan), _NAN2, np.full((2, 2), np.nan), at, tuple(flags),
            )  # fmt: skip
        up = float(light.vector_px @ self.up)  # one lamp moves both legs the same way: the width stays
        apex, legs = arc.apex_px + up * self.up, arc.legs_px
        still = kept.motion is None
        return PayoutFrame(
            kept.frame, line, kept.u_line_px, apex, arc.apex_m + np.array([0.0, up / self.px_per_m]),
            kept.u_apex_m, t, arc.width_m, arc.radius_m, arc.u_radius_m, legs,
            apex if still else np.asarray(kept.motion.undo(apex)), legs if still else np.asarray(kept.motion.undo(legs)),
            at, tuple(flags),
        )  # fmt: skip

    def _notices(self, kept: list[_Kept], speed: SpeedSeries, tracks: list[MarkTrack]) -> tuple[Notice, ...]:
        out = []
        lost = [k.frame for k in kept if "line-lost" in k.flags]
        if kept and lost:
            out.append(
                Notice(
                    "line-lost", f"The line was not found in {len(lost)} of {len(kept)} frames, the first is {lost[0]}.",
                    "These frames carry no value.", "Give the line more contrast against what is behind it.",
                )
            )  # fmt: skip
        if (speed.verdict == "ambiguous").any():
            named = ", ".join(f"{np.nanmedian(c):.2f}" for c in (speed.v_mps, *speed.candidates_mps[:3]))
            out.append(
                Notice(
                    "speed-ambiguous",
                    f"The texture looks alike every {speed.alias_step_mps:.2f} m/s at this frame rate: the median speed may be "
                    f"{named} m/s.",
                    "Line speed is not stated as sure.",
                    "Put marks on the line some 0.3 m apart, or start the clip with the line at rest.",
                )
            )  # fmt: skip
        if (speed.verdict == "none").all() and len(lost) < len(kept):
            out.append(
                Notice("no-speed", speed.basis, "Line speed is not measured.", "Put marks of tape on the line some 0.3 m apart.")
            )
        return tuple(out)


def _scale_and_up(plane: _Plane, origin_px: tuple[float, float]) -> tuple[float, tuple[float, float]]:
    """Pixels per metre at the rim and the picture's direction against gravity there."""
    o = np.asarray(origin_px, dtype=float)
    at = plane.to_metres(o + np.array([[0.0, 0.0], [20.0, 0.0], [0.0, 20.0]]))
    jacobian = np.column_stack([(at[1] - at[0]) / 20.0, (at[2] - at[0]) / 20.0])  # metres per pixel
    up = np.linalg.solve(jacobian, np.array([0.0, 1.0]))
    return float(np.hypot(*up)), tuple(up / np.hypot(*up))


def _metres(plane: _Plane, points: Floats) -> Floats:
    """The plane along a curve: exact every few pixels, between them by the deviation from an affine map, which is flat."""
    n = points.shape[0]
    nodes = np.unique(np.append(np.arange(0, n, _NODE_PX), n - 1))
    at = plane.to_metres(points[nodes])
    design = np.column_stack([points[nodes], np.ones(nodes.size)])
    affine = np.linalg.lstsq(design, at, rcond=None)[0]
    off = at - design @ affine
    index = np.arange(n)
    rest = np.column_stack([np.interp(index, nodes, off[:, 0]), np.interp(index, nodes, off[:, 1])])
    return np.asarray(points @ affine[:2] + affine[2] + rest)


def _pace_of(doubt_m: Floats, frame_s: Floats) -> Floats:
    """Speed that the drift of the doubt about the rim's crossing would feign [m/s], its root mean square nearby.

    Both ways to carry the line to the rim's level are fair, and half of what they differ is taken for the error of one.
    """
    known = np.isfinite(doubt_m)
    if known.sum() < _DOUBT_FRAMES + 2:
        return np.zeros(doubt_m.size)
    whole = np.interp(frame_s, frame_s[known], doubt_m[known])
    pace = savgol_filter(whole, _DOUBT_FRAMES, 1, deriv=1, mode="interp") / float(np.median(np.diff(frame_s)))
    return np.asarray(0.5 * np.sqrt(uniform_filter1d(pace**2, _DOUBT_FRAMES, mode="nearest")))


def _drop_glimpses(kept: list[_Kept]) -> None:
    """What is found in a few frames only is somebody walking by, or a reflection: a line stays."""
    shortest = int(np.clip(0.1 * len(kept), *_GLIMPSE_FRAMES))
    for what in ("line", "arc"):
        has = [len(k.line_px) > 0 if what == "line" else k.arc is not None for k in kept]
        start = 0
        for i in range(len(kept) + 1):
            if i < len(kept) and has[i] == has[start]:
                continue
            if has[start] and i - start < min(shortest, len(kept)):
                for k in kept[start:i]:
                    k.arc = None
                    if what == "line":
                        k.line_px, k.u_line_px, k.sights = np.zeros((0, 2), np.float32), np.zeros(0, np.float32), []
                        k.flags = ["line-lost"]
                    else:
                        k.flags.append("no-arc")
            start = i


def _scatter_of_apexes(kept: list[_Kept], at_s: Floats) -> None:
    """Set each frame's u by what the apexes of neighbouring frames show about a smooth course.

    The points' own noise, counted as if their shared part were all, is too large by up to two: half of it is the floor.
    """
    have = np.array([i for i, k in enumerate(kept) if k.arc is not None], dtype=np.intp)
    if have.size < 12:
        return
    z = np.array([k.arc.apex_m[1] for k in kept if k.arc is not None])
    third = z[3:] - 3 * z[2:-1] + 3 * z[1:-2] - z[:-3]
    whole = (np.diff(have)[2:] == 1) & (np.diff(have)[1:-1] == 1) & (np.diff(have)[:-2] == 1)
    if whole.sum() < 8:
        return
    scatter = 1.4826 * float(np.median(np.abs(third[whole]))) / np.sqrt(20.0)  # 1 + 9 + 9 + 1
    for i in have:
        kept[i].u_apex_m = max(0.5 * kept[i].u_apex_m, scatter)


def _marks_by_frame(tracks: list[MarkTrack]) -> dict[int, list[Floats]]:
    out: dict[int, list[Floats]] = {}
    for track in tracks:
        for s in track.sights:
            out.setdefault(s.frame, []).append(s.place_px)
    return out
