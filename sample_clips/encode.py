"""Frames to a phone's MP4 file: exact stamps, rotation tag, range flag, capture-rate tag.

PyAV writes the streams. Two things are set in the finished file's bytes: the track's display matrix (ISO/IEC 14496-12,
8.3.2 and 6.2.2), because what PyAV's versions offer for it differs, and the type of the capture-rate key, which phones store as a
32-bit float (type 23) where FFmpeg writes text.
"""

import struct
from collections.abc import Iterable, Iterator, Sequence
from fractions import Fraction
from itertools import pairwise
from pathlib import Path

import av
import numpy as np
from numpy.typing import NDArray

__all__ = ["write_clip"]

_CAPTURE_KEY = "com.android.capture.fps"


def write_clip(
    path: Path,
    frames: Iterable[NDArray[np.generic]],
    ticks: Sequence[int],
    time_base: Fraction,
    *,
    codec: str = "h264",
    bits: int = 8,
    full_range: bool = False,
    quarter_turns: int = 0,
    mirrored: bool = False,
    capture_fps_tag: float | None = None,
    crf: float = 18.0,
    keyframe_every: int = 12,
    preset: str = "medium",
    tint: tuple[float, float] = (0.0, 0.0),
) -> int:
    """Write a clip and give back its size.

    Parameters
    ----------
    path : Path
        The MP4 file; replaced if it is there.
    frames : iterable of (height, width) arrays
        Grey UPRIGHT pictures of even size, uint8 (0..255) or uint16 (0..1023, of 10 bits). They are stored turned, so that the
        rotation tag brings them upright again.
    ticks : sequence of int
        Presentation stamp of each frame, strictly increasing.
    time_base : Fraction
        Seconds a tick. A clip of 240 frames/s stretched to 30: ticks 0, 1, 2, ... of 1/30 s.
    codec : str
        "h264" or "hevc".
    bits : int
        8 or 10 a sample.
    full_range : bool
        Luma 0..255 and the flag for it, rather than 16..235.
    quarter_turns : int
        Clockwise quarter turns, 0 to 3, that bring the stored picture upright.
    mirrored : bool
        The stored picture is mirrored left-right before those turns.
    capture_fps_tag : float, optional
        True rate, written as phones do [1/s]; absent: no tag.
    crf : float
        Constant rate factor. Both encoders spend less on a frame that is shown shortly: at 240 frames/s and 720 x 1280 with 2.4 grey
        levels of noise 14 keeps the noise (37 kB a frame), 18 smooths it away as phones do (7 kB), 28 is a cheap phone (1.5 kB).
    keyframe_every : int
        Frames between key frames at most.
    preset : str
        Of the encoder: slower is smaller.
    tint : tuple of 2 floats
        Colour differences Cb and Cr of the whole picture, in units of 1/255 about neutral.

    Returns
    -------
    int
        Bytes.

    Raises
    ------
    ValueError
        Stamps that do not increase or do not match the frames; a picture of odd size; an unknown codec or depth.

    Notes
    -----
    One encoder thread and no frame reordering: the same frames give the same bytes with the same encoder version.
    """
    if codec not in ("h264", "hevc") or bits not in (8, 10):
        raise ValueError(f'write_clip: expected codec "h264" or "hevc" and 8 or 10 bits, got {codec!r} and {bits!r}.')
    if any(b <= a for a, b in pairwise(ticks)):
        raise ValueError("write_clip: stamps must increase from frame to frame.")
    pictures = iter(frames)
    first = next(pictures, None)
    if first is None or len(ticks) == 0:
        raise ValueError("write_clip: no frames.")
    height, width = _stored(first, quarter_turns, mirrored).shape
    if height % 2 or width % 2:
        raise ValueError(f"write_clip: width and height must be even, got {width} x {height}.")

    options = {} if capture_fps_tag is None else {"movflags": "use_metadata_tags"}
    with av.open(str(path), "w", format="mp4", options=options) as container:
        if capture_fps_tag is not None:
            container.metadata[_CAPTURE_KEY] = _PLACEHOLDER
        stream = container.add_stream("libx264" if codec == "h264" else "libx265", rate=_nominal_rate(ticks, time_base))
        assert isinstance(stream, av.VideoStream)
        _set_up(stream, width, height, bits, full_range, time_base, _encoder(codec, crf, keyframe_every, preset))
        count = 0
        for picture in _chain(first, pictures):
            if count >= len(ticks):
                raise ValueError(f"write_clip: more frames than the {len(ticks)} stamps.")
            stored = _stored(picture, quarter_turns, mirrored)
            container.mux(stream.encode(_video_frame(stored, bits, full_range, tint, int(ticks[count]), time_base)))
            count += 1
        if count != len(ticks):
            raise ValueError(f"write_clip: {count} frames for {len(ticks)} stamps.")
        container.mux(stream.encode(None))
    _mend(path, quarter_turns, mirrored, capture_fps_tag)
    return path.stat().st_size


# --- pictures ---------------------------------------------------------------------------------------------------------


def _chain(first: NDArray[np.generic], rest: Iterator[NDArray[np.generic]]) -> Iterator[NDArray[np.generic]]:
    yield first
    yield from rest


def _stored(upright: NDArray[np.generic], quarter_turns: int, mirrored: bool) -> NDArray[np.generic]:
    """The picture as stored: the inverse of what the display matrix does."""
    stored = np.rot90(upright, quarter_turns)  # counter-clockwise
    return stored[:, ::-1] if mirrored else stored


def _video_frame(
    grey: NDArray[np.generic], bits: int, full_range: bool, tint: tuple[float, float], tick: int, time_base: Fraction
) -> av.VideoFrame:
    """A 4:2:0 frame with this luma (ITU-R BT.709: limited luma 16 + 219 E', times four in 10 bits)."""
    white_in = 1023.0 if grey.dtype == np.uint16 else 255.0
    step = 2 ** (bits - 8)
    top = step * 256 - 1
    dtype = np.uint8 if bits == 8 else np.uint16
    code = np.arange(int(white_in) + 1) / white_in * (top if full_range else 219 * step) + (0 if full_range else 16 * step)
    table = np.rint(code).astype(dtype)
    height, width = grey.shape
    luma = np.ascontiguousarray(table[grey.astype(np.intp)])
    chroma_span = top / 255 if full_range else 224 * step / 255
    planes = [luma.ravel()]
    for difference in tint:
        value = round(128 * step + difference * chroma_span)
        planes.append(np.full(height * width // 4, value, dtype=dtype))
    packed = np.concatenate(planes).reshape(height * 3 // 2, width)
    frame = av.VideoFrame.from_ndarray(packed, format="yuv420p" if bits == 8 else "yuv420p10le")
    frame.color_range = 2 if full_range else 1
    frame.colorspace = 1
    frame.pts = tick
    frame.time_base = time_base
    return frame


# --- encoder ----------------------------------------------------------------------------------------------------------


def _nominal_rate(ticks: Sequence[int], time_base: Fraction) -> Fraction:
    """Mean frame rate; the encoder's rate control uses it, the stamps do not."""
    if len(ticks) < 2:
        return 1 / time_base
    return Fraction(len(ticks) - 1, int(ticks[-1] - ticks[0])) / time_base


def _encoder(codec: str, crf: float, keyframe_every: int, preset: str) -> dict[str, str]:
    """Encoder options: constant quality, one thread, no reordering of frames."""
    shared = {"crf": f"{crf:g}", "preset": preset, "bf": "0"}
    if codec == "h264":
        return {**shared, "g": str(keyframe_every), "threads": "1"}
    x265 = f"pools=none:frame-threads=1:bframes=0:keyint={keyframe_every}:log-level=error"
    return {**shared, "x265-params": x265}


def _set_up(
    stream: av.VideoStream,
    width: int,
    height: int,
    bits: int,
    full_range: bool,
    time_base: Fraction,
    options: dict[str, str],
) -> None:
    """Size, format, colour flags and options of the stream, before its first frame."""
    stream.width, stream.height = width, height
    stream.pix_fmt = "yuv420p" if bits == 8 else "yuv420p10le"
    stream.time_base = time_base
    context = stream.codec_context
    context.time_base = time_base
    context.color_range = 2 if full_range else 1
    context.colorspace = context.color_primaries = context.color_trc = 1
    context.thread_count = 1
    context.options = options
    if context.name == "libx265":
        context.codec_tag = "hvc1"


# --- bytes of the finished file ---------------------------------------------------------------------------------------

_PLACEHOLDER = "0000"  # as long as the float that replaces it


def _mend(path: Path, quarter_turns: int, mirrored: bool, capture_fps_tag: float | None) -> None:
    """Set the display matrix and the type of the capture-rate key in place; no box changes its size."""
    data = bytearray(path.read_bytes())
    moov = _box(data, (0, len(data)), "moov")
    if quarter_turns or mirrored:
        tkhd = _box(data, _box(data, moov, "trak"), "tkhd")
        at = tkhd[0] + (40 if data[tkhd[0]] == 0 else 52)  # version 0 or 1: shorter or longer times before the matrix
        width, height = (v >> 16 for v in struct.unpack(">2I", data[at + 36 : at + 44]))
        data[at : at + 36] = struct.pack(">9i", *_display_matrix(quarter_turns, mirrored, width, height))
    if capture_fps_tag is not None:
        meta = _box(data, _box(data, moov, "udta"), "meta")
        ilst = _box(data, (meta[0] + 4, meta[1]), "ilst")  # meta is a full box: version and flags come first
        value = struct.pack(">I", 16 + len(_PLACEHOLDER)) + b"data" + struct.pack(">II", 1, 0) + _PLACEHOLDER.encode()
        at = bytes(data).find(value, *ilst)
        if at < 0:
            raise RuntimeError("write_clip: the muxer did not write the capture-rate key as expected.")
        data[at : at + len(value)] = value[:8] + struct.pack(">IIf", 23, 0, capture_fps_tag)
    path.write_bytes(data)


def _box(data: bytearray, inside: tuple[int, int], kind: str) -> tuple[int, int]:
    """Span of the content of the first box of this kind directly inside a span (ISO/IEC 14496-12, 4.2)."""
    at, end = inside
    while at + 8 <= end:
        size, name = struct.unpack(">I4s", data[at : at + 8])
        head = 8
        if size == 1:
            size, head = struct.unpack(">Q", data[at + 8 : at + 16])[0], 16
        if name == kind.encode():
            return at + head, at + size
        at += size or end - at
    raise RuntimeError(f"write_clip: the muxer wrote no {kind} box.")


def _display_matrix(quarter_turns: int, mirrored: bool, width: int, height: int) -> tuple[int, ...]:
    """Track matrix a b u c d v x y w that turns the stored picture: x' = a p + c q + x, y' = b p + d q + y."""
    a, b, c, d = [(1, 0, 0, 1), (0, 1, -1, 0), (-1, 0, 0, -1), (0, -1, 1, 0)][quarter_turns]
    if mirrored:
        a, b = -a, -b  # first p -> width - p
    x = -min(0, a * width) - min(0, c * height)  # moved back so that the picture starts at 0, 0
    y = -min(0, b * width) - min(0, d * height)
    one = 1 << 16
    return (a * one, b * one, 0, c * one, d * one, 0, x * one, y * one, 1 << 30)
