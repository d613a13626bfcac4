"""Mean speed, ripple and snags of a drawn line."""

import numpy as np
import pytest

from tracker.analysis.drawn import DrawnSetup, evaluate, find_snags
from tracker.analysis.tracks import PayoutTrack


def drawn(rng, snags=(), ripple=0.02, start=False):
    t = np.arange(360) / 240
    v = 1.2 * (1 + ripple * np.sqrt(2) * np.sin(2 * np.pi * 9 * t))
    for at in snags:
        v *= 1 - 0.6 * np.exp(-(((t - at) / 0.02) ** 2))
    if start:
        v *= np.clip(t / 0.1, 0, 1)
    nan = np.full(t.size, np.nan)
    seen = v + rng.normal(0, 0.004, t.size)
    return PayoutTrack(t, nan, nan, nan, nan, seen, np.full(t.size, 0.004), np.cumsum(v) / 240), v


def test_mean_ripple_and_length(rng):
    track, v = drawn(rng)
    out = evaluate(track, DrawnSetup()).estimates
    assert abs(out["line_speed_mps"].value - v.mean()) < 4 * out["line_speed_mps"].u_random
    assert out["speed_ripple"].value == pytest.approx(0.02, rel=0.2)
    assert out["snag_count"].value == 0
    assert out["length_paid_out_m"].value == pytest.approx(v[1:].sum() / 240, abs=1e-9)


def test_snags_are_found_with_time_and_size(rng):
    track, _ = drawn(rng, snags=(0.5, 1.1))
    out = evaluate(track, DrawnSetup())
    snags = out.estimates["snag_count"].extra["snags"]
    assert [round(0.5 * (s["from_s"] + s["to_s"]), 1) for s in snags] == [0.5, 1.1]
    assert all(s["lost_m"] == pytest.approx(1.2 * 0.6 * 0.02 * np.sqrt(np.pi), rel=0.15) for s in snags)
    assert len(out.findings) == 2


def test_starting_up_is_no_snag(rng):
    track, _ = drawn(rng, snags=(0.7,), start=True)
    assert len(find_snags(track.t_s, track.speed_mps, track.u_speed_mps)) == 1
