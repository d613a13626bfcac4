"""The outline of a disc: against rays cast on sub-pixels, the Cramer-Rao bound and the geometry of a sphere's picture."""

import numpy as np
import pytest

import tests.tracker.follow.ball_pictures as pictures
from tracker.follow.disc import BLUR, RADIUS, SOFT, Disc, disc_looks, look_spread, roundness
from tracker.follow.layer import Belief, Patch, fit_layer

PIXEL = np.sqrt(1 / 12)  # blur of the square pixel itself


def found(picture, scene, start, radius, *, noise=1.0, way=(0.0, 0.0), level=None, half=None, looks=None):
    """Fit a disc of known radius from a start that is a pixel off."""
    looks = disc_looks(radius) if looks is None else looks
    half = radius + 6 + 0.5 * np.hypot(*way) if half is None else half
    x0, y0 = int(start[0] - half), int(start[1] - half)
    cut = (slice(y0, int(start[1] + half) + 1), slice(x0, int(start[0] + half) + 1))
    y, x = np.mgrid[cut].astype(float)
    patch = Patch(x, y, picture[cut].astype(float), scene[cut].astype(float), np.full(x.shape, noise), np.ones(x.shape))
    level = float(np.median(patch.seen[np.hypot(x - start[0], y - start[1]) < 0.6 * radius])) if level is None else level
    look = np.zeros(looks)
    look[0] = level
    p = np.array([*start, radius, 0.7, *way])
    sigma = np.array([np.inf, np.inf, 0.007 * radius, 0.3, 0.3, 0.3])
    return fit_layer(patch, Disc(looks, np.eye(2)), Belief(p, sigma, look, look_spread(looks, level)), soften=(1.5, 0.5, 0, 0, 0, 0))


@pytest.mark.parametrize("looks", [1, 4, 9])
@pytest.mark.parametrize("way", [(0.0, 0.0), (1.5, 2.0), (-6.0, 9.0)])
def test_derivatives_agree_with_differences(looks, way, rng):
    disc = Disc(looks, np.array([[1.0, 0.02], [0.0, 0.97]]))
    x, y = rng.uniform(-12, 12, (2, 400))
    look = rng.normal(0, 20, looks) + np.eye(looks)[0] * 150
    p = np.array([0.3, -0.4, 7.0, 0.8, *way])
    drawn = disc.draw(p, x, y, look)
    for i, rough in zip(range(6), (0.05, 0.05, 0.02, 0.2, 0.35, 0.35), strict=True):
        step = 1e-4 * np.eye(6)[i]
        up, down = disc.draw(p + step, x, y, look), disc.draw(p - step, x, y, look)
        cover = (up.basis[0] - down.basis[0]) / 2e-4
        colour = look @ (up.basis - down.basis) / 2e-4
        # left out: the shear, the change of the edge's blur with the way between two moments; of the colour also the
        # look's change with radius, and its unbounded slope at the limb. They steer the steps, they do not move the end.
        for got, true, share in ((drawn.d_cover[i], cover, rough), (drawn.d_colour[i], colour, rough if looks == 1 else max(rough, 0.2))):
            assert np.sqrt(np.mean((got - true) ** 2)) < share * np.sqrt(np.mean(true**2)) + 1e-3


def test_coverage_is_the_area():
    y, x = np.mgrid[-20:21, -20:21].astype(float)
    for way in ((0.0, 0.0), (3.0, 8.0)):
        drawn = Disc(1, np.eye(2)).draw(np.array([0.2, 0.3, 7.3, 0.7, *way]), x.ravel(), y.ravel(), np.ones(1))
        # a blurred circle keeps its area, but for the curvature of its edge: pi (r^2 + s^2)
        assert drawn.basis[0].sum() == pytest.approx(np.pi * (7.3**2 + 0.7**2), rel=4e-3)


@pytest.mark.parametrize("radius", [3.0, 6.0, 15.0])
def test_scatter_is_near_the_cramer_rao_bound(radius, rng):
    """Best possible edge: (n/C) sqrt(2 s sqrt(pi)) for each pixel of its length, facts 4 (var >= n^2/sum (dI/dx)^2).

    Round the circle each pixel of edge tells of a column by its cosine squared: in all pi r pixels.
    """
    noise, contrast, soft = 2.0, 100.0, 0.7
    bound = noise / contrast * np.sqrt(2 * np.hypot(soft, PIXEL) * np.sqrt(np.pi) / (np.pi * radius))
    scene = np.full((61, 61), 90.0)
    errors, told = [], []
    for _ in range(60):
        centre = 30 + rng.uniform(-0.5, 0.5, 2)
        picture = pictures.ball(scene, centre, radius, level=90 + contrast, soft=soft) + rng.normal(0, noise, scene.shape)
        fit = found(picture, scene, centre + rng.uniform(-1, 1, 2), radius, noise=noise)
        errors.append(fit.p[:2] - centre)
        told.append(np.sqrt(fit.p_cov[0, 0]))
    scatter = np.sqrt(np.mean(np.square(errors)))
    assert 0.85 * bound < scatter < 2.0 * bound + 0.01  # free looks and robust weights cost; below is impossible
    assert np.mean(told) > 0.85 * bound
    assert np.abs(np.mean(errors, axis=0)).max() < 0.015


def test_one_sided_light_moves_brightness_but_not_the_outline(rng):
    scene = np.full((61, 61), 60.0)
    outline, brightness = [], []
    for _ in range(20):
        centre = 30 + rng.uniform(-0.5, 0.5, 2)
        picture = pictures.ball(scene, centre, 8.0, level=220, light=(-1.0, -1.0, 1.0), ambient=0.45)
        seen = picture + rng.normal(0, 1.0, scene.shape)
        fit = found(seen, scene, centre + rng.uniform(-1, 1, 2), 8.0)
        outline.append(fit.p[:2] - centre)
        y, x = np.mgrid[0:61, 0:61]
        mass = picture - scene
        brightness.append([(mass * x).sum() / mass.sum() - centre[0], (mass * y).sum() / mass.sum() - centre[1]])
    assert np.hypot(*np.mean(brightness, axis=0)) > 0.7  # what a centroid would be off
    assert np.hypot(*np.mean(outline, axis=0)) < 0.12
    assert np.std(outline, axis=0).max() < 0.03


def test_a_chequered_board_behind_does_no_harm(rng):
    scene = pictures.chequers((61, 61))
    for _ in range(20):
        centre = 30 + rng.uniform(-4, 4, 2)
        seen = pictures.ball(scene, centre, 6.0, level=130) + rng.normal(0, 1.5, scene.shape)
        fit = found(seen, scene, centre + rng.uniform(-1, 1, 2), 6.0, noise=1.5)
        assert np.hypot(*(fit.p[:2] - centre)) < 0.08


@pytest.mark.parametrize("way", [(0.0, 4.0), (9.0, -3.0), (0.0, 14.0)])
def test_a_blurred_ball_is_where_it_was_at_mid_exposure(way, rng):
    scene = np.full((81, 81), 80.0)
    for _ in range(8):
        centre = 40 + rng.uniform(-0.5, 0.5, 2)
        seen = pictures.ball(scene, centre, 6.0, level=200, way=way) + rng.normal(0, 1.0, scene.shape)
        fit = found(seen, scene, centre + rng.uniform(-1, 1, 2), 6.0, way=way)
        assert np.hypot(*(fit.p[:2] - centre)) < 0.1
        assert np.abs(np.abs(fit.p[BLUR]) - np.abs(way)).max() < 0.6


def test_a_cord_at_its_edge_is_left_out(rng):
    scene = np.full((61, 61), 80.0)
    for _ in range(20):
        centre = 30 + rng.uniform(-0.5, 0.5, 2)
        seen = pictures.ball(scene, centre, 6.0, level=200)
        bare = seen.copy()
        seen[int(centre[1]) + 4 :, 29:32] = 200.0  # a cord as bright as the ball hangs from it
        noise = rng.normal(0, 1.0, scene.shape)
        with_cord = found(seen + noise, scene, centre + 0.5, 6.0)
        without = found(bare + noise, scene, centre + 0.5, 6.0)
        assert np.hypot(*(with_cord.p[:2] - centre)) < 0.15
        assert with_cord.edge < without.edge - 0.05  # and it says that less of the edge carried the fit


def test_a_sphere_off_the_axis_is_seen_as_the_ellipse_that_geometry_says():
    """Outline of a sphere through a pinhole: the cone of tangent rays, (d.C)^2 = |d|^2 (|C|^2 - R^2) for rays d."""
    focal, distance, radius_m = 1400.0, 1.5, 0.02
    middle = np.array([359.5, 639.5])
    place = np.array([120.0, 520.0])  # from the optical axis [px]
    centre_m = np.array([*(place / focal * distance), distance])
    y, x = np.mgrid[-40:41, -40:41] + 0.0
    columns, rows = x + place[0], y + place[1]
    ray = np.stack([columns, rows, np.full_like(x, focal)], axis=-1)
    inside = (ray @ centre_m) ** 2 > (ray**2).sum(-1) * (centre_m @ centre_m - radius_m**2)
    radius = focal * radius_m / distance
    shape = roundness(np.zeros(2), np.zeros(2), place, focal)
    offset = place * (radius / focal) ** 2  # the outline's centre lies a little farther out
    u = (np.stack([x, y], axis=-1) - offset) @ shape.T
    drawn = np.hypot(u[..., 0], u[..., 1]) < radius
    assert (inside != drawn).sum() < 0.02 * inside.sum()
    circle = np.hypot(x, y) < radius
    assert (inside != circle).sum() > 0.05 * inside.sum()  # what is lost without it
    assert np.isfinite(middle).all()


def test_a_rolling_shutter_stretches_what_moves_along_it():
    """A point at offset w passes the row that is exposed tau (y - yc) later at w + v tau (y - yc): solved by hand."""
    velocity, slope = np.array([300.0, 4000.0]), np.array([0.0, 5e-6])
    w = np.array([3.0, 7.0])
    seen = w.copy()
    for _ in range(50):
        seen = w + velocity * slope[1] * seen[1]
    np.testing.assert_allclose(roundness(velocity, slope, np.zeros(2), np.inf) @ seen, w, atol=1e-9)


def test_wrong_radius_and_soft_are_told_apart(rng):
    scene = np.full((61, 61), 80.0)
    seen = pictures.ball(scene, (30.2, 29.7), 6.2, level=200, soft=1.1) + rng.normal(0, 1.0, scene.shape)
    fit = found(seen, scene, np.array([30.0, 30.0]), 6.2)
    assert fit.p[RADIUS] == pytest.approx(6.2, abs=0.05)
    assert fit.p[SOFT] == pytest.approx(np.hypot(1.1, PIXEL), abs=0.12)
