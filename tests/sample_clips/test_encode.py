"""Clips written and read back by PyAV: stamps, turns, range, tags, the picture itself."""

from fractions import Fraction

import av
import cv2
import numpy as np
import pytest

from sample_clips.camera import Camera, Sensor, truth_pixels
from sample_clips.encode import write_clip
from sample_clips.moving import Ball
from sample_clips.render import Renderer
from sample_clips.scenery import Light, Scenery, Wall

HEIGHT, WIDTH = 96, 64


def pictures(count, dtype=np.uint8):
    """A bright corner, a slope and a moving square: no symmetry hides a wrong turn."""
    top = 255 if dtype == np.uint8 else 1023
    row, column = np.mgrid[0:HEIGHT, 0:WIDTH]
    for i in range(count):
        grey = 60 + row + 0.5 * column
        grey[:24, :16] = 230
        grey[40 + 2 * i : 56 + 2 * i, 30:46] = 30
        yield np.rint(cv2.GaussianBlur(grey, (0, 0), 1.0) / 255 * top).astype(dtype)


def read(path):
    """Stamps [s], display matrices (3, 3) and luma planes as codes."""
    stamps, turns, planes = [], [], []
    with av.open(str(path)) as container:
        stream = container.streams.video[0]
        for frame in container.decode(stream):
            stamps.append(frame.pts * stream.time_base)
            matrix = next((bytes(d) for d in frame.side_data if d.type.name == "DISPLAYMATRIX"), None)
            turns.append(np.eye(3) if matrix is None else np.frombuffer(matrix, np.int32).reshape(3, 3) / [65536, 65536, 1 << 30])
            plane = frame.planes[0]
            dtype = np.uint8 if frame.format.components[0].bits == 8 else np.dtype("<u2")
            rows = np.frombuffer(plane, dtype).reshape(plane.height, -1)
            planes.append(rows[:, : plane.width].astype(float))
    return stamps, turns, planes


def shown(stored, matrix):
    """Apply a display matrix to a stored picture: (x y 1) = (p q 1) M (ISO/IEC 14496-12, 6.2.2), moved to start at 0, 0."""
    row, column = np.indices(stored.shape)
    x = column * matrix[0, 0] + row * matrix[1, 0]
    y = column * matrix[0, 1] + row * matrix[1, 1]
    x, y = np.rint(x - x.min()).astype(int), np.rint(y - y.min()).astype(int)
    upright = np.zeros((y.max() + 1, x.max() + 1))
    upright[y, x] = stored
    return upright


@pytest.mark.parametrize("codec", ["h264", "hevc"])
def test_stamps_come_back_exactly(tmp_path, codec):
    ticks = [0, 375, 750, 1126, 2250, 2626, 3001]  # jitter of a tick, one frame dropped, 90 kHz
    write_clip(tmp_path / "a.mp4", pictures(7), ticks, Fraction(1, 90000), codec=codec)
    assert read(tmp_path / "a.mp4")[0] == [Fraction(t, 90000) for t in ticks]


def test_stretched_stamps_come_back_exactly(tmp_path):
    write_clip(tmp_path / "a.mp4", pictures(9), range(9), Fraction(1001, 30000))
    assert read(tmp_path / "a.mp4")[0] == [Fraction(1001 * i, 30000) for i in range(9)]


@pytest.mark.parametrize("mirrored", [False, True])
@pytest.mark.parametrize("turns", [0, 1, 2, 3])
def test_the_display_matrix_brings_the_picture_upright(tmp_path, turns, mirrored):
    path = tmp_path / "a.mp4"
    write_clip(path, pictures(2), [0, 1], Fraction(1, 240), quarter_turns=turns, mirrored=mirrored, crf=4)
    _, matrices, planes = read(path)
    assert planes[0].shape == ((WIDTH, HEIGHT) if turns % 2 else (HEIGHT, WIDTH))
    upright = shown(planes[0], matrices[0])
    expected = 16 + next(pictures(1)).astype(float) * 219 / 255
    assert upright.shape == expected.shape
    assert np.sqrt(((upright - expected) ** 2).mean()) < 1.5


def test_pyav_reads_the_turn_as_clockwise(tmp_path):
    write_clip(tmp_path / "a.mp4", pictures(2), [0, 1], Fraction(1, 240), quarter_turns=1)
    with av.open(str(tmp_path / "a.mp4")) as container:
        assert next(container.decode(video=0)).rotation == -90  # FFmpeg counts counter-clockwise


@pytest.mark.parametrize("codec", ["h264", "hevc"])
@pytest.mark.parametrize(("bits", "dtype"), [(8, np.uint8), (10, np.uint16)])
@pytest.mark.parametrize("full", [False, True])
def test_luma_has_its_range_and_depth(tmp_path, codec, bits, dtype, full):
    """BT.709: limited 8-bit luma is 16 + 219 E', 10-bit four times that; full is 255 or 1023 E'."""
    path = tmp_path / "a.mp4"
    write_clip(path, pictures(3, dtype), range(3), Fraction(1, 240), codec=codec, bits=bits, full_range=full, crf=6)
    with av.open(str(path)) as container:
        frame = next(container.decode(video=0))
        assert frame.color_range == (2 if full else 1)
        assert frame.format.components[0].bits == bits
    step = 2 ** (bits - 8)
    span, foot = (2**bits - 1, 0) if full else (219 * step, 16 * step)
    for plane, grey in zip(read(path)[2], pictures(3, np.uint16), strict=True):
        assert np.sqrt(((plane - foot - grey / 1023 * span) ** 2).mean()) < 1.0 * step  # one grey level


def test_the_capture_rate_is_a_float_as_phones_write_it(tmp_path):
    path = tmp_path / "a.mp4"
    write_clip(path, pictures(3), range(3), Fraction(1, 30), capture_fps_tag=239.76)
    with av.open(str(path)) as container:
        assert float(container.metadata["com.android.capture.fps"]) == pytest.approx(239.76, abs=1e-4)
    data = path.read_bytes()
    at = data.rindex(np.array([239.76], ">f4").tobytes())
    assert data[at - 12 : at] == b"data" + (23).to_bytes(4, "big") + bytes(4)  # type 23: big-endian 32-bit float
    write_clip(path, pictures(3), range(3), Fraction(1, 30))
    assert b"capture.fps" not in path.read_bytes()


@pytest.mark.parametrize("codec", ["h264", "hevc"])
def test_the_same_frames_give_the_same_pictures(tmp_path, codec):
    """To a tenth of a grey level RMS: x264's macroblock tree does not repeat to the byte, even on one thread."""
    seen = []
    for name in ("a.mp4", "b.mp4"):
        write_clip(tmp_path / name, pictures(15), range(15), Fraction(1, 240), codec=codec)
        with av.open(str(tmp_path / name)) as container:
            seen.append(np.stack([frame.to_ndarray(format="gray").astype(float) for frame in container.decode(video=0)]))
    assert seen[0].shape == seen[1].shape
    assert np.sqrt(np.mean((seen[0] - seen[1]) ** 2)) < 0.1


def test_key_frames_come_as_often_as_asked(tmp_path):
    write_clip(tmp_path / "a.mp4", pictures(20), range(20), Fraction(1, 240), keyframe_every=6)
    with av.open(str(tmp_path / "a.mp4")) as container:
        keys = [i for i, packet in enumerate(p for p in container.demux(video=0) if p.size) if packet.is_keyframe]
    assert keys == [0, 6, 12, 18]


def test_a_tint_leaves_the_luma_alone(tmp_path):
    write_clip(tmp_path / "a.mp4", pictures(1), [0], Fraction(1, 240), tint=(-12.0, 15.0), crf=4)
    with av.open(str(tmp_path / "a.mp4")) as container:
        frame = next(container.decode(video=0))
    # 224 codes to a whole colour difference of 255 (BT.709): 128 - 12 x 224/255 and 128 + 15 x 224/255
    for plane, value in zip(frame.planes[1:], (117.5, 141.2), strict=True):
        codes = np.frombuffer(plane, np.uint8).reshape(plane.height, -1)[:, : plane.width]
        assert codes.mean() == pytest.approx(value, abs=1.0)
    expected = 16 + next(pictures(1)).astype(float) * 219 / 255
    assert np.sqrt(((read(tmp_path / "a.mp4")[2][0] - expected) ** 2).mean()) < 1.0


@pytest.mark.parametrize(("turns", "mirrored"), [(1, False), (2, False), (3, True)])
def test_a_rendered_turned_clip_shows_a_falling_ball_where_truth_has_it(tmp_path, turns, mirrored):
    """From the motion to the decoded file: each frame's ball within 0.1 px of its rolling-shutter place, noise and all."""
    camera = Camera(
        width=96, height=128, fx=240.0, fy=240.0, cx=47.0, cy=64.0, position_m=(0, -1.0, 0), readout_s=0.006,
        quarter_turns=turns, mirrored=mirrored, sensor=Sensor(full_well_e=20000.0),
    )  # fmt: skip

    class Falling:
        def at(self, t):
            t = np.asarray(t)
            return np.stack([0.05 - 0.5 * t, 0 * t, 0.15 - 2.0 * t - 4.905 * t * t], axis=-1)

        def discs(self, t):
            return [Ball(self.at(t), 0.025, 0.04, specular=0.0)]

    frame_s = camera.frame_times(12)
    scenery = Scenery(Wall(y_m=0.4, albedo=0.6, texture=0.0, grain=0.0), Light(ambient=1.0, lamp=0.0))
    renderer = Renderer(camera, scenery, Falling(), frame_s=frame_s)
    path = tmp_path / "a.mp4"
    write_clip(path, renderer.frames(), range(12), Fraction(1, 240), quarter_turns=turns, mirrored=mirrored, crf=6)
    stamps, matrices, planes = read(path)
    truth, _ = truth_pixels(camera, Falling().at, frame_s)
    for stored, matrix, expected in zip(planes, matrices, truth, strict=True):
        dark = np.clip((np.median(stored) - shown(stored, matrix)) / np.median(stored) - 0.15, 0, None)
        row, column = np.indices(dark.shape)
        found = np.array([(dark * column).sum(), (dark * row).sum()]) / dark.sum()
        np.testing.assert_allclose(found, expected, atol=0.1)
    np.testing.assert_allclose([float(s) for s in stamps], frame_s, atol=1e-12)


@pytest.mark.parametrize(
    ("ticks", "says"),
    [([0, 2, 2], "increase"), ([0, 1], "more frames"), ([0, 1, 2, 3], "3 frames for 4 stamps"), ([], "no frames")],
)
def test_stamps_that_do_not_fit_are_refused(tmp_path, ticks, says):
    with pytest.raises(ValueError, match=says):
        write_clip(tmp_path / "a.mp4", pictures(3), ticks, Fraction(1, 30))


def test_odd_sizes_and_unknown_codecs_are_refused(tmp_path):
    with pytest.raises(ValueError, match="even"):
        write_clip(tmp_path / "a.mp4", [np.zeros((33, 32), np.uint8)], [0], Fraction(1, 30))
    with pytest.raises(ValueError, match="codec"):
        write_clip(tmp_path / "a.mp4", pictures(1), [0], Fraction(1, 30), codec="mjpeg")
