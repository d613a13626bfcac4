"""The free end of a line without a mark, in pictures drawn by counting sub-pixels, and in real footage without any line."""

import av
import cv2
import numpy as np
import pytest

from tests.footage import footage
from tracker.follow.background import Background
from tracker.follow.tip import LineEnd, find_tip, fit_tip, tip_candidates

SIZE = 81
FINE = 6  # sub-pixels a side
BLUR = 0.6


def drawn(tip, angle, width, *, bend=0.0, fg=200.0, bg=100.0, way=(0.0, 0.0), light=0.0, pitch=None, past=None):
    """Mean of sub-pixels of a line that ends at `tip`, square, in the direction `angle`; `past` lets it go on."""
    y, x = (np.mgrid[0 : SIZE * FINE, 0 : SIZE * FINE] + 0.5) / FINE - 0.5
    steps = max(1, int(3 * np.hypot(*way)))
    cover, value = np.zeros((SIZE, SIZE)), np.zeros((SIZE, SIZE))
    for at in (np.arange(steps) + 0.5) / steps - 0.5:
        dx, dy = x - tip[0] - at * way[0], y - tip[1] - at * way[1]
        u = dx * np.cos(angle) + dy * np.sin(angle)
        v = dy * np.cos(angle) - dx * np.sin(angle) - 0.5 * bend * np.minimum(u, 0) ** 2
        inside = (u <= (0.0 if past is None else past)) & (np.abs(v) <= width / 2)
        colour = fg + light * v / (width / 2)
        if pitch is not None:
            colour = colour + 0.4 * (fg - np.mean(bg)) * np.cos(2 * np.pi * u / pitch)
        for total, what in ((cover, inside), (value, inside * colour)):
            total += what.reshape(SIZE, FINE, SIZE, FINE).mean(axis=(1, 3)) / steps
    return cv2.GaussianBlur(value + (1 - cover) * bg, (0, 0), BLUR)


def noisy(picture, sigma, rng):
    return np.rint(picture + rng.normal(0, sigma, picture.shape)).clip(0, 255)


def chequers():
    y, x = np.mgrid[0:SIZE, 0:SIZE]
    return cv2.GaussianBlur((y // 9 + x // 9) % 2 * 120.0 + 60.0, (0, 0), 0.7)


def errors(fit, tip, angle):
    """Along and across the line [px]."""
    along, across = np.array([np.cos(angle), np.sin(angle)]), np.array([-np.sin(angle), np.cos(angle)])
    return (fit.point - tip) @ along, (fit.point - tip) @ across


CASES = {
    "plain": ({}, 0.10),
    "dark": ({"fg": 20.0}, 0.10),
    "bent": ({"bend": 0.01}, 0.10),
    "blurred by motion": ({"way": (3.0, 7.0)}, 0.15),
    "lit from one side": ({"light": 60.0}, 0.10),
    "before chequers": ({"bg": chequers(), "fg": 250.0}, 0.15),
    "with a texture": ({"pitch": 9.0}, 0.40),
}


@pytest.mark.parametrize("width", [4.0, 8.0])
@pytest.mark.parametrize("case", CASES)
def test_the_end_is_where_it_was_drawn(case, width):
    how, limit = CASES[case]
    rng = np.random.default_rng(7)
    found, expected = [], 8
    for _ in range(expected):
        tip, angle = 40 + rng.uniform(-1, 1, 2), rng.uniform(0, 2 * np.pi)
        picture = noisy(drawn(tip, angle, width, **how), 2.0, rng)
        scene = np.broadcast_to(how.get("bg", 100.0), picture.shape)
        line = LineEnd(width * 1.1, u_width=0.1, pitch_px=how.get("pitch"))
        fit = find_tip(picture, scene, (0, 0), tip + rng.normal(0, 3, 2), line, way=how.get("way"), noise=2.0, reach_px=15)
        if fit is not None:
            found.append(errors(fit, tip, angle))
    along = np.array(found)[:, 0]
    assert len(found) >= expected - 1
    assert np.sqrt(np.mean(along**2)) < limit  # [px]


def test_a_thin_line_of_two_pixels():
    rng = np.random.default_rng(3)
    off = []
    for _ in range(12):
        tip, angle = 40 + rng.uniform(-1, 1, 2), rng.uniform(0, 2 * np.pi)
        fit = find_tip(noisy(drawn(tip, angle, 2.0), 2.0, rng), np.full((SIZE, SIZE), 100.0), (0, 0), tip, LineEnd(2.2, 0.1), noise=2.0)
        assert fit is not None
        off.append(errors(fit, tip, angle)[0])
    assert np.sqrt(np.mean(np.square(off))) < 0.15


def test_scatter_comes_near_what_noise_allows_and_is_what_is_stated():
    """Best possible edge: (n/C) sqrt(2 s sqrt(pi)) per row of pixels (Cramer-Rao bound, derived in many texts: for a step
    of height C blurred by a Gaussian s, the Fisher information of its place is C^2 / (2 s sqrt(pi) n^2)); a line of
    `width` rows is better by sqrt(width). Sharing the data with light, width and direction costs something."""
    rng = np.random.default_rng(5)
    width, noise, contrast = 8.0, 4.0, 100.0
    soft = float(np.hypot(BLUR, 1 / np.sqrt(12)))
    clean, tip = drawn((40.3, 40.2), np.pi / 2, width), np.array([40.3, 40.2])
    off, stated = [], []
    for _ in range(60):
        fit = fit_tip(clean + rng.normal(0, noise, clean.shape), np.full_like(clean, 100.0), (0, 0), tip + 0.5,
                      np.array([0.0, 1.0]), LineEnd(width, 0.03, soft), noise=noise)
        off.append(fit.point[1] - tip[1])
        stated.append(np.sqrt(fit.cov[1, 1]))
    best = noise / contrast * np.sqrt(2 * soft * np.sqrt(np.pi)) / np.sqrt(width)
    scatter = np.std(off)
    assert 0.8 * best < scatter < 1.6 * best
    assert np.mean(stated) == pytest.approx(scatter, rel=0.3)  # 60 draws know a deviation to 9 %
    assert abs(np.mean(off)) < 0.02


def test_the_light_behind_does_not_matter():
    """The same contrast on another level is the same picture."""
    at = []
    for level in (0.0, 80.0):
        picture = drawn((40.2, 40.4), 0.3, 8.0, fg=160.0 + level, bg=60.0 + level)
        at.append(fit_tip(picture, np.full_like(picture, 60.0 + level), (0, 0), np.array([40.7, 40.9]), np.array([1.0, 0.3]),
                          LineEnd(8.0, 0.1), noise=2.0).point)
    assert at[0] == pytest.approx(at[1], abs=0.002)
    assert at[0] == pytest.approx([40.2, 40.4], abs=0.02)


def test_gain_and_offset_of_the_frame_are_found():
    picture = drawn((40.2, 40.4), 0.3, 6.0, bg=chequers(), fg=230.0)
    fit = find_tip(0.8 * picture + 9.0, chequers() * 0.8 + 9.0, (0, 0), np.array([40.0, 40.0]), LineEnd(6.0, 0.1), noise=2.0)
    other = fit_tip(0.8 * picture + 9.0, chequers(), (0, 0), fit.point, fit.direction, LineEnd(6.0, 0.1), noise=2.0)
    assert other.point == pytest.approx([40.2, 40.4], abs=0.1)


def test_coordinates_are_the_frames():
    picture = drawn((40.2, 40.4), 0.3, 6.0)
    fit = find_tip(picture, np.full_like(picture, 100.0), (300, 500), np.array([340.0, 540.0]), LineEnd(6.0, 0.1), noise=2.0)
    assert fit.point == pytest.approx([340.2, 540.4], abs=0.05)
    assert np.arctan2(fit.direction[1], fit.direction[0]) == pytest.approx(0.3, abs=0.02)


def test_a_mirrored_picture_gives_the_mirrored_place():
    rng = np.random.default_rng(2)
    picture = noisy(drawn((40.2, 41.4), 0.7, 5.0, bend=0.01), 2.0, rng)
    scene = np.full_like(picture, 100.0)
    one = find_tip(picture, scene, (0, 0), np.array([41.0, 41.0]), LineEnd(5.0, 0.1), noise=2.0)
    two = find_tip(picture[:, ::-1], scene, (0, 0), np.array([SIZE - 42.0, 41.0]), LineEnd(5.0, 0.1), noise=2.0)
    assert two.point == pytest.approx([SIZE - 1 - one.point[0], one.point[1]], abs=0.01)
    assert two.bend == pytest.approx(-one.bend, abs=1e-3)


class TestNothingIsInvented:
    def sure(self, picture, scene, near=(40.0, 40.0), **more):
        return find_tip(picture, scene, (0, 0), np.array(near), LineEnd(4.0, 0.1), noise=2.0, **more)

    def test_in_an_empty_scene(self):
        rng = np.random.default_rng(0)
        for scene in (np.full((SIZE, SIZE), 100.0), chequers()):
            assert all(self.sure(noisy(scene, 2.0, rng), scene) is None for _ in range(10))

    def test_on_a_line_that_goes_on(self):
        rng = np.random.default_rng(0)
        scene = np.full((SIZE, SIZE), 100.0)
        for angle in np.linspace(0, 3, 10):
            assert self.sure(noisy(drawn((40, 40), angle, 4.0, past=200.0), 2.0, rng), scene) is None

    def test_on_a_line_of_beads_and_gaps_between_two_beads(self):
        y, x = np.mgrid[0:SIZE, 0:SIZE].astype(float)
        beads = np.hypot(x - 40, (y % 9) - 4) < 2.5
        picture = cv2.GaussianBlur(100.0 + 100.0 * beads, (0, 0), 0.8)
        fit = find_tip(picture, np.full_like(picture, 100.0), (0, 0), np.array([40.0, 40.0]), LineEnd(5.0, 0.1, pitch_px=9.0),
                       noise=2.0, reach_px=25)  # fmt: skip
        assert fit is None

    def test_on_its_shadow(self):
        soft = cv2.GaussianBlur(drawn((40, 40), 1.0, 4.0, fg=60.0), (0, 0), 2.0)
        assert self.sure(soft, np.full_like(soft, 100.0), contrast=80.0) is None  # the line is lighter than the wall

    def test_out_of_reach(self):
        picture = drawn((40, 20), -np.pi / 2, 4.0)
        assert self.sure(picture, np.full_like(picture, 100.0), near=(40.0, 60.0), reach_px=15) is None
        assert self.sure(picture, np.full_like(picture, 100.0), near=(40.0, 60.0)) is not None

    def test_at_the_border_of_the_picture(self):
        picture = drawn((40, 40), 1.2, 4.0)
        assert self.sure(picture[:41], np.full((41, SIZE), 100.0)) is None

    def test_among_walkers(self):
        """People on a path, no line anywhere. Legs end like lines, and to someone who knows nothing of the line some of them
        are lines; to a follower, which knows width and contrast from the frames before, one place in 200 at most."""
        with av.open(str(footage("moving/vtest.avi"))) as video:
            frames = [frame.to_ndarray(format="gray") for _, frame in zip(range(300), video.decode(video=0), strict=False)]
        background = Background.from_frames(frames[::10])
        noise = max(2.0, background.noise)
        line, looked, sure = LineEnd(5.0, 0.05), 0, 0
        for gray in frames[5::60]:
            scene = background.expected(gray.shape, None, None, background.light(gray))
            for row in range(60, 520, 60):
                for column in range(60, 720, 60):
                    part = (slice(row - 40, row + 41), slice(column - 40, column + 41))
                    near, corner = np.array([column, row], dtype=float), (column - 40, row - 40)
                    for contrast in (-80.0, 80.0):
                        fit = find_tip(gray[part], scene[part], corner, near, line, noise=noise, reach_px=30, contrast=contrast)
                        looked, sure = looked + 1, sure + (fit is not None)
        assert looked > 800
        assert sure <= looked / 200


def test_candidates_are_the_two_ends_of_a_short_line_nearest_first():
    picture = drawn((55, 40), 0.0, 4.0)
    picture[:, :25] = 100.0
    found = tip_candidates(picture - 100.0, (10, 20), np.array([36.0, 60.0]), 4.0, 2.0)
    assert len(found) == 2
    assert found[0][0] == pytest.approx([35, 60], abs=2.0)
    assert found[1][0] == pytest.approx([65, 60], abs=2.0)
    assert found[0][1] == pytest.approx([-1, 0], abs=0.2)
    assert found[1][1] == pytest.approx([1, 0], abs=0.2)
