"""A clip against files that others measured (shared/footage/MANIFEST.md) and against files written here with known content."""

import dataclasses
import hashlib
import json
import pickle
import threading
from collections.abc import Callable, Iterator
from fractions import Fraction
from pathlib import Path
from typing import Any

import av
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import tracker.clip
from calibration.clock import make_clock
from calibration.notice import BadInput, CannotMeasure
from tests.footage import SHARED, clips, footage
from tracker.clip import Clip, _run_ahead, orientation, to_full_scale, turned_upright
from tracker.spool import Spool

# Name, frames, upright width and height, clockwise quarter turns, bits, full range, transfer, codec: shared/footage/MANIFEST.md,
# whose figures were read with ffprobe and PyAV when it was made; transfer codes ITU-T H.273.
CONTAINERS = [
    ("container/sample_android_slow_motion.mp4", 7, 1280, 720, 0, 8, True, "h264"),
    ("container/sample_sef_slow_motion.mp4", 63, 320, 240, 0, 8, False, "h264"),
    ("container/sample_sef_super_slow_motion.mp4", 435, 160, 120, 0, 8, False, "h264"),
    ("container/sample_edit_list.mp4", 77, 1080, 1920, 1, 10, False, "hevc"),
    ("container/sample_edit_list_only_preroll_sync_sample.mp4", 16, 640, 360, 0, 8, False, "h264"),
    ("container/edit_list_positive_shift.mp4", 270, 1920, 1080, 0, 8, False, "h264"),
    ("container/iibbibb_editlist_videoonly.mp4", 12, 704, 576, 0, 8, False, "h264"),
    ("container/hlg10-color-test.mp4", 9, 1920, 1080, 0, 10, False, "hevc"),
    ("container/hdr10-video-with-sdr-container.mp4", 28, 1920, 1080, 0, 10, False, "hevc"),
    ("container/hdr10-av1.mp4", 127, 720, 1280, 0, 10, False, "av1"),
    ("container/portrait_4k60.mp4", 18, 2160, 3840, 1, 8, True, "h264"),
    ("container/h265_with_metadata_track.mp4", 3, 1080, 1920, 1, 8, True, "hevc"),
    ("container/dolbyVision-hdr.MOV", 4, 720, 1280, 1, 10, False, "hevc"),
    ("container/h265_bframes.mp4", 30, 854, 480, 0, 8, False, "hevc"),
    ("container/testvid_1022ms.mp4", 30, 480, 360, 0, 8, False, "h264"),
    ("container/sample_12_5fps_720p_1s.mp4", 13, 1280, 720, 0, 8, False, "h264"),
    ("container/sample_with_increasing_timestamps.mp4", 30, 1920, 1080, 0, 8, True, "h264"),
    ("container/roadtrip-vp92-10bit.webm", 72, 426, 240, 0, 10, False, "vp9"),
    ("container/bear-vp9.webm", 82, 320, 240, 0, 8, False, "vp9"),
    ("container/av1_video.mkv", 125, 640, 360, 0, 8, False, "av1"),
    ("container/bt709_full_range.mp4", 30, 1280, 720, 0, 8, True, "h264"),
    ("container/h264_10bits.mp4", 30, 200, 200, 0, 10, False, "h264"),
    ("container/h265_10bits.mp4", 30, 200, 200, 0, 10, False, "hevc"),
    ("container/video_0.mov", 3, 568, 320, 0, 8, False, "h264"),
    ("container/video_90.mov", 3, 320, 568, 1, 8, False, "h264"),
    ("container/video_180.mov", 3, 568, 320, 2, 8, False, "h264"),
    ("container/video_270.mov", 3, 320, 568, 3, 8, False, "h264"),
    ("container/unordered.mov", 4, 50, 50, 0, 8, False, "h264"),
    ("made-here/walkers_h264.mp4", 60, 768, 576, 0, 8, False, "h264"),
    ("made-here/walkers_hevc_main10.mp4", 60, 768, 576, 0, 10, False, "hevc"),
    ("made-here/walkers_full_range.mp4", 60, 768, 576, 0, 8, True, "h264"),
    ("made-here/walkers_hevc_main10_full_hlg_tag.mp4", 60, 768, 576, 0, 10, True, "hevc"),
    ("made-here/walkers_vp9.webm", 60, 768, 576, 0, 8, False, "vp9"),
    ("made-here/walkers_av1.mp4", 30, 768, 576, 0, 8, False, "av1"),
    ("made-here/walkers_rot90.mp4", 30, 768, 576, 1, 8, False, "h264"),
    ("made-here/walkers_rot180.mp4", 30, 768, 576, 2, 8, False, "h264"),
    ("made-here/walkers_rot270.mp4", 30, 768, 576, 3, 8, False, "h264"),
    ("made-here/walkers_edit_list.mp4", 45, 768, 576, 0, 8, False, "h264"),
    ("made-here/walkers_fragmented.mp4", 60, 768, 576, 0, 8, False, "h264"),
    ("made-here/walkers_vfr.mp4", 57, 768, 576, 0, 8, False, "h264"),
    ("made-here/walkers_ramp_8x.mp4", 60, 768, 576, 0, 8, False, "h264"),
    ("made-here/walkers_hevc_main10_true_240_jitter.mp4", 60, 768, 576, 0, 10, False, "hevc"),
    ("moving/chaplin.mp4", 241, 640, 360, 0, 8, False, "h264"),
    ("moving/newtonscradle.gif", 36, 200, 150, 0, 8, True, "gif"),
    ("moving/tree.avi", 68, 320, 240, 0, 8, True, "cinepak"),
]
QUICK = [c[0] for c in CONTAINERS if not any(slow in c[0] for slow in ("4k60", "positive_shift", "hdr10-av1"))]


# --- files of others ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name, frames, width, height, turns, bits, full, codec", CONTAINERS, ids=lambda v: str(v))
def test_every_container_gives_its_frames(
    name: str, frames: int, width: int, height: int, turns: int, bits: int, full: bool, codec: str
) -> None:
    clip = Clip(footage(name))
    assert (clip.frame_count, clip.width, clip.height, clip.quarter_turns) == (frames, width, height, turns)
    assert (clip.bit_depth, clip.full_range, clip.codec, clip.mirrored) == (bits, full, codec, False)
    assert (np.diff(clip.ticks) > 0).all()
    indices = []
    for i, gray in clip.frames():
        indices.append(i)
        assert gray.shape == (height, width) and gray.dtype == np.uint8 and gray.flags.c_contiguous and gray.flags.writeable
    assert indices == list(range(frames))
    assert clip.notices == ()  # none of these is damaged, odd or has a second video


@pytest.mark.parametrize("stream, frames, size", [(0, 325, (320, 180)), (3, 390, (480, 270))])
def test_stamps_of_both_streams_agree_with_ffprobe(stream: int, frames: int, size: tuple[int, int]) -> None:
    """Stamps written by ffprobe, in the JSON files beside the clip (to 1 us)."""
    path = footage("container/nasa_13013.mp4")
    listed = json.loads(footage(f"container/nasa_13013.mp4.stream{stream}.all_frames_info.json").read_text(encoding="utf-8"))
    clip = Clip(path, stream=stream)
    assert (clip.width, clip.height) == size
    seconds = [float(tick * clip.time_base) for tick in clip.ticks]
    np.testing.assert_allclose(seconds, [float(f["pts_time"]) for f in listed], atol=0.6e-6)
    assert len(seconds) == frames


def test_of_several_videos_the_largest_is_taken_and_said() -> None:
    clip = Clip(footage("container/nasa_13013.mp4"))
    assert clip.stream == 3
    (notice,) = clip.notices
    assert notice.code == "several-videos" and "stream 3" in notice.says and "480 x 270" in notice.says
    with pytest.raises(BadInput, match="stream 1 is not a video"):
        Clip(clip.path, stream=1)


@pytest.mark.parametrize(
    "name, hidden",
    [
        ("container/sample_edit_list.mp4", 9),
        ("container/sample_edit_list_only_preroll_sync_sample.mp4", 1),
        ("container/iibbibb_editlist_videoonly.mp4", 1),
        ("made-here/walkers_edit_list.mp4", 15),
    ],
)
def test_edit_lists_hide_frames(name: str, hidden: int) -> None:
    """ISO/IEC 14496-12, 8.6.6; numbers of hidden frames from MANIFEST.md."""
    path = footage(name)
    with av.open(str(path), options={"ignore_editlist": "1"}) as container:
        everything = sum(packet.size > 0 for packet in container.demux(video=0))
    assert Clip(path).frame_count == everything - hidden


def test_a_delayed_start_keeps_its_stamp() -> None:
    clip = Clip(footage("container/edit_list_positive_shift.mp4"))
    assert clip.ticks[0] * clip.time_base == 1  # the edit list delays by 1 s; the clock starts at the first frame


@pytest.mark.parametrize("name", ["walkers_vfr", "walkers_ramp_8x", "walkers_hevc_main10_true_240_jitter"])
def test_varying_stamps_are_exact(name: str) -> None:
    truth = json.loads(footage("made-here/truth.json").read_text(encoding="utf-8"))[f"{name}.mp4"]
    clip = Clip(footage(f"made-here/{name}.mp4"))
    assert clip.time_base == Fraction(truth["time_base"])
    assert clip.ticks.tolist() == truth["stamp_ticks"]


@pytest.mark.parametrize("name", QUICK)
def test_pictures_and_order_agree_with_plain_decoding(name: str) -> None:
    """Another path to the same pictures: PyAV's own decode loop, sorted by stamp, luma by float formula and numpy turns."""
    path = footage(name)
    clip = Clip(path)
    with av.open(str(path)) as container:
        plain = sorted(((f.pts, f) for f in container.decode(video=0)), key=lambda pair: pair[0])
    assert [pts for pts, _ in plain] == clip.ticks.tolist()
    if clip.pix_fmt in ("bgra", "rgb24"):
        return
    for i, gray in clip.frames():
        if i % 5 not in (0, 1):  # the numpy formula is slow
            continue
        frame = plain[i][1]
        wide = clip.bit_depth > 8
        codes = np.frombuffer(bytes(frame.planes[0]), "<u2" if wide else "u1").reshape(frame.height, -1)[:, : frame.width]
        black, white = (0, 2**clip.bit_depth - 1) if clip.full_range else (16 * 2**clip.bit_depth // 256, 235 * 2**clip.bit_depth // 256)
        expected = np.clip(np.rint((codes.astype(float) - black) * 255 / (white - black)), 0, 255)
        np.testing.assert_array_equal(gray, np.rot90(expected, -clip.quarter_turns))


@pytest.mark.parametrize("name", QUICK)
def test_sampling_and_ranges_give_the_same_pictures(name: str) -> None:
    clip = Clip(footage(name))
    n = clip.frame_count
    every = dict(clip.frames())
    wanted = [n - 1, 0, n // 2, n // 3, n // 3, min(1, n - 1)]  # not sorted, one twice
    sampled = clip.sample(wanted)
    assert len(sampled) == len(wanted)
    for i, gray in zip(wanted, sampled, strict=True):
        np.testing.assert_array_equal(gray, every[i])
    clip.close()
    ranges = ((n - 1, n), (n // 3, n // 3 + 1), (n // 2, n), (1, n // 2), (n, n))
    for start, stop in ranges if clip.width < 1000 else ranges[:2]:
        found = list(clip.frames(start, max(start, stop)))
        assert [i for i, _ in found] == list(range(start, stop))
        assert all((gray == every[i]).all() for i, gray in found)


@pytest.mark.parametrize("fault", ["none", "seek lands late", "seek cannot be checked"])
def test_a_lone_sample_is_reached_by_seeking(fault: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """A file of several key frames: only the group of the frame asked for is decoded, and the picture is the same.

    A container whose seeks land behind the frame must cost time, never show another picture.
    """
    clip = Clip(footage("container/roadtrip-vp92-10bit.webm"))
    keys = clip._index.key_ticks
    assert len(keys) == 3
    every = dict(clip.frames())
    decoded: list[int] = []
    plain = tracker.clip._decoded

    def counted(*arguments: Any) -> Iterator[Any]:
        for frame in plain(*arguments):
            decoded.append(frame.pts)
            yield frame

    monkeypatch.setattr("tracker.clip._decoded", counted)
    wanted = int(np.searchsorted(clip.ticks, keys[1])) + 3
    if fault == "seek lands late":
        clip._index = dataclasses.replace(clip._index, key_dts=(keys[2],) * 3)
    if fault == "seek cannot be checked":
        monkeypatch.setattr("tracker.clip._Reader._goes_to", lambda self, key: self._container.seek(keys[2], stream=self._stream) or True)
    np.testing.assert_array_equal(clip.sample([wanted])[0], every[wanted])
    assert (len(decoded) < clip.frame_count / 4) == (fault != "seek cannot be checked")
    assert [i for i, gray in clip.frames(wanted) if (gray == every[i]).all()] == list(range(wanted, clip.frame_count))
    assert clip.notices == ()


# --- range and bit depth ------------------------------------------------------------------------------------------


def source_walkers(count: int) -> Iterator[np.ndarray]:
    """The 60 frames of vtest.avi that all walkers_* files show, luma codes as decoded."""
    with av.open(str(footage("moving/vtest.avi"))) as container:
        for i, frame in enumerate(container.decode(video=0)):
            if i >= 300 + count:
                return
            if i >= 300:
                plane = frame.planes[0]
                yield np.frombuffer(plane, np.uint8).reshape(-1, plane.line_size)[: frame.height, : frame.width].astype(float)


@pytest.mark.parametrize("name, mean_off", [("hevc_main10.mp4", 1.5), ("h264.mp4", 1.6), ("vp9.webm", 1.6), ("av1.mp4", 1.7)])
def test_limited_encodings_decode_to_the_luma_of_the_source(name: str, mean_off: float) -> None:
    """MANIFEST.md: the 10-bit plane lies within 1.5 limited grey levels (mean absolute) of the source, bias below 0.1.

    The 8-bit encodings are coarser by the same measure: 1.57, 1.54, 1.65, read from their bare planes. Codes beyond black
    and white are clipped on both sides.
    """
    clip = Clip(footage(f"made-here/walkers_{name}"))
    off = np.array([g - full(s) for (_, g), s in zip(clip.frames(0, 20), source_walkers(20), strict=True)]) * (219 / 255)
    assert np.abs(off).mean() < mean_off
    assert abs(off.mean()) < 0.1


@pytest.mark.parametrize("name, white", [("walkers_full_range", 1.0), ("walkers_hevc_main10_full_hlg_tag", 1020 / 1023)])
def test_full_range_encodings_agree_with_limited_ones(name: str, white: float) -> None:
    """MANIFEST.md: the same luma after range conversion, and an HLG tag on SDR pictures changes nothing.

    The 10-bit full file was made by shifting 8-bit codes up, so its white lies at 1020, not 1023.
    """
    limited = np.array([g for _, g in Clip(footage("made-here/walkers_hevc_main10.mp4")).frames(0, 20)], dtype=float)
    off = np.array([g for _, g in Clip(footage(f"made-here/{name}.mp4")).frames(0, 20)]) / white - limited
    assert abs(off.mean()) < 0.15 and np.abs(off).mean() < 2.5  # each within 1.5 limited levels of the source


@pytest.mark.parametrize("turn", [90, 180, 270])
def test_turned_walkers_stand_upright(turn: int) -> None:
    upright = dict(Clip(footage("made-here/walkers_h264.mp4")).frames(0, 30))
    clip = Clip(footage(f"made-here/walkers_rot{turn}.mp4"))
    for i, gray in clip.frames():
        off = np.abs(gray.astype(float) - upright[i]).mean()
        assert off < 2.3  # two encodings, each 1.6 levels from the source
        for wrong in (gray[::-1, ::-1], gray[:, ::-1], gray[::-1]):
            assert np.abs(wrong.astype(float) - upright[i]).mean() > 10 * off


def test_the_streams_own_range_tag_wins() -> None:
    """MANIFEST.md: its container tags disagree with its stream (limited, PQ)."""
    clip = Clip(footage("container/hdr10-video-with-sdr-container.mp4"))
    assert (clip.full_range, clip.transfer, clip.bit_depth) == (False, "PQ", 10)


def test_two_codecs_of_one_10_bit_pattern_agree() -> None:
    pairs = zip(Clip(footage("container/h264_10bits.mp4")).frames(), Clip(footage("container/h265_10bits.mp4")).frames(), strict=True)
    off = np.mean([np.abs(a.astype(float) - b).mean() for (_, a), (_, b) in pairs])
    assert off < 3.0


@pytest.mark.parametrize(
    "bits, full, shift, black, white",
    [
        (8, False, 0, 16, 235),  # ITU-R BT.709; BT.2100 table 9 for 10 and 12 bits
        (8, True, 0, 0, 255),
        (10, False, 0, 64, 940),
        (10, True, 0, 0, 1023),
        (12, False, 0, 256, 3760),
        (10, False, 6, 64, 940),  # P010: the code in the high bits
    ],
)
def test_every_code_goes_to_the_nearest_level(bits: int, full: bool, shift: int, black: int, white: int) -> None:
    codes = np.arange(2**bits)
    expected = np.clip(np.rint((codes - black) * (255 / (white - black))), 0, 255)
    dtype = np.uint8 if bits == 8 else np.uint16
    picture = np.tile(codes << shift, (3, 1)).astype(dtype)
    got = to_full_scale(picture, bits, full, shift)
    np.testing.assert_array_equal(got, np.tile(expected, (3, 1)))
    assert (got[0, black], got[0, white]) == (0, 255)
    work, out = np.empty_like(picture), np.empty(picture.shape, np.uint8)
    assert to_full_scale(picture, bits, full, shift, work, out) is not None
    np.testing.assert_array_equal(out, got)


# --- orientation --------------------------------------------------------------------------------------------------

EIGHT = [
    (1, 0, 0, 1), (0, 1, -1, 0), (-1, 0, 0, -1), (0, -1, 1, 0),
    (-1, 0, 0, 1), (0, 1, 1, 0), (1, 0, 0, -1), (0, -1, -1, 0),
]  # fmt: skip


def shown(stored: np.ndarray, a: int, b: int, c: int, d: int) -> np.ndarray:
    """ISO/IEC 14496-12, 6.2.2, pixel by pixel: (column, row) goes to (a column + c row + x, b column + d row + y)."""
    rows, columns = np.indices(stored.shape)
    x, y = a * columns + c * rows, b * columns + d * rows
    upright = np.zeros((int(np.ptp(y)) + 1, int(np.ptp(x)) + 1), stored.dtype)
    upright[y - y.min(), x - x.min()] = stored
    return upright


@pytest.mark.parametrize("matrix", EIGHT, ids=str)
def test_all_eight_orientations_turn_upright(matrix: tuple[int, int, int, int]) -> None:
    a, b, c, d = matrix
    turns, mirrored, exact = orientation(np.array([a, b, 0, c, d, 0, 0, 0, 1]) * 65536)
    assert exact
    stored = np.arange(12, dtype=np.uint8).reshape(3, 4)
    np.testing.assert_array_equal(turned_upright(stored, turns, mirrored), shown(stored, a, b, c, d))


@pytest.mark.parametrize("matrix", EIGHT, ids=str)
def test_all_eight_orientations_through_a_file_and_the_clock(matrix: tuple[int, int, int, int], tmp_path: Path) -> None:
    """A picture whose brightness is its stored row, through a real file; the clock must find that row again."""
    a, b, c, d = matrix
    rows, columns = 64, 96
    stored = np.repeat(np.arange(rows, dtype=np.uint8)[:, None] * 3 + 20, columns, axis=1)
    path = write(tmp_path / "turned.mp4", [stored] * 3, matrix=(a << 16, b << 16, 0, c << 16, d << 16, 0, 0, 0, 1 << 30))
    clip = Clip(path)
    (_, gray), *_ = clip.frames()
    np.testing.assert_allclose(gray.astype(int), shown(full(stored), a, b, c, d), atol=2)
    clock = make_clock(
        clip.ticks, clip.time_base, capture_fps=30, readout_s=0.0063, stored_size=(clip.stored_width, clip.stored_height),
        quarter_turns=clip.quarter_turns, mirrored=clip.mirrored,
    )  # fmt: skip
    y, x = np.indices(gray.shape)
    row = (clock.at(1, np.stack([x, y], axis=-1)) - clock.frame_s[1]) / 0.0063 * (rows - 1)
    np.testing.assert_allclose(full(row * 3 + 20), gray.astype(int), atol=2)


def test_an_odd_matrix_is_said(tmp_path: Path) -> None:
    h = int(0.7071 * 65536)
    path = write(tmp_path / "odd.mp4", [np.zeros((64, 96), np.uint8)] * 3, matrix=(h, h, 0, -h, h, 0, 0, 0, 1 << 30))
    assert [n.code for n in Clip(path).notices] == ["odd-rotation"]


# --- files written here -------------------------------------------------------------------------------------------


def full(codes: np.ndarray) -> np.ndarray:
    """Limited 8-bit codes to full scale."""
    return np.clip(np.rint((codes - 16.0) * 255 / 219), 0, 255)


def write(
    path: Path,
    luma: list[np.ndarray],
    *,
    codec: str = "libx264",
    pix_fmt: str = "yuv420p",
    options: dict[str, str] | None = None,
    rate: Fraction = Fraction(30),
    matrix: tuple[int, ...] | None = None,
    container_options: dict[str, str] | None = None,
    metadata: dict[str, str] | None = None,
    color_range: int | None = None,
) -> Path:
    """A clip whose plane 0 holds the given codes."""
    options = {"qp": "0" if codec == "libx264" else "1"} | (options or {}) if codec in ("libx264", "libx265") else options or {}
    with av.open(str(path), "w", options=container_options or {}) as container:
        container.metadata.update(metadata or {})
        stream = container.add_stream(codec, rate=rate, options=options)
        stream.height, stream.width = luma[0].shape
        stream.pix_fmt = pix_fmt
        if color_range is not None:
            stream.codec_context.color_range = color_range
        if matrix is not None:
            stream.set_display_matrix(matrix)
        for i, codes in enumerate(luma):
            frame = av.VideoFrame(codes.shape[1], codes.shape[0], pix_fmt)
            for plane in frame.planes:
                neutral = np.full(plane.buffer_size // codes.itemsize, 128 * 2 ** (0 if codes.itemsize == 1 else 2), codes.dtype)
                plane.update(neutral.tobytes())
            plane = frame.planes[0]
            padded = np.zeros((codes.shape[0], plane.line_size // codes.itemsize), codes.dtype)
            padded[:, : codes.shape[1]] = codes
            plane.update(padded.tobytes())
            frame.pts, frame.time_base = i, 1 / rate
            if color_range is not None:
                frame.color_range = color_range
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    return path


def numbered(count: int, height: int = 64, width: int = 96) -> list[np.ndarray]:
    """Pictures that carry their own number as brightness: 20, 22, 24 ..."""
    return [np.full((height, width), 20 + 2 * i, np.uint8) for i in range(count)]


WRITTEN: list[tuple[str, str, str, dict[str, str], float]] = [
    ("h264.mp4", "libx264", "yuv420p", {"bf": "3", "g": "12"}, 0.6),
    ("open_gop.mp4", "libx264", "yuv420p", {"bf": "3", "g": "10", "x264-params": "open-gop=1:bframes=3:keyint=10"}, 0.6),
    ("hevc.mp4", "libx265", "yuv420p", {"x265-params": "log-level=none:bframes=3:keyint=12"}, 1.6),
    ("hevc.mkv", "libx265", "yuv420p", {"x265-params": "log-level=none:open-gop=1:keyint=10:bframes=4"}, 1.6),
    ("vp9.webm", "libvpx-vp9", "yuv420p", {"crf": "5", "b": "0", "auto-alt-ref": "1", "lag-in-frames": "12", "g": "20"}, 2.1),
    ("vp8.webm", "libvpx", "yuv420p", {"crf": "5", "b": "2M", "auto-alt-ref": "1", "lag-in-frames": "12", "g": "20"}, 2.1),
    ("av1.mp4", "libsvtav1", "yuv420p", {"crf": "10", "preset": "12"}, 2.6),
    ("mjpeg.avi", "mjpeg", "yuvj420p", {"qmin": "1", "q": "1"}, 1.1),
    ("ffv1.mkv", "ffv1", "yuv420p", {}, 0.0),
]


@pytest.mark.parametrize("name, codec, pix_fmt, options, off", WRITTEN, ids=[w[0] for w in WRITTEN])
def test_written_files_give_each_number_at_its_place(
    name: str, codec: str, pix_fmt: str, options: dict[str, str], off: float, tmp_path: Path
) -> None:
    """B-frames, open groups, invisible frames and key frames: every index shows its own number, whole or in part."""
    if codec not in av.codecs_available:
        pytest.skip(f"this PyAV has no {codec} encoder")
    luma = numbered(50)
    clip = Clip(write(tmp_path / name, luma, codec=codec, pix_fmt=pix_fmt, options=options))
    is_full = pix_fmt.startswith("yuvj")
    assert clip.frame_count == 50 and clip.full_range == is_full
    expected = [float(p[0, 0]) if is_full else (p[0, 0] - 16.0) * 255 / 219 for p in luma]
    scale = 1.0 if is_full else 255 / 219
    every = {i: float(g.mean()) for i, g in clip.frames()}
    assert list(every) == list(range(50))
    # Numbers are 2 codes apart: off by less than half of that in the mean picture, or the order is not proven.
    np.testing.assert_allclose(list(every.values()), expected, atol=scale * off + 0.5)
    assert (np.diff(list(every.values())) > 0.5).all()
    for start, stop in ((0, 3), (9, 14), (23, 24), (37, 50)):
        assert [(i, float(g.mean())) for i, g in clip.frames(start, stop)] == [(i, every[i]) for i in range(start, stop)]
    assert [float(g.mean()) for g in clip.sample([33, 2, 49, 17])] == [every[i] for i in (33, 2, 49, 17)]
    clip.close()
    assert [float(g.mean()) for g in clip.sample([33])] == [every[33]]  # alone: by seeking, where that is possible


@pytest.mark.parametrize(
    "pix_fmt, codes, expected",
    [
        ("yuv420p10le", [64, 502, 940, 1000, 10], [0, 128, 255, 255, 0]),
        ("yuv422p", [16, 126, 235, 250, 3], [0, 128, 255, 255, 0]),
        ("gray", [0, 16, 128, 235, 255], [0, 16, 128, 235, 255]),  # a still-picture codec's gray is full range
        ("yuv444p12le", [256, 2008, 3760], [0, 128, 255]),
    ],
)
def test_lossless_codes_of_other_formats(pix_fmt: str, codes: list[int], expected: list[int], tmp_path: Path) -> None:
    dtype = np.uint16 if "le" in pix_fmt else np.uint8
    picture = np.repeat(np.array(codes, dtype), 16)[None].repeat(16, 0)
    clip = Clip(write(tmp_path / "clip.mkv", [picture] * 2, codec="ffv1", pix_fmt=pix_fmt))
    (_, gray), _ = clip.frames()
    np.testing.assert_array_equal(gray[5, ::16], expected)


@pytest.mark.parametrize("tag, is_full", [(1, False), (2, True)])  # H.273: 1 limited, 2 full, as PyAV numbers them
def test_the_range_tag_is_obeyed(tag: int, is_full: bool, tmp_path: Path) -> None:
    picture = np.repeat(np.array([16, 60, 126, 235], np.uint8), 16)[None].repeat(16, 0)
    clip = Clip(write(tmp_path / "clip.mp4", [picture] * 3, color_range=tag))
    assert clip.full_range is is_full
    (_, gray), *_ = clip.frames()
    # PyAV 18.1's own gray conversion gives 0, 51, 128, 255 for limited and leaves full unchanged (facts.md, section 4).
    np.testing.assert_array_equal(gray[4, ::16], [16, 60, 126, 235] if is_full else [0, 51, 128, 255])


def test_colour_becomes_bt601_luma(tmp_path: Path) -> None:
    """ITU-R BT.601: 0.299, 0.587, 0.114; the weights a JPEG's own luma has."""
    path = tmp_path / "rgb.mkv"
    with av.open(str(path), "w") as container:
        stream = container.add_stream("ffv1", rate=30)
        stream.width, stream.height, stream.pix_fmt = 32, 16, "bgr0"
        picture = np.zeros((16, 32, 3), np.uint8)
        picture[:, :8], picture[:, 8:16], picture[:, 16:24], picture[:, 24:] = (255, 0, 0), (0, 255, 0), (0, 0, 255), 255
        for i in range(2):
            frame = av.VideoFrame.from_ndarray(picture, "rgb24").reformat(format="bgr0")
            frame.pts = i
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    (_, gray), _ = Clip(path).frames()
    np.testing.assert_allclose(gray[3, [4, 12, 20, 28]], [0.299 * 255, 0.587 * 255, 0.114 * 255, 255], atol=0.6)


def test_the_capture_rate_tag_is_read_and_a_broken_one_is_said(tmp_path: Path) -> None:
    for text, expected in (("240.000000", 240.0), ("fast", None), ("-1", None)):
        path = write(
            tmp_path / f"{text}.mp4", numbered(3), metadata={"com.android.capture.fps": text},
            container_options={"movflags": "use_metadata_tags"},
        )  # fmt: skip
        clip = Clip(path)
        assert clip.tag_fps == expected
        assert [n.code for n in clip.notices] == ([] if expected else ["capture-tag-unreadable"])
    assert Clip(footage("made-here/walkers_stretched_240.mp4")).tag_fps == 240.0
    assert Clip(footage("container/h265_with_metadata_track.mp4")).tag_fps == 30.0


def test_where_the_clip_was_filmed_is_never_told(tmp_path: Path) -> None:
    secret = {"location": "+51.4769-000.0005/", "com.apple.quicktime.location.ISO6709": "+51.4769-000.0005/"}
    path = write(tmp_path / "here.mp4", numbered(3), metadata=secret, container_options={"movflags": "use_metadata_tags"})
    with av.open(str(path)) as container:
        assert "+51.4769" in str(container.metadata)  # it is in the file
    clip = Clip(path)
    assert "51.47" not in f"{clip.describe()} {clip.notices}"


def test_a_bare_stream_is_refused_for_want_of_stamps(tmp_path: Path) -> None:
    path = write(tmp_path / "clip.h264", numbered(5))
    with pytest.raises(CannotMeasure, match=r"clip\.h264: .*no time stamp"):
        Clip(path)


def test_description_and_hash(tmp_path: Path) -> None:
    path = write(tmp_path / "clip.mp4", numbered(10))
    clip = Clip(path)
    assert clip.sha256() == hashlib.sha256(path.read_bytes()).hexdigest()
    told = clip.describe()
    assert told["file"] == "clip.mp4" and told["frames"] == 10 and told["stamp_rate_per_s"] == pytest.approx(30)
    assert json.loads(json.dumps(told)) == told


def test_a_clip_goes_to_another_process(tmp_path: Path) -> None:
    clip = Clip(write(tmp_path / "clip.mp4", numbered(10)))
    clip.sample([9])
    again = pickle.loads(pickle.dumps(clip))
    assert [(i, g.mean()) for i, g in again.frames()] == [(i, g.mean()) for i, g in clip.frames()]


def test_wrong_ranges_are_refused(tmp_path: Path) -> None:
    clip = Clip(write(tmp_path / "clip.mp4", numbered(5)))
    for start, stop in ((-1, 3), (0, 6), (4, 3)):
        with pytest.raises(ValueError, match="frames: expected"):
            clip.frames(start, stop)
    with pytest.raises(ValueError, match="indices: expected 0 to 4"):
        clip.sample([5])
    assert list(clip.frames(2, 2)) == [] and clip.sample([]) == []


# --- running ahead, memory, the spool ------------------------------------------------------------------------------


def decoders() -> int:
    return sum(t.name == "decode" for t in threading.enumerate())


def test_decoding_runs_ahead_but_never_further_than_the_queue() -> None:
    """Constant memory: however slow the reader, at most depth + 1 pictures wait (one is held by the thread)."""
    made: list[int] = []

    def work() -> Iterator[tuple[int, np.ndarray]]:
        for i in range(1000):
            made.append(i)
            yield i, np.zeros((2, 2), np.uint8)

    pass_over = _run_ahead(work, 4)
    for k in range(20):
        next(pass_over)
        threading.Event().wait(0.01)
        assert len(made) <= k + 1 + 4 + 1
    assert len(made) > 20  # and it did run ahead
    pass_over.close()
    assert decoders() == 0


def test_a_pass_left_early_ends_its_thread_and_faults_arrive(tmp_path: Path) -> None:
    clip = Clip(write(tmp_path / "clip.mp4", numbered(50)))
    for i, _ in clip.frames():
        if i == 3:
            break
    del _
    passing = clip.frames()
    next(passing)
    assert decoders() >= 1
    passing.close()  # type: ignore[attr-defined]
    assert decoders() == 0

    def broken() -> Iterator[Any]:
        yield 0, np.zeros((1, 1), np.uint8)
        raise RuntimeError("out of film")

    run = _run_ahead(broken, 2)
    next(run)
    with pytest.raises(RuntimeError, match="out of film"):
        next(run)


def test_two_passes_at_once(tmp_path: Path) -> None:
    clip = Clip(write(tmp_path / "clip.mp4", numbered(40)))
    for (i, a), (j, b) in zip(clip.frames(), clip.frames(), strict=True):
        assert i == j and (a == b).all() and a is not b


def test_sampled_pictures_are_not_decoded_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with Clip(write(tmp_path / "clip.mp4", numbered(40), options={"g": "100"})) as clip:
        every = {i: g.copy() for i, g in clip.frames()}
        clip.sample([0, 20, 39])

        def refuse(path: Path) -> None:
            raise AssertionError("opened again")

        monkeypatch.setattr("tracker.clip._open", refuse)
        again = dict(clip.frames())
        assert again.keys() == every.keys() and all((again[i] == every[i]).all() for i in every)
        again[5][:] = 0  # the caller's own
        assert (clip.sample([5])[0] == every[5]).all()
        with pytest.raises(AssertionError, match="opened again"):
            clip.close()
            list(clip.frames())


def test_a_full_disk_only_costs_time(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    clip = Clip(write(tmp_path / "clip.mp4", numbered(20), options={"g": "100"}))
    monkeypatch.setattr(Spool, "keep", lambda self, index, gray: index < 7)
    assert [int(g[0, 0]) for g in clip.sample([0, 10, 19])] == [int(g[0, 0]) for _, g in clip.frames() if _ in (0, 10, 19)]
    assert len(list(clip.frames())) == 20
    monkeypatch.setattr("tracker.spool.SPOOL_BYTES", 0)
    assert not Spool.fits(20, (64, 96))


# --- damage -------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    """A sound file, index first, of textured pictures in groups of twelve."""
    rng = np.random.default_rng(7)
    base = rng.integers(30, 200, (96, 128)).astype(np.uint8)
    path = tmp_path_factory.mktemp("sound") / "sound.mp4"
    write(path, [np.roll(base, i, axis=1) for i in range(48)], options={"g": "12", "bf": "2"}, container_options={"movflags": "faststart"})
    data = path.read_bytes()
    assert data.find(b"moov") < data.find(b"mdat")
    return data


@pytest.fixture(scope="module")
def sound_pictures(sound: bytes, tmp_path_factory: pytest.TempPathFactory) -> dict[int, np.ndarray]:
    path = tmp_path_factory.mktemp("whole") / "whole.mp4"
    path.write_bytes(sound)
    return dict(Clip(path).frames())


@pytest.mark.parametrize("share", [0.9, 0.6, 0.4])
def test_a_clip_cut_short_is_measured_as_far_as_it_goes(
    share: float, sound: bytes, sound_pictures: dict[int, np.ndarray], tmp_path: Path
) -> None:
    path = tmp_path / "short.mp4"
    path.write_bytes(sound[: int(len(sound) * share)])
    clip = Clip(path)
    assert [n.code for n in clip.notices] == ["file-cut-short"]
    assert "of 48 pictures" in clip.notices[0].says and clip.notices[0].says.startswith("short.mp4: ")
    frames = dict(clip.frames())
    assert 0.2 * 48 < len(frames) < 48
    assert all((gray == sound_pictures[i]).all() for i, gray in frames.items())
    if len(frames) < clip.frame_count:
        assert clip.notices[1].code == "frames-do-not-decode"
        assert f"{clip.frame_count - len(frames)} of {clip.frame_count} frames" in clip.notices[1].says


def test_pictures_after_damage_are_named(sound: bytes, sound_pictures: dict[int, np.ndarray], tmp_path: Path) -> None:
    """Zeroes over part of one group: what decodes differently must be among the doubtful, and other groups be whole."""
    media = sound.find(b"mdat")
    at = media + (len(sound) - media) * 2 // 5
    path = tmp_path / "hole.mp4"
    path.write_bytes(sound[:at] + bytes(2000) + sound[at + 2000 :])
    clip = Clip(path)
    frames = dict(clip.frames())
    changed = {i for i, gray in frames.items() if not (gray == sound_pictures[i]).all()}
    assert len(frames) < 48 and "frames-do-not-decode" in [n.code for n in clip.notices]
    assert changed <= clip.doubtful
    assert len(frames) - len(clip.doubtful) >= 24
    sampled = clip.sample(list(range(48)))
    assert len(sampled) == len(frames)


@pytest.mark.parametrize("seed", range(5))
def test_traces_of_damage_before_it_in_display_order_are_named_too(seed: int, tmp_path: Path) -> None:
    """B-frames lean on a damaged frame that is shown after them: doubt follows the order of decoding."""
    sound = footage("made-here/walkers_h264.mp4")
    data = bytearray(sound.read_bytes())
    media, end = data.find(b"mdat"), data.find(b"moov")
    for at in np.random.default_rng(seed).integers(media + 100, end - 100, 3):
        data[at] ^= 0xFF
    path = tmp_path / "flipped.mp4"
    path.write_bytes(bytes(data))
    with Clip(path) as clip:
        changed = {i for (i, gray), whole in zip(clip.frames(), _matching(sound, clip), strict=True) if not (gray == whole).all()}
        assert changed <= clip.doubtful


def _matching(sound: Path, clip: Clip) -> Iterator[np.ndarray]:
    """Frames of a sound clip that also decode in a damaged copy."""
    here = {i for i, _ in clip.frames()}
    return (gray for i, gray in Clip(sound).frames() if i in here)


def test_unusable_files_are_one_sentence(sound: bytes, tmp_path: Path) -> None:
    with av.open(str(tmp_path / "audio.mp4"), "w") as container:
        stream = container.add_stream("aac", rate=44100, layout="mono")
        for i in range(5):
            frame = av.AudioFrame.from_ndarray(np.zeros((1, 1024), np.float32), format="fltp", layout="mono")
            frame.rate, frame.pts = 44100, i * 1024
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    cases: dict[str, tuple[bytes | None, type[Exception], str]] = {
        "audio.mp4": (None, BadInput, "sound only"),
        "empty.mp4": (b"", BadInput, "0 bytes"),
        "text.mp4": (b"a text that was renamed\n" * 40, BadInput, "not a video file"),
        "head.mp4": (sound[:30], BadInput, "incomplete"),
        "tail.mp4": (sound[: sound.find(b"moov") - 4] + sound[sound.find(b"mdat") - 4 :], BadInput, "incomplete"),
        "index.mp4": (sound[: sound.find(b"mdat") + 4], BadInput, "no pictures"),
        "blank.mp4": (sound[: sound.find(b"mdat") + 4].ljust(len(sound), b"\0"), CannotMeasure, "not one picture decodes"),
    }
    for name, (data, kind, says) in cases.items():
        path = tmp_path / name
        if data is not None:
            path.write_bytes(data)
        with pytest.raises((BadInput, CannotMeasure), match=says) as caught:
            Clip(path)
        assert type(caught.value) is kind, name
        assert str(caught.value).startswith(f"{name}: ") and "\n" not in str(caught.value)
    with pytest.raises(BadInput, match=r"none\.mp4: there is no such file in "):
        Clip(tmp_path / "none.mp4")
    with pytest.raises(BadInput, match="is a folder"):
        Clip(tmp_path)


def test_a_renamed_playlist_opens_nothing_else(sound: bytes, tmp_path: Path) -> None:
    (tmp_path / "whole.mp4").write_bytes(sound)
    lists = {
        "hls.mp4": f"#EXTM3U\n#EXT-X-TARGETDURATION:10\n#EXTINF:9,\n{(tmp_path / 'whole.mp4').as_uri()}\n#EXT-X-ENDLIST\n",
        "concat.mp4": f"ffconcat version 1.0\nfile '{tmp_path / 'whole.mp4'}'\n",
    }
    for name, text in lists.items():
        (tmp_path / name).write_text(text, encoding="utf-8")
        with pytest.raises(BadInput, match="not a video file"):
            Clip(tmp_path / name)


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(flips=st.lists(st.tuples(st.floats(0, 0.999), st.integers(1, 255)), min_size=1, max_size=6))
def test_flipped_bytes_never_crash(
    flips: list[tuple[float, int]], sound: bytes, sound_pictures: dict[int, np.ndarray], tmp_path: Path
) -> None:
    """Anywhere in the file: measured with what is left, or refused in a sentence that names the file."""
    data = bytearray(sound)
    for share, bits in flips:
        data[int(share * len(data))] ^= bits
    path = tmp_path / "flipped.mp4"
    path.write_bytes(bytes(data))
    try:
        with Clip(path) as clip:
            indices = [i for i, _ in clip.frames()]
            assert indices == sorted(set(indices)) and len(indices) <= clip.frame_count
            assert len(indices) == clip.frame_count or "frames-do-not-decode" in [n.code for n in clip.notices]
    except (BadInput, CannotMeasure) as refusal:
        assert "flipped.mp4" in str(refusal)


def test_a_picture_that_changes_size_is_refused(tmp_path: Path) -> None:
    """Two encodings of different size in one Matroska stream, as when the camera's setting changes."""
    path = tmp_path / "two.mkv"
    with av.open(str(path), "w") as container:
        stream = container.add_stream("mjpeg", rate=30)
        stream.width, stream.height, stream.pix_fmt = 64, 48, "yuvj420p"
        encoder: Callable[[int, int], Any] = lambda w, h: av.CodecContext.create("mjpeg", "w")  # noqa: E731
        stamp = 0
        for w, h in ((64, 48), (32, 24)):
            context = encoder(w, h)
            context.width, context.height, context.pix_fmt, context.time_base = w, h, "yuvj420p", Fraction(1, 30)
            for _ in range(3):
                frame = av.VideoFrame(w, h, "yuvj420p")
                for plane in frame.planes:
                    plane.update(bytes(plane.buffer_size))
                frame.pts, frame.time_base = stamp, Fraction(1, 30)
                for packet in context.encode(frame):
                    packet.stream, packet.pts, packet.dts, packet.time_base = stream, stamp, stamp, Fraction(1, 30)
                    container.mux(packet)
                stamp += 1
    with pytest.raises(CannotMeasure, match=r"two\.mkv: the picture changes from 64 x 48 to 32 x 24 at frame 3"):
        list(Clip(path).frames())


def test_every_shared_clip_decodes_whole() -> None:
    for folder in sorted(p.name for p in (SHARED / "clips").glob("*/") if (p / "clip.mp4").exists()) or [clips("drop").name]:
        clip = Clip(clips(f"{folder}/clip.mp4"))
        assert [i for i, _ in clip.frames()] == list(range(clip.frame_count)) and clip.notices == ()
