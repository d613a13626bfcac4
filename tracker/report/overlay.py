"""The overlay video: the clip with what was followed drawn over it, and the numbers running below.

It shows at a glance whether the line was followed: one thin line with a dark edge, a diamond at the apex, a ring at the
free end, squares on marks, a cross at the datum, a bar of known length. Shapes differ, so that colour is not needed.
The numbers stand in a strip below the picture and hide nothing. Written frame by frame: memory does not grow with
the clip.
"""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Any

import av
import cv2
import numpy as np
from numpy.typing import NDArray

from calibration.notice import BadInput
from tracker.progress import Progress, silent
from tracker.report.colours import ROLES, rgb
from tracker.report.lettering import lettering
from tracker.report.tables import flag_text
from tracker.result import FrameMark, Result

__all__ = ["Painter", "Still", "pick_stills", "still", "write_overlay"]

Grey = NDArray[np.uint8]
SHOWN_FPS = 30
LONG_SIDE = 1280
SHORT_ENOUGH = 640  # smaller pictures are enlarged, or the numbers would not be read
DARK = (24, 24, 24)
SHIFT = 4  # sixteenths of a pixel: drawing is sub-pixel
TIMELINE = 6  # rows
# On noisy bench footage the fastest preset at 25 gave the picture and size of slower ones for a quarter of their time. No
# macroblock-tree rate control: with it, x264 reads memory that nobody set, and the same frames give other bytes.
X264 = {"preset": "ultrafast", "crf": "25", "profile": "high", "x264-params": "mbtree=0"}


@dataclass(frozen=True, slots=True, eq=False)
class Still:
    """One painted frame for the report."""

    stem: str
    frame: int
    words: str
    picture: Grey  # (h, w, 3), blue green red


class Painter:
    """Paints frames of one result.

    Parameters
    ----------
    result : Result
    size : (int, int)
        Width and height of the upright pictures that will come.
    """

    def __init__(self, result: Result, size: tuple[int, int]) -> None:
        self._result = result
        self._scale = _scale(size)
        self.width = _even(size[0] * self._scale)
        self._picture_height = _even(size[1] * self._scale)
        self._marks = {mark.frame: mark for mark in result.marks}
        self._rows = {int(frame): i for i, frame in enumerate(result.frames["frame"])}
        self._columns = {name: np.asarray(result.frames[name], dtype=float) for name in _NUMBERS if name in result.frames}
        self._small, self._large = lettering(_clamp(self.width / 44, 12, 17)), lettering(_clamp(self.width / 28, 15, 26))
        self._span = _span(result)
        self._strip = self._static_strip()
        self.height = self._picture_height + self._strip.shape[0]
        self._canvas = np.zeros((self.height, self.width), np.uint8)
        self._bar = _scale_bar(result.scale_px_per_m * self._scale, self.width)

    @property
    def slow_factor(self) -> float:
        """How many times slower than it happened the video runs; NaN where it is not known."""
        return _slow_factor(self._result.marks)

    def paint(self, frame: int, grey: Grey) -> Grey:
        """One frame of the video.

        Parameters
        ----------
        frame : int
            Its number in the clip.
        grey : (h, w) uint8 array
            Upright picture of the size announced.

        Returns
        -------
        (height, width, 3) uint8 array
            Blue, green, red; a new array.
        """
        canvas, top = self._canvas, self._picture_height
        _fit(grey, canvas[:top], self._scale)
        canvas[top:] = self._strip
        mark = self._marks.get(frame)
        self._write_numbers(canvas[top:], frame, mark)
        picture: Grey = np.asarray(cv2.cvtColor(canvas, cv2.COLOR_GRAY2BGR), dtype=np.uint8)
        self._draw_timeline(picture, frame, mark)
        self._draw_legend(picture)
        self._draw_bar(picture)
        _cross(picture, self._at(self._result.origin_px))
        if mark is not None:
            self._draw_mark(picture, mark)
        return picture

    def _at(self, point: Any) -> NDArray[np.float64]:
        """Place in the painted picture; pixel centres are whole numbers in both."""
        return (np.asarray(point, dtype=float) + 0.5) * self._scale - 0.5

    def _draw_mark(self, picture: Grey, mark: FrameMark) -> None:
        # The drawing may not reach into the strip: it is cut at the picture's lower edge.
        inside = picture[: self._picture_height]
        if mark.line_px is not None and len(mark.line_px):
            _line(inside, self._at(mark.line_px))
        if mark.marks_px is not None:
            for point in self._at(mark.marks_px):
                _shape(inside, point, _SQUARE, ROLES["mark"])
        if mark.apex_px is not None:
            _shape(inside, self._at(mark.apex_px), _DIAMOND, ROLES["apex"])
        if mark.end_px is not None:
            _ring(inside, self._at(mark.end_px))

    def _write_numbers(self, strip: Grey, frame: int, mark: FrameMark | None) -> None:
        texts = [str(frame), *self._numbers(frame, mark)]
        row = TIMELINE + 4 + self._small.height
        for i, text in enumerate(texts):
            self._large.write(strip, text, self._cell(i), row)
        self._small.write(strip, self._flags(frame, mark), self._cell(0), row + self._large.height + 2)

    def _numbers(self, frame: int, mark: FrameMark | None) -> list[str]:
        row = self._rows.get(frame)
        height = "apex_z_m" if self._result.kind == "payout" else "paid_out_m" if self._result.kind == "drawn" else "end_z_m"
        t = mark.t_s if mark is not None else self._value("t_s", row)
        return [
            f"{t:.4f} s" if np.isfinite(t) else "–", _or_dash(self._value(height, row), "m", 4),
            _or_dash(self._value("line_speed_mps", row), "m/s", 2),
        ]  # fmt: skip

    def _value(self, column: str, row: int | None) -> float:
        return float(self._columns[column][row]) if row is not None and column in self._columns else float("nan")

    def _flags(self, frame: int, mark: FrameMark | None) -> str:
        if mark is None:
            return "outside the frames that were followed"
        row = self._rows.get(frame)
        words = list(mark.flags)
        if row is not None and "flags" in self._result.frames:
            words += flag_text(self._result.frames["flags"].iloc[row]).split()
        return "flagged: " + ", ".join(word.replace("-", " ") for word in dict.fromkeys(words)) if words else ""

    def _cell(self, i: int) -> int:
        return round((0.012 + 0.25 * i) * self.width)

    def _static_strip(self) -> Grey:
        height = TIMELINE + 4 + 3 * self._small.height + self._large.height + 10
        legend_rows = self._legend_rows()
        height += (legend_rows - 1) * (self._small.height + 2)
        strip = np.full((_even(height), self.width), DARK[0], np.uint8)
        kind = self._result.kind
        middle = {"payout": "arc height above rim", "drawn": "paid out"}.get(kind, "height of the end")
        speed = "line speed" if kind in ("payout", "drawn") else "speed of the end"
        for i, label in enumerate(("frame", "time", middle, speed)):
            self._small.write(strip, label, self._cell(i), TIMELINE + 2, level=190)
        for (shape, words), (row, column) in zip(self._legend(), self._legend_places(), strict=True):
            after_shape = column + (self._small.height + 4 if shape else 0)
            self._small.write(strip, words, after_shape, self._legend_top() + row * (self._small.height + 2), level=215)
        return strip

    def _legend_top(self) -> int:
        return TIMELINE + 4 + 2 * self._small.height + self._large.height + 6

    def _legend(self) -> list[tuple[str, str]]:
        """(shape, words) of what occurs in this result."""
        marks = self._result.marks
        items = [
            ("line", "line", any(mark.line_px is not None for mark in marks)),
            ("apex", "apex", any(mark.apex_px is not None for mark in marks)),
            ("end", "object" if self._result.kind == "free-drop" else "free end", any(mark.end_px is not None for mark in marks)),
            ("mark", "marks", any(mark.marks_px is not None for mark in marks)),
            ("datum", "datum", bool(np.isfinite(self._result.origin_px).all())),
            ("window", "window", self._span[2] is not None),
        ]
        found = [(shape, words) for shape, words, occurs in items if occurs]
        factor = self.slow_factor
        slow = f"shown {factor:.3g} times slower than it happened" if np.isfinite(factor) and factor > 1.005 else "shown at its own speed"
        return [*found, ("", slow)]

    def _legend_places(self) -> list[tuple[int, int]]:
        """(row, column) of each, flowing into as many rows as the width needs."""
        places, row, column = [], 0, self._cell(0)
        for shape, words in self._legend():
            wide = (self._small.height + 4 if shape else 0) + self._small.width(words) + 14
            if column + wide - 14 > self.width and column > self._cell(0):
                row, column = row + 1, self._cell(0)
            places.append((row, column))
            column += wide
        return places

    def _legend_rows(self) -> int:
        return self._legend_places()[-1][0] + 1

    def _draw_legend(self, picture: Grey) -> None:
        half = self._small.height / 2
        for (shape, _), (row, column) in zip(self._legend(), self._legend_places(), strict=True):
            centre = np.array([column + half, self._picture_height + self._legend_top() + row * (self._small.height + 2) + half])
            if shape == "line":
                _line(picture, centre + np.array([[-half + 1, 0.0], [half - 1, 0.0]]))
            elif shape == "apex":
                _shape(picture, centre, _DIAMOND * 0.8, ROLES["apex"])
            elif shape == "mark":
                _shape(picture, centre, _SQUARE, ROLES["mark"])
            elif shape == "end":
                _ring(picture, centre, 6.0)
            elif shape == "datum":
                _cross(picture, centre, 6.0)
            elif shape == "window":
                x, y = (round(float(part)) for part in centre)
                picture[y - 3 : y + 4, x - round(half) + 1 : x + round(half) - 1] = _bgr(ROLES["window"])

    def _draw_timeline(self, picture: Grey, frame: int, mark: FrameMark | None) -> None:
        first, last, window = self._span
        if not last > first:
            return
        top = self._picture_height
        bar = picture[top : top + TIMELINE]
        bar[:] = 70

        def column(t: float) -> int:
            return int(np.clip((t - first) / (last - first), 0, 1) * (self.width - 1))

        if window is not None:
            bar[:, column(window[0]) : column(window[1]) + 1] = _bgr(ROLES["window"])
        if mark is not None:
            now = column(mark.t_s)
            bar[:, max(now - 3, 0) : now + 4] = 0
            bar[:, max(now - 1, 0) : now + 2] = 255

    def _draw_bar(self, picture: Grey) -> None:
        if self._bar is None:
            return
        long, text = self._bar
        left, row = self._cell(0) + 4, self._picture_height - 14
        ends = np.array([[left, row - 5], [left, row], [left + long, row], [left + long, row - 5]], float)
        _stroke(picture, ends, (255, 255, 255), 2)
        wide = self._small.width(text)
        patch = np.zeros((self._small.height, wide), np.uint8)
        self._small.write(patch, text, 0, 0)
        top = row - 6 - self._small.height
        column = int(left + max(0.0, (long - wide) / 2))
        under = picture[top : top + patch.shape[0], column : column + wide]
        edge = cv2.dilate(patch, cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (5, 5)))[: under.shape[0], : under.shape[1], None] / 255.0
        ink = patch[: under.shape[0], : under.shape[1], None] / 255.0
        under[:] = ((under * (1 - edge)) * (1 - ink) + 255 * ink).astype(np.uint8)


def write_overlay(
    result: Result, frames: Iterable[tuple[int, Grey]], path: Path, progress: Progress | None = None
) -> tuple[Still, ...]:
    """Write the overlay video and keep a few painted frames.

    Parameters
    ----------
    result : Result
    frames : iterable of (int, (h, w) uint8 array)
        Number and upright grey picture of each frame, in order; read once, one at a time.
    path : Path
        An .mp4 file: H.264, 4:2:0, its index in front, so that a browser plays it. 30 frames a second, each frame of the
        clip once.
    progress : callable, optional

    Returns
    -------
    tuple of Still
        First, middle of the window, last, and the first flagged frame, as far as they came.

    Raises
    ------
    OSError
        The disk is full or the file cannot be written.
    BadInput
        The installed PyAV cannot code H.264.
    ValueError
        There were no frames.
    """
    tell, wanted = progress or silent, pick_stills(result)
    kept: list[Still] = []
    painter: Painter | None = None
    with av.open(str(path), "w", format="mp4", options={"movflags": "+faststart"}) as container:
        stream: Any = None
        for count, (frame, grey) in enumerate(frames):
            if painter is None:
                painter = Painter(result, (grey.shape[1], grey.shape[0]))
                stream = _stream(container, painter)
            picture = painter.paint(frame, grey)
            kept += [Still(stem, frame, words, picture) for stem, (number, words) in wanted.items() if number == frame]
            for packet in stream.encode(_as_video(picture, count)):
                container.mux(packet)
            tell("overlay", count + 1, len(result.marks))
        if stream is None:
            raise ValueError("There are no frames to draw on.")
        for packet in stream.encode(None):
            container.mux(packet)
    return tuple(sorted(kept, key=lambda one: list(wanted).index(one.stem)))


def pick_stills(result: Result) -> dict[str, tuple[int, str]]:
    """Which frames tell most: stem of the file -> (frame, words)."""
    followed = [mark for mark in result.marks if mark.line_px is not None or mark.apex_px is not None or mark.end_px is not None]
    if not followed:
        return {}
    picks = {}
    window = _span(result)[2]
    inside = [mark for mark in followed if window is not None and window[0] <= mark.t_s <= window[1]]
    if inside:
        picks["still-window"] = (inside[len(inside) // 2].frame, "middle of the window")
    picks["still-first"] = (followed[0].frame, "first frame that was followed")
    picks["still-last"] = (followed[-1].frame, "last frame that was followed")
    flagged = [mark for mark in result.marks if mark.flags]
    if flagged:
        picks["still-flagged"] = (flagged[0].frame, "first flagged frame: " + ", ".join(flagged[0].flags).replace("-", " "))
    return picks


def still(result: Result, stem: str, frame: int, words: str, grey: Grey) -> Still:
    """One painted frame without the video."""
    return Still(stem, frame, words, Painter(result, (grey.shape[1], grey.shape[0])).paint(frame, grey))


_NUMBERS = ("t_s", "apex_z_m", "end_z_m", "line_speed_mps", "paid_out_m")
_DIAMOND = np.array([[0.0, -9.0], [9.0, 0.0], [0.0, 9.0], [-9.0, 0.0]])
_SQUARE = np.array([[-5.0, -5.0], [5.0, -5.0], [5.0, 5.0], [-5.0, 5.0]])


def _stream(container: Any, painter: Painter) -> Any:
    try:
        stream = container.add_stream("libx264", rate=SHOWN_FPS, options=X264)
    except av.codec.codec.UnknownCodecError:
        raise BadInput(
            "The PyAV that is installed has no H.264 encoder, so the overlay video cannot be written.",
            "Install PyAV from the package registry (its own builds have one), or measure with --no-overlay.",
        ) from None
    stream.width, stream.height, stream.pix_fmt = painter.width, painter.height, "yuv420p"
    context = stream.codec_context
    context.time_base = Fraction(1, SHOWN_FPS)
    context.thread_type = "FRAME"
    # OpenCV converts by BT.601, limited range (ITU-T H.273: 6 is SMPTE 170M, range 1 is limited); the file says so.
    context.colorspace, context.color_primaries, context.color_trc, context.color_range = 6, 6, 6, 1
    return stream


def _as_video(picture: Grey, count: int) -> av.VideoFrame:
    planes: Grey = np.asarray(cv2.cvtColor(picture, cv2.COLOR_BGR2YUV_I420), dtype=np.uint8)
    frame = av.VideoFrame.from_ndarray(planes, format="yuv420p")
    frame.pts, frame.time_base = count, Fraction(1, SHOWN_FPS)
    return frame


def _span(result: Result) -> tuple[float, float, tuple[float, float] | None]:
    """First and last time of the frames, and the window of the headline."""
    times = [mark.t_s for mark in result.marks]
    windows = [quantity.window_s for quantity in result.quantities.values() if quantity.window_s is not None]
    return (min(times, default=0.0), max(times, default=0.0), windows[0] if windows else None)


def _slow_factor(marks: tuple[FrameMark, ...]) -> float:
    steps = np.diff([mark.t_s for mark in marks])
    return float(1 / (SHOWN_FPS * np.median(steps))) if len(steps) and np.median(steps) > 0 else float("nan")


def _scale(size: tuple[int, int]) -> float:
    long = max(size)
    return LONG_SIDE / long if long > LONG_SIDE else max(1.0, SHORT_ENOUGH / long)


def _even(length: float) -> int:
    return 2 * max(1, round(length / 2))


def _clamp(value: float, low: int, high: int) -> int:
    return int(min(max(round(value), low), high))


def _fit(grey: Grey, onto: Grey, scale: float) -> None:
    if scale == 1.0:
        high, wide = min(grey.shape[0], onto.shape[0]), min(grey.shape[1], onto.shape[1])
        onto[:high, :wide] = grey[:high, :wide]
        return
    kind = cv2.INTER_AREA if scale < 1 else cv2.INTER_LINEAR
    onto[:] = cv2.resize(grey, (onto.shape[1], onto.shape[0]), interpolation=kind)


def _scale_bar(px_per_m: float, width: int) -> tuple[float, str] | None:
    """Length in pixels and words of a bar of a round length, a sixth to a third of the picture."""
    if not np.isfinite(px_per_m) or px_per_m <= 0:
        return None
    for exponent in range(-4, 4):
        for lead in (1, 2, 5):
            metres = lead * 10.0**exponent
            if metres * px_per_m >= width / 6:
                return metres * px_per_m, f"{metres:g} m" if metres >= 1 else f"{1000 * metres:g} mm"
    return None


def _or_dash(value: float, unit: str, places: int) -> str:
    return f"{value:.{places}f} {unit}".replace("-", "−") if np.isfinite(value) else "–"


def _bgr(colour: str) -> tuple[int, int, int]:
    red, green, blue = rgb(colour)
    return blue, green, red


def _stroke(picture: Grey, points: NDArray[np.float64], colour: tuple[int, int, int], wide: int, closed: bool = False) -> None:
    fixed = np.rint(points * (1 << SHIFT)).astype(np.int32).reshape(-1, 1, 2)
    cv2.polylines(picture, [fixed], closed, DARK, wide + 2, cv2.LINE_AA, SHIFT)
    cv2.polylines(picture, [fixed], closed, colour, wide, cv2.LINE_AA, SHIFT)


def _line(picture: Grey, points: NDArray[np.float64]) -> None:
    """A thin line with a dark edge; a gap in the points is a gap in the line."""
    pieces = [np.rint(piece * (1 << SHIFT)).astype(np.int32).reshape(-1, 1, 2) for piece in _pieces(points)]
    if pieces:
        cv2.polylines(picture, pieces, False, DARK, 3, cv2.LINE_AA, SHIFT)
        cv2.polylines(picture, pieces, False, _bgr(ROLES["line"]), 1, cv2.LINE_AA, SHIFT)


def _pieces(points: NDArray[np.float64]) -> Iterator[NDArray[np.float64]]:
    known = np.isfinite(points).all(axis=1)
    edges = np.flatnonzero(np.diff(np.concatenate(([0], known.astype(np.int8), [0]))))
    for start, stop in zip(edges[::2], edges[1::2], strict=True):
        piece = points[start:stop]
        # A lone point has no length to draw: it becomes a dash of a pixel.
        yield piece if len(piece) > 1 else piece + np.array([[-0.5, 0.0], [0.5, 0.0]])


def _shape(picture: Grey, centre: NDArray[np.float64], outline: NDArray[np.float64], colour: str) -> None:
    if np.isfinite(centre).all():
        _stroke(picture, outline + centre, _bgr(colour), 2, closed=True)


def _ring(picture: Grey, centre: NDArray[np.float64], radius: float = 11.0) -> None:
    if not np.isfinite(centre).all():
        return
    x, y = (round(float(part) * (1 << SHIFT)) for part in centre)
    for colour, wide in ((DARK, 4), (_bgr(ROLES["end"]), 2)):
        cv2.circle(picture, (x, y), round(radius * (1 << SHIFT)), colour, wide, cv2.LINE_AA, SHIFT)


def _cross(picture: Grey, centre: NDArray[np.float64], arm: float = 8.0) -> None:
    if np.isfinite(centre).all():
        for along in (np.array([[-arm, 0.0], [arm, 0.0]]), np.array([[0.0, -arm], [0.0, arm]])):
            _stroke(picture, along + centre, (255, 255, 255), 1)
