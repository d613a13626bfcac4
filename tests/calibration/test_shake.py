"""Camera movement from the still background: pictures of a textured wall, moved by known amounts."""

import time

import cv2
import numpy as np
import pytest

from calibration.shake import Motion, ShakeMeter, moving_parts, settle

cv2.setNumThreads(1)
HEIGHT, WIDTH = 640, 480


def wall(seed=0, height=HEIGHT, width=WIDTH, margin=60):
    """A wall with some texture and things on it, smooth enough to be moved by fractions of a pixel."""
    rng = np.random.default_rng(seed)
    shape = (height + 2 * margin, width + 2 * margin)
    grey = 110 + 60 * cv2.GaussianBlur(rng.normal(0, 1, shape), (0, 0), 6)
    for _ in range(40):
        x, y = rng.uniform(0, shape[1]), rng.uniform(0, shape[0])
        cv2.rectangle(grey, (int(x), int(y)), (int(x + rng.uniform(15, 60)), int(y + rng.uniform(15, 60))),
                      float(rng.uniform(40, 220)), -1)
    return cv2.GaussianBlur(grey, (0, 0), 1.2)


def moved(grey, dx, dy, turn, zoom=1.0, noise=1.5, gain=1.0, rng=None, margin=60):
    """The picture that a camera sees whose picture has moved; its centre is the picture's."""
    centre = np.array([(WIDTH - 1) / 2, (HEIGHT - 1) / 2])
    c, s = zoom * np.cos(turn), zoom * np.sin(turn)
    linear = np.array([[c, -s], [s, c]])
    matrix = np.c_[linear, centre + np.array([dx, dy]) - linear @ (centre + margin)]
    seen = cv2.warpAffine(grey, matrix, (WIDTH, HEIGHT), flags=cv2.INTER_LANCZOS4)
    return np.clip(np.round(gain * seen + rng.normal(0, noise, seen.shape)), 0, 255).astype(np.uint8)


def test_shake_of_3_px_leaves_less_than_a_tenth(rng):
    grey = wall()
    meter = ShakeMeter(moved(grey, 0, 0, 0, rng=rng))
    points = rng.uniform([20, 20], [WIDTH - 20, HEIGHT - 20], (40, 2))
    centre = np.array([(WIDTH - 1) / 2, (HEIGHT - 1) / 2])
    rest, claimed = [], []
    for _ in range(40):
        shift, turn = rng.normal(0, 3, 2), rng.normal(0, 0.003)
        motion = meter.measure(moved(grey, *shift, turn, gain=rng.uniform(0.9, 1.1), rng=rng))
        assert motion.ok and not motion.zoomed
        c, s = np.cos(turn), np.sin(turn)
        seen = (points - centre) @ np.array([[c, -s], [s, c]]).T + centre + shift
        rest.append(motion.undo(seen) - points)
        claimed.append(motion.u_px)
        np.testing.assert_allclose(motion.apply(motion.undo(seen)), seen, atol=1e-9)
        np.testing.assert_allclose(motion.apply(points), seen, atol=0.6)
    rms = float(np.sqrt(np.mean(np.square(rest))))
    assert rms < 0.1
    assert rms < 6 * np.mean(claimed)  # u is at the patches' middle; the turn adds to it towards the corners


def test_a_still_camera_is_not_corrected_at_all(rng):
    grey = wall(1)
    meter = ShakeMeter(moved(grey, 0, 0, 0, rng=rng))
    motions = [meter.measure(moved(grey, 0, 0, 0, gain=1 + 0.05 * np.sin(n), rng=rng)) for n in range(30)]
    assert sum(motion.still for motion in motions) >= 27
    settled = settle(motions)
    assert all(motion.still and motion.dx == motion.dy == motion.rotation == 0 for motion in settled)
    points = rng.uniform(0, [WIDTH, HEIGHT], (10, 2))
    assert (settled[0].undo(points) == points).all()


def test_a_moving_camera_is_not_settled(rng):
    grey = wall(1)
    meter = ShakeMeter(moved(grey, 0, 0, 0, rng=rng))
    motions = [meter.measure(moved(grey, 0.5 * np.sin(n), 0, 0, rng=rng)) for n in range(12)]
    assert settle(motions) == tuple(motions)


def test_something_large_that_moves_is_not_followed(rng):
    """A hand with its own texture over a quarter of the picture goes one way, the camera the other."""
    grey, hand = wall(2), moved(wall(9), 0, 0, 0, rng=rng)
    reference = moved(grey, 0, 0, 0, rng=rng)
    reference[100:420, 60:300] = hand[100:420, 60:300]
    meter = ShakeMeter(reference)
    frame = moved(grey, 1.5, -0.8, 0.001, rng=rng)
    frame[104:424, 60:300] = hand[100:420, 60:300]
    motion = meter.measure(frame)
    assert (motion.dx, motion.dy) == pytest.approx((1.5, -0.8), abs=0.12)


def test_the_mask_keeps_patches_off(rng):
    mask = np.zeros((HEIGHT, WIDTH), dtype=bool)
    mask[:, 200:300] = True
    meter = ShakeMeter(moved(wall(3), 0, 0, 0, rng=rng), mask)
    assert meter.ok
    columns = meter._places[:, 0]
    assert not ((columns > 192) & (columns < 308)).any()


def test_large_steps_are_found_and_order_does_not_matter(rng):
    grey = wall(4)
    meter = ShakeMeter(moved(grey, 0, 0, 0, rng=rng))
    frames = [moved(grey, dx, dy, 0, rng=rng) for dx, dy in ((18, -12), (-15, 20), (0.3, 0.2))]
    forward = [meter.measure(frame) for frame in frames]
    backward = [meter.measure(frame) for frame in frames[::-1]][::-1]
    for one, other, (dx, dy) in zip(forward, backward, ((18, -12), (-15, 20), (0.3, 0.2)), strict=True):
        assert (one.dx, one.dy) == pytest.approx((dx, dy), abs=0.1)
        assert (one.dx, one.dy) == pytest.approx((other.dx, other.dy), abs=0.03)


def test_a_zoom_is_flagged_and_undone(rng):
    grey = wall(5)
    meter = ShakeMeter(moved(grey, 0, 0, 0, rng=rng))
    motion = meter.measure(moved(grey, 1, 1, 0, zoom=1.004, rng=rng))
    assert motion.zoomed
    assert motion.zoom == pytest.approx(1.004, abs=3e-4)


def test_a_blank_wall_carries_nothing_and_says_so(rng):
    blank = np.clip(120 + rng.normal(0, 2, (HEIGHT, WIDTH)), 0, 255).astype(np.uint8)
    meter = ShakeMeter(blank)
    motion = meter.measure(np.clip(120 + rng.normal(0, 2, (HEIGHT, WIDTH)), 0, 255).astype(np.uint8))
    assert not motion.ok
    assert (motion.undo([[3.0, 4.0]]) == [[3.0, 4.0]]).all()


def test_another_scene_is_not_taken_for_a_motion(rng):
    meter = ShakeMeter(moved(wall(6), 0, 0, 0, rng=rng))
    assert not meter.measure(moved(wall(7), 0, 0, 0, rng=rng)).ok


def test_time_does_not_grow_with_the_picture(rng):
    """Only patches are read: four times the pixels cost less than twice the time."""

    def seconds(factor):
        picture = cv2.resize(moved(wall(8), 0, 0, 0, rng=rng), None, fx=factor, fy=factor)
        meter = ShakeMeter(picture)
        meter.measure(picture)
        every = []
        for _ in range(15):
            start = time.perf_counter()
            meter.measure(picture)
            every.append(time.perf_counter() - start)
        return min(every)

    assert seconds(4.0) < 2 * seconds(2.0)


def test_wrong_pictures_are_refused(rng):
    with pytest.raises(ValueError, match="uint8"):
        ShakeMeter(np.zeros((HEIGHT, WIDTH)))
    with pytest.raises(ValueError, match="shape"):
        ShakeMeter(moved(wall(), 0, 0, 0, rng=rng)).measure(np.zeros((10, 10), np.uint8))


def test_undo_turns_the_right_way():
    motion = Motion(0.0, 0.0, np.radians(90), 0.01, True, centre=(100.0, 100.0))
    np.testing.assert_allclose(motion.apply([[110.0, 100.0]]), [[100.0, 110.0]], atol=1e-9)  # clockwise as seen
    np.testing.assert_allclose(motion.undo([[100.0, 110.0]]), [[110.0, 100.0]], atol=1e-9)


def test_a_hung_line_that_falls_is_no_background(rng: np.random.Generator) -> None:
    """A ladder of bright rods before a plain wall carries most of the texture; patches on it would agree on its fall."""
    wall = np.full((640, 480), 120.0)
    wall[40:600:56, 30:60] = 60.0  # a little furniture that stands still
    wall[60:620:70, 420:450] = 170.0
    frames = []
    for fallen in (0, 0, 30, 90, 200):
        picture = wall.copy()
        for rung in range(8):
            row = 40 + 40 * rung + fallen
            if row < 620:
                picture[row : row + 6, 150:330] = 230.0
        frames.append(np.clip(picture + rng.normal(0, 1.5, picture.shape), 0, 255).astype(np.uint8))
    told = ShakeMeter(frames[0], moving_parts(frames)).measure(frames[2])
    assert told.ok and np.hypot(told.dx, told.dy) < 0.05
    assert not moving_parts(frames)[40:600, 30:60].any()
    moved = [np.roll(frame, (3 * n, -2 * n), axis=(0, 1)) for n, frame in enumerate(frames[:2])]
    assert moving_parts(moved).mean() < 0.2  # a camera that moves leaves its background to be trusted
