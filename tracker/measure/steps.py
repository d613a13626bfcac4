"""Pictures that are not what their stamps say: repeated ones, and ones that were lost without a gap in the stamps.

A phone that cannot keep up shows a picture twice, or drops some and closes the gap in the stamps. Neither can be read from
the file's index, but pictures tell: a repeat lacks even the sensor's noise, and what moves smoothly leaps over lost frames.
"""

from collections.abc import Iterable, Iterator
from dataclasses import replace

import cv2
import numpy as np
from numpy.typing import NDArray

from calibration.clock import Clock, hidden_steps
from calibration.notice import Notice
from tracker.follow.end import EndFollow

__all__ = ["REPEATED", "StepWatch", "lost_notice", "repeat_notice", "without_repeats"]

Gray = NDArray[np.uint8]
REPEATED = "picture-repeated"
"""Flag of a frame that shows the picture before it."""

NOISE_FLOOR = 0.03  # grey levels; where pictures usually differ by less, compression left nothing that a repeat could lack
CLEAR_PX = 1.0  # a step; below, the noise of places could pass for a leap
NAMED = 4  # frames named in a sentence


class StepWatch:
    """Lets frames pass and keeps by how much each differs from the one before: one number a frame."""

    def __init__(self, frames: Iterable[tuple[int, Gray]]) -> None:
        self._frames = frames
        self._index: list[int] = []
        self._change: list[float] = []

    def __iter__(self) -> Iterator[tuple[int, Gray]]:
        before: Gray | None = None
        for index, gray in self._frames:
            if before is not None:
                self._change.append(float(cv2.norm(gray, before, cv2.NORM_L1)) / gray.size)
            self._index.append(index)
            before = gray
            yield index, gray

    def repeated(self) -> NDArray[np.intp]:
        """Frames that show the picture of the frame before."""
        change = np.array(self._change)
        if change.size == 0:
            return np.array([], dtype=np.intp)
        at = hidden_steps(change).repeated
        usual = np.array([np.median(change[max(0, i - 8) : i + 7]) for i in at])
        return np.array(self._index, dtype=np.intp)[at[usual > NOISE_FLOOR]]


def without_repeats(follow: EndFollow, repeated: NDArray[np.intp]) -> EndFollow:
    """The end, left empty where the picture is an old one: its place there is that of the frame before."""
    stale = np.isin(follow.frame, repeated)
    if not stale.any():
        return follow
    px, raw = follow.px.copy(), follow.raw_px.copy()
    px[stale], raw[stale] = np.nan, np.nan
    flags = tuple((*f, REPEATED) if s else f for f, s in zip(follow.flags, stale, strict=True))
    return replace(follow, px=px, raw_px=raw, flags=flags)


def repeat_notice(name: str, clock: Clock, repeated: NDArray[np.intp], speed_mps: float) -> tuple[Notice, ...]:
    """Say which pictures are repeated.

    Parameters
    ----------
    name : str
        Of the clip.
    clock : Clock
    repeated : (k,) array of int
        Frames.
    speed_mps : float
        Of what is followed, at its fastest; NaN where not known.

    Returns
    -------
    tuple of Notice
        One or none.
    """
    if repeated.size == 0:
        return ()
    many = f"{repeated.size} frames show" if repeated.size > 1 else "1 frame shows"
    shift = _shift(speed_mps, clock, 1)
    return (
        Notice(
            "pictures-repeated",
            f"{name}: {many} the picture of the frame before: {_named(clock, repeated)}.",
            f"Their stamps are not when they were taken, so they are left out. If the phone put them in besides the true frames, "
            f"all later times are {1e3 * clock.period_s:.2f} ms late for each of them{shift}.",
            "Film with the phone's own camera at a rate that it keeps up with, in good light, and hand over the original file.",
        ),
    )


def lost_notice(name: str, clock: Clock, follow: EndFollow, speed_mps: float) -> tuple[Notice, ...]:
    """Say where the followed end leaps over frames that the stamps do not miss.

    Parameters
    ----------
    name : str
        Of the clip.
    clock : Clock
    follow : EndFollow
        With repeated pictures left out.
    speed_mps : float
        Of the end, at its fastest; NaN where not known.

    Returns
    -------
    tuple of Notice
        One or none.
    """
    place = follow.px
    found = hidden_steps(np.ones(max(len(place) - 1, 0)), place)
    times = clock.frame_s[follow.frame]
    told = np.diff(times) > 1.5 * clock.period_s  # gaps that the stamps do tell
    sizes = np.hypot(*np.diff(place, axis=0).T)
    real = [k for k, i in enumerate(found.jumps) if not told[i - 1] and sizes[i - 1] > CLEAR_PX]
    if not real:
        return ()
    jumps, missing = follow.frame[found.jumps[real]], int(found.missing[real].sum())
    many = f"{missing} frames are" if missing > 1 else "1 frame is"
    return (
        Notice(
            "frames-lost",
            f"{name}: {many} missing although the stamps have no gap: the end leaps before {_named(clock, jumps)}.",
            f"All later times are {1e3 * missing * clock.period_s:.2f} ms early{_shift(speed_mps, clock, missing)}: speeds and "
            "accelerations over the leap are too large.",
            "Film again with free memory on the phone and hand over the original file, not a converted one; "
            "or set clip.window_s to a part without a leap.",
        ),
    )


def _shift(speed_mps: float, clock: Clock, frames: int) -> str:
    """What a time error of some frames is in place."""
    if not np.isfinite(speed_mps):
        return ""
    return f", up to {1e3 * speed_mps * frames * clock.period_s:.2g} mm of the way"


def _named(clock: Clock, frames: NDArray[np.intp]) -> str:
    named = [f"frame {i} ({clock.frame_s[i]:.3f} s)" for i in frames[:NAMED]]
    more = f" and {frames.size - NAMED} more" if frames.size > NAMED else ""
    return ", ".join(named) + more
