"""Local polynomials against SciPy's Savitzky-Golay filter."""

import numpy as np
import pytest
from scipy.signal import savgol_filter

from tracker.follow.smooth import local_polynomial


@pytest.mark.parametrize(("n", "half", "degree"), [(200, 9, 3), (60, 25, 1), (19, 9, 3), (500, 3, 2)])
def test_same_as_scipy(rng, n, half, degree):
    values = np.cumsum(rng.normal(0, 1, (n, 2)), axis=0)
    expected = savgol_filter(values, 2 * half + 1, degree, axis=0, mode="interp")
    np.testing.assert_allclose(local_polynomial(values, half, degree), expected, atol=1e-10)
    np.testing.assert_allclose(local_polynomial(values[:, 0], half, degree), expected[:, 0], atol=1e-10)


def test_polynomial_stays_and_short_arrays_are_left():
    s = np.linspace(-1, 1, 41)
    cubic = 1 - 2 * s + 3 * s**2 - s**3
    np.testing.assert_allclose(local_polynomial(cubic, 8, 3), cubic, atol=1e-12)
    assert local_polynomial(np.array([1.0, 5.0, 2.0]), 9, 3).tolist() == [1.0, 5.0, 2.0]
