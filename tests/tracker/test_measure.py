"""Whole runs through pixels against known truth: the sample clips, and clips made elsewhere (skipped where absent)."""

import functools
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from tests.accuracy import Row, compare
from tests.footage import SHARED

ROOT = Path(__file__).parents[2]
SAMPLES = sorted(p.parent for p in (ROOT / "sample_clips").glob("*/run.toml"))
GOOD = [p for p in SAMPLES if not p.name.startswith("bad") and p.name != "board-hidden"]
BAD = [p for p in SAMPLES if p not in GOOD]
OTHERS = ("cable", "control", "drop", "fountain", "held", "surface")


@functools.cache
def measured(folder: Path) -> Row:
    """Each clip is measured once for all tests of this file."""
    return compare(folder)


def other(name: str) -> Path:
    """A clip of the shared folder, or skip."""
    folder = SHARED / "clips" / name
    if not folder.is_dir():
        pytest.skip(f"shared clips are not here: {folder}")
    return folder


@pytest.mark.parametrize("folder", GOOD, ids=lambda p: p.name)
def test_sample_clip_is_followed(folder):
    row = measured(folder)
    assert not row.refusal
    assert row.invented == 0
    if row.point:
        assert row.rms_px <= 1.0
        assert row.measured_pct >= 95
    if row.point != "end" and not np.isnan(row.speed_rms_pct):
        # through the snag of the drawn line, 60 % of the speed lost and back within 25 frames, 3.8 % were measured
        assert row.speed_rms_pct <= (4.5 if folder.name == "drawn" else 3.0)


@pytest.mark.parametrize("folder", BAD, ids=lambda p: p.name)
def test_the_bad_clip_is_refused_with_the_remedy(folder):
    row = measured(folder)
    assert "board" in row.refusal
    assert row.refusal.count(".") >= 2  # what is missing, and how to shoot it again


@pytest.mark.parametrize("name", OTHERS)
def test_clip_made_elsewhere_is_followed(name):
    row = measured(other(name))
    assert not row.refusal
    assert row.invented == 0
    assert row.rms_px <= 1.5
    assert row.measured_pct >= 95
    if row.point == "apex":
        assert row.speed_rms_pct <= 1.5


@pytest.mark.parametrize("which", ["samples", "others"])
def test_headline_intervals_hold_their_truth(which):
    """No more of them miss than the 1 % binomial bound of 95 % allows, and none by more than 1.6 U."""
    folders = GOOD if which == "samples" else [other(name) for name in OTHERS]
    ratios = np.array([(v - goal) / big_u for f in folders for v, goal, big_u in measured(f).errors.values()])
    assert ratios.size >= 10
    assert (np.abs(ratios) > 1).sum() <= stats.binom.ppf(0.99, ratios.size, 0.05)
    assert np.abs(ratios).max() <= 1.6
