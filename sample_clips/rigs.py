"""Each rig in front of the camera: what is drawn at a moment, and what is true then. Times are those of the frames' clock.

A rig has the methods of `moving.Motion` for the picture and those of `Ends` or `Arcs` for the truth table. Before its release it
stands still.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sample_clips.falls import EdgeSlide
from sample_clips.links import Landing
from sample_clips.motion import Record, Strand, evenly, in_world
from sample_clips.moving import Ball
from sample_clips.payout import Drawing, Payout

__all__ = ["Arcs", "BallRig", "DrawnRig", "EdgeRig", "Ends", "HeldRig", "PayoutRun", "Runs", "SurfaceRig"]

Floats = NDArray[np.float64]


@runtime_checkable
class Ends(Protocol):
    """A line or object with an end that is followed."""

    release_s: float

    def end(self, t: ArrayLike) -> Floats:
        """Centre of the end's ball (..., 3) [m] at times (...)."""

    def end_velocity(self, t: ArrayLike) -> Floats:
        """Its velocity (..., 3) [m/s]."""

    def over(self, t: ArrayLike) -> NDArray[np.bool_]:
        """Whether the motion asked for has ended by then (...)."""


@runtime_checkable
class Runs(Protocol):
    """A line that runs over a rim."""

    release_s: float

    def speed(self, t: float) -> float:
        """Rate at which line crosses the rim [m/s]."""

    def paid_out(self, t: float) -> float:
        """Length that has crossed it since release [m]."""


@runtime_checkable
class Arcs(Runs, Protocol):
    """A line that rises over the rim in an arc."""

    def apex(self, t: float) -> Floats:
        """Highest point of the line's axis (3,) [m]."""

    def width(self, t: float) -> float:
        """Distance of the legs at half the apex' height [m]."""


class _FromRecord:
    """A single point that is followed, from a record of places (k, 2) since release."""

    def __init__(self, path: Record, release_s: float) -> None:
        self._path, self.release_s = path, release_s

    def end(self, t: ArrayLike) -> Floats:
        return in_world(self._path.at(np.asarray(t, dtype=float) - self.release_s))

    def end_velocity(self, t: ArrayLike) -> Floats:
        return in_world(self._path.rate_at(np.asarray(t, dtype=float) - self.release_s))

    def over(self, t: ArrayLike) -> NDArray[np.bool_]:
        return np.asarray(np.asarray(t, dtype=float) - self.release_s > self._path.t_s[-1])


class BallRig(_FromRecord):
    """A ball let go."""

    def __init__(self, path: Record, release_s: float, ball: Ball) -> None:
        super().__init__(path, release_s)
        self._ball = ball

    def discs(self, t: float) -> Sequence[Ball]:
        return [_moved(self._ball, self.end(t))]


class HeldRig(_FromRecord):
    """A folded chain whose last mass was let go; the origin is the free end's place at release."""

    def __init__(self, record: Record, release_s: float, pitch_m: float, ball: Ball) -> None:
        self._all = Record(record.t_s, record.state - record.state[0, -1], record.rate)
        super().__init__(Record(record.t_s, self._all.state[:, -1], record.rate[:, -1]), release_s)
        self._ball = ball
        self._s = evenly(record.state.shape[1], pitch_m)[::-1]  # from the free end

    def strand(self, t: float) -> Strand:
        points = in_world(self._all.at(t - self.release_s))
        return Strand(points, self._s, np.ones(self._s.size, dtype=bool))

    def discs(self, t: float) -> Sequence[Ball]:
        return [_moved(self._ball, self.end(t))]


class SurfaceRig(_FromRecord):
    """A hung chain that lands; the origin is its top end's place at release. What has landed lies down in a small heap."""

    def __init__(self, landing: Landing, release_s: float, pitch_m: float, ball: Ball, heap_m: float = 0.012) -> None:
        record = landing.record
        super().__init__(_to_rest(Record(record.t_s, record.state[:, 0], record.rate[:, 0])), release_s)
        self._all, self._landed, self._ball = record, landing.landed_s, ball
        self._s = evenly(record.state.shape[1], pitch_m)  # from the top end
        laid = self._s[-1] - self._s  # length that has landed before each mass
        turns = (laid / heap_m) % 4
        self._aside = heap_m * np.where(turns < 1, turns, np.where(turns < 3, 2 - turns, turns - 4))
        self._away = 0.25 * heap_m * np.sin(laid / 0.021)
        self._up = 0.004 * laid / laid[0]

    def strand(self, t: float) -> Strand:
        since = min(t - self.release_s, float(self._all.t_s[-1]))
        points = in_world(self._all.at(since))
        lying = np.nan_to_num(-np.expm1(-np.maximum(since - self._landed, 0) / 0.006))
        points += lying[:, None] * np.stack([self._aside, self._away, self._up], axis=1)
        points[0] = self.end(t)
        return Strand(points, self._s, np.ones(self._s.size, dtype=bool))

    def discs(self, t: float) -> Sequence[Ball]:
        return [_moved(self._ball, self.end(t))]

    def over(self, t: ArrayLike) -> NDArray[np.bool_]:
        return np.zeros(np.shape(t), dtype=bool)  # it lies where it landed


def _to_rest(path: Record) -> Record:
    """A path (k, 2) that stops dead at its end and stays there: the ball lies on what has landed."""
    still = np.zeros((2, 2))
    return Record(
        np.r_[path.t_s, path.t_s[-1] + [1e-6, 1.0]],
        np.vstack([path.state, path.state[-1:], path.state[-1:]]),
        np.vstack([path.rate, still]),
    )


class EdgeRig(_FromRecord):
    """A chain over a table's edge; the origin is its leading end's place at release."""

    def __init__(self, slide: EdgeSlide, release_s: float, pitch_m: float, ball: Ball) -> None:
        gone, rate = slide.record.state[:, 0], slide.record.rate[:, 0]
        on = slide.overhang_m + gone
        ahead = (slide.place(on + 1e-7) - slide.place(on - 1e-7)) / 2e-7
        self._start = slide.place(slide.overhang_m)
        super().__init__(Record(slide.record.t_s, slide.place(on) - self._start, ahead * rate[:, None]), release_s)
        self._slide, self._ball = slide, ball
        self._s = np.arange(0, slide.length_m + pitch_m / 2, pitch_m)  # from the leading end

    def strand(self, t: float) -> Strand:
        gone = float(self._slide.record.at(t - self.release_s)[0])
        u = self._slide.overhang_m + gone
        bend = np.linspace(0, np.pi / 2 * self._slide.guide_m, 9)  # the guide's own points, so that it is seen round
        s = np.unique(np.r_[self._s, (u - bend)[(u - bend > 0) & (u - bend < self._s[-1])]])
        s = s[np.r_[True, np.diff(s) > 1e-9]]
        return Strand(in_world(self._slide.place(u - s) - self._start), s, np.ones(s.size, dtype=bool))

    def discs(self, t: float) -> Sequence[Ball]:
        return [_moved(self._ball, self.end(t))]


@dataclass(frozen=True, slots=True)
class PayoutRun:
    """A payout on the frames' clock; the origin is the middle of the rim."""

    payout: Payout
    release_s: float

    def strand(self, t: float) -> Strand:
        return self.payout.strand(t - self.release_s)

    def speed(self, t: float) -> float:
        return self.payout.speed(t - self.release_s)

    def paid_out(self, t: float) -> float:
        return self.payout.paid_out(t - self.release_s)

    def apex(self, t: float) -> Floats:
        return self.payout.apex(t - self.release_s)

    def width(self, t: float) -> float:
        return self.payout.width(t - self.release_s)


@dataclass(frozen=True, slots=True)
class DrawnRig:
    """A drawn line on the frames' clock; the origin is the middle of the rim."""

    drawing: Drawing
    release_s: float

    def strand(self, t: float) -> Strand:
        return self.drawing.strand(t - self.release_s)

    def speed(self, t: float) -> float:
        return float(self.drawing.speed(t - self.release_s))

    def paid_out(self, t: float) -> float:
        return self.drawing.paid_out(t - self.release_s)


def _moved(ball: Ball, centre: Floats) -> Ball:
    return Ball(centre, ball.radius_m, ball.albedo, ball.specular)
