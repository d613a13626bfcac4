"""A video file as upright luma frames with exact integer time stamps.

How it is done: the file is read through once without decoding (demuxed) for the stamps of its pictures. Pictures
that an edit list hides are left out, what is left is put in display order, and stamps stay integer ticks with
their base; seconds are made in `calibration.clock`. One picture is decoded for size, orientation and range. A pass
over the frames decodes in a thread of its own that runs a few pictures ahead, and every decoded picture finds its
index by its stamp, never by counting. So a picture that does not decode leaves a hole in the indices and shifts
nothing. Sampling a clip that has few key frames decodes most of it; those pictures then wait on disk (`spool.py`) for
the pass that follows.

Luma is plane 0 of the decoded picture, coded light Y', brought from limited or full range of any bit depth to
0..255. It is never tone-mapped: a transfer tag (HLG, PQ) is reported and otherwise left alone.
"""

import hashlib
import math
import queue
import threading
from bisect import bisect_right
from collections.abc import Callable, Generator, Iterable, Iterator, Sequence
from contextlib import closing
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import av
import cv2
import numpy as np
from av.buffer import Buffer
from av.container import InputContainer
from av.video.frame import VideoFrame
from av.video.stream import VideoStream
from numpy.typing import NDArray

from calibration.notice import BadInput, CannotMeasure, Notice
from tracker.spool import Spool

__all__ = ["Clip", "orientation", "to_full_scale", "turned_upright"]

Gray = NDArray[np.uint8]

CAPTURE_RATE_TAG = "com.android.capture.fps"
AHEAD_BYTES = 64 * 2**20  # what may wait, decoded, for the one who measures
TRANSFER_NAMES = {1: "BT.709", 6: "BT.601", 8: "linear", 13: "sRGB", 14: "BT.2020", 15: "BT.2020", 16: "PQ", 18: "HLG"}  # ITU-T H.273
FULL_RANGE = 2  # H.273 video_full_range_flag as PyAV numbers it; 1 limited, 0 not said
COPY_AGAIN = "Copy it again from the phone; if it still fails, record again and stop the recording before the battery does."


class Clip:
    """One video file. Cheap to open, holds no file open, may be pickled and read by several threads.

    Parameters
    ----------
    path : Path or str
    stream : int, optional
        Index of the video stream in the file; by default the one with the largest picture.

    Attributes
    ----------
    path : Path
    stream : int
        Index of the stream that is read.
    stored_width, stored_height : int
        Size of the picture as recorded [px].
    width, height : int
        Size of the upright picture [px].
    quarter_turns : int
        Clockwise quarter turns, 0 to 3, from the stored to the upright picture.
    mirrored : bool
        Whether the picture is mirrored left to right after those turns.
    codec, pix_fmt : str
    bit_depth : int
        Bits of a luma sample.
    full_range : bool
        Whether luma runs over all its codes; else 16 to 235 (in 8 bits).
    transfer : str
        Name of the transfer tag, empty if none. Reported only.
    ticks : (n,) int64 array
        Stamps in display order, strictly rising, the edit list honoured.
    time_base : Fraction
        Seconds a tick.
    tag_fps : float or None
        Rate of capture that the phone wrote into the file.

    Raises
    ------
    BadInput
        No such file, a folder, not a video, sound only, no picture.
    CannotMeasure
        Damaged so that no picture decodes, or no time stamps.
    """

    def __init__(self, path: Path | str, *, stream: int | None = None) -> None:
        self.path = Path(path)
        self._late: dict[str, Notice] = {}
        self._missing: set[int] = set()
        self._doubtful: set[int] = set()
        self._spool: Spool | None = None
        self._spooled = 0  # frames before this one are in the spool, or do not decode
        with _open(self.path) as container:
            chosen, said = _choose(container, self.path, stream)
            self.stream = chosen.index
            self.tag_fps, tag_said = _capture_tag(container, chosen, self.path.name)
            self._index, self._look = _read_through(container, chosen, self.path)
        self._opening = (*said, *tag_said, *self._index.notices, *self._look.notices)

    @property
    def stored_width(self) -> int:
        return self._look.stored[0]

    @property
    def stored_height(self) -> int:
        return self._look.stored[1]

    @property
    def quarter_turns(self) -> int:
        return self._look.quarter_turns

    @property
    def mirrored(self) -> bool:
        return self._look.mirrored

    @property
    def width(self) -> int:
        return self._look.stored[self.quarter_turns % 2]

    @property
    def height(self) -> int:
        return self._look.stored[1 - self.quarter_turns % 2]

    @property
    def codec(self) -> str:
        return self._look.codec

    @property
    def pix_fmt(self) -> str:
        return self._look.pix_fmt

    @property
    def bit_depth(self) -> int:
        return self._look.luma.bits

    @property
    def full_range(self) -> bool:
        return self._look.luma.full

    @property
    def transfer(self) -> str:
        return self._look.transfer

    @property
    def ticks(self) -> NDArray[np.int64]:
        return self._index.ticks

    @property
    def time_base(self) -> Fraction:
        return self._index.time_base

    @property
    def frame_count(self) -> int:
        """Number of stamps. After a pass, `notices` tells if fewer pictures decode."""
        return len(self._index.ticks)

    @property
    def notices(self) -> tuple[Notice, ...]:
        """What was found on opening, and after a pass over the frames what only decoding shows."""
        return (*self._opening, *self._late.values())

    @property
    def doubtful(self) -> frozenset[int]:
        """Indices of decoded pictures that may carry traces of damage before them, as far as passes have seen."""
        return frozenset(self._doubtful)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Give back what sampling kept on disk. The clip may still be read."""
        spool, self._spool, self._spooled = self._spool, None, 0
        if spool is not None:
            spool.close()

    def __getstate__(self) -> dict[str, Any]:
        return {**self.__dict__, "_spool": None, "_spooled": 0}

    def sha256(self) -> str:
        """SHA-256 of the whole file, in hexadecimal digits."""
        with self.path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()

    def describe(self) -> dict[str, Any]:
        """What the file is, for the trail of a result. Tags of place, time and owner are left out."""
        span = float((self.ticks[-1] - self.ticks[0]) * self.time_base)
        return {
            "file": self.path.name,
            "bytes": self.path.stat().st_size,
            "stream": self.stream,
            "codec": self.codec,
            "pix_fmt": self.pix_fmt,
            "bit_depth": self.bit_depth,
            "full_range": self.full_range,
            "transfer": self.transfer,
            "width": self.width,
            "height": self.height,
            "stored_width": self.stored_width,
            "stored_height": self.stored_height,
            "quarter_turns": self.quarter_turns,
            "mirrored": self.mirrored,
            "frames": self.frame_count,
            "time_base": f"{self.time_base.numerator}/{self.time_base.denominator}",
            "stamp_span_s": span,
            "stamp_rate_per_s": (self.frame_count - 1) / span if span > 0 else None,
            "capture_rate_tag_per_s": self.tag_fps,
        }

    def frames(self, start: int = 0, stop: int | None = None) -> Iterator[tuple[int, Gray]]:
        """Upright luma, frame by frame, in display order.

        Decoding runs ahead in its own thread; memory does not grow with the length of the clip.

        Parameters
        ----------
        start, stop : int
            Half-open range of frame indices, 0 <= start <= stop <= frame_count.

        Yields
        ------
        index : int
            Strictly rising; a frame that does not decode is left out, and `notices` then says so.
        gray : (height, width) uint8 array
            Contiguous, full scale 0..255, the caller's own.

        Raises
        ------
        CannotMeasure
            The picture changes its size on the way.
        """
        stop = self._checked_range(start, stop)
        return _run_ahead(lambda: self._upright(start, stop), self._ahead()) if stop > start else iter(())

    def sample(self, indices: Sequence[int]) -> list[Gray]:
        """A few frames, in the order asked for, reached by seeking where the file has key frames near them.

        Parameters
        ----------
        indices : sequence of int
            Frame indices. An index that does not decode is left out, so the list may be shorter.

        Returns
        -------
        list of (height, width) uint8 arrays
        """
        wanted = sorted({int(i) for i in indices})
        if wanted and not 0 <= wanted[0] <= wanted[-1] < self.frame_count:
            raise ValueError(f"indices: expected 0 to {self.frame_count - 1}, got {wanted[0]} to {wanted[-1]}.")
        found: dict[int, Gray] = {}
        if self._spool is None and wanted and self._worth_spooling(wanted):
            self._fill_spool(wanted[-1] + 1)
        if wanted and wanted[-1] < self._spooled:
            found = dict(self._kept(wanted))
            return [found[int(i)] for i in indices if int(i) in found]
        with _Reader(self) as reader:
            for group in self._index.groups(wanted):
                found.update((i, gray) for i, gray in reader.run(group[0], group[-1] + 1, frozenset(group)))
        return [found[int(i)] for i in indices if int(i) in found]

    def _checked_range(self, start: int, stop: int | None) -> int:
        stop = self.frame_count if stop is None else stop
        if not 0 <= start <= stop <= self.frame_count:
            raise ValueError(f"frames: expected 0 <= start <= stop <= {self.frame_count}, got {start} and {stop}.")
        return stop

    def _ahead(self) -> int:
        return max(2, min(16, AHEAD_BYTES // (self.width * self.height)))

    def _upright(self, start: int, stop: int) -> Iterator[tuple[int, Gray]]:
        kept = min(stop, self._spooled)
        yield from self._kept(range(start, kept))
        if (start := max(start, kept)) < stop:
            with _Reader(self) as reader:
                yield from reader.run(start, stop)

    def _worth_spooling(self, wanted: list[int]) -> bool:
        """Whether reaching these frames decodes half the clip or more, and the disk has room for it."""
        key_places = [-1 if (key := self._index.key_before(i)) < 0 else self._index.key_ticks[key] for i in wanted]
        last_of_key = dict(zip(key_places, wanted, strict=True))
        decoded = sum(
            last + 1 - (int(np.searchsorted(self.ticks, key)) if key != -1 else 0) for key, last in last_of_key.items()
        )
        return decoded >= self.frame_count / 2 and Spool.fits(wanted[-1] + 1, (self.height, self.width))

    def _fill_spool(self, stop: int) -> None:
        spool = Spool((self.height, self.width))
        with closing(_run_ahead(lambda: self._upright(0, stop), self._ahead())) as pictures:
            for i, gray in pictures:
                if not spool.keep(i, gray):
                    spool.close()
                    return
        self._spool, self._spooled = spool, stop

    def _kept(self, indices: Iterable[int]) -> Iterator[tuple[int, Gray]]:
        for i in indices:
            gray = None if self._spool is None else self._spool.get(i)
            if gray is not None:
                yield i, gray

    def _tell(self, start: int, stop: int, seen: set[int], faults: list[int | None]) -> None:
        """Note what a finished pass over [start, stop) did not see."""
        index = self._index
        missing = set(range(start, stop)) - seen
        damaged = missing | {index.place[pts] for pts in faults if pts in index.place and start <= index.place[pts] < stop}
        if not damaged:
            return
        self._missing |= missing
        for i in damaged:  # what is decoded later may be drawn from it, up to the next key frame
            key = bisect_right(index.key_turn, int(index.turn[i]))
            end = index.key_turn[key] if key < len(index.key_turn) else np.inf
            after = np.flatnonzero((index.turn > index.turn[i]) & (index.turn < end))
            self._doubtful |= set(after.tolist()) & seen
        if not self._missing:
            return
        first = min(self._missing)
        into = float((index.ticks[first] - index.ticks[0]) * index.time_base)
        doubtful = f" {len(self._doubtful)} more may carry traces of the damage." if self._doubtful else ""
        self._late["frames-do-not-decode"] = Notice(
            "frames-do-not-decode",
            f"{self.path.name}: {len(self._missing)} of {self.frame_count} frames do not decode, the first is frame {first}, "
            f"{into:.3f} s of stored time into the clip.{doubtful}",
            "They are left out; the others keep their own time.",
            COPY_AGAIN,
        )


# --- opening ---------------------------------------------------------------------------------------------------


def _open(path: Path) -> InputContainer:
    """Open for reading, or say in one sentence why not."""
    name = path.name
    if not path.exists():
        raise BadInput(f"{name}: there is no such file in {path.absolute().parent}.", "Check the name and the folder.")
    if path.is_dir():
        raise BadInput(f"{name}: is a folder, not a video file.", "Name one clip in it.")
    try:
        with path.open("rb") as file:
            head = file.read(12)
    except OSError as fault:
        raise BadInput(f"{name}: cannot be read ({fault.strerror}).", "Check its permissions, or copy it elsewhere.") from fault
    if not head:
        raise BadInput(f"{name}: the file is empty (0 bytes).", COPY_AGAIN)
    try:
        # Only local files: a renamed playlist must not make this machine fetch something.
        return av.open(
            str(path.absolute()), "r", metadata_errors="replace", options={"protocol_whitelist": "file"}
        )
    except (av.FFmpegError, OSError, ValueError) as fault:
        if head[4:8] in (b"ftyp", b"mdat", b"wide", b"moov", b"free"):
            raise BadInput(f"{name}: is incomplete: its index, which is written last, is missing or damaged.", COPY_AGAIN) from fault
        raise BadInput(
            f"{name}: is not a video file that can be read.", "Give the clip as the phone recorded it (MP4, MOV, MKV, WebM, AVI)."
        ) from fault


def _choose(container: InputContainer, path: Path, wanted: int | None) -> tuple[VideoStream, tuple[Notice, ...]]:
    """The stream with the largest picture; cover pictures do not count."""
    covers = av.stream.Disposition.attached_pic | av.stream.Disposition.timed_thumbnails
    films = [s for s in container.streams.video if not s.disposition & covers and s.codec_context is not None]
    if wanted is not None:
        films = [s for s in films if s.index == wanted]
        if not films:
            raise BadInput(f"{path.name}: stream {wanted} is not a video stream.", "Leave the stream out, or name another.")
    if not films:
        what = "sound only, no video" if container.streams.audio else "no video"
        raise BadInput(f"{path.name}: holds {what}.", "Give the clip as the phone recorded it.")
    best = max(films, key=lambda s: (s.width * s.height, s.frames, -s.index))
    if len(films) == 1:
        return best, ()
    sizes = ", ".join(f"stream {s.index} with {s.width} x {s.height}" for s in films)
    notice = Notice(
        "several-videos",
        f"{path.name}: holds {len(films)} videos ({sizes}); stream {best.index}, the largest picture, is measured.",
        "None if that is the recording.",
        "Export the recording alone if another one is meant.",
    )
    return best, (notice,)


def _capture_tag(
    container: InputContainer, stream: VideoStream, name: str
) -> tuple[float | None, tuple[Notice, ...]]:
    """The phone's own statement of the true rate of capture, if there is one."""
    text = stream.metadata.get(CAPTURE_RATE_TAG) or container.metadata.get(CAPTURE_RATE_TAG)
    if text is None:
        return None, ()
    try:
        rate = float(text)
    except ValueError:
        rate = math.nan
    if math.isfinite(rate) and rate > 0:
        return rate, ()
    notice = Notice(
        "capture-tag-unreadable",
        f"{name}: the tag {CAPTURE_RATE_TAG} is {text!r}, which is no rate; it is left out.",
        "None if clock.capture_fps is given.",
        "Give clock.capture_fps in the sheet.",
    )
    return None, (notice,)


# --- stamps ----------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Index:
    """Stamps of the pictures shown, and the key frames at which decoding may start."""

    ticks: NDArray[np.int64]
    time_base: Fraction
    by_order: bool  # the container stamps no display times: pictures are matched by order
    key_ticks: tuple[int, ...]  # rising
    key_dts: tuple[int, ...]
    place: dict[int, int]  # tick -> index
    turn: NDArray[np.int64]  # (n,) turn of each frame in decode order
    key_turn: tuple[int, ...]  # the same of key frames, rising
    notices: tuple[Notice, ...]

    def key_before(self, index: int) -> int:
        """Position of the last key frame shown at or before a frame; -1 if decoding must start at the file's start.

        A picture shown before its key frame may lean on pictures of the group before, so shown order decides.
        """
        return -1 if self.by_order else bisect_right(self.key_ticks, int(self.ticks[index])) - 1

    def groups(self, wanted: Sequence[int]) -> list[list[int]]:
        """Split rising frame indices into runs that share a key frame or follow without a skip of one."""
        runs: list[list[int]] = []
        for i in wanted:
            if runs and self.key_before(i) - self.key_before(runs[-1][-1]) <= (1 if runs[-1][-1] == i - 1 else 0):
                runs[-1].append(i)
            else:
                runs.append([i])
        return runs


def _read_through(container: InputContainer, stream: VideoStream, path: Path) -> "tuple[_Index, _Look]":
    """Read all packets once; decode only until the first sound picture is seen."""
    shown: list[tuple[int | None, int | None]] = []
    keys: dict[int, tuple[int, int]] = {}  # stamp -> decode stamp, turn
    turns: dict[int | None, int] = {}
    look: _Look | None = None
    corrupt = hidden = 0
    broken = False
    codec = stream.codec_context.codec.canonical_name
    try:
        for packet in container.demux(stream):
            if look is None:
                look = _first_look(stream, packet, path)
            if packet.size == 0:
                continue
            corrupt += packet.is_corrupt
            if packet.is_keyframe and packet.pts is not None and packet.dts is not None:
                keys[packet.pts] = packet.dts, len(shown)
            if packet.is_discard:
                hidden += 1
            elif not _is_invisible(codec, packet):
                turns.setdefault(packet.dts if packet.pts is None else packet.pts, len(shown))
                shown.append((packet.pts, packet.dts))
    except (av.FFmpegError, OSError):
        broken = True
        look = look or _first_look(stream, None, path)
    count = hidden + len(shown)
    if not shown:
        if hidden:
            raise BadInput(f"{path.name}: shows no picture: its edit list hides all {hidden}.", "Export the clip again without cuts.")
        raise BadInput(f"{path.name}: holds a video of no pictures.", COPY_AGAIN)
    if look is None:
        raise CannotMeasure(f"{path.name}: the file is damaged: not one picture decodes.", COPY_AGAIN, "clip-damaged")
    ticks, by_order, said = _in_display_order(shown, path.name)
    if broken or corrupt or ("mov" in container.format.name and count < stream.frames):
        said.append(_cut_short(path.name, count, stream.frames, corrupt))
    time_base = stream.time_base
    if time_base is None or time_base <= 0:
        raise CannotMeasure(f"{path.name}: holds no time base, so no time stamps.", "Record as MP4 or MOV.", "no-time-stamps")
    ticks.flags.writeable = False
    ordered = sorted(keys)
    place = {int(t): i for i, t in enumerate(ticks)}
    turn = np.array([turns.get(int(t), i) for i, t in enumerate(ticks)], dtype=np.int64)
    key_dts, key_turn = tuple(keys[k][0] for k in ordered), tuple(sorted(k[1] for k in keys.values()))
    return _Index(ticks, time_base, by_order, tuple(ordered), key_dts, place, turn, key_turn, tuple(said)), look


def _cut_short(name: str, found: int, promised: int, in_part: int) -> Notice:
    of = f"{found} of {promised} pictures are" if found < promised else f"{_many(found, 'picture')} can be read"
    part = f", {in_part} of them only in part" if in_part else ""
    return Notice(
        "file-cut-short",
        f"{name}: the file is damaged or cut short: {of}{' in it' if found < promised else ''}{part}.",
        "What is left is measured; nothing is filled in.",
        COPY_AGAIN,
    )


def _many(count: int, noun: str) -> str:
    return f"{count} {noun}{'' if count == 1 else 's'}"


def _in_display_order(
    shown: list[tuple[int | None, int | None]], name: str
) -> tuple[NDArray[np.int64], bool, list[Notice]]:
    """Unique rising stamps; whether they had to be taken from the decode order; what was wrong with them."""
    notices: list[Notice] = []
    stamps = [pts for pts, _ in shown if pts is not None]
    by_order = len(stamps) < len(shown)
    if by_order:  # some containers stamp only the decode order: a shifted but equally spaced copy of the display order
        stamps = [dts for _, dts in shown if dts is not None]
        if len(stamps) < len(shown):
            raise CannotMeasure(
                f"{name}: {len(shown) - len(stamps)} of {len(shown)} pictures carry no time stamp.",
                "Give the file as the phone recorded it (MP4 or MOV), not a bare stream.",
                "no-time-stamps",
            )
    decode = [dts for _, dts in shown if dts is not None]
    if falls := sum(b < a for a, b in pairwise(decode)):
        notices.append(
            Notice("stamps-out-of-order", f"{name}: {falls} pictures stand out of order in the file; they were sorted by stamp.")
        )
    ticks, counts = np.unique(np.array(stamps, dtype=np.int64), return_counts=True)
    if (twice := np.flatnonzero(counts > 1)).size:
        notices.append(
            Notice(
                "stamps-twice",
                f"{name}: {int((counts - 1).sum())} pictures carry the stamp of another, the first at frame {int(twice[0])}; "
                "the first of each is kept.",
                "Those moments are measured once.",
                "Give the file as the phone recorded it.",
            )
        )
    return ticks, by_order, notices


def _is_invisible(codec: str, packet: "av.Packet[VideoStream]") -> bool:
    """Whether a packet only prepares later pictures and shows none.

    VP9 bitstream specification, 6.2 (uncompressed header) and annex B (superframes); VP8: RFC 6386, 9.1.
    """
    if codec not in ("vp8", "vp9"):
        return False
    data = memoryview(packet)
    if codec == "vp8":
        return not data[0] & 0x10
    marker = data[-1]
    size_bytes, frames = (marker >> 3 & 3) + 1, (marker & 7) + 1
    index = 2 + size_bytes * frames
    if marker & 0xE0 == 0xC0 and len(data) >= index and data[-index] == marker:
        return False  # a superframe carries its invisible frame together with the one shown
    bits = f"{data[0]:08b}"
    rest = bits[5:] if bits[2:4] == "11" else bits[4:]  # profile 3 has one reserved bit more
    return rest[0] == "0" and rest[2] == "0"


# --- the picture -----------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Luma:
    """How plane 0 becomes 0..255."""

    bits: int
    full: bool
    shift: int  # unused low bits of a sample
    plain: bool  # plane 0 is luma and nothing else, little endian
    rgb: bool


@dataclass(frozen=True, slots=True)
class _Look:
    """What one decoded picture says of all of them."""

    stored: tuple[int, int]  # width, height
    quarter_turns: int
    mirrored: bool
    codec: str
    pix_fmt: str
    transfer: str
    luma: _Luma
    notices: tuple[Notice, ...]

    def gray(self, frame: VideoFrame, scratch: "_Scratch") -> Gray:
        """Upright full-scale luma of a decoded picture, in memory of its own."""
        turned = self.quarter_turns != 0 or self.mirrored
        flat = _luma(frame, self.luma, scratch, keep=not turned)
        return turned_upright(flat, self.quarter_turns, self.mirrored) if turned else flat


def _first_look(stream: VideoStream, packet: "av.Packet[VideoStream] | None", path: Path) -> _Look | None:
    """What the first sound picture out of a packet shows, if one comes out."""
    try:
        frames = stream.codec_context.decode(packet)
    except (av.FFmpegError, OSError):
        return None
    return next((_look_at(f, stream, path) for f in frames if not f.is_corrupt), None)


def _look_at(frame: VideoFrame, stream: VideoStream, path: Path) -> _Look:
    """Size, orientation, range and oddities."""
    notices: list[Notice] = []
    matrix = frame.side_data.get("DISPLAYMATRIX")
    turns, mirrored, exact = orientation(_int32(matrix)) if isinstance(matrix, Buffer) else (0, False, True)
    if not exact:
        notices.append(
            Notice(
                "odd-rotation",
                f"{path.name}: its display matrix is no quarter turn; the nearest ({turns}) is used.",
                "The picture may lean.",
                "State the vertical with datum.plumb_px.",
            )
        )
    aspect = stream.sample_aspect_ratio
    if aspect and aspect != 1:
        notices.append(
            Notice(
                "pixels-not-square",
                f"{path.name}: its pixels are tagged as {aspect.numerator}:{aspect.denominator}, not square; stored pixels are used.",
                "A lens calibration with square pixels does not hold.",
                "Give the file as the phone recorded it.",
            )
        )
    if frame.interlaced_frame:
        notices.append(
            Notice(
                "interlaced",
                f"{path.name}: is interlaced: odd and even rows are taken half a frame period apart.",
                "Moving points are torn; times of rows are wrong by half a frame period.",
                "Record progressive video.",
            )
        )
    transfer = int(frame.color_trc)
    return _Look(
        (frame.width, frame.height),
        turns,
        mirrored,
        stream.codec_context.codec.canonical_name,
        frame.format.name,
        TRANSFER_NAMES.get(transfer, "" if transfer in (0, 2) else f"H.273 code {transfer}"),
        _luma_of(frame, stream),
        tuple(notices),
    )


def _luma_of(frame: VideoFrame, stream: VideoStream) -> _Luma:
    form = frame.format
    first, others = form.components[0], form.components[1:]
    alone = first.plane == 0 and all(c.plane != 0 for c in others)
    rgb = form.is_rgb or form.has_palette
    plain = alone and not rgb and not form.is_big_endian and not form.is_bit_stream and 8 <= first.bits <= 16
    high_bits = form.name.startswith(("p0", "p2", "p4")) and first.bits > 8  # p010le and its kin: sample in the high bits
    return _Luma(
        bits=first.bits if plain else 8,
        full=rgb or _is_full(frame, stream),
        shift=16 - first.bits if high_bits else 0,
        plain=plain,
        rgb=rgb,
    )


def _is_full(frame: VideoFrame, stream: VideoStream) -> bool:
    """The range tag of the stream itself; without one, limited (ITU-T H.264 and H.265, annex E), save for gray stills."""
    if frame.format.name.startswith("yuvj"):
        return True
    if frame.color_range:
        return int(frame.color_range) == FULL_RANGE
    broadcast = ("h264", "hevc", "vp8", "vp9", "av1", "mpeg4", "mpeg2video", "h263")
    return frame.format.name.startswith("gray") and stream.codec_context.codec.canonical_name not in broadcast


class _Scratch:
    """Memory used again for every picture: getting it anew costs more than the work done in it."""

    def __init__(self) -> None:
        self._kept: dict[str, NDArray[Any]] = {}

    def like(self, name: str, shape: tuple[int, ...], dtype: type) -> NDArray[Any]:
        kept = self._kept.get(name)
        if kept is None or kept.shape != shape or kept.dtype != dtype:
            kept = self._kept[name] = np.empty(shape, dtype)
        return kept


def _luma(frame: VideoFrame, luma: _Luma, scratch: _Scratch, keep: bool) -> Gray:
    """Full-scale luma as stored; unless it is to be kept, it may lie in memory that the next picture uses."""
    if luma.rgb:  # BT.601 luma, as in a JPEG's own gray
        return np.asarray(cv2.cvtColor(frame.to_ndarray(format="rgb24"), cv2.COLOR_RGB2GRAY), dtype=np.uint8)
    if not luma.plain:  # packed or big endian: to planar 8 bits of the same range
        word = "JPEG" if luma.full else "MPEG"
        frame = frame.reformat(format="yuv444p", src_color_range=word, dst_color_range=word)
    plane = frame.planes[0]
    wide = luma.plain and luma.bits > 8
    samples = np.frombuffer(memoryview(plane), dtype=np.dtype("<u2") if wide else np.dtype(np.uint8))
    stride = plane.line_size // samples.itemsize  # rows are padded to the decoder's taste
    view = samples[: stride * frame.height].reshape(frame.height, stride)[:, : frame.width]
    if luma.bits == 8 and luma.full:
        plain = view.astype(np.uint8, copy=False)
        return plain.copy() if keep else plain
    work = scratch.like("codes", view.shape, np.uint16 if wide else np.uint8)
    out = None if keep else scratch.like("gray", view.shape, np.uint8)
    return to_full_scale(view, luma.bits, luma.full, luma.shift, work, out)


def to_full_scale(
    codes: NDArray[Any],
    bits: int,
    full: bool,
    shift: int = 0,
    work: NDArray[Any] | None = None,
    out: Gray | None = None,
) -> Gray:
    """Luma codes to 0..255: black at 0, white at 255, clipped beyond, rounded to the nearest.

    Parameters
    ----------
    codes : (h, w) uint8 array for 8 bits, else uint16
    bits : int
        Bit depth of a code.
    full : bool
        Full range (0 to 2^bits - 1) or limited (16 to 235, times 2^(bits-8); ITU-R BT.709 and BT.2100).
    shift : int
        Unused low bits below the code.
    work : array like `codes`, optional
        Memory to work in.
    out : (h, w) uint8 array, optional
        Where to write.

    Returns
    -------
    (h, w) uint8 array
    """
    black, white = (0, 2**bits - 1) if full else (16 << bits - 8, 235 << bits - 8)
    native: NDArray[np.integer[Any]] = codes.astype(np.uint8 if bits == 8 else np.uint16, copy=False)
    # Two passes by vector instructions beat one look-up table. The first saturates at black, so the second's absolute
    # value has nothing to do; it rounds and saturates at white.
    above = cv2.subtract(native, np.array([float(black << shift)]), dst=work) if black else native
    return np.asarray(cv2.convertScaleAbs(above, dst=out, alpha=255.0 / (white - black << shift)), dtype=np.uint8)


def _int32(data: Buffer) -> NDArray[np.int32]:
    return np.frombuffer(bytes(data), dtype=np.int32)


def orientation(matrix: NDArray[Any]) -> tuple[int, bool, bool]:
    """Quarter turns and mirroring of a display matrix.

    Parameters
    ----------
    matrix : (9,) array
        a b u, c d v, x y w: a stored point (column, row) is shown at column a*column + c*row + x and
        row b*column + d*row + y (ISO/IEC 14496-12, 6.2.2).

    Returns
    -------
    quarter_turns : int
        Clockwise, 0 to 3, done first.
    mirrored : bool
        Mirror left to right, done after.
    exact : bool
        False if the matrix is not one of the eight, and the nearest was taken.
    """
    a, b, c, d = (float(matrix[i]) for i in (0, 1, 3, 4))
    size = math.hypot(a, b, c, d) / math.sqrt(2)
    if size == 0:  # some writers leave it empty: no turn
        return 0, False, True
    mirrored = a * d - b * c < 0
    if mirrored:
        a, c = -a, -c
    turns = round(math.atan2(b - c, a + d) / (math.pi / 2)) % 4
    cos, sin = ((1, 0), (0, 1), (-1, 0), (0, -1))[turns]
    off = max(abs(a / size - cos), abs(b / size - sin), abs(c / size + sin), abs(d / size - cos))
    return turns, mirrored, off < 1e-3


def turned_upright(stored: Gray, quarter_turns: int, mirrored: bool) -> Gray:
    """Turn clockwise by quarter turns, then mirror left to right."""
    if quarter_turns:
        code = (cv2.ROTATE_90_CLOCKWISE, cv2.ROTATE_180, cv2.ROTATE_90_COUNTERCLOCKWISE)[quarter_turns - 1]
        stored = np.asarray(cv2.rotate(stored, code), dtype=np.uint8)
    return np.asarray(cv2.flip(stored, 1), dtype=np.uint8) if mirrored else stored


# --- decoding --------------------------------------------------------------------------------------------------


def _decoded(container: InputContainer, stream: VideoStream, faults: list[int | None]) -> Iterator[VideoFrame]:
    """Every sound picture from where the container stands; faulty packets are stepped over and listed by stamp."""
    last: int | None = None
    packets = container.demux(stream)
    while True:
        try:
            packet = next(packets)
        except StopIteration:
            return
        except (av.FFmpegError, OSError):  # the file ends in the middle: what is in the decoder still comes out
            faults.append(last)
            packet = None
        last = last if packet is None else packet.pts
        for _ in range(64 if packet is None or packet.size == 0 else 1):  # a flush that fails is asked again
            try:
                frames = stream.codec_context.decode(packet)
            except EOFError:
                break
            except (av.FFmpegError, OSError):
                faults.append(last)
                continue
            for frame in frames:
                if frame.is_corrupt:
                    faults.append(frame.pts)
                else:
                    yield frame
            break
        if packet is None:
            return


class _Reader:
    """An open file of a clip from which ranges of frames are decoded, by seeking where that is safe."""

    def __init__(self, clip: Clip) -> None:
        self._clip, self._index, self._scratch = clip, clip._index, _Scratch()
        self._container, self._stream = self._fresh()

    def _fresh(self) -> tuple[InputContainer, VideoStream]:
        container = _open(self._clip.path)
        stream = container.streams[self._clip.stream]
        assert isinstance(stream, VideoStream)
        stream.thread_type = "AUTO"
        return container, stream

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._container.close()

    def run(
        self, start: int, stop: int, wanted: frozenset[int] | None = None
    ) -> Iterator[tuple[int, Gray]]:
        """Frames of [start, stop) that decode, or those wanted of them, with their indices, rising."""
        key = self._index.key_before(start)
        seeks = [key] if key > 0 else []
        for at in [*seeks, None]:
            if at is not None and not self._goes_to(at):
                continue
            if at is None:
                self._container.close()
                self._container, self._stream = self._fresh()
            last = start - 1
            faults: list[int | None] = []
            seen: set[int] = set()
            for i, frame in self._numbered(faults):
                if i < start or i <= last:
                    continue
                if at is not None and last < start and i > start:
                    break  # the seek did not reach far enough back: read from the start instead
                if i >= stop:
                    break
                last = i
                seen.add(i)
                if wanted is None or i in wanted:
                    yield i, self._clip._look.gray(frame, self._scratch)
                if i == stop - 1:
                    break
            if seen or at is None:
                self._clip._tell(start, stop, seen, faults)
                return

    def _goes_to(self, key: int) -> bool:
        """Seek to a key frame; whether its packet then really comes first."""
        for target in (self._index.key_dts[key], self._index.key_ticks[key]):
            try:
                self._container.seek(target, stream=self._stream)
                first = next(iter(self._container.demux(self._stream)), None)
                if first is None or first.pts is None or first.pts != self._index.key_ticks[key]:
                    continue
                self._container.seek(target, stream=self._stream)
                return True
            except (av.FFmpegError, OSError):
                continue
        return False

    def _numbered(self, faults: list[int | None]) -> Iterator[tuple[int, VideoFrame]]:
        size = (self._clip.stored_width, self._clip.stored_height)
        for order, frame in enumerate(_decoded(self._container, self._stream, faults)):
            i = order if self._index.by_order else self._index.place.get(-1 if frame.pts is None else frame.pts)
            if i is None or i >= len(self._index.ticks):
                continue
            if (frame.width, frame.height) != size:
                raise CannotMeasure(
                    f"{self._clip.path.name}: the picture changes from {size[0]} x {size[1]} to "
                    f"{frame.width} x {frame.height} at frame {i}.",
                    "Record again without changing the camera's setting.",
                    "picture-size-changes",
                )
            yield i, frame


def _run_ahead(work: Callable[[], Iterator[tuple[int, Gray]]], depth: int) -> Generator[tuple[int, Gray], None, None]:
    """Run an iterator in a thread of its own, at most `depth` items ahead."""
    ready: queue.Queue[tuple[int, Gray] | BaseException | None] = queue.Queue(maxsize=depth)
    left = threading.Event()

    def put(item: tuple[int, Gray] | BaseException | None) -> bool:
        while not left.is_set():
            try:
                ready.put(item, timeout=0.05)
                return True
            except queue.Full:
                continue
        return False

    def produce() -> None:
        items = work()
        try:
            for item in items:
                if not put(item):
                    return
            put(None)
        except BaseException as fault:  # told to the one who reads, whatever it is
            put(fault)
        finally:
            if isinstance(items, Generator):
                items.close()

    worker = threading.Thread(target=produce, name="decode", daemon=True)
    worker.start()
    try:
        while (item := ready.get()) is not None:
            if isinstance(item, BaseException):
                raise item
            yield item
    finally:
        left.set()
        worker.join()
