"""The laws against motion integrated from their equations, and against published values."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.integrate import solve_ivp

from tracker.analysis import edge_slide, free_drop, held_drop, payout, surface_drop
from tracker.analysis.kinematics import constant_acceleration, find_release
from tracker.analysis.tracks import PayoutTrack, Track

LAWS = Path(__file__).parents[2] / "reference" / "laws"
G = 9.80665


def track(t, z, noise=0.0, rng=None):
    """A track of z(t) with white noise."""
    z = np.asarray(z, float) + (rng.normal(0, noise, len(t)) if rng is not None else 0.0)
    return Track(np.asarray(t, float), np.zeros(len(t)), z, np.full(len(t), max(noise, 1e-6)))


def test_held_drop_table():
    table = pd.read_csv(LAWS / "held_drop.csv")
    table = table[table["x_m"] < 0.985]
    for _, row in table.iterrows():
        assert held_drop.speed(row["x_m"], 1.0, row["length_m"], row["g_mps2"]) == pytest.approx(row["v_mps"], rel=1e-7)
        assert held_drop.predict(np.array([row["t_s"]]), 1.0, row["length_m"], row["g_mps2"])[0] == pytest.approx(
            row["x_m"], abs=2e-5
        )


def test_held_drop_family_between_its_limits():
    """k = 0 is free fall; any k against the equation v' = g + k v^2/(2 (L - x))."""
    t = np.linspace(0.01, 0.3, 20)
    np.testing.assert_allclose(held_drop.predict(t, 0.0, 1.0, G), 0.5 * G * t**2, rtol=2e-4)
    run = solve_ivp(
        lambda _, s: [s[1], G + 0.6 * s[1] ** 2 / (2 * (1 - s[0]))], (0, 0.3), [0, 0], rtol=1e-10, atol=1e-12, t_eval=t
    )
    np.testing.assert_allclose(held_drop.predict(t, 0.6, 1.0, G), run.y[0], atol=2e-5)


def test_surface_drop_table():
    table = pd.read_csv(LAWS / "surface_drop.csv")
    moving = table[(table["v0_mps"] > 0) & (table["l_above_m"] > 0.05)]
    assert len(moving) > 5
    for _, row in moving.iterrows():
        arguments = (row["b"], row["v0_mps"], row["length_m"], row["g_mps2"])
        assert surface_drop.speed(row["l_above_m"], *arguments) == pytest.approx(row["v_mps"], rel=1e-7)
        assert surface_drop.predict(np.array([row["t_s"]]), *arguments)[0] == pytest.approx(row["l_above_m"], abs=2e-5)


def test_edge_slide_table():
    table = pd.read_csv(LAWS / "edge_slide.csv")
    for _, row in table.iterrows():
        kappa = np.sqrt(row["g_mps2"] * (1 + row["mu"]) / row["length_m"])
        start = row["g_mps2"] / row["length_m"] * ((1 + row["mu"]) * row["x0_m"] - row["mu"] * row["length_m"])
        fallen = edge_slide.predict(np.array([row["t_s"]]), kappa, start)[0]
        assert fallen == pytest.approx(row["x_m"] - row["x0_m"], abs=2e-7)


def test_edge_slide_lifts_off_where_the_pull_ends():
    """mu 0.3, x0 0.5 L: at 0.744 L (design, section 4; computed)."""
    assert edge_slide.lift_off(1.0, 0.5, 0.3, G) == pytest.approx(0.744, abs=0.002)


@pytest.mark.parametrize(("diameter", "mass", "fallen"), [(0.012, 0.0070, None), (0.040, 0.0027, 1.16523)])
def test_free_drop_with_drag(diameter, mass, fallen):
    """z = (vt^2/g) ln cosh(g t/vt), air 1.2 kg/m^3, cd 0.47, t = 0.5 s (computed); any ball against solve_ivp."""
    setup = free_drop.FreeDropSetup(G, diameter, mass)
    found = free_drop.predict(setup, np.array([0.5]))[0]
    area = np.pi * diameter**2 / 4
    run = solve_ivp(
        lambda _, s: [s[1], G - 0.5 * 1.2 * 0.47 * area * s[1] ** 2 / mass], (0, 0.5), [0, 0], rtol=1e-11, atol=1e-13
    )
    assert found == pytest.approx(run.y[0, -1], rel=1e-8)
    if fallen is not None:
        assert found == pytest.approx(fallen, abs=2e-4)


@pytest.mark.parametrize(
    ("law", "end", "ratio"),  # constant acceleration over g, start place and speed free, on a continuum (computed)
    [("held", 0.5, 1.19287), ("held", 0.9, 1.46019), ("surface 0.05", 0.5, 1.01844), ("surface 0.10", 0.9, 1.09218)],
)
def test_the_best_fitting_constant_acceleration(law, end, ratio):
    if law == "held":
        equation = lambda _, s: [s[1], G + s[1] ** 2 / (2 * (1 - s[0]))]  # noqa: E731
    else:
        b = float(law.split()[1])
        equation = lambda _, s: [s[1], G + b * s[1] ** 2 / (1 - s[0])]  # noqa: E731
    hit = lambda _, s: s[0] - end  # noqa: E731
    hit.terminal = True
    run = solve_ivp(equation, (0, 1), [0, 0], events=hit, rtol=1e-11, atol=1e-13, dense_output=True)
    t = (np.arange(4000) + 0.5) / 4000 * run.t[-1]
    fit = constant_acceleration(track(t, -run.sol(t)[0]), (0, 1), parabola=False)
    assert fit is not None
    assert fit.a / G == pytest.approx(ratio, abs=2e-5)


def test_uncertainty_of_an_acceleration_from_independent_frames():
    """61 frames over 0.5 s: 13.304 s exactly, 13.742 s by s sqrt(720/N)/T^2, which holds for many (computed)."""
    from tracker.analysis.fits import Noise, fit_linear, polynomial_rows

    t = np.linspace(0, 0.5, 61)
    rows, _, half = polynomial_rows(t, 2)
    fit = fit_linear(rows, np.zeros(61), np.arange(61.0), Noise(1.0, 0.0, 58))
    u = 3 / half**2 * np.sqrt(fit.covariance[2, 2])
    assert u == pytest.approx(13.304, abs=1e-3)
    assert np.sqrt(720 / 61) / 0.25 == pytest.approx(13.742, abs=1e-3)


def test_release_is_found_between_frames(rng):
    t = np.arange(80) / 240
    released = 0.1234
    z = -0.5 * G * np.maximum(t - released, 0) ** 2
    found = find_release(track(t, z, 1e-4, rng), G, reach_m=0.3)
    assert found is not None
    assert abs(found.t_s - released) < 4 * found.u_s < 1e-3


def test_no_release_without_rest_or_fall(rng):
    t = np.arange(60) / 240
    assert find_release(track(t, -0.5 * G * t**2 - 0.5 * t, 1e-4, rng), G, reach_m=0.3) is None
    assert find_release(track(t, np.zeros(60), 1e-4, rng), G, reach_m=0.3) is None


def test_free_drop_measures_gravity_freed_of_drag_and_buoyancy(rng):
    """A hollow 40 mm ball of 2.7 g: air carries 1.5 % of it and brakes it by 5 %; motion integrated."""
    t = np.arange(120) / 240
    setup = free_drop.FreeDropSetup(G, 0.040, 0.0027)
    carried, area = 1.2 * np.pi / 6 * 0.04**3 / 0.0027, np.pi * 0.04**2 / 4
    run = solve_ivp(lambda _, s: [s[1], G * (1 - carried) - 0.5 * 1.2 * 0.47 * area * s[1] ** 2 / 0.0027], (0, 0.5), [0, 0],
                    rtol=1e-10, atol=1e-12, dense_output=True)  # fmt: skip
    z = -run.sol(np.maximum(t - 0.1, 0))[0]
    out = free_drop.evaluate(track(t, z, 5e-5, rng), setup)
    g = out.estimates["measured_gravity_mps2"]
    assert abs(g.value - G) < 0.015  # to second order in two corrections of 6 and 1.5 %
    assert out.estimates["effective_acceleration_mps2"].value < 0.98 * G


def test_surface_drop_finds_its_landing_coefficient_and_lead(rng):
    """b = 0.05, released 0.2 m above touch: v0 = 1.98; truth integrated from dv/dt = g + b v^2/l."""
    length, height, b = 1.0, 1.2, 0.05
    t0, touch = 0.08, 0.08 + np.sqrt(2 * 0.2 / G)
    run = solve_ivp(lambda _, s: [-s[1], G + b * s[1] ** 2 / s[0]], (0, 0.4), [length, np.sqrt(2 * G * 0.2)], rtol=1e-10, atol=1e-12,
                    dense_output=True, events=_at_a_tenth)  # fmt: skip
    t = np.arange(0, touch + run.t[-1], 1 / 240)
    z = np.where(t < touch, -0.5 * G * np.maximum(t - t0, 0) ** 2, run.sol(np.maximum(t - touch, 0))[0] - height)
    out = surface_drop.evaluate(track(t, z, 5e-5, rng), surface_drop.SurfaceDropSetup(G, length, height))
    found = out.estimates["landing_coefficient"]
    assert abs(found.value - b) < 4 * found.u_random < 0.02
    lead = out.estimates["lead_over_free_fall_s"]
    end_s = lead.window_s[1]
    v0 = np.sqrt(2 * G * 0.2)
    fall = length - run.sol(end_s - touch)[0]
    true = (-v0 + np.sqrt(v0**2 + 2 * G * fall)) / G - (end_s - touch)
    assert abs(lead.value - true) < 4 * lead.u_random < 1e-3
    assert abs(out.estimates["first_touch_s"].value - touch) < 2e-4


def _at_a_tenth(_, s):
    return s[0] - 0.1


_at_a_tenth.terminal = True


def test_a_fall_without_a_surface_is_a_control(rng):
    t = np.arange(90) / 240
    z = -0.5 * G * np.maximum(t - 0.05, 0) ** 2
    out = surface_drop.evaluate(track(t, z, 5e-5, rng), surface_drop.SurfaceDropSetup(G, 0.6, None))
    assert out.estimates["acceleration_ratio"].value == pytest.approx(1, abs=0.003)
    assert "control run" in out.absent["landing_coefficient"]


@pytest.mark.parametrize(
    ("a", "b", "v", "arc"),  # h1 = 1.8 m, g = 9.80665 (Biggins & Warner, Proc. R. Soc. A 470, 20130689; computed)
    [
        (0.12, 0.05, 4.61166, 0.260241),
        (1 / 6, 0, 4.60243, 0.36),
        (1 / 12, 0, 4.38825, 0.163636),
        (0.12, 0.11, 4.78797, 0.280519),
    ],
)
def test_steady_payout_gives_back_rod_and_bead_coefficients(a, b, v, arc):
    found = payout.coefficients(v, 0.0, arc, 0.0, 0.0, 0.0, 1.8, G)
    assert found == pytest.approx((a, b), abs=2e-5)


def test_an_arc_of_width_needs_its_radius():
    """a = g (h2 + c)/v^2, b = 1 - g (h1 + h2 + c)/v^2 (design, section 4)."""
    a, b = payout.coefficients(4.0, 0.0, 0.2, 0.0, 0.0, 0.05, 1.8, G)
    assert a == pytest.approx(G * 0.25 / 16)
    assert b == pytest.approx(1 - G * 2.05 / 16)


def test_growing_payout_gives_back_its_coefficients():
    """The two legs' equations integrated: h v' = (v-h')^2 - (1-a) v^2 - g h and H w' = g H + b w^2 - (v-h')^2."""
    a, b, height = 0.15, 0.04, 1.8

    def equation(_, s):
        v, h = s[0], s[1]
        w_of = lambda rate: v - 2 * rate  # noqa: E731
        rate = s[2]
        h_now = max(h, 1e-6)
        v_rate = ((v - rate) ** 2 - (1 - a) * v**2 - G * h_now) / h_now
        big = height + h_now
        w_rate = (G * big + b * w_of(rate) ** 2 - (v - rate) ** 2) / big
        return [v_rate, rate, 0.5 * (v_rate - w_rate)]

    run = solve_ivp(equation, (0, 0.15), [3.0, 0.05, 0.25], rtol=1e-9, atol=1e-11, dense_output=True)
    for t in (0.02, 0.08, 0.14):
        v, h, rate = run.sol(t)
        slope = equation(t, [v, h, rate])
        found = payout.coefficients(v, slope[0], h, rate, slope[2], 0.0, height, G)
        assert found == pytest.approx((a, b), abs=1e-6)


def test_payout_window_mean_and_reasons(rng):
    t = np.arange(200) / 240
    h = 0.3 * np.tanh(t / 0.15)
    v = 4.0 * np.tanh(t / 0.12)
    nan = np.full(200, np.nan)
    run = PayoutTrack(t, h + rng.normal(0, 1e-4, 200), np.full(200, 1e-4), np.full(200, 0.1), nan, v + rng.normal(0, 0.02, 200),
                      np.full(200, 0.02), np.cumsum(v) / 240)  # fmt: skip
    out = payout.evaluate(run, payout.PayoutSetup(G, drop_height_m=1.8))
    window = out.estimates["arc_height_m"].window_s
    inside = (t >= window[0]) & (t <= window[1])
    assert out.estimates["arc_height_m"].value == pytest.approx(h[inside].mean(), abs=2e-4)
    assert out.estimates["line_speed_mps"].value == pytest.approx(v[inside].mean(), abs=0.02)
    assert h[inside].min() > 0.95 * 0.3
    assert "pile_depth_m" in out.absent["pickup_coefficient"]
