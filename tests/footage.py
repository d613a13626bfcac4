"""Where the shared test footage lies: beside the checkout. Tests that need it skip with the reason where it is absent."""

from pathlib import Path

import pytest

__all__ = ["SHARED", "clips", "footage"]

SHARED = Path(__file__).resolve().parents[2] / "shared"


def footage(name: str) -> Path:
    """A file under shared/footage, or skip the test."""
    return _found(SHARED / "footage" / name)


def clips(name: str) -> Path:
    """A file under shared/clips, or skip the test."""
    return _found(SHARED / "clips" / name)


def _found(path: Path) -> Path:
    if not path.exists():
        pytest.skip(f"shared test data not here: {path}")
    return path
