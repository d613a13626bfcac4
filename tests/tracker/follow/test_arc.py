"""The arc's top, width and curvature, and the coordinate along the line."""

import numpy as np
import pytest

from tests.tracker.follow.line_pictures import Hoop
from tracker.follow.along import along_line, carried_jump, jitter
from tracker.follow.arc import arc_length, measure_arc

SCALE = 1e-3  # metres per pixel


def arc_of(points_px, u=1e-5):
    metres = np.column_stack([points_px[:, 0], 240.0 - points_px[:, 1]]) * SCALE
    return measure_arc(points_px, metres, np.ones(len(metres), bool), np.full(len(metres), u))


@pytest.mark.parametrize(("radius", "height"), [(24.0, 70.0), (60.0, 200.0), (9.0, 14.0)])
def test_top_of_a_hoop(radius, height):
    hoop = Hoop(rim=(80.3, 240.0), radius=radius, height=height)
    points = hoop.point(np.arange(0.0, hoop.length, 1.0))
    arc = arc_of(points)
    assert arc.apex_m[1] == pytest.approx(height * SCALE, abs=0.003 * radius * SCALE)
    assert arc.apex_px == pytest.approx(hoop.apex, abs=0.05)
    assert arc.radius_m == pytest.approx(radius * SCALE, rel=0.05)
    if height / 2 < height - radius:
        assert arc.width_m == pytest.approx(2 * radius * SCALE, abs=1e-5)


def test_inverted_catenary_width_at_half_height():
    """arc_width = 2 c acosh(1 + h2 / (2 c)) for an inverted catenary of radius c at its top (Biggins, EPL 106, 44001
    (2014), as given in the project's laws), z = h2 - c (cosh(x / c) - 1)."""
    c, h = 0.030, 0.200
    x = np.linspace(-1.3 * c * np.arccosh(1 + h / c), 1.3 * c * np.arccosh(1 + h / c), 20001)
    z = h - c * (np.cosh(x / c) - 1)
    s = arc_length(np.column_stack([x, z]))
    even = np.linspace(0, s[-1], int(s[-1] / SCALE))
    metres = np.column_stack([np.interp(even, s, x), np.interp(even, s, z)])
    metres = metres[np.argmax(metres[:, 1] > 0) :]
    arc = measure_arc(metres / SCALE * [1, -1], metres, np.ones(len(metres), bool), np.full(len(metres), 1e-5))
    assert arc.width_m == pytest.approx(2 * c * np.arccosh(1 + h / (2 * c)), rel=1e-3)
    assert arc.radius_m == pytest.approx(c, rel=0.05)
    assert arc.apex_m[1] == pytest.approx(h, abs=2e-5)


def test_noise_of_the_points_comes_out_in_u(rng):
    """Independent noise smoothed over nine points, as the follower leaves it: errors of the top are as large as u says."""
    hoop = Hoop(radius=40.0, height=120.0)
    clean = hoop.point(np.arange(0.0, hoop.length, 1.0))
    errors, us = [], []
    for _ in range(300):
        noise = np.array([np.convolve(rng.normal(0, 0.3, len(clean) + 8), np.ones(9) / 9, "valid") for _ in range(2)]).T
        arc = arc_of(clean + noise, u=0.1 * SCALE)
        errors.append(arc.apex_m[1] - 120.0 * SCALE)
        us.append(arc.u_apex_m)
    assert 0.5 < np.std(errors) / np.mean(us) < 1.2
    assert abs(np.mean(errors)) < 0.1 * SCALE


def test_shifted_line_shifts_the_arc(rng):
    hoop = Hoop()
    points = hoop.point(np.arange(0.0, hoop.length, 1.0)) + rng.normal(0, 0.02, (int(np.ceil(hoop.length)), 2))
    one, two = arc_of(points), arc_of(points + np.array([7.25, -3.5]))
    assert two.apex_px - one.apex_px == pytest.approx([7.25, -3.5], abs=1e-6)
    mirrored = arc_of(points * [-1, 1])
    assert mirrored.apex_m[1] == pytest.approx(one.apex_m[1], abs=1e-9)


def test_no_top_no_arc():
    line = np.column_stack([np.full(200, 50.0), np.arange(200.0)])
    assert arc_of(line) is None
    assert arc_of(line[::-1]) is None
    assert arc_of(line[:8]) is None


def test_leg_that_is_not_seen_gives_no_width():
    hoop = Hoop()
    points = hoop.point(np.arange(45.0, hoop.length, 1.0))  # the rising leg begins above half height
    arc = arc_of(points)
    assert np.isnan(arc.width_m)
    assert np.isfinite(arc.apex_m).all()


# along the line -----------------------------------------------------------------------------------------------------


def rolling(t0, readout, growth, rows=480):
    """A growing hoop as a rolling shutter sees it: each point at its own row's time."""
    s = np.arange(0.0, 600.0, 1.0)
    t = np.full(s.size, t0)
    for _ in range(30):
        height = 70.0 + growth * t
        points = np.array([Hoop(height=h).point(np.array([a]))[0] for h, a in zip(height, s, strict=True)])
        t = t0 + readout * points[:, 1] / (rows - 1)
    inside = points[:, 1] < rows
    return points[inside], t[inside], s[inside]


def test_length_along_the_line_is_that_of_the_moment_each_place_was_seen():
    """Rim at speed v, arc growing at h': a bit of line at length S(t) from the rim is seen there at its own time; the length
    measured along the distorted picture is off by up to 2 h' times the readout, the corrected one is not."""
    period, readout, growth = 1 / 240, 0.008, 900.0  # px/s
    points, t, s = rolling(0.1, readout, growth)
    metres = np.column_stack([points[:, 0], 240.0 - points[:, 1]]) * SCALE
    tangent = np.gradient(metres, axis=0)
    normal = np.column_stack([-tangent[:, 1], tangent[:, 0]]) / np.hypot(*tangent.T)[:, None]
    rise = growth * period * SCALE * np.array([0.0, 1.0])
    bend = np.where((s > 46 + growth * 0.1) & (s < 46 + growth * 0.1 + np.pi * 24), 1.0, 0.0)
    move = (normal @ rise) * bend  # legs move along themselves only
    along = along_line(metres, move, normal, t, period)
    plain = arc_length(metres) - arc_length(metres)[0]
    low = points[:, 1] > 400
    falling = s > 200
    error = along.sigma_m - s * SCALE
    error_plain = plain - s * SCALE
    assert np.abs(error_plain[low & falling]).min() > 2.0 * SCALE
    assert np.abs(error[low & falling]).max() < 0.35 * np.abs(error_plain[low & falling]).max()


def test_carried_coordinate_sees_a_jump_of_the_rim():
    hoop = Hoop()
    points = hoop.point(np.arange(0.0, hoop.length, 1.0))
    metres = np.column_stack([points[:, 0], 240.0 - points[:, 1]]) * SCALE
    tangent = np.gradient(metres, axis=0)
    normal = np.column_stack([-tangent[:, 1], tangent[:, 0]]) / np.hypot(*tangent.T)[:, None]
    still = np.zeros(len(metres))
    one = along_line(metres, still, normal, np.zeros(len(metres)), 1 / 240)
    two = along_line(metres + np.array([0, 1.5 * SCALE]), still, normal, np.full(len(metres), 1 / 240), 1 / 240)
    # the picture stayed, the rim's level is taken 1.5 px lower
    back = carried_jump(one, type(two)(metres, two.sigma_m, two.t_s, two.stretch, two.doubt_m), still, normal)
    assert back == pytest.approx(1.5 * SCALE, abs=0.05 * SCALE)


def test_jitter_is_told_from_motion(rng):
    """The rim's crossing scatters by 0.8 mm; jumps of the carried coordinate show it while the shape rests."""
    n = 120
    wrong = rng.normal(0, 0.8e-3, n)
    jumps = np.concatenate([[np.nan], np.diff(wrong) + rng.normal(0, 0.05e-3, n - 1)])
    found = jitter(jumps, np.full(n, 0.05e-3), 0.8e-3)
    assert np.std(wrong - found) < 0.2 * np.std(wrong)
    drifting = jumps + 0.4e-3  # an error of what is carried, the same in every frame of a fast moving shape
    moved = jitter(drifting, np.full(n, 0.8e-3), 0.8e-3)
    assert np.abs(moved.mean()) < 0.1e-3
    assert np.std(wrong - moved) < 0.9 * np.std(wrong)
