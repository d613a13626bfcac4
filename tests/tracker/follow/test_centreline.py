"""The line's axis: found from nothing, placed to hundredths of a pixel, not drawn off by light, shadow or a gap."""

import cv2
import numpy as np
import pytest
from scipy.special import ndtr

from tests.tracker.follow.line_pictures import Hoop, bare, draw, seen, wall
from tracker.follow.background import Background
from tracker.follow.centreline import LineFollower, continuous_ridge
from tracker.follow.path import find_path
from tracker.follow.profile import ProfilePool, Template, bar_profile, fit_centres, side_light, side_light_offset


def followed(rng, pictures, scene, repeat=None, rim=(80.3, 240.0)):
    background = Background.from_frames([seen(bare(scene), rng) for _ in range(12)])
    follower = LineFollower(background, rim, repeat)
    return follower, [follower.follow(i, seen(p, rng)) for i, p in enumerate(pictures)]


def across(line, hoop, high=20.0):
    """Signed distance of the followed points from the true axis, above the rim by `high` px and more before the exit."""
    s = np.arange(0.0, hoop.length, 0.05)
    true = hoop.point(s)
    inner = (line.points_px[:, 1] < 470) & line.seen
    inner[: int(high)] = False
    p = line.points_px[inner]
    near = np.argmin(np.hypot(*(p[:, None, :] - true[None, ::10]).transpose(2, 0, 1)), axis=1) * 10
    tangent = np.gradient(true, axis=0)[near]
    normal = np.column_stack([tangent[:, 1], -tangent[:, 0]]) / np.hypot(*tangent.T)[:, None]
    return ((p - true[near]) * normal).sum(axis=1)


@pytest.mark.parametrize(("level", "width"), [(40.0, 5.0), (230.0, 3.5), (60.0, 8.0)])
def test_axis_is_placed_to_a_few_hundredths(rng, level, width):
    hoops = [Hoop(height=70.0 + 1.3 * i) for i in range(8)]
    scene = wall()
    _, lines = followed(rng, [draw(scene, h, width, level) for h in hoops], scene)
    off = np.concatenate([across(line, h) for line, h in zip(lines, hoops, strict=True)])
    assert abs(off.mean()) < 0.045  # a section of five pixels of a hoop of 24 lies 5^2 / (24 * 24) inside it
    assert off.std() < 0.08  # noise over contrast in such sections gives 0.02; the rest is the hoop's bend setting in


def test_beads_do_not_make_it_wander(rng):
    hoops = [Hoop(height=70.0 + 1.1 * i) for i in range(8)]
    scene = wall()
    pictures = [draw(scene, h, 4.0, 230.0, pitch=6.4, paid_out=3.7 * i) for i, h in enumerate(hoops)]
    _, lines = followed(rng, pictures, scene, repeat=6.4)
    off = np.concatenate([across(line, h) for line, h in zip(lines, hoops, strict=True)])
    assert off.std() < 0.12
    assert abs(off.mean()) < 0.05


def test_soft_shadow_beside_it_is_not_followed(rng):
    hoop, scene = Hoop(), wall()
    shadow = cv2.GaussianBlur(draw(scene, Hoop(rim=(98.0, 262.0)), 8.0, 40.0) - bare(scene), (0, 0), 5.0)
    picture = draw(scene + shadow, hoop, 5.0, 40.0)
    assert np.abs(shadow).max() > 20
    _, (line,) = followed(rng, [picture], scene)
    assert np.abs(across(line, hoop)).max() < 0.8  # the shadow's slope may draw it, the shadow lies 28 px away


def test_both_polarities_along_one_line(rng):
    scene = wall(level=150.0)
    scene[330:, 100:160] = 245.0  # a white board behind part of the falling leg, which is lighter than the wall
    scene[330:400, 100:160] = 245.0
    hoop = Hoop()
    _, (line,) = followed(rng, [draw(scene, hoop, 5.0, 200.0)], scene)
    off = across(line, hoop)
    assert np.median(np.abs(off)) < 0.05
    assert line.points_px[-1, 1] > 470


def test_it_keeps_up_and_says_where_it_was_hidden(rng):
    hoops = [Hoop(height=60.0 + 3.0 * i) for i in range(12)]
    scene = wall()
    pictures = [draw(scene, h, 5.0, 40.0) for h in hoops]
    for p in pictures:
        p[300:330, 115:145] = bare(scene)[300:330, 115:145]  # a post before the falling leg
    _, lines = followed(rng, pictures, scene)
    assert all(line is not None for line in lines)
    last = lines[-1]
    hidden = (last.points_px[:, 1] > 305) & (last.points_px[:, 1] < 325)
    assert not last.seen[hidden].any()
    assert last.u_px[hidden].min() > 10 * np.median(last.u_px[last.seen])
    assert np.abs(across(last, hoops[-1])).max() < 0.5


def test_nothing_is_found_where_there_is_nothing(rng):
    scene = wall()
    background = Background.from_frames([seen(scene, rng) for _ in range(12)])
    for _ in range(6):
        gray = seen(scene, rng)
        assert find_path(background.difference(gray), background.noise, (80.3, 240.0)) is None
    walker = scene.copy()
    walker[150:400, 60:140] = 60.0  # as large as a person
    assert find_path(background.difference(seen(walker, rng)), background.noise, (80.3, 240.0)) is None


def test_path_runs_from_the_rim_over_the_top_to_the_exit(rng):
    scene, hoop = wall(), Hoop()
    background = Background.from_frames([seen(bare(scene), rng) for _ in range(12)])
    path = find_path(background.difference(seen(draw(scene, hoop, 5.0, 40.0), rng)), background.noise, hoop.rim)
    assert np.hypot(*(path.points_px[0] - hoop.rim)) < 6
    assert path.points_px[-1, 1] >= 477
    assert path.points_px[:, 1].min() == pytest.approx(hoop.apex[1], abs=2)
    assert path.width_px == pytest.approx(5.0, abs=2)


def test_mirrored_picture_gives_the_mirrored_axis(rng):
    scene, hoop = wall(), Hoop()
    gray = seen(draw(scene, hoop, 5.0, 40.0), rng)
    frames = [seen(bare(scene), rng) for _ in range(12)]
    one = LineFollower(Background.from_frames(frames), hoop.rim).follow(0, gray)
    flip = [np.ascontiguousarray(f[:, ::-1]) for f in frames]
    two = LineFollower(Background.from_frames(flip), (239 - hoop.rim[0], hoop.rim[1])).follow(0, np.ascontiguousarray(gray[:, ::-1]))
    top = [p.points_px[np.argmin(p.points_px[:, 1])] for p in (one, two)]
    assert top[0][1] == pytest.approx(top[1][1], abs=0.05)
    assert one.points_px[-60, 0] == pytest.approx(239 - two.points_px[-60, 0], abs=0.05)


def test_fit_is_nearly_as_good_as_light_allows(rng):
    """Cramer-Rao bound for a Gaussian line of height A, sigma s, noise n per pixel: (n/A) sqrt(2 s / sqrt(pi)) px.

    The bound is the published one for place alone (variance >= n^2 / sum (dI/dx)^2); level and slope beside the line,
    fitted too, cost little as they are even and nearly orthogonal to its derivative.
    """
    n, height, s = 2.0, 100.0, 1.5
    bound = n / height * np.sqrt(2 * s / np.sqrt(np.pi))
    assert bound == pytest.approx(0.0260, abs=5e-5)  # worked value of the reference table
    q = np.arange(-12, 13)
    place = rng.uniform(-0.5, 0.5, 20000)
    bands = height * np.exp(-0.5 * ((q - place[:, None]) / s) ** 2) + rng.normal(0, n, (20000, 25)) + 5 + 0.3 * q
    offset = np.arange(-6, 6.1, 0.5)
    template = Template.from_profile(offset, np.exp(-0.5 * (offset / s) ** 2))
    centre, found, _ = fit_centres(bands.astype(np.float32), -12, place + rng.uniform(-0.4, 0.4, 20000), template, rounds=3)
    error = centre - place
    assert abs(error.mean()) < 0.002
    assert bound * 0.97 < error.std() < bound * 1.35
    assert np.median(found) == pytest.approx(height, rel=0.05)  # reading between pixels lowers a peak of that width by 3 %


def test_one_sided_light_moves_brightness_as_steger_says_and_silhouette_less():
    """Steger, IEEE PAMI 20(2), 113 (1998): a bar of half width w between 0 and a share a of its height, under a Gaussian
    s, has its extremum off its axis by -s^2 ln(1 - a) / (2 w)."""
    for s, w, a, published in ((2.0, 2.0, 0.5, 0.6931), (1.5, 2.0, 0.3, 0.2006)):
        assert -(s**2) * np.log(1 - a) / (2 * w) == pytest.approx(published, abs=5e-5)
        x = np.arange(-15, 15, 1e-3)
        picture = ndtr((x + w) / s) - ndtr((x - w) / s) + a * ndtr((x - w) / s)
        assert abs(x[np.argmax(picture)]) == pytest.approx(published, abs=2e-3)
        offset = np.arange(-8, 8.1, 0.5)
        difference = bar_profile(offset, 2 * w, s)  # what is followed is the difference from the scene: no step is left
        template = Template.from_profile(offset, difference)
        band = np.interp(np.arange(-14, 15), x, ndtr((x + w) / s) - ndtr((x - w) / s))[None]
        centre, _, _ = fit_centres(band.astype(np.float32), -14, np.array([0.3]), template, rounds=3)
        assert abs(centre[0]) < 0.01


@pytest.mark.parametrize("lamp", [(0.0, 0.0), (0.0, 45.0), (-30.0, 30.0)])
def test_side_light_is_estimated_within_its_uncertainty(rng, lamp):
    hoops = [Hoop(height=70.0 + 1.3 * i) for i in range(16)]
    scene = wall()
    follower, lines = followed(rng, [draw(scene, h, 6.0, 50.0, side_light=lamp) for h in hoops], scene)
    light = side_light(follower.pool)
    raw = np.array([line.points_px[:, 1].min() - h.apex[1] for line, h in zip(lines, hoops, strict=True)])
    corrected = raw.mean() + light.vector_px[1]
    assert abs(corrected) < 2 * light.u_px
    assert abs(corrected) < max(0.6 * abs(raw.mean()), 0.08)
    assert light.u_px < 0.3


def test_pool_keeps_directions_apart():
    offset = np.arange(-5, 5.1, 0.5)
    pool = ProfilePool(offset)
    up, right = np.array([[0.0, -1.0]]), np.array([[1.0, 0.0]])
    pool.add(np.repeat(up, 100, 0), np.repeat(bar_profile(offset - 0.3, 4, 0.8)[None], 100, 0))
    pool.add(np.repeat(right, 100, 0), np.repeat(bar_profile(offset, 4, 0.8)[None], 100, 0))
    profile, count = pool.along((0.0, -1.0))
    assert count == 100
    assert side_light_offset(offset, profile)[0] == pytest.approx(0.3, abs=0.02)
    assert side_light_offset(offset, pool.along((1.0, 0.0))[0])[0] == pytest.approx(0.0, abs=0.01)


def test_ridge_stays_continuous_past_a_brighter_stranger(rng):
    q = np.arange(-10, 11)
    true = 3.0 * np.sin(np.arange(120) / 25.0)
    ridge = 60 * np.exp(-0.5 * ((q - true[:, None]) / 1.5) ** 2) + rng.normal(0, 3, (120, 21))
    ridge[50:60] += 150 * np.exp(-0.5 * ((q - 8) / 1.0) ** 2)  # something bright beside it for ten sections
    place, evidence = continuous_ridge(ridge.astype(np.float32), np.ones(ridge.shape, bool), 10, 60.0)
    assert np.abs(place - true).max() < 1.0
    assert evidence.min() > 30
