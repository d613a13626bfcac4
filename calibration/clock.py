"""From a clip's time stamps to seconds of true time, with where the rate comes from.

Slow motion is stored in three ways. *True-rate*: a frame taken every 1/240 s is stamped every 1/240 s, and the
stamps are time. *Stretched*: it is stamped every 1/30 s, and time runs eight times too slow. *Ramped*: both in one
file. Which of them it is follows from the stamps together with the rate of capture, which the run sheet states or
the phone wrote into the file; stamps of an ordinary rate (up to 61 per second) alone cannot tell, and then the rate
is asked for, never guessed.

Stamps that sit on a regular grid but for the rounding to their time base are smoothed to that grid. Stamps that
truly vary are kept as they are. Gaps keep their time. Numbers of frames never make time.
"""

from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import minimize_scalar

from calibration.notice import BadInput, CannotMeasure, Notice

__all__ = ["Clock", "HiddenSteps", "Scan", "hidden_steps", "make_clock", "scan_direction"]

Scan = Literal["down", "up", "left", "right"]
Array = NDArray[np.float64]

U_CRYSTAL = 1e-4  # relative; phone crystals are 1e-5 to 1e-4 off (common practice, no source)
U_NOMINAL = 5e-4  # relative; a tag says 240 where 239.76 was recorded (0.1 %), as high frame rates of broadcast do
SAME_RATE = 0.002  # rates closer than this are one rate: 240 and 239.76 differ by 0.001
CLOSE_RATE = 0.02  # up to here a disagreement is said and enters u; beyond, it is a contradiction
STRETCH = 1.4  # capture over stamp rate from here on is slow motion: 24 fps made of 30 is 1.25
ORDINARY_RATE = 61.0  # per second; stamps of this rate or less may be stretched slow motion
LEAP = 1.6  # usual steps of this ratio are different speeds: above 3:2 pull-down, below a halving
LASTING = 6  # steps; what lasts shorter is a row of gaps
OFF_GRID = 0.75  # ticks; rounding moves a stamp by half a tick, the rest is let pass as jitter too small to keep
COARSE = 4.0  # ticks a step; below, a gap of several steps fits two counts
MANY_GAPS = 12  # that are worth counting again
GAP = 1.5  # a step this many usual steps long is a gap
LONG_READOUT = 1.02  # of a frame period: a sensor rarely reads one picture while it takes the next
IMPOSSIBLE_READOUT = 3.0  # of a frame period: a wrong unit or a wrong rate


@dataclass(frozen=True, slots=True, eq=False)
class Clock:
    """True time of every point of every frame.

    Attributes
    ----------
    frame_s : (n,) array
        Mid-exposure of stored row 0 of each frame [s], rising, 0 at the first.
    readout_s, u_readout_s : float
        From the first to the last stored row [s], signed, and its standard uncertainty (common to the clip).
    rows : int
        Number of stored rows.
    scan : Scan
        How stored rows 0, 1, ... run through the upright picture.
    u_rate : float
        Relative standard uncertainty of the rate, common to all clips of a station.
    u_stamp_s : float
        Standard uncertainty of each frame's time [s], independent from frame to frame.
    capture_fps : float
        Frames taken per second of true time, gaps apart.
    provenance : str
        Where the rate comes from, one sentence.
    notices : tuple of Notice
    """

    frame_s: Array
    readout_s: float
    u_readout_s: float
    rows: int
    scan: Scan
    u_rate: float
    u_stamp_s: float
    capture_fps: float
    provenance: str
    notices: tuple[Notice, ...] = ()

    def __post_init__(self) -> None:
        frame_s = np.array(self.frame_s, dtype=float)
        if frame_s.ndim != 1 or len(frame_s) == 0 or not np.isfinite(frame_s).all():
            raise ValueError(f"Clock.frame_s: expected (n,) finite seconds, got shape {frame_s.shape}.")
        if frame_s[0] != 0 or (np.diff(frame_s) <= 0).any():
            raise ValueError("Clock.frame_s: expected 0 at the first frame and rising times.")
        if self.rows < 1 or self.capture_fps <= 0:
            raise ValueError(f"Clock: expected rows >= 1 and capture_fps > 0, got {self.rows} and {self.capture_fps}.")
        frame_s.flags.writeable = False
        object.__setattr__(self, "frame_s", frame_s)

    @property
    def period_s(self) -> float:
        """Usual true time from frame to frame [s]."""
        return 1.0 / self.capture_fps

    def at(self, frame: ArrayLike, points_px: ArrayLike) -> Array:
        """True time at which points were seen: the mid-exposure of their own stored rows.

        Parameters
        ----------
        frame : int or array_like of int
            Frame index of each point, broadcast against the points.
        points_px : (..., 2) array_like
            Column and row in the upright picture [px]; NaN where not measured.

        Returns
        -------
        (...) array
            Seconds; NaN where the point is.

        Raises
        ------
        ValueError
            Wrong shape.
        IndexError
            A frame that the clip does not have.
        """
        p = np.asarray(points_px, dtype=float)
        if p.shape[-1:] != (2,):
            raise ValueError(f"points_px: expected shape (..., 2), column and row, got {p.shape}.")
        along = p[..., 1] if self.scan in ("down", "up") else p[..., 0]
        row = along if self.scan in ("down", "right") else (self.rows - 1) - along
        index = np.asarray(frame)
        if index.size and (index.min() < 0 or index.max() >= len(self.frame_s)):
            raise IndexError(f"frame: expected 0 to {len(self.frame_s) - 1}, got {index.min()} to {index.max()}.")
        share = row / (self.rows - 1) if self.rows > 1 else 0.0 * row
        return np.asarray(self.frame_s[index] + self.readout_s * share, dtype=float)

    def scaled(self, factor: float) -> "Clock":
        """The clock with all times between frames longer by a factor; the readout, measured by itself, stays."""
        return replace(
            self, frame_s=self.frame_s * factor, u_stamp_s=self.u_stamp_s * factor, capture_fps=self.capture_fps / factor
        )

    def with_readout(self, readout_s: float) -> "Clock":
        """The clock with another readout time."""
        return replace(self, readout_s=readout_s)


def scan_direction(quarter_turns: int, mirrored: bool) -> Scan:
    """How stored rows run through the upright picture.

    Parameters
    ----------
    quarter_turns : int
        Clockwise quarter turns from the stored to the upright picture, done first.
    mirrored : bool
        Mirrored left to right, done after.

    Returns
    -------
    Scan
    """
    turned: tuple[Scan, Scan, Scan, Scan] = ("down", "left", "up", "right")
    scan = turned[quarter_turns % 4]
    if not mirrored or scan in ("down", "up"):
        return scan
    return "right" if scan == "left" else "left"


def make_clock(
    ticks: ArrayLike,
    time_base: Fraction,
    *,
    capture_fps: float | None = None,
    tag_fps: float | None = None,
    readout_s: float | None = None,
    u_readout_s: float | None = None,
    u_capture_fps: float | None = None,
    stored_size: tuple[int, int],
    quarter_turns: int = 0,
    mirrored: bool = False,
    name: str = "the clip",
) -> Clock:
    """Make true time of a clip's stamps.

    Parameters
    ----------
    ticks : (n,) array_like of int
        Stamps in display order, not falling.
    time_base : Fraction
        Seconds a tick.
    capture_fps : float, optional
        True rate of capture, from the run sheet [1/s].
    tag_fps : float, optional
        True rate of capture as the phone tagged the file [1/s].
    readout_s, u_readout_s : float, optional
        First to last stored row [s]; absent: zero, with half-range one frame period of either sign.
    u_capture_fps : float, optional
        Standard uncertainty of `capture_fps` [1/s].
    stored_size : (int, int)
        Width and height of the picture as stored [px].
    quarter_turns, mirrored
        See `scan_direction`.
    name : str
        What to call the clip in sentences.

    Returns
    -------
    Clock

    Raises
    ------
    BadInput
        Sheet, tag and stamps contradict each other, or a readout is longer than a frame period.
    CannotMeasure
        The rate of capture is unknown, or there are fewer than two frames.
    ValueError
        Stamps fall, or are no integers.
    """
    stamps = _checked(ticks, name)
    steps = _Steps.of(stamps, time_base)
    rate = _decide(steps, capture_fps, tag_fps, u_capture_fps, name)
    frame_s, u_stamp_s = steps.true_times(rate)
    period = 1.0 / rate.fps
    if readout_s is not None and abs(readout_s) > IMPOSSIBLE_READOUT * period:
        raise BadInput(
            f"clock.readout_s is {readout_s:g}, longer than the frame period of {period:.5f} s at {rate.fps:.5g} frames a second.",
            "Give the time from the first to the last row of one picture, or leave it out.",
        )
    long_readout: tuple[Notice, ...] = ()
    if readout_s is not None and abs(readout_s) > LONG_READOUT * period:
        long_readout = (
            Notice(
                "readout-long",
                f"clock.readout_s is {readout_s:g}, longer than the frame period of {period:.5f} s.",
                f"If the true readout is one period, times across the picture are {abs(readout_s) - period:.4f} s out.",
                "Check readout_s and capture_fps; most cameras read a picture within one frame period.",
            ),
        )
    return Clock(
        frame_s=frame_s,
        readout_s=0.0 if readout_s is None else float(readout_s),
        u_readout_s=period / np.sqrt(3) if readout_s is None else (0.1 * abs(readout_s) if u_readout_s is None else u_readout_s),
        rows=stored_size[1],
        scan=scan_direction(quarter_turns, mirrored),
        u_rate=rate.u,
        u_stamp_s=u_stamp_s,
        capture_fps=rate.fps,
        provenance=rate.provenance,
        notices=(*rate.notices, *long_readout, *steps.notices(frame_s, name)),
    )


# --- steps between stamps ----------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Steps:
    """The steps between stamps, and what is usual among them. All in ticks."""

    stamps: Array  # (n,) repeats spread
    step: Array  # (n-1,)
    usual: Array  # (n-1,) the usual step around each step: one number unless the file is ramped
    periods: NDArray[np.int64]  # (n-1,) whole frame periods in each step, 1 or more
    whole: NDArray[np.bool_]  # (n-1,) whether the step is that whole number of periods; false at odd gaps
    repeats: NDArray[np.int64]  # frames that carried the stamp of the frame before
    ramped: bool
    grid: Array | None  # (n,) the regular grid behind rounded stamps; None if steps truly vary
    period: float  # mean length of a period, of the shortest usual step if ramped
    u_period: float  # relative
    jitter: float  # standard deviation of stamps about the grid, beyond rounding
    tick_s: float

    @classmethod
    def of(cls, stamps: NDArray[np.int64], time_base: Fraction) -> "_Steps":
        if (plain := _Steps._rounded_only(stamps, float(time_base))) is not None:
            return plain
        spread, repeats = _spread_repeats(stamps)
        step = np.diff(spread)
        usual, ramped = _usual_steps(step)
        ratio = step / usual
        periods = np.maximum(1, np.rint(ratio)).astype(np.int64)
        near = ratio[ratio < GAP]
        scatter = float(near.std()) if near.size else 0.0
        whole = (np.abs(ratio - periods) <= np.maximum(min(0.25, 0.02 + 4 * scatter), 1.51 / usual)) | (ratio < GAP)
        period, u_period, grid, jitter = float(usual.min()), 0.0, None, 0.0
        if not ramped:
            (period, u_period, grid, jitter), periods = _fit_counted(spread, step, periods, whole)
        return cls(spread, step, usual, periods, whole, repeats, ramped, grid, period, u_period, jitter, float(time_base))

    @classmethod
    def _rounded_only(cls, stamps: NDArray[np.int64], tick_s: float) -> "_Steps | None":
        """The steps if one regular grid without any gap explains them by rounding alone, else None.

        It is asked first: on ticks as coarse as the steps (480 frames a second in 1/600 s) a step of two ticks is
        neither a gap nor a repeat.
        """
        n = len(stamps)
        one, yes = np.ones(n - 1, dtype=np.int64), np.ones(n - 1, dtype=bool)
        step = np.diff(stamps).astype(float)
        period, u_period, grid, jitter = _fit_grid(stamps.astype(float), step, one, yes)
        if grid is None:
            return None
        none = np.array([], dtype=np.int64)
        return cls(grid, step, np.full(n - 1, period), one, yes, none, False, grid, period, u_period, jitter, tick_s)

    @property
    def rate(self) -> float:
        """Stamps a second of stored time; of the fastest part if ramped."""
        return 1.0 / (self.period * self.tick_s)

    def true_times(self, rate: "_Rate") -> tuple[Array, float]:
        """Seconds of true time from the first frame, and the independent u of each."""
        n = len(self.stamps)
        if self.ramped:
            ratio = self.step / self.usual
            snap = np.abs(ratio - np.rint(ratio)) * self.usual <= 1.01  # rounding to a tick is no jitter
            true_steps = np.where(snap & (ratio > 0.5), np.rint(ratio), ratio) / rate.fps
            worst_tick = 1.0 / (self.usual.min() * rate.fps)
            return np.concatenate([[0.0], np.cumsum(true_steps)]), float(worst_tick / np.sqrt(12))
        tick = self.tick_s / rate.stretch
        if self.grid is None:
            return (self.stamps - self.stamps[0]) * tick, tick / np.sqrt(12)
        # Jitter below a tick cannot be seen in one stamp. Over n stamps the variance about the grid tells it from
        # rounding (1/12 tick^2) within sqrt((1/80 - 1/144)/n) tick^2, the standard deviation of a sample variance.
        hidden = np.sqrt(np.sqrt((1 / 80 - 1 / 144) / n))
        return (self.grid - self.grid[0]) * tick, float(np.hypot(hidden, self.jitter) * tick)

    def notices(self, frame_s: Array, name: str) -> tuple[Notice, ...]:
        """What is odd about the steps, each with its frame and true time."""
        found: list[Notice] = []
        long = self.step - self.usual > np.maximum((GAP - 1) * self.usual, 1.01)
        if (lost := np.flatnonzero(long & self.whole)).size:
            count = int((self.periods[lost] - 1).sum())
            found.append(
                Notice(
                    "dropped-frames",
                    f"{name}: {_many(count, 'frame')} dropped at {_many(len(lost), 'place')}: "
                    + _places(lost, frame_s, [f"{k - 1} after" for k in self.periods[lost]])
                    + ".",
                    "Their time is kept; nothing is filled in.",
                    "Free the phone's storage and close other apps, or film at a lower resolution.",
                )
            )
        if (odd := np.flatnonzero(long & ~self.whole)).size:
            words = [f"{x:.2f} usual steps after" for x in (self.step / self.usual)[odd]]
            found.append(
                Notice(
                    "gap-in-stamps",
                    f"{name}: {_many(len(odd), 'gap')} in the stamps: {_places(odd, frame_s, words)}.",
                    "The gap is kept as stamped; motion across it is not measured.",
                    "Use a window (clip.window_s) that leaves it out, or film again.",
                )
            )
        if self.repeats.size:
            found.append(
                Notice(
                    "repeated-stamps",
                    f"{name}: {_many(len(self.repeats), 'frame')} with the stamp of the frame before: "
                    f"{_places(self.repeats, frame_s, ['at'] * len(self.repeats))}; spread evenly up to the next stamp.",
                    "Their own times are uncertain by half a step.",
                    "Give the file as the phone recorded it.",
                )
            )
        if not self.ramped and self.grid is None:
            near = self.step[~long] * self.tick_s * 1e3
            found.append(
                Notice(
                    "variable-frame-rate",
                    f"{name}: the frame rate varies: steps of {near.min():.2f} to {near.max():.2f} ms in stored time, "
                    f"{np.median(near):.2f} ms usual.",
                    "None: every frame keeps its own stamp.",
                    "Fix exposure and frame rate in the camera's manual mode if it offers one.",
                )
            )
        return tuple(found)


def _checked(ticks: ArrayLike, name: str) -> NDArray[np.int64]:
    given = np.asarray(ticks)
    if given.ndim != 1 or (given.size and not np.issubdtype(given.dtype, np.integer)):
        raise ValueError(f"ticks: expected (n,) integers, got {given.dtype} of shape {given.shape}.")
    if len(given) < 2:
        raise CannotMeasure(f"{name}: holds {len(given)} frame(s), so no time passes.", "Record a clip, not a picture.", "no-time")
    stamps = given.astype(np.int64)
    if (np.diff(stamps) < 0).any():
        raise ValueError(f"ticks: expected display order, stamps fall after frame {int(np.flatnonzero(np.diff(stamps) < 0)[0])}.")
    if stamps[-1] == stamps[0]:
        raise CannotMeasure(f"{name}: all {len(stamps)} frames carry one stamp.", "Give the file as the phone recorded it.", "no-time")
    return stamps


def _spread_repeats(stamps: NDArray[np.int64]) -> tuple[Array, NDArray[np.int64]]:
    """Frames of one stamp share the time up to the next stamp evenly; at the end, usual steps follow."""
    first = np.flatnonzero(np.concatenate([[True], np.diff(stamps) > 0]))
    if len(first) == len(stamps):
        return stamps.astype(float), np.array([], dtype=np.int64)
    own = stamps[first].astype(float)
    after = float(len(stamps) - first[-1]) * float(np.median(np.diff(own)))
    knots = np.append(first, len(stamps))
    spread = np.interp(np.arange(len(stamps)), knots, np.append(own, own[-1] + after))
    return spread, np.setdiff1d(np.arange(len(stamps)), first)


def _usual_steps(step: Array) -> tuple[Array, bool]:
    """The usual step around each step, and whether there are several: a ramp.

    A running median over five steps passes over single gaps and keeps changes that last. It splits into levels
    where its sorted values leap by more than 1.6; a level that nowhere lasts is a row of gaps, no part of a ramp.
    """
    one = np.full(len(step), _usual(step))
    if len(step) < 2 * LASTING:
        return one, False
    around = np.median(np.lib.stride_tricks.sliding_window_view(np.pad(step, 2, mode="reflect"), 5), axis=1)
    slow = around > max(LEAP * around.min(), around.min() + 2.01)  # rounding alone makes 3 ticks of 5
    if not _lasts(slow) or not _lasts(~slow):
        return one, False
    order = np.sort(around)
    leaps = np.flatnonzero(order[1:] > np.maximum(LEAP * order[:-1], order[:-1] + 2.01))
    if len(leaps) == 0:  # a ramp without a leap: the rate glides
        return around, True
    level = np.searchsorted((order[leaps] + order[leaps + 1]) / 2, around)
    lasting = [k for k in range(len(leaps) + 1) if _lasts(level == k)]
    if len(lasting) < 2 or (np.diff(level) != 0).sum() + 1 > len(step) / 4:
        return one, False
    fits = np.isin(level, lasting)
    level = level[np.maximum.accumulate(np.where(fits, np.arange(len(level)), fits.argmax()))]
    value = {k: _usual(step[level == k]) for k in lasting}
    own = np.array([value[k] for k in level.tolist()])
    beside = np.stack([np.append(own[:1], own[:-1]), own, np.append(own[1:], own[-1:])])  # a change falls between runs
    nearest = np.abs(np.log(step / beside)).argmin(axis=0)
    return beside[nearest, np.arange(len(step))], True


def _lasts(flags: NDArray[np.bool_]) -> bool:
    """Whether flags stay up for a while somewhere."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], flags.astype(np.int8), [0]])))
    return int((edges[1::2] - edges[::2]).max(initial=0)) >= LASTING


def _usual(step: Array) -> float:
    """The usual step: the mean of those within rounding and 30 % of the median, or of the shorter ones if many
    frames were dropped."""
    middle = float(np.quantile(step, 0.5, method="lower"))  # one of them, not between two
    short = step[step < 0.7 * middle]
    if len(short) > 0.15 * len(step) and middle > 4:
        shorter = float(np.quantile(short, 0.5, method="lower"))
        if abs(middle / shorter - round(middle / shorter)) < 0.15:
            middle = shorter
    return float(step[np.abs(step - middle) <= max(1.0, 0.3 * middle)].mean())


def _fit_counted(
    stamps: Array, step: Array, periods: NDArray[np.int64], whole: NDArray[np.bool_]
) -> tuple[tuple[float, float, Array | None, float], NDArray[np.int64]]:
    """`_fit_grid`, with the count of each gap put right where ticks are so coarse that a gap fits two counts."""
    best = _fit_grid(stamps, step, periods, whole)
    gaps = np.flatnonzero(whole & (periods > 1))
    if best[0] > COARSE or len(gaps) > MANY_GAPS:
        return best, periods
    for i in gaps:
        for other in (-1, 1):
            if best[2] is not None:
                return best, periods
            counted = periods.copy()
            counted[i] += other
            fit = _fit_grid(stamps, step, counted, whole)
            if fit[2] is not None or fit[3] < best[3]:
                best, periods = fit, counted
    return best, periods


def _fit_grid(
    stamps: Array, step: Array, periods: NDArray[np.int64], whole: NDArray[np.bool_]
) -> tuple[float, float, Array | None, float]:
    """Period of stamps on a grid, with a phase of its own after each odd gap.

    Returns period [ticks], its relative u, the grid or None if stamps lie off it by more than rounding can, and the
    scatter beyond rounding [ticks]. Where rounding alone explains the stamps, the period is the middle of those that
    rounding allows: errors of rounding are no random draws (steps of 5.005 ticks are 5, 5, 5 ... 6), so that least
    squares would be too sure of itself.
    """
    part = np.concatenate([[0], np.cumsum(~whole)])
    count = np.concatenate([[0], np.cumsum(np.where(whole, periods, 0))]).astype(float)
    members = np.bincount(part)
    centre = (np.bincount(part, count) / members)[part]
    level = (np.bincount(part, stamps) / members)[part]
    spread = float(((count - centre) ** 2).sum())
    if spread == 0:
        return float(np.median(step)), 0.5, None, 0.0
    period = float(((count - centre) * (stamps - level)).sum() / spread)
    off = stamps - level - period * (count - centre)
    scatter = float(np.sqrt((off**2).sum() / max(1, len(off) - members.size - 1)))
    u_period = max(1 / np.sqrt(12), scatter) / np.sqrt(spread) / period
    if (allowed := _allowed_by_rounding(stamps, count, part, period)) is not None:
        low, high = allowed
        period, u_period = (low + high) / 2, (high - low) / np.sqrt(12) / period
        off = stamps - period * count
        ends = [(off[part == k].min() + off[part == k].max()) / 2 for k in range(members.size)]
        return period, u_period, np.array(ends)[part] + period * count, 0.0
    if np.abs(off).max() > OFF_GRID:
        return period, u_period, None, scatter
    return period, u_period, level + period * (count - centre), float(np.sqrt(max(0.0, scatter**2 - 1 / 12)))


def _allowed_by_rounding(stamps: Array, count: Array, part: NDArray[np.int64], near: float) -> tuple[float, float] | None:
    """Smallest and largest period with which every stamp lies within one tick's width of its grid, by bisection.

    The width of the band that holds all stamps is a convex function of the period.
    """
    starts = np.flatnonzero(np.diff(part, prepend=-1))

    def width(period: float) -> float:
        off = stamps - period * count
        return float((np.maximum.reduceat(off, starts) - np.minimum.reduceat(off, starts)).max())

    reach = 2.0 / float(np.ptp(count))
    found = minimize_scalar(width, bounds=(near - reach, near + reach), method="bounded", options={"xatol": reach * 1e-9})
    best = float(found.x)
    if width(best) > 1 + 1e-9:
        return None
    ends = []
    for side in (-reach, reach):
        inside, outside = best, best + 2 * side
        for _ in range(60):
            middle = (inside + outside) / 2
            inside, outside = (middle, outside) if width(middle) <= 1 + 1e-9 else (inside, middle)
        ends.append(inside)
    return ends[0], ends[1]


def _many(count: int, noun: str) -> str:
    return f"{count} {noun}{'' if count == 1 else 's'}"


def _places(frames: NDArray[np.int64], frame_s: Array, words: list[str], most: int = 5) -> str:
    said = [f"{word} frame {i} ({frame_s[i]:.4f} s)" for i, word in zip(frames[:most].tolist(), words, strict=False)]
    rest = f", and {len(frames) - most} more" if len(frames) > most else ""
    return ", ".join(said) + rest


# --- the rate ----------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Rate:
    """The rate decided on: frames per true second, stored seconds per true second, and why."""

    fps: float
    stretch: float
    u: float
    provenance: str
    notices: tuple[Notice, ...] = ()


def _decide(steps: _Steps, sheet: float | None, tag: float | None, u_sheet: float | None, name: str) -> _Rate:
    """The true rate out of stamps, sheet and tag; or say why they do not give one."""
    for key, value in (("clock.capture_fps", sheet), ("the file's capture rate tag", tag)):
        if value is not None and not (np.isfinite(value) and value > 0):
            raise BadInput(f"{key} is {value:g}, which is no rate.", "Give frames per second of true time.")
    said = _contradiction(steps, sheet, tag, name)
    if sheet is not None:
        source, given, u = f"clock.capture_fps = {sheet:g}", sheet, (u_sheet / sheet if u_sheet is not None else U_CRYSTAL)
    elif tag is not None:
        source, given, u = f"the file's tag com.android.capture.fps = {tag:g}", tag, U_NOMINAL
    else:
        return _from_stamps_alone(steps, name)
    if steps.ramped:
        return _ramped(steps, given, u, source, said, name)
    ratio = given / steps.rate
    if ratio >= STRETCH:
        return _stretched(steps, given, u, source, said, u_sheet is None, name)
    if sheet is not None and abs(ratio - 1) > CLOSE_RATE + 3 * steps.u_period:
        known = steps.rate > ORDINARY_RATE or tag is not None
        raise BadInput(
            f"clock.capture_fps is {sheet:g}, but the file's stamps are {steps.rate:.5g} per second.",
            f"Set {steps.rate:.5g}, or {'delete the key to use the file' if known else 'the rate the camera was set to, not the file'}'s.",
        )
    if ratio < 1 / STRETCH:
        raise CannotMeasure(
            f"{name}: {source}, but its stamps are {steps.rate:.5g} per second: time lapse, or a wrong tag.",
            "Give clock.capture_fps in the sheet if the tag is wrong.",
            "capture-rate-unknown",
        )
    return _true_rate(steps, given, source, said, sheet is not None)


def _contradiction(steps: _Steps, sheet: float | None, tag: float | None, name: str) -> tuple[Notice, ...]:
    """Sheet against tag, with the stamps as the third witness."""
    if sheet is None or tag is None or abs(sheet / tag - 1) <= CLOSE_RATE:
        return ()
    wrong = max(sheet / tag, tag / sheet)
    close = CLOSE_RATE + 3 * steps.u_period
    found = f"clock.capture_fps is {sheet:g}, but the file's own tag says {tag:g}"
    # Stamps cannot run faster than frames are taken; stamps as slow as the sheet would fit stretched frames as well.
    if abs(sheet / steps.rate - 1) <= close and tag < steps.rate * (1 - close):
        return (
            Notice(
                "capture-rate-disagrees",
                f"{name}: {found}; its stamps of {steps.rate:.5g} per second agree with the sheet, which is used.",
                f"If the tag were right, all speeds would be {wrong:.3g} times wrong.",
                "Check the camera's setting.",
            ),
        )
    word = "and its stamps are too" if abs(tag / steps.rate - 1) <= close else "its stamps, which fit either, are"
    raise BadInput(
        f"{found} ({word} {steps.rate:.5g} per second): one of the two makes all speeds {wrong:.3g} times wrong.",
        f"Set {tag:g} or delete the key to use the file's, or give the file as the phone recorded it.",
    )


def _from_stamps_alone(steps: _Steps, name: str) -> _Rate:
    if steps.ramped:
        raise CannotMeasure(
            f"{name}: its stamps change between {_levels(steps)} a second (a ramp), and no capture rate is known.",
            "Give clock.capture_fps, the rate the camera was set to.",
            "capture-rate-unknown",
        )
    if steps.rate <= ORDINARY_RATE:
        raise CannotMeasure(
            f"{name}: capture rate unknown: its stamps are {steps.rate:.5g} per second and no tag tells slow motion from real time.",
            "Give clock.capture_fps, the rate the camera was set to (the same figure if it is no slow motion).",
            "capture-rate-unknown",
        )
    return _Rate(
        steps.rate, 1.0, _u_stamps(steps), f"the file's stamps, {steps.rate:.5g} per second, taken as true-rate{_smoothed(steps)}"
    )


def _true_rate(steps: _Steps, given: float, source: str, said: tuple[Notice, ...], from_sheet: bool) -> _Rate:
    """Stamps that run at the capture rate are time; the stated rate only confirms them."""
    off = abs(given / steps.rate - 1)
    u = _u_stamps(steps)
    provenance = f"the file's true-rate stamps, {steps.rate:.5g} per second{_smoothed(steps)}; {source} confirms them"
    limit = SAME_RATE + 3 * steps.u_period
    if off > limit or (from_sheet and off > max(2e-4, 3 * steps.u_period)):
        u = float(np.hypot(u, off))
        provenance = provenance.replace("confirms", f"differs by {100 * off:.2g} % from")
        said = (
            *said,
            Notice(
                "capture-rate-differs",
                f"{source} and the file's stamps of {steps.rate:.6g} per second differ by {100 * off:.2g} %; the stamps are used.",
                f"The difference enters u of the rate: {100 * off:.2g} % of a speed, {200 * off:.2g} % of an acceleration.",
                f"Set clock.capture_fps to {steps.rate:.6g} if the stamps are right.",
            ),
        )
    return _Rate(steps.rate, 1.0, u, provenance, said)


def _stretched(
    steps: _Steps, given: float, u: float, source: str, said: tuple[Notice, ...], nominal: bool, name: str
) -> _Rate:
    """Slow motion stored at an ordinary rate."""
    stretch = given / steps.rate
    off = abs(round(stretch) * steps.rate / given - 1)
    if nominal and 2e-4 < off <= SAME_RATE and off > 3 * steps.u_period:  # 240 in a file of 29.97 may be 239.76
        u = float(np.hypot(u, off))
        said = (
            *said,
            Notice(
                "nominal-rate",
                f"{name}: {source} is {100 * off:.2g} % off {round(stretch)} times the stored {steps.rate:.6g} per second; "
                "either may be meant.",
                f"The difference enters u of the rate: {200 * off:.2g} % of an acceleration.",
                "Give u_capture_fps with the rate, or prove the clock by a free drop.",
            ),
        )
    stored = f"the file stores {steps.rate:.5g} frames a second, so time is stretched {stretch:.4g} times"
    return _Rate(given, stretch, u, f"{source}; {stored}{_smoothed(steps)}", said)


def _ramped(steps: _Steps, given: float, u: float, source: str, said: tuple[Notice, ...], name: str) -> _Rate:
    """One file, several stored rates: every frame is one capture period after the one before."""
    if given < steps.rate * (1 - CLOSE_RATE):
        raise BadInput(
            f"{source}, but part of the file's stamps are {steps.rate:.5g} per second.",
            f"Set {steps.rate:.5g} or more: the rate the camera was set to.",
        )
    low_light = float(steps.usual.max() / steps.usual.min()) < 2.5
    notice = Notice(
        "ramped",
        f"{name}: its stamps change between {_levels(steps)} a second, a speed ramp; every step is taken as 1/{given:g} s of true time.",
        "If frames were left out where it plays fast"
        + (", or the camera itself slowed down in low light," if low_light else "")
        + " speeds there are wrong by that ratio.",
        "Use a window (clip.window_s) inside one part, or film without a ramp.",
    )
    return _Rate(given, 1.0, u, f"{source}; the file is ramped and its stamps set gaps only", (*said, notice))


def _u_stamps(steps: _Steps) -> float:
    return float(np.hypot(U_CRYSTAL, steps.u_period if steps.grid is not None else _u_span(steps)))


def _u_span(steps: _Steps) -> float:
    """Relative u of the whole span by rounding of its two ends, where stamps are kept one by one."""
    return float(1 / np.sqrt(6) / (steps.stamps[-1] - steps.stamps[0]))


def _levels(steps: _Steps) -> str:
    rates = 1.0 / (np.unique(np.round(steps.usual, 6)) * steps.tick_s)
    return f"{rates.min():.4g} and {rates.max():.4g}"


def _smoothed(steps: _Steps) -> str:
    """Say so where rounding was visible."""
    if steps.grid is None or np.ptp(steps.step[steps.periods == 1]) == 0 or steps.period > 1000:
        return ""
    return f", rounded to ticks of {steps.tick_s * 1e3:.3g} ms and smoothed to their regular grid"


# --- behind good stamps ------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class HiddenSteps:
    """Faults of pictures that their stamps do not show.

    Attributes
    ----------
    repeated : (k,) array of int
        Frames that show the picture of the frame before.
    jumps : (m,) array of int
        Frames before which frames are missing, by the motion.
    missing : (m,) array of int
        How many are missing there.
    """

    repeated: NDArray[np.int64]
    jumps: NDArray[np.int64]
    missing: NDArray[np.int64]


def hidden_steps(difference: ArrayLike, track: ArrayLike | None = None) -> HiddenSteps:
    """Find repeated pictures, and frames lost, behind stamps that look good.

    A repeated picture differs from the one before by far less than its neighbours do: sensor noise alone keeps
    pictures apart. Lost frames make a smooth motion leap by a whole number of its usual steps.

    Parameters
    ----------
    difference : (n-1,) array_like
        Mean absolute difference between frame i and i+1, in any unit, over pixels that are not clipped.
    track : (n, 2) array_like, optional
        Place of something that moves smoothly, in any unit, evenly stamped; NaN where not seen.

    Returns
    -------
    HiddenSteps
    """
    change = np.asarray(difference, dtype=float)
    repeated = _repeated_pictures(change) + 1
    jumps, missing = np.array([], dtype=np.int64), np.array([], dtype=np.int64)
    if track is not None:
        place = np.asarray(track, dtype=float)
        if place.shape != (len(change) + 1, 2):
            raise ValueError(f"track: expected ({len(change) + 1}, 2) places, got {place.shape}.")
        jumps, missing = _leaps(place)
    return HiddenSteps(repeated, jumps, missing)


def _repeated_pictures(change: Array, reach: int = 7) -> NDArray[np.int64]:
    """Steps whose change is below a quarter of the local median and below half of any other around it."""
    if len(change) < 5:
        return np.array([], dtype=np.int64)
    padded = np.pad(change, reach, constant_values=np.nan)
    around = np.lib.stride_tricks.sliding_window_view(padded, 2 * reach + 1)
    usual = np.nanmedian(around, axis=1)
    low = change < 0.25 * usual  # never where pictures have no noise: nothing tells a repeat from rest there
    others = np.lib.stride_tricks.sliding_window_view(np.pad(np.where(low, np.nan, change), reach, constant_values=np.nan), 2 * reach + 1)
    return np.flatnonzero(low & (change < 0.5 * np.nanmin(others, axis=1, initial=np.inf)))


def _leaps(place: Array, reach: int = 4) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Steps of a track that are a whole multiple, two or more, of what the steps around them are."""
    step = np.diff(place, axis=0)
    jumps: list[int] = []
    missing: list[int] = []
    for i in range(len(step)):
        near = [k for k in range(max(0, i - reach), min(len(step), i + reach + 1)) if k != i and np.isfinite(step[k]).all()]
        if len(near) < 4 or not np.isfinite(step[i]).all():
            continue
        if near[1] > i or near[-2] < i:  # from one side alone, a motion that speeds up looks like one that leaps
            continue
        usual = np.median(step[near], axis=0)
        size = float(np.hypot(*usual))
        scatter = 1.4826 * float(np.median(np.hypot(*(step[near] - usual).T)))
        multiple = float(step[i] @ usual) / size**2 if size > 0 else 0.0
        across = float(np.hypot(*(step[i] - multiple * usual)))
        whole = round(multiple)
        if whole >= 2 and abs(multiple - whole) < 0.3 and (multiple - 1) * size > 6 * scatter and across < 0.3 * size:
            jumps.append(i + 1)
            missing.append(whole - 1)
    return np.array(jumps, dtype=np.int64), np.array(missing, dtype=np.int64)
