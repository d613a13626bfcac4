"""The overlay video: plays in a browser, shows every frame, draws where things are, hides nothing else."""

import dataclasses
import time
from pathlib import Path

import av
import cv2
import numpy as np
import pytest

from calibration.notice import BadInput
from tracker.report import overlay
from tracker.report.colours import ROLES, contrast, rgb
from tracker.report.demo import Demo, demo
from tracker.report.lettering import lettering
from tracker.report.overlay import Painter, pick_stills, still, write_overlay
from tracker.result import FrameMark


@pytest.fixture(scope="module")
def made() -> Demo:
    return demo("payout", frames=61, size=(360, 640))


def boxes(path: Path) -> list[str]:
    """Names of the top-level boxes of an MP4 file in their order (ISO/IEC 14496-12, 4.2)."""
    data, at, names = path.read_bytes(), 0, []
    while at < len(data):
        size = int.from_bytes(data[at : at + 4], "big")
        names.append(data[at + 4 : at + 8].decode("ascii"))
        at += size or len(data)
    return names


def test_the_file_plays_in_a_browser_and_has_every_frame_once(made: Demo, tmp_path: Path) -> None:
    path = tmp_path / "overlay.mp4"
    stills = write_overlay(made.result, made.frames(), path)
    names = boxes(path)
    assert names.index("moov") < names.index("mdat")  # the index in front
    with av.open(str(path)) as container:
        stream = container.streams.video[0]
        assert (stream.codec_context.name, stream.codec_context.pix_fmt) == ("h264", "yuv420p")
        assert stream.width % 2 == 0 and stream.height % 2 == 0
        frames = list(container.decode(stream))
        assert len(frames) == 61
        assert [round(float(frame.pts * frame.time_base) * 30) for frame in frames] == list(range(61))
    assert [one.stem for one in stills] == ["still-window", "still-first", "still-last", "still-flagged"]
    # What a player shows is what was painted, within what H.264 at this quality loses.
    shown = frames[stills[0].frame].to_ndarray(format="bgr24").astype(int)
    assert np.abs(shown - stills[0].picture).mean() < 4


@pytest.mark.parametrize(
    ("size", "expected"),
    [
        ((720, 1280), (720, 1280)),
        ((1080, 1920), (720, 1280)),
        ((1920, 1080), (1280, 720)),
        ((641, 641), (640, 640)),  # the odd last row and column go
        ((161, 91), (640, 362)),
    ],
)
def test_sides_are_even_and_of_a_good_size(made: Demo, size: tuple[int, int], expected: tuple[int, int]) -> None:
    painter = Painter(made.result, size)
    picture = painter.paint(5, np.full((size[1], size[0]), 90, np.uint8))
    assert picture.shape == (painter.height, painter.width, 3)
    assert painter.width % 2 == 0 and painter.height % 2 == 0
    assert abs(painter.width - expected[0]) <= 1 and painter.height - expected[1] < 0.3 * expected[1] + 120


def with_mark(made: Demo, mark: FrameMark, **changes: object) -> Painter:
    result = dataclasses.replace(made.result, marks=(mark, FrameMark(1, mark.t_s + 1 / 240)), origin_px=(np.nan, np.nan),
                                 scale_px_per_m=np.nan, **changes)  # fmt: skip
    return Painter(result, (720, 1280))


GREY = np.full((1280, 720), 128, np.uint8)


def coloured(picture: np.ndarray, role: str) -> np.ndarray:
    """(n, 2) column, row of pixels near a role's colour."""
    red, green, blue = rgb(ROLES[role])
    near = (np.abs(picture[:1280].astype(int) - (blue, green, red)) < 40).all(axis=2)
    rows, columns = np.nonzero(near)
    return np.stack([columns, rows], axis=1)


def test_the_line_is_drawn_where_it_was_found_with_a_dark_edge_and_gaps_stay(made: Demo) -> None:
    points = np.array([[100, 300], [200, 300], [np.nan, np.nan], [300, 300], [400, 300]], np.float32)
    picture = with_mark(made, FrameMark(0, 0.0, line_px=points)).paint(0, GREY)
    core = coloured(picture, "line")
    assert set(core[:, 1]) <= {299, 300, 301}
    assert abs(core[:, 0].min() - 100) <= 2 and abs(core[:, 0].max() - 400) <= 2
    assert not ((core[:, 0] > 203) & (core[:, 0] < 297)).any()
    assert picture[298:303, 150].max(axis=1).argmax() == 2 and picture[298, 150].max() < 40  # light core, dark edge
    assert (picture[:1280][np.r_[0:290, 310:1280]] == 128).all()  # nothing else is touched


def test_apex_end_and_marks_lie_about_their_points_in_shapes_of_their_own(made: Demo) -> None:
    mark = FrameMark(0, 0.0, apex_px=(200.5, 400.25), end_px=(500.0, 900.0), marks_px=np.array([[350, 600]], np.float32))
    picture = with_mark(made, mark).paint(0, GREY)
    for role, place in (("apex", (200.5, 400.25)), ("end", (500.0, 900.0)), ("mark", (350.0, 600.0))):
        found = coloured(picture, role)
        np.testing.assert_allclose((found.min(axis=0) + found.max(axis=0)) / 2, place, atol=0.75, err_msg=role)
        low, high = found.min(axis=0), found.max(axis=0)
        filled = len(found) / np.prod(high - low + 1)
        assert filled < 0.75, role  # hollow: the thing itself stays visible
        corner = np.hypot(*(found - place).T).max() / ((high - low).max() / 2)
        assert (corner > 1.25) == (role == "mark"), role  # a square reaches into its corners, ring and diamond do not


def test_a_scaled_picture_keeps_places(made: Demo) -> None:
    """Pixel centres are whole numbers on both sides: column c of a picture of twice the size lands at (c + 0.5) / 2 - 0.5."""
    mark = FrameMark(0, 0.0, end_px=(701.0, 1401.0))
    result = dataclasses.replace(made.result, marks=(mark,), origin_px=(np.nan, np.nan), scale_px_per_m=np.nan)
    picture = Painter(result, (1440, 2560)).paint(0, np.full((2560, 1440), 128, np.uint8))
    found = coloured(picture, "end")
    np.testing.assert_allclose((found.min(axis=0) + found.max(axis=0)) / 2, [350.25, 700.25], atol=0.75)


def test_an_enlarged_picture_keeps_places(made: Demo) -> None:
    """Four times the size: column c lands at 4 (c + 0.5) - 0.5; a shift of half a small pixel would be 1.5 large ones."""
    mark = FrameMark(0, 0.0, end_px=(40.0, 100.0))
    result = dataclasses.replace(made.result, marks=(mark,), origin_px=(np.nan, np.nan), scale_px_per_m=np.nan)
    picture = Painter(result, (90, 160)).paint(0, np.full((160, 90), 128, np.uint8))
    found = coloured(picture[:640], "end")
    np.testing.assert_allclose((found.min(axis=0) + found.max(axis=0)) / 2, [161.5, 401.5], atol=0.75)


def test_a_lone_point_between_gaps_is_still_shown(made: Demo) -> None:
    gap = [np.nan, np.nan]
    points = np.array([gap, [200, 300], gap, [300, 300], [400, 300]], np.float32)
    picture = with_mark(made, FrameMark(0, 0.0, line_px=points)).paint(0, GREY)
    assert (picture[295:306, 195:206] != 128).any() and (picture[295:306, 245:256] == 128).all()


def test_drawings_do_not_reach_into_the_numbers(made: Demo) -> None:
    quiet, loud = FrameMark(0, 0.0), FrameMark(0, 0.0, end_px=(300.0, 1279.0), line_px=np.array([[10, 1200], [10, 1400]], np.float32))
    strips = [with_mark(made, mark).paint(0, GREY)[1284:] for mark in (quiet, loud)]
    lowest = min(strip.shape[0] for strip in strips)
    assert (strips[0][6:60, :720] == strips[1][6:60, :720]).all() and lowest > 60


def test_outlines_differ_from_their_edge_and_shapes_from_each_other() -> None:
    for role in ("line", "apex", "end", "mark"):
        assert contrast(ROLES[role], "#181818") >= 3, role  # WCAG 2.2, 1.4.11, against the dark edge


def test_the_scale_bar_is_as_long_as_it_says(made: Demo) -> None:
    result = dataclasses.replace(made.result, marks=(FrameMark(0, 0.0),), origin_px=(np.nan, np.nan), scale_px_per_m=1234.5)
    picture = Painter(result, (720, 1280)).paint(0, np.full((1280, 720), 128, np.uint8))
    row = (picture[1240:1280] > 240).all(axis=2).sum(axis=1).max()  # the longest white run is the bar
    assert row == pytest.approx(0.1 * 1234.5, abs=4)  # 100 mm: the first round length over a sixth of the width


def test_the_video_says_how_slow_it_is(made: Demo) -> None:
    assert Painter(made.result, (360, 640)).slow_factor == pytest.approx(240 / 30)
    real_time = dataclasses.replace(made.result, marks=tuple(FrameMark(i, i / 30) for i in range(5)))
    assert Painter(real_time, (360, 640))._legend()[-1][1] == "shown at its own speed"


def test_the_strip_tells_the_numbers_and_the_flags_in_words(made: Demo) -> None:
    painter = Painter(made.result, (360, 640))
    flagged = next(mark for mark in made.result.marks if mark.flags == ("blurred-apex",))
    assert painter._flags(flagged.frame, flagged) == "flagged: blurred apex"
    assert painter._flags(999, None) == "outside the frames that were followed"
    lost = next(mark for mark in made.result.marks if mark.flags == ("line-lost",))
    t, height, speed = painter._numbers(lost.frame, lost)
    assert t == f"{lost.t_s:.4f} s" and height == "–" and speed.endswith(" m/s")
    height = painter._numbers(30, made.result.marks[30])[1]
    assert height == f"{made.result.frames['apex_z_m'][30]:.4f} m"


def test_text_is_light_on_dark_and_is_cut_at_the_edge() -> None:
    letters = lettering(16)
    onto = np.full((30, 60), 24, np.uint8)
    end = letters.write(onto, "0.2085 m", 2, 3)
    assert onto.max() > 230 and end <= 60 + 40
    assert letters.width("0") == letters.width("1")  # running numbers stand still
    letters.write(onto, "far too long for this strip", 50, 25)  # no error


def test_stills_are_the_telling_frames(made: Demo) -> None:
    picks = pick_stills(made.result)
    low, high = made.result.quantities["arc_height_m"].window_s or (0, 0)
    assert low <= made.result.marks[picks["still-window"][0]].t_s <= high
    assert picks["still-flagged"][1].startswith("first flagged frame: ")
    assert pick_stills(dataclasses.replace(made.result, marks=())) == {}
    one = still(made.result, "still-first", 0, "first", np.zeros((640, 360), np.uint8))
    assert one.picture.shape[2] == 3


def test_the_same_frames_give_the_same_bytes(tmp_path: Path) -> None:
    """Ten times, with other things in memory: it once failed only now and then."""
    small, path, seen = demo("payout", frames=24, size=(90, 160)), tmp_path / "overlay.mp4", set()
    for i in range(10):
        clutter = [np.full(size, i, np.uint8) for size in (10_000 * (i + 1), 333_333, 1_000_001)]
        del clutter
        write_overlay(small.result, small.frames(), path)
        seen.add(path.read_bytes())
    assert len(seen) == 1


def test_no_frames_is_said(made: Demo, tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="no frames"):
        write_overlay(made.result, iter(()), tmp_path / "overlay.mp4")


def test_a_library_without_an_encoder_is_said(made: Demo, tmp_path: Path) -> None:
    with pytest.raises(av.codec.codec.UnknownCodecError), av.open(str(tmp_path / "x.mp4"), "w") as container:
        container.add_stream("no-such-coder", rate=30)  # this is how PyAV says it

    class Bare:
        def add_stream(self, name: str, **_: object) -> object:
            raise av.codec.codec.UnknownCodecError(name)

    with pytest.raises(BadInput, match=r"no H\.264 encoder.*--no-overlay"):
        overlay._stream(Bare(), Painter(made.result, (360, 640)))


def test_memory_does_not_grow_with_the_clip(made: Demo, tmp_path: Path) -> None:
    """Frames are read one at a time: the next is not asked for before the last is drawn and coded."""
    asked, released = [], []

    class Watched:
        def __init__(self) -> None:
            self.pairs = made.frames()

        def __iter__(self) -> "Watched":
            return self

        def __next__(self) -> tuple[int, np.ndarray]:
            pair = next(self.pairs)
            asked.append(pair[0])
            return pair

    def tell(stage: str, done: int, total: int) -> None:
        released.append((done, len(asked), total))

    write_overlay(made.result, Watched(), tmp_path / "overlay.mp4", tell)
    assert all(done == seen for done, seen, _ in released) and released[-1] == (61, 61, 61)


def test_painting_is_cheap_beside_decoding(made: Demo) -> None:
    """Painting costs less than coding the same pictures as the fastest still format does: a ratio, not a wall clock."""
    painter = Painter(demo("payout", frames=12, size=(720, 1280)).result, (720, 1280))
    grey = np.random.default_rng(1).integers(0, 255, (1280, 720), dtype=np.uint8)

    def best(work: object) -> float:
        times = []
        for _ in range(7):
            start = time.perf_counter()
            work()  # type: ignore[operator]
            times.append(time.perf_counter() - start)
        return min(times)

    assert best(lambda: painter.paint(5, grey)) < best(lambda: cv2.imencode(".png", grey))
