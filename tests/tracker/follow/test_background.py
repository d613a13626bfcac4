"""The still scene: no line burnt in, light taken out, noise as it is."""

from dataclasses import dataclass

import cv2
import numpy as np
import pytest

from tests.tracker.follow.line_pictures import Hoop, bare, draw, seen, wall
from tracker.follow.background import Background


@dataclass(frozen=True)
class Moved:
    """A camera movement by whole or broken pixels."""

    dx: float
    dy: float

    def undo(self, points):
        return np.asarray(points, dtype=float) - [self.dx, self.dy]


@pytest.mark.parametrize("share", [0.4, 0.6, 0.75])
def test_line_that_hangs_still_is_not_burnt_in(rng, share):
    scene, n = wall(), 32
    still = draw(scene, Hoop(), 5.0, 40.0)
    frames = [seen(still if i < share * n else scene, rng) for i in range(n)]
    off = Background.from_frames(frames).gray - scene
    # The line differs by 90. A pixel that it covers by a tenth only may differ by up to eight sigma of one frame unnoticed.
    assert np.abs(off).max() < 8 * 1.5
    assert (np.abs(off) > 6).mean() < 1e-3
    assert np.sqrt(np.mean(off**2)) < 0.5


def test_median_would_burn_it_in(rng):  # so the case above is not an easy one
    scene = wall()
    frames = [seen(draw(scene, Hoop(), 5.0, 40.0) if i < 20 else scene, rng) for i in range(32)]
    assert np.abs(np.median(frames, axis=0) - scene).max() > 60


def test_line_over_an_edge_of_the_scene_is_told_from_it(rng):
    scene = wall()
    scene[:, 100:] = 235.0  # a white board begins under the falling leg's side of the hoop
    frames = [seen(draw(scene, Hoop(), 5.0, 40.0) if i < 20 else bare(scene), rng) for i in range(32)]
    off = np.abs(Background.from_frames(frames).gray - bare(scene))
    assert (off > 8).mean() < 2e-4


def test_flicker_of_gain_offset_and_rows_is_taken_out(rng):
    scene = wall() + 60.0 * (np.indices((480, 240))[1] > 150)
    rows = np.arange(480)[:, None]

    def lit(i):
        return scene * (1 + 0.08 * np.sin(i) + 0.05 * np.sin(2 * np.pi * (rows / 600 + i * 0.37))) + 4.0 * np.cos(i)

    background = Background.from_frames([seen(lit(i), rng) for i in range(24)])
    left = background.difference(seen(lit(77), rng))
    assert abs(left.mean()) < 0.3
    assert left.std() < 2.3  # 1.5 of noise, and what a smooth profile leaves of five per cent
    raw = seen(lit(77), rng) - background.gray
    assert raw.std() > 3 * left.std()


def test_noise_is_found_by_level(rng):
    scene = np.where(np.indices((200, 240))[1] < 120, 60.0, 200.0)
    frames = [np.clip(np.rint(scene + rng.normal(0, 1, scene.shape) * np.where(scene < 100, 2.0, 5.0)), 0, 255) for _ in range(32)]
    background = Background.from_frames([f.astype(np.uint8) for f in frames])
    # rounding adds 1/12; the quartiles of 32 frames estimate sigma within a few per cent
    assert background.noise_by_level[60] == pytest.approx(np.hypot(2, 0.289), rel=0.1)
    assert background.noise_by_level[200] == pytest.approx(np.hypot(5, 0.289), rel=0.1)


def test_a_patch_is_the_same_as_the_whole(rng):
    scene = wall()
    background = Background.from_frames([seen(scene, rng) for _ in range(8)])
    gray = seen(draw(scene, Hoop(), 5.0, 40.0), rng)
    whole = background.difference(gray)
    np.testing.assert_array_equal(background.difference(gray, roi=(40, 100, 140, 300)), whole[100:300, 40:140])


def test_camera_movement_moves_the_background(rng):
    scene = cv2.GaussianBlur(rng.uniform(60, 200, (300, 240)), (0, 0), 2.0)
    moved = cv2.warpAffine(scene, np.array([[1, 0, 3.4], [0, 1, -2.2]]), (240, 300), flags=cv2.INTER_CUBIC)
    background = Background.from_frames([seen(scene, rng) for _ in range(12)])
    gray = seen(moved, rng)
    inner = (slice(20, -20), slice(20, -20))
    assert background.difference(gray, Moved(3.4, -2.2))[inner].std() < 1.7
    assert background.difference(gray)[inner].std() > 3.0


def test_too_few_or_unequal_frames_are_refused():
    gray = np.zeros((40, 50), np.uint8)
    with pytest.raises(ValueError, match="at least 3 frames, got 2"):
        Background.from_frames([gray, gray])
    with pytest.raises(ValueError, match="differ in size"):
        Background.from_frames([gray, gray, gray[:20]])
