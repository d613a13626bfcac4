"""Fixtures for all tests."""

import zlib

import numpy as np
import pytest


@pytest.fixture
def rng(request: pytest.FixtureRequest) -> np.random.Generator:
    """Random numbers seeded by the test's own name, so that a failure repeats and tests do not lean on each other."""
    return np.random.default_rng(zlib.crc32(request.node.nodeid.rpartition("::")[2].encode("utf-8")))
