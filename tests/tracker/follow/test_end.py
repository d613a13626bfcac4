"""Ends followed through drawn clips, the shared clips with truth, and real footage that holds no such end."""

import csv
import json
import tomllib
from types import SimpleNamespace

import av
import cv2
import numpy as np
import pytest

from calibration.clock import Clock
from calibration.shake import ShakeMeter
from tests.footage import clips, footage
from tests.tracker.follow.ball_pictures import Scene, ball, chequers, dropped, wall
from tracker.follow.background import Background
from tracker.follow.course import Course
from tracker.follow.end import follow_end
from tracker.follow.hints import LineHints

SIZE = (400, 240)  # rows, columns
ORIGIN = (100.0, 60.0)
NO_PLANE = SimpleNamespace(to_metres=lambda points: points)  # knows no distance


def clock(count, rows=SIZE[0], readout_s=0.0, fps=240.0):
    return Clock(np.arange(count) / fps, readout_s, 0.0, rows, "down", 0.0, 0.0, fps, "test")


def followed(scene, count, *, kind="free-drop", shake=False, origin=ORIGIN, size=None, exposure=0.0005, **more):
    frames = list(scene.frames(count))
    sampled = [frames[i][1] for i in np.linspace(0, count - 1, 24).astype(int)]
    motions = [ShakeMeter(frames[0][1]).measure(f) for f in sampled] if shake else None
    size = 2 * scene.radius if size is None else size
    hints = LineHints(kind, origin, end_mark_px=size, exposure_s=exposure, px_per_m=400.0, **more)
    meter = ShakeMeter(frames[0][1]) if shake else None
    return follow_end(iter(frames), Background.from_frames(sampled, motions), NO_PLANE, clock(count), hints, meter)


def errors(follow, scene):
    """Result minus truth (n, 2), and whether the ball's centre was in the picture."""
    true = np.array([scene.path(i / scene.fps) for i in range(len(follow.frame))])
    h, w = scene.still.shape
    return follow.px - true, ((true >= 0) & (true <= [w - 1, h - 1])).all(axis=1)


def falling(**changes):
    return Scene(still=wall(SIZE), path=dropped(ORIGIN, 0.06), **changes)


def test_a_dropped_ball_from_rest_until_it_leaves_the_picture():
    scene = falling()
    follow = followed(scene, 120)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert seen[inside].all()
    assert not seen[~inside].any()
    assert all("end-out-of-picture" in flags for flags in np.array(follow.flags, dtype=object)[~inside])
    assert np.sqrt(np.mean(error[inside] ** 2)) < 0.06
    # its own uncertainty is that of its scatter: 106 frames, two coordinates, so within some 20 %
    z = error[inside] / follow.u_xy_px[inside]
    assert 0.6 < np.sqrt(np.mean((z - z.mean(axis=0)) ** 2)) < 1.5
    assert np.nanmax(follow.speed_px_s) == pytest.approx(9.81 * 400 * ((inside.sum() - 1) / 240 - 0.06), rel=0.03)
    assert follow.flags[3] == ("end-still",)


@pytest.mark.parametrize("level", [30.0, 200.0])
@pytest.mark.parametrize("light", [None, (-1.0, -1.0, 0.8)])
def test_one_sided_light_is_inside_the_stated_bias(level, light):
    scene = falling(level=level, light=light)
    follow = followed(scene, 100)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0]) & inside
    assert seen.sum() >= 0.97 * inside.sum()
    assert np.abs(error[seen].mean(axis=0)).max() < 2 * follow.bias_px
    assert follow.bias_px < 0.4
    assert (error[seen] - error[seen].mean(axis=0)).std() < 0.1


def test_its_shadow_on_the_wall_is_not_taken_for_it():
    scene = falling(level=95.0, shadow_at=(14.0, 10.0), noise=1.0)  # darker than the wall, and so is the shadow
    follow = followed(scene, 100)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert seen[inside].mean() > 0.95
    assert np.hypot(*error[seen].T).max() < 1.0


def test_a_board_behind_its_path():
    still = wall(SIZE)
    still[150:300, 70:140] = chequers((150, 70), square=12)
    scene = Scene(still=still, path=dropped(ORIGIN, 0.06), level=130.0)
    follow = followed(scene, 100)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert seen[inside].mean() > 0.97
    assert np.sqrt(np.mean(error[seen] ** 2)) < 0.12


def test_a_ball_that_hangs_so_long_that_the_background_shows_it():
    scene = Scene(still=wall(SIZE), path=dropped(ORIGIN, 0.85))
    frames = list(scene.frames(300))
    sampled = [frames[i][1] for i in np.linspace(0, 299, 24).astype(int)]
    background = Background.from_frames(sampled)
    still = scene.still.astype(np.float32)
    burnt = ball(still, ORIGIN, scene.radius, level=scene.level)
    background.gray[:] = burnt  # the worst case: burnt in, whatever the background's own care
    hints = LineHints("free-drop", ORIGIN, end_mark_px=10.0, exposure_s=0.0005, px_per_m=400.0)
    follow = follow_end(iter(frames), background, NO_PLANE, clock(300), hints)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert seen[inside].mean() > 0.97
    assert np.hypot(*error[seen].T).max() < 0.6
    assert [n.code for n in follow.notices] == ["end-in-background"]


def test_behind_a_post_it_is_hidden_then_found_again():
    def post(frame, index):
        frame = frame.copy()
        frame[170:200, 60:140] = 60.0
        return frame

    still = wall(SIZE)
    still[170:200, 60:140] = 60.0
    scene = Scene(still=still, path=dropped(ORIGIN, 0.06), before=post)
    follow = followed(scene, 100)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    true = np.array([scene.path(i / 240) for i in range(100)])[:, 1]
    hidden = (true > 170) & (true < 200)
    assert hidden.sum() >= 3
    assert not seen[(true > 174) & (true < 196)].any()
    assert seen[inside & (true < 160)].all() and seen[inside & (true > 225)].all()
    assert np.hypot(*error[seen].T).max() < 0.5
    assert any("end-hidden" in flags for flags in follow.flags)


def test_a_whip_turns_within_a_frame():
    def path(t):  # down at 25 px a frame, then off sideways at 60 and up again
        knots_t = np.array([0.0, 10, 24, 26, 28, 60]) / 240
        x = np.array([100.0, 100, 100, 160, 170, 120])
        y = np.array([30.0, 30, 350, 340, 300, 60])
        return np.array([np.interp(t, knots_t, x), np.interp(t, knots_t, y)])

    scene = Scene(still=wall(SIZE), path=path, exposure_s=0.0003)
    follow = followed(scene, 60, kind="held-drop", origin=(100.0, 30.0), exposure=0.0003)
    error, _ = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert seen.mean() > 0.9
    assert np.median(np.hypot(*error[seen].T)) < 0.06
    assert np.hypot(*error[seen].T).max() < 1.0


def test_flicker_and_noise():
    scene = falling(gain=lambda i: 1 + 0.15 * np.sin(2.6 * i), noise=5.0)
    follow = followed(scene, 100)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert seen[inside].mean() > 0.97
    assert np.sqrt(np.mean(error[seen] ** 2)) < 0.15


def test_hard_compression_neither_loses_it_nor_invents_it():
    """Once, a ball that compression had spoiled was not found, and its empty place was taken for it ever after."""
    scene = falling(level=135.0, light=(-1.0, -1.0, 1.0), ambient=0.6)  # parts of it are as bright as the wall
    squeezed = [
        (i, cv2.imdecode(cv2.imencode(".jpg", f, [cv2.IMWRITE_JPEG_QUALITY, 25])[1], cv2.IMREAD_GRAYSCALE))
        for i, f in scene.frames(120)
    ]
    background = Background.from_frames([f for _, f in squeezed[::5]])
    hints = LineHints("free-drop", ORIGIN, end_mark_px=10.0, exposure_s=0.0005, px_per_m=400.0)
    follow = follow_end(iter(squeezed), background, NO_PLANE, clock(120), hints)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert not seen[~inside].any()
    assert np.hypot(*error[seen].T).max() < scene.radius / 2  # it is the ball, nothing else
    assert seen[inside].mean() > 0.8
    stated = np.hypot(follow.u_xy_px[seen], follow.bias_px)
    assert np.sqrt(np.mean((error[seen] / stated) ** 2)) < 1.5  # poorly seen, and it says so
    assert follow.bias_px > 0.3


def test_a_shaking_camera_is_taken_out():
    still = wall((420, 420))
    rng = np.random.default_rng(3)
    for _ in range(60):  # something for the shake to be read from
        x, y = rng.integers(10, 400, 2)
        if abs(x - 200) > 25:
            cv2.circle(still, (int(x), int(y)), int(rng.integers(4, 12)), float(rng.uniform(50, 200)), -1)
    moves = rng.normal(0, 1.2, (100, 2))
    moves[0] = 0
    scene = Scene(still=cv2.GaussianBlur(still, (0, 0), 1.0), path=dropped((200.0, 60.0), 0.06), shift=lambda i: tuple(moves[i]))
    follow = followed(scene, 100, shake=True, origin=(200.0, 60.0))
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0]) & inside
    assert seen.sum() > 0.95 * inside.sum()
    assert np.sqrt(np.mean(error[seen] ** 2)) < 0.12
    # in the frame itself it is where the camera put it
    assert np.abs((follow.raw_px - follow.px)[seen] - moves[seen]).max() < 0.2


def test_what_comes_to_rest_below_is_said_to_have_landed():
    fall = dropped(ORIGIN, 0.06)
    scene = Scene(still=wall(SIZE), path=lambda t: np.minimum(fall(t), [ORIGIN[0], 330.0]))
    follow = followed(scene, 140, kind="surface-drop")
    error, _ = errors(follow, scene)
    assert np.isfinite(follow.px).all()
    landed = np.array(["end-landed" in flags for flags in follow.flags])
    at_rest = np.array([scene.path(i / 240)[1] > 329.9 for i in range(140)])
    assert landed[at_rest].sum() >= at_rest.sum() - 3 and not landed[~at_rest].any()
    assert np.hypot(*error.T).max() < 0.5


def test_two_that_look_alike_after_a_loss_are_called_ambiguous():
    fall = dropped(ORIGIN, 0.06)

    def path(t):  # it jumps: cut from one place to another, as in a splice
        return fall(t) if t < 0.2 else np.array([60.0, 300.0])

    def twin(frame, index):
        return ball(frame, (140.0, 300.0), 5.0, level=200.0) if index >= 48 else frame

    scene = Scene(still=wall(SIZE), path=path, before=twin, exposure_s=0.0)
    follow = followed(scene, 70, kind="held-drop")
    assert any("end-ambiguous" in flags for flags in follow.flags)
    assert not np.isfinite(follow.px[48:52]).any()


def test_a_dropped_object_of_untold_size_is_looked_at():
    scene = falling()
    frames = list(scene.frames(100))
    background = Background.from_frames([frames[i][1] for i in range(0, 100, 4)])
    hints = LineHints("free-drop", ORIGIN, exposure_s=0.0005, px_per_m=400.0)
    follow = follow_end(iter(frames), background, NO_PLANE, clock(100), hints)
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert seen[inside].mean() > 0.97
    assert np.sqrt(np.mean(error[seen] ** 2)) < 0.1
    assert np.nanmedian(follow.diameter_px) == pytest.approx(10.0, abs=0.6)
    assert "end-size-guessed" in {n.code for n in follow.notices}


def test_the_mark_of_an_edge_slide_is_found_below_the_edge():
    scene = falling()
    follow = followed(scene, 90, kind="edge-slide", origin=(150.0, 20.0))
    error, inside = errors(follow, scene)
    seen = np.isfinite(follow.px[:, 0])
    assert seen[inside].mean() > 0.9
    assert np.hypot(*error[seen].T).max() < 0.4


def test_a_window_that_begins_after_the_release():
    scene = falling()
    frames = list(scene.frames(100))
    background = Background.from_frames([frames[i][1] for i in range(0, 100, 4)])
    hints = LineHints("free-drop", ORIGIN, end_mark_px=10.0, exposure_s=0.0005, px_per_m=400.0)
    follow = follow_end(iter(frames[40:]), background, NO_PLANE, clock(100), hints)
    assert follow.frame[0] == 40
    true = np.array([scene.path(i / 240) for i in follow.frame])
    inside = true[:, 1] <= SIZE[0] - 1
    seen = np.isfinite(follow.px[:, 0])
    assert seen[inside].mean() > 0.9
    assert np.hypot(*(follow.px - true)[seen].T).max() < 0.4


def test_the_bare_end_of_a_line_is_followed():
    fall = dropped(ORIGIN, 0.06)

    def bar(frame, index):  # a bar 5 px wide that hangs 60 px down from the end
        y, x = np.mgrid[0 : 400 * 4, 0 : 240 * 4] / 4 + 0.125 - 0.5
        at = fall(index / 240)
        inside = (np.abs(x - at[0]) < 2.5) & (y > at[1]) & (y < at[1] + 60)
        cover = cv2.GaussianBlur(inside.reshape(400, 4, 240, 4).mean(axis=(1, 3)), (0, 0), 0.6)
        return frame * (1 - cover) + 210.0 * cover

    scene = Scene(still=wall(SIZE), path=lambda t: np.array([-50.0, -50.0]), before=bar)
    frames = list(scene.frames(60))
    background = Background.from_frames([f for _, f in frames[::3]])
    hints = LineHints("surface-drop", ORIGIN, exposure_s=0.0005, px_per_m=1250.0)
    follow = follow_end(iter(frames), background, NO_PLANE, clock(60), hints)
    error = follow.px - np.array([fall(i / 240) for i in range(60)])
    seen = np.isfinite(follow.px[:, 0])
    assert seen.mean() > 0.9
    assert np.hypot(*error[seen].T).max() < 0.6
    assert follow.bias_px > 0.3  # how the end is cut is not known


def test_a_wrong_origin_finds_nothing_and_says_so():
    scene = falling()
    follow = followed(scene, 40, origin=(180.0, 250.0))
    assert not np.isfinite(follow.px).any()
    assert all("end-not-found" in flags for flags in follow.flags)
    assert "end-not-found" in {n.code for n in follow.notices}


@pytest.mark.parametrize("name", ["moving/tree.avi", "moving/newtonscradle.gif", "moving/vtest.avi"])
def test_real_footage_without_such_an_end_yields_nothing(name):
    """No ball of these sizes hangs there; what moves there (leaves, other balls, people) must not be taken for one."""
    path = footage(name)
    with av.open(str(path)) as container:
        frames = []
        for frame in container.decode(video=0):
            frames.append(frame.to_ndarray(format="gray"))
            if len(frames) == 36:
                break
    background = Background.from_frames(frames[::2])
    h, w = frames[0].shape
    for place in ((0.5, 0.2), (0.3, 0.4), (0.7, 0.3)):
        for size in (9.0, 16.0):
            hints = LineHints("held-drop", (place[0] * w, place[1] * h), end_mark_px=size)
            follow = follow_end(enumerate(frames), background, NO_PLANE, clock(len(frames), h), hints)
            assert np.isfinite(follow.px[:, 0]).sum() <= 2, (place, size)


@pytest.mark.parametrize(("name", "shape_px"), [("drop", 0.15), ("surface", 0.25), ("control", 0.15), ("held", 0.3)])
def test_shared_clips(name, shape_px):
    """The bar of the design: within 0.3 px RMS about a steady offset of at most 0.5 px that is inside its own u."""
    folder = clips(name)
    with av.open(str(folder / "clip.mp4")) as container:
        frames = []
        for frame in container.decode(video=0):
            plane = frame.planes[0]
            frames.append(np.frombuffer(plane, np.uint8).reshape(-1, plane.line_size)[: frame.height, : frame.width].copy())
    with (folder / "run.toml").open("rb") as file:
        sheet = tomllib.load(file)
    scale = json.loads((folder / "truth.json").read_text(encoding="utf-8"))["scale_m_per_px"]
    with (folder / "truth_extra.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    true = np.array([[float(r["end_px_x"]), float(r["end_px_y"])] for r in rows])
    inside = np.array([r["inside"] == "1" for r in rows])
    count = len(frames)
    h = frames[0].shape[0]
    hints = LineHints(
        sheet["test"]["kind"], tuple(sheet["datum"]["origin_px"]), end_mark_px=sheet["line"]["end_mark_m"] / scale,
        exposure_s=sheet["clock"]["exposure_s"], px_per_m=1 / scale,
    )  # fmt: skip
    background = Background.from_frames([frames[i] for i in np.linspace(0, count - 1, 24).astype(int)])
    plane = SimpleNamespace(to_metres=NO_PLANE.to_metres, distance_m=sheet["camera"]["distance_m"])
    follow = follow_end(enumerate(frames), background, plane, clock(count, h, sheet["clock"]["readout_s"]), hints)
    seen = np.isfinite(follow.px[:, 0])
    assert not seen[~inside].any()
    assert seen[inside].mean() >= 0.95
    error = (follow.px - true)[seen]
    offset = error.mean(axis=0)
    assert np.abs(offset).max() < min(0.5, 2 * follow.bias_px)
    assert np.sqrt(np.mean((error - offset) ** 2, axis=0)).max() < shape_px


def test_a_course_foretells_a_fall_and_a_rest():
    course = Course()
    for i in range(20):
        course.add(i / 240, np.array([100.0, 60.0 + 0.5 * 4000 * (i / 240) ** 2]))
    place, velocity, gate = course.at(20 / 240)
    np.testing.assert_allclose(place, [100.0, 60.0 + 0.5 * 4000 * (20 / 240) ** 2], atol=1e-6)
    np.testing.assert_allclose(velocity, [0.0, 4000 * 20 / 240], rtol=1e-6, atol=1e-6)
    assert gate < 1.0
    for i in range(20, 40):
        course.add(i / 240, np.array([100.0, 100.0]))
    place, velocity, _ = course.at(40 / 240)
    np.testing.assert_allclose(place, [100.0, 100.0], atol=1e-6)
    assert np.hypot(*velocity) < 1e-6
