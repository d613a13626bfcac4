"""Payouts and drawn lines: momentum, the published steady state, and a line that neither stretches nor jumps."""

import numpy as np
import pytest

from sample_clips.payout import Drawing, PayoutRig, Ripple, curvature_radius, pay_out

G = 9.80665


@pytest.fixture(scope="module")
def payout():
    rig = PayoutRig(push=1 / 6, pull=0.05, drop_m=1.5, ripples=(Ripple(0.0015, 0.07, 2.0),), gravity_mps2=G)
    return pay_out(rig, 1.0)


# --- dynamics ---------------------------------------------------------------------------------------------------------


def test_a_long_payout_comes_to_the_published_steady_state():
    """J. S. Biggins, M. Warner, Proc. R. Soc. A 470, 20130689 (2014), recalled: v^2 = g h1/(1 - a - b), h2 = a v^2/g, h1 from
    the pile to the floor, for an arc without width. Here the bend is made as sharp as it can be, and the pile is level."""
    a, b = 0.12, 0.05
    rig = PayoutRig(
        push=a, pull=b, drop_m=0.30, pile_m=(0.02, 0.02), length_m=100, lip_m=0.002, lip_width_m=1e-5, arc_width_m=1e-5,
        gravity_mps2=G,
    )  # fmt: skip
    z, rise, v, _ = pay_out(rig, 3.5).record.state[-1]
    assert abs(rise) < 1e-3
    assert v == pytest.approx(np.sqrt(G * 0.28 / (1 - a - b)), rel=0.001)
    assert z + 0.02 == pytest.approx(a * v * v / G, rel=0.002)


def test_the_whole_line_obeys_its_momentum(payout):
    """Momentum of all that moves, upwards, summed over the legs: its rate is push and pull, gravity, and what is lost at the
    floor. An outside check of the two legs' equations, in which the tension at the apex must cancel."""
    rig, t = payout.rig, np.linspace(0.45, 0.99, 40)

    def momentum(when):
        z, rise, v, gone = np.moveaxis(payout.record.at(when), -1, 0)
        depth = rig.pile_m[0] + (rig.pile_m[1] - rig.pile_m[0]) / rig.length_m * gone
        return (z + depth) * v - (rig.drop_m + z) * (v - 2 * rise), z, rise, v, depth

    h = 1e-4
    rate = (momentum(t + h)[0] - momentum(t - h)[0]) / (2 * h)
    _, z, rise, v, depth = momentum(t)
    width = np.array([rig.width(q) for q in z])
    radius = np.array([curvature_radius(w, q) for w, q in zip(width, z, strict=True)])
    w = v - 2 * rise
    tension = (v - rise) ** 2 - G * radius
    outer = rig.push * v**2 - rig.pull * w**2 + 2 * tension - G * (z + depth + rig.drop_m + z)
    carried_off = -(v - rise) * v - (v - rise) * w + w * w  # up over the apex, down from it, and out at the floor
    np.testing.assert_allclose(rate, outer + carried_off, atol=0.01 * np.abs(outer).max())


def test_the_line_waits_on_the_lip_until_it_can_fly(payout):
    z, rise, v, gone = payout.record.state.T
    resting = z == payout.rig.lip_m
    assert 0.1 < payout.record.t_s[resting][-1] < 0.4
    assert (np.diff(z) >= 0).all() and (np.diff(v) > -1e-9).all() and (np.diff(gone) > 0).sum() == gone.size - 1
    assert v[0] == 0 and gone[0] == 0 and rise[resting].max() == 0


def test_a_line_too_short_to_start_or_to_last_is_refused():
    with pytest.raises(ValueError, match="lengthen the drop"):
        pay_out(PayoutRig(drop_m=0.02, pile_m=(0.05, 0.05)), 0.1)
    with pytest.raises(ValueError, match="tail"):
        pay_out(PayoutRig(length_m=0.5), 0.8)


# --- shape ------------------------------------------------------------------------------------------------------------


def test_the_line_does_not_stretch(payout):
    """A metre of material is a metre of line, at any moment, ripples and all."""
    for t in (-0.01, 0.0, 0.3, 0.71, 0.95):
        strand = payout.strand(t)
        way = np.linalg.norm(np.diff(strand.points_m, axis=0), axis=1)
        np.testing.assert_allclose(way, -np.diff(strand.s_m), rtol=1e-9)
        assert way.max() < 0.0015


def test_what_crosses_the_rim_is_what_is_paid_out(payout):
    for t in (0.2, 0.8):
        strand = payout.strand(t)
        up = int(np.flatnonzero(strand.points_m[:, 2] >= 0)[0])
        s = np.interp(0.0, strand.points_m[up - 1 : up + 1, 2], strand.s_m[up - 1 : up + 1])
        assert s == pytest.approx(payout.paid_out(t), abs=1e-9)
        h = 1e-5
        assert (payout.paid_out(t + h) - payout.paid_out(t - h)) / (2 * h) == pytest.approx(payout.speed(t), rel=1e-6)


def test_line_passes_apex_and_floor_as_much_slower_as_the_arc_grows(payout):
    """Design of any growing arc: v - h' past the apex, v - 2 h' on the falling leg (geometry alone); ripples left out."""
    smooth = pay_out(PayoutRig(push=1 / 6, pull=0.05, drop_m=1.5, wander_m=0.0, depth_m=0.0, gravity_mps2=G), 0.9)
    t, h = 0.8, 1e-3

    def way_to(height, past_apex):
        def sigma(when):
            strand = smooth.strand(when)
            z, s = strand.points_m[:, 2], smooth.paid_out(when) - strand.s_m
            top = int(z.argmax())
            return s[top] if past_apex is None else np.interp(-height, -z[top:], s[top:])

        return (sigma(t + h) - sigma(t - h)) / (2 * h)

    rise = float(smooth.record.at(t)[1])
    assert rise > 0.1
    assert way_to(0, None) == pytest.approx(rise, rel=0.35)  # a bend that widens takes up some line of its own
    assert way_to(-1.0, True) == pytest.approx(2 * rise, rel=0.35)


def test_apex_and_width_are_those_of_the_curve(payout):
    for t in (0.5, 0.93):
        points = payout.strand(t).points_m
        x, y, z = payout.apex(t)
        assert points[:, 2].max() <= z <= points[:, 2].max() + 2e-5
        assert abs(y) < 0.0011
        half = points[np.abs(points[:, 2] - z / 2) < 0.0006]
        left, right = half[half[:, 0] < x, 0], half[half[:, 0] > x, 0]
        assert payout.width(t) == pytest.approx(right.mean() - left.mean(), abs=5e-4)


def test_the_apex_moves_smoothly(payout):
    z = np.array([payout.apex(q)[2] for q in 0.8 + 5e-5 * np.arange(300)])
    assert np.abs(np.diff(z, 3)).max() < 2e-7  # the highest of the curve's points alone would jump by some 5e-6


def test_a_catenary_has_its_width():
    for width, height in ((0.02, 0.1), (0.2, 0.1)):
        r = curvature_radius(width, height)
        assert r * (np.cosh(width / 2 / r) - 1) == pytest.approx(height, rel=1e-9)


def test_a_ripple_runs_at_its_own_speed():
    ripple, s = Ripple(0.001, 0.08, 1.7, 0.3), np.linspace(0, 0.5, 200)
    np.testing.assert_allclose(ripple.across(s + 1.7 * 0.013, 0.013), ripple.across(s, 0.0), atol=1e-12)


# --- drawn ------------------------------------------------------------------------------------------------------------


def test_a_drawn_line_adds_up():
    drawing = Drawing()
    t = np.linspace(0, 1.2, 240001)
    assert drawing.paid_out(1.2) == pytest.approx(np.trapezoid(drawing.speed(t), t), rel=1e-8)
    assert drawing.paid_out(-0.1) == 0 and drawing.speed(0.0) == 0


def test_a_drawn_line_snags_once():
    drawing = Drawing(ripple=0.0, snag_s=0.5, snag_length_s=0.02, snag_depth=0.6)
    t = np.linspace(0.25, 1.2, 2000)
    v = drawing.speed(t)
    assert v.min() == pytest.approx(0.4 * 1.2, rel=1e-3) and t[v.argmin()] == pytest.approx(0.5, abs=1e-3)
    assert v.max() == pytest.approx(1.2, rel=1e-6)


def test_a_drawn_line_does_not_stretch():
    drawing = Drawing(ripples=(Ripple(0.001, 0.15, 2.0),))
    for t in (-0.1, 0.4):
        strand = drawing.strand(t)
        way = np.linalg.norm(np.diff(strand.points_m, axis=0), axis=1)
        np.testing.assert_allclose(way, -np.diff(strand.s_m), rtol=1e-9)
        up = int(np.flatnonzero(strand.points_m[:, 2] >= 0)[0]) + 1
        s = np.interp(0.0, strand.points_m[:up, 2], strand.s_m[:up])
        assert s == pytest.approx(drawing.paid_out(t), abs=1e-5)
