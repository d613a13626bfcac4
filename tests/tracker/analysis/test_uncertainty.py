"""Monte Carlo against the worked examples of JCGM 101:2008 (values: computed with 4e6 draws, quoted from memory in part)."""

import numpy as np
import pytest
from scipy import stats

from tracker.analysis.uncertainty import Propagated, arcsine, curved_trapezoid, propagate, tolerance, validate

DRAWS = 400_000  # ends of a 95 % interval then scatter by about 0.4 % of u


def total(**inputs):
    return sum(inputs.values())


def test_sum_of_four_normals_is_validated(rng):
    """9.2.2: interval +-3.92, u 2.0."""
    found = propagate(total, {str(i): rng.normal(size=DRAWS) for i in range(4)})
    assert found.u == pytest.approx(2.0, abs=0.01)
    assert found.symmetric == pytest.approx((-3.92, 3.92), abs=0.03)
    assert validate(0.0, 2.0, (-3.92, 3.92), found).holds


def test_sum_of_four_rectangulars_ends_sooner(rng):
    """9.2.3: 95 % ends at 2 sqrt(3) (2 - 0.6^(1/4)) = 3.879 of sd 1 each, where normal theory says 3.92."""
    half = np.sqrt(3)
    found = propagate(total, {str(i): rng.uniform(-half, half, DRAWS) for i in range(4)})
    exact = 2 * np.sqrt(3) * (2 - 0.6**0.25)
    assert exact == pytest.approx(3.879, abs=5e-4)
    assert found.symmetric == pytest.approx((-exact, exact), abs=0.03)


def test_one_large_rectangular_breaks_the_linear_route(rng):
    """9.2.4: u 10.1; normal theory 19.9, truly 17.0."""
    draws = {str(i): rng.uniform(-np.sqrt(3), np.sqrt(3), DRAWS) for i in range(3)}
    draws["large"] = rng.uniform(-10 * np.sqrt(3), 10 * np.sqrt(3), DRAWS)
    found = propagate(total, draws)
    assert found.u == pytest.approx(10.1, abs=0.1)
    assert found.symmetric[1] == pytest.approx(17.0, abs=0.1)
    told = validate(0.0, 10.15, (-19.9, 19.9), found)
    assert not told.holds
    assert told.high == pytest.approx(2.9, abs=0.1)


def mass(m_rc, d_r, air, rho_w, rho_r):
    """9.3.2.4: mass of a weight by comparison in air of another density than 1.2 kg/m^3, less its nominal 100 g [mg]."""
    return (m_rc + d_r) * (1 + (air - 1.2) * (1 / rho_w - 1 / rho_r)) - 100000.0


def test_mass_calibration_needs_its_higher_orders(rng):
    """9.3: 1.2340 mg, u 0.0755, 95 % 1.084 to 1.384; the first order, 0.0539, leaves out the air altogether."""
    found = propagate(
        mass,
        {
            "m_rc": rng.normal(100000.0, 0.050, DRAWS),
            "d_r": rng.normal(1.234, 0.020, DRAWS),
            "air": rng.uniform(1.10, 1.30, DRAWS),
            "rho_w": rng.uniform(7000, 9000, DRAWS),
            "rho_r": rng.uniform(7950, 8050, DRAWS),
        },
    )
    assert found.value == pytest.approx(1.2340, abs=5e-4)
    assert found.u == pytest.approx(0.0755, abs=3e-4)
    assert found.symmetric == pytest.approx((1.084, 1.384), abs=2e-3)
    first = 1.234 - 1.96 * 0.0539, 1.234 + 1.96 * 0.0539
    assert not validate(1.234, 0.0539, first, found, digits=1).holds
    higher = 1.234 - 1.96 * 0.0750, 1.234 + 1.96 * 0.0750
    assert validate(1.234, 0.0750, higher, found, digits=1).holds


def test_end_gauge(rng):
    """9.5: 838.0 nm, u 35.8, shortest 99 % interval 744.7 to 931.8 nm, where the linear route has u = 32 nm."""

    def length(l_s, d, d1, d2, alpha_s, theta_0, cycle, d_alpha, d_theta):
        return l_s + d + d1 + d2 - l_s * (d_alpha * (theta_0 + cycle) + alpha_s * d_theta) - 50e6

    def t(dof, centre, scale):
        return centre + scale * rng.standard_t(dof, DRAWS)

    found = propagate(
        length,
        {
            "l_s": t(18, 50_000_623, 25), "d": t(24, 215, 6), "d1": t(5, 0, 4), "d2": t(8, 0, 7),
            "alpha_s": rng.uniform(9.5e-6, 13.5e-6, DRAWS), "theta_0": rng.normal(-0.1, 0.2, DRAWS),
            "cycle": arcsine(rng, -0.5, 0.5, DRAWS), "d_alpha": curved_trapezoid(rng, -1e-6, 1e-6, 0.1e-6, DRAWS),
            "d_theta": curved_trapezoid(rng, -0.050, 0.050, 0.025, DRAWS),
        },
        coverage=0.99,
    )  # fmt: skip
    assert found.value == pytest.approx(838.0, abs=0.3)
    assert found.u == pytest.approx(35.8, abs=0.3)
    assert found.shortest == pytest.approx((744.7, 931.8), abs=2.5)
    assert not validate(838.0, 32.0, (838 - 93, 838 + 93), found, digits=2).holds


def test_shortest_interval_of_a_lopsided_value(rng):
    """An exponential's shortest interval starts at 0 and ends at -ln(1 - p); the symmetric one takes a tail off each side."""
    found = propagate(lambda x: x, {"x": rng.exponential(size=DRAWS)})
    assert found.shortest == pytest.approx((0.0, -np.log(0.05)), abs=0.03)
    assert found.symmetric == pytest.approx(stats.expon.ppf([0.025, 0.975]), abs=0.05)


@pytest.mark.parametrize(
    ("u", "digits", "half"), [(0.00035, 2, 5e-6), (32.0, 2, 0.5), (2.0, 1, 0.5), (0.0996, 2, 0.005), (0.097, 1, 0.05)]
)
def test_tolerance_is_half_of_the_last_digit(u, digits, half):
    """7.9.2 with its examples: 0.000 35 g to two digits gives 0.000 005 g; 2 K to one digit 0.5 K."""
    assert tolerance(u, digits) == pytest.approx(half)


def test_nonsense_is_refused(rng):
    with pytest.raises(ValueError, match="100 or more"):
        propagate(total, {"a": np.zeros(10)})
    with pytest.raises(ValueError, match="one length"):
        propagate(total, {"a": np.zeros(200), "b": np.zeros(300)})
    with pytest.raises(ValueError, match="between 0 and 1"):
        propagate(total, {"a": np.zeros(200)}, coverage=95)
    with pytest.raises(ValueError, match="finite"):
        propagate(lambda a: a * np.nan, {"a": np.zeros(200)})
    with pytest.raises(ValueError, match="above 0"):
        tolerance(0.0)
    held = Propagated(0.0, 1.0, 0.95, (-1.96, 1.96), (-1.96, 1.96), 1000)
    with pytest.raises(ValueError, match="does not hold"):
        validate(3.0, 1.0, (-2.0, 2.0), held)
