"""Stated 95 % intervals hold the truth: 50 runs a kind. The full table is `python -m tests.studies.coverage`, docs/coverage.md."""

import numpy as np
import pytest
from scipy import stats

from tests.studies.coverage import KINDS, study

RUNS = 50


@pytest.mark.parametrize("kind", KINDS)
def test_intervals_hold_the_truth(kind):
    for name, rows in study(kind, RUNS, seed=3).items():
        error, big_u, u = rows.T
        held = int((np.abs(error) <= big_u).sum())
        assert held >= stats.binom.ppf(0.001, len(error), 0.95), name
        assert abs(np.mean(error / u)) < 4 / np.sqrt(len(error)), name
        assert 0.6 < np.std(error / u) < 1.45, name  # wide intervals are no merit
