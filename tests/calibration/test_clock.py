"""The clock against stamps with known truth: made here, in shared/footage, and drawn by hypothesis."""

import json
import warnings
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from typing import Any

import av
import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from calibration.clock import Clock, hidden_steps, make_clock, scan_direction
from calibration.notice import BadInput, CannotMeasure
from tests.footage import footage

N90K = Fraction(1, 90000)
SIZE = (1280, 720)


def clock_of(seconds: Any, base: Fraction = N90K, **given: Any) -> Clock:
    ticks = np.rint(np.asarray(seconds, dtype=float) / float(base)).astype(np.int64)
    return make_clock(ticks, base, **({"stored_size": SIZE} | given))


def codes(clock: Clock) -> list[str]:
    return [n.code for n in clock.notices]


def stamps_of(name: str) -> tuple[np.ndarray, Fraction]:
    """Stamps by PyAV alone, so that this room needs no other."""
    with av.open(str(footage(name))) as container:
        packets = [p.pts for p in container.demux(video=0) if p.pts is not None and not p.is_discard]
        return np.unique(packets), container.streams.video[0].time_base


# --- three ways of slow motion -------------------------------------------------------------------------------------


def test_true_rate_stamps_are_time() -> None:
    clock = clock_of(np.arange(100) / 240)
    np.testing.assert_allclose(clock.frame_s, np.arange(100) / 240, atol=1e-9)
    assert clock.capture_fps == pytest.approx(240) and codes(clock) == []
    assert "240 per second" in clock.provenance and clock.u_rate == pytest.approx(1e-4, rel=0.02)
    confirmed = clock_of(np.arange(100) / 240, capture_fps=240.0)
    np.testing.assert_array_equal(confirmed.frame_s, clock.frame_s)
    assert "confirms" in confirmed.provenance


@pytest.mark.parametrize("stored", [30, 25, 24, 60])
@pytest.mark.parametrize("source", ["sheet", "tag"])
def test_stretched_stamps_shrink_to_the_capture_rate(stored: int, source: str) -> None:
    given = {"capture_fps": 240.0} if source == "sheet" else {"tag_fps": 240.0}
    clock = clock_of(np.arange(50) / stored, **given)
    np.testing.assert_allclose(clock.frame_s, np.arange(50) / 240, atol=1e-9)
    assert f"stretched {240 / stored:.4g} times" in clock.provenance
    assert ("capture_fps = 240" in clock.provenance) == (source == "sheet")
    assert clock.u_rate == pytest.approx(1e-4 if source == "sheet" else 5e-4)  # a tag is a nominal figure
    assert codes(clock) == []


def test_a_stated_u_of_the_capture_rate_is_used_when_it_makes_time() -> None:
    assert clock_of(np.arange(50) / 30, capture_fps=240.0, u_capture_fps=0.24).u_rate == pytest.approx(1e-3)
    stamped = clock_of(np.arange(50) / 240, capture_fps=240.0, u_capture_fps=0.24)
    assert stamped.u_rate == pytest.approx(1e-4, rel=0.06)  # the stamps make time, to their rounding


def test_the_ramp_of_the_footage_is_found_and_every_frame_is_one_capture_step() -> None:
    """truth.json: stamps 1/30 s apart, 8/30 s between frames 15 and 45, then 1/30 s again."""
    ticks, base = stamps_of("made-here/walkers_ramp_8x.mp4")
    clock = make_clock(ticks, base, capture_fps=240.0, stored_size=(768, 576), name="walkers")
    np.testing.assert_allclose(clock.frame_s, np.arange(60) / 240, atol=1e-12)
    assert clock.u_stamp_s == pytest.approx(1 / (3000 * 240) / np.sqrt(12))  # rounding of the shortest step, 3000 ticks
    assert codes(clock) == ["ramped"]
    assert "between 3.75 and 30 a second" in clock.notices[0].says and clock.notices[0].says.startswith("walkers: ")
    with pytest.raises(CannotMeasure, match=r"walkers: .*ramp.*no capture rate") as caught:
        make_clock(ticks, base, stored_size=(768, 576), name="walkers")
    assert caught.value.code == "capture-rate-unknown"
    with pytest.raises(BadInput, match=r"clock\.capture_fps = 20, but part of the file's stamps are 30 per second"):
        make_clock(ticks, base, capture_fps=20.0, stored_size=(768, 576))


@settings(max_examples=60, deadline=None)
@given(
    lengths=st.lists(st.integers(8, 40), min_size=2, max_size=5),
    ratio=st.sampled_from([2.0, 4.0, 8.0, 10.0]),
    first_slow=st.booleans(),
    data=st.data(),
)
def test_ramps_of_any_make_with_dropped_frames_keep_count(lengths: list[int], ratio: float, first_slow: bool, data: st.DataObject) -> None:
    """Runs of slow and fast parts; frames dropped inside a run (not at its ends) cost their capture steps."""
    periods, usual = [], []
    for k, n in enumerate(lengths):
        run = [1] * n
        if n >= 20 and data.draw(st.booleans()):
            run[n // 2] = data.draw(st.integers(2, 5))
        periods += run
        usual += [1 / 30 * (ratio if (k % 2 == 0) == first_slow else 1.0)] * n
    stamps = np.concatenate([[0], np.cumsum(np.multiply(periods, usual))])
    clock = clock_of(stamps, capture_fps=240.0)
    np.testing.assert_allclose(clock.frame_s, np.concatenate([[0], np.cumsum(periods)]) / 240, atol=1e-9)
    assert "ramped" in codes(clock) and ("dropped-frames" in codes(clock)) == (max(periods) > 1)


def test_a_gliding_ramp_is_a_ramp() -> None:
    steps = np.geomspace(1 / 30, 8 / 30, 60)
    clock = clock_of(np.concatenate([[0], np.cumsum(steps)]), capture_fps=240.0)
    np.testing.assert_allclose(clock.frame_s[-1], 60 / 240, rtol=0.01)
    assert codes(clock) == ["ramped"]


def test_a_low_light_halving_is_a_ramp_that_names_the_other_reading() -> None:
    steps = np.r_[[1 / 60] * 40, [1 / 30] * 40]
    clock = clock_of(np.concatenate([[0], np.cumsum(steps)]), capture_fps=60.0)
    assert "low light" in clock.notices[0].damage


# --- where the rate comes from --------------------------------------------------------------------------------------


@pytest.mark.parametrize("rate", [24, 30, 60, 60.9])
def test_an_unknown_capture_rate_is_asked_for_never_guessed(rate: float) -> None:
    with pytest.raises(CannotMeasure, match="run-07: capture rate unknown") as caught:
        clock_of(np.arange(40) / rate, name="run-07")
    assert "clock.capture_fps" in caught.value.remedy and caught.value.code == "capture-rate-unknown"


def test_the_makers_untagged_super_slow_motion_is_asked_for() -> None:
    """MANIFEST.md: super slow motion, no capture-rate tag."""
    ticks, base = stamps_of("container/sample_sef_super_slow_motion.mp4")
    with pytest.raises(CannotMeasure, match="capture rate unknown"):
        make_clock(ticks, base, stored_size=(160, 120))


def test_real_time_is_believed_once_the_sheet_says_so() -> None:
    clock = clock_of(np.arange(40) / 30, capture_fps=30.0)
    np.testing.assert_allclose(clock.frame_s, np.arange(40) / 30, atol=1e-9)


def test_a_tag_equal_to_the_stored_rate_is_no_slow_motion() -> None:
    ticks, base = stamps_of("container/h265_with_metadata_track.mp4")
    clock = make_clock(ticks, base, tag_fps=30.0, stored_size=(1920, 1080))
    np.testing.assert_allclose(clock.frame_s, (ticks - ticks[0]) * float(base), atol=1e-5)
    assert "confirms" in clock.provenance and codes(clock) == []


def test_a_sheet_slower_than_the_stamps_is_refused_in_the_words_of_the_house() -> None:
    """style.md, Screens and plots, 9."""
    with pytest.raises(BadInput) as caught:
        clock_of(np.arange(40) / 240, capture_fps=24.0)
    assert str(caught.value) == (
        "clock.capture_fps is 24, but the file's stamps are 240 per second. Set 240, or delete the key to use the file's."
    )


def test_a_slip_that_no_slow_motion_explains_is_refused() -> None:
    with pytest.raises(BadInput, match=r"clock\.capture_fps is 250, but the file's stamps are 240 per second"):
        clock_of(np.arange(40) / 240, capture_fps=250.0)


@pytest.mark.parametrize("stamps, sheet, tag", [(30, 30.0, 240.0), (30, 240.0, 120.0), (30, 240.0, 30.0), (240, 120.0, 240.0)])
def test_a_contradiction_without_a_witness_is_refused_with_its_size(stamps: int, sheet: float, tag: float) -> None:
    """30 stored, tag 240: the stamps fit a sheet of 30 and a tag of 240 alike, and speeds are 8 times wrong with one of them."""
    wrong = max(sheet / tag, tag / sheet)
    with pytest.raises(BadInput, match=rf"capture_fps is {sheet:g}, but the file's own tag says {tag:g} .*{wrong:.3g} times wrong"):
        clock_of(np.arange(40) / stamps, capture_fps=sheet, tag_fps=tag)


def test_stamps_faster_than_the_tag_bear_the_sheet_out() -> None:
    clock = clock_of(np.arange(40) / 240, capture_fps=240.0, tag_fps=30.0)
    assert codes(clock) == ["capture-rate-disagrees"] and "8 times wrong" in clock.notices[0].damage
    np.testing.assert_allclose(clock.frame_s[-1], 39 / 240, atol=1e-9)


def test_a_time_lapse_tag_is_refused() -> None:
    with pytest.raises(CannotMeasure, match="time lapse"):
        clock_of(np.arange(40) / 30, tag_fps=2.0)


@pytest.mark.parametrize("value", [0.0, -240.0, float("nan")])
def test_no_rate_is_no_rate(value: float) -> None:
    with pytest.raises(BadInput, match="which is no rate"):
        clock_of(np.arange(40) / 240, capture_fps=value)


def test_240_against_239_76_is_said_and_enters_u() -> None:
    """facts.md, section 8.13: 0.1 %, which is 2 mm in 1 m of fall."""
    off = 240 / 239.76 - 1
    true = clock_of(np.arange(400) * (1001 / 240000), Fraction(1, 240000), capture_fps=240.0)
    assert codes(true) == ["capture-rate-differs"] and true.u_rate == pytest.approx(np.hypot(1e-4, off), rel=0.01)
    np.testing.assert_allclose(true.frame_s[-1], 399 * 1001 / 240000, rtol=1e-9)  # the stamps are used
    stretched = clock_of(np.arange(400) * (1001 / 30000), Fraction(1, 30000), capture_fps=240.0)
    assert codes(stretched) == ["nominal-rate"] and stretched.u_rate == pytest.approx(np.hypot(1e-4, off), rel=0.01)
    np.testing.assert_allclose(stretched.frame_s[-1], 399 / 240, rtol=1e-9)
    sure = clock_of(np.arange(400) * (1001 / 30000), Fraction(1, 30000), capture_fps=239.76, u_capture_fps=0.01)
    assert codes(sure) == [] and sure.u_rate == pytest.approx(0.01 / 239.76)


# --- rounding, varying rates, gaps -----------------------------------------------------------------------------------


@pytest.mark.parametrize("name, fps", [("container/roadtrip-vp92-10bit.webm", 24000 / 1001), ("container/bear-vp9.webm", 30000 / 1001)])
def test_millisecond_stamps_are_rounding_not_vfr(name: str, fps: float) -> None:
    """MANIFEST.md: 41/42 ms and 33/34 ms steps of 23.976 and 29.97 fps. Doubled stamps are invisible frames."""
    ticks, base = stamps_of(name)
    ticks = ticks[np.append(np.diff(ticks) > 5, True)]  # a hidden frame is stamped up to 1 ms before the next one shown
    clock = make_clock(ticks, base, capture_fps=fps, stored_size=SIZE)
    steps = np.diff(clock.frame_s)
    assert np.ptp(steps) < 1e-9 and steps[0] == pytest.approx(1 / fps, rel=3e-4)
    assert "rounded to ticks of 1 ms" in clock.provenance and "variable-frame-rate" not in codes(clock)
    assert clock.u_stamp_s < 0.0005


@pytest.mark.parametrize("fps", [30, 59.94, 119.88, 240, 239.76, 480, 960])
@pytest.mark.parametrize("base", [Fraction(1, 600), Fraction(1, 1000), Fraction(1, 90000), Fraction(1, 15360)])
@pytest.mark.parametrize("rounding", [np.rint, np.floor])
def test_any_rate_on_any_time_base_comes_back_regular(fps: float, base: Fraction, rounding: Any, rng: np.random.Generator) -> None:
    """Quick stamps on coarse ticks: 2 and 3 ticks of 1/600 s are 240 a second, not a ramp, not gaps."""
    n = 200
    ticks = rounding((np.arange(n) + rng.uniform()) / fps / float(base)).astype(np.int64)
    if (np.diff(ticks) == 0).mean() > 0.5:
        pytest.skip("most stamps coincide: no clock")
    stretched = fps <= 61
    clock = make_clock(ticks, base, capture_fps=8 * fps if stretched else None, stored_size=SIZE)
    true = np.arange(n) / (8 * fps if stretched else fps)
    assert clock.u_rate >= 1e-4
    assert set(codes(clock)) <= {"nominal-rate"}
    tick = float(base) / (8 if stretched else 1)
    # Residual error against truth is covered: the common part by u_rate, the rest by u_stamp (4 u).
    off = clock.frame_s - true
    slope = off @ true / (true @ true)
    assert abs(slope) < 4 * clock.u_rate
    assert np.abs(off - slope * true - (off - slope * true).mean()).max() < 1e-9 + 4 * clock.u_stamp_s
    assert clock.u_stamp_s < tick


@pytest.mark.parametrize("jitter_ticks", [0.0, 0.05, 0.1, 0.15])
def test_u_of_a_smoothed_stamp_covers_the_jitter_that_rounding_hides(jitter_ticks: float, rng: np.random.Generator) -> None:
    """Frames that jitter by less than a tick are smoothed; what is lost by that must be inside u_stamp_s, and not far inside."""
    ratios = []
    for _ in range(60):
        jitter = rng.normal(0, jitter_ticks, 200)
        ticks = np.rint(np.arange(200) * 41.7083 + rng.uniform() + jitter).astype(np.int64)
        clock = make_clock(ticks, Fraction(1, 10000), stored_size=SIZE)
        if "variable-frame-rate" in codes(clock):
            continue  # kept as stamped: nothing is lost
        ratios.append(jitter_ticks * 1e-4 / clock.u_stamp_s)
    assert len(ratios) > 5
    assert np.sqrt(np.mean(np.square(ratios))) < 1.6
    assert clock.u_stamp_s < 1e-4 * 0.5


def test_the_varying_rate_of_the_footage_is_kept_and_its_faults_are_named() -> None:
    """truth.json: source frames 20 to 22 dropped after frame 19; frame 40 repeated behind good stamps."""
    truth = json.loads(footage("made-here/truth.json").read_text(encoding="utf-8"))["walkers_vfr.mp4"]
    ticks, base = stamps_of("made-here/walkers_vfr.mp4")
    assert ticks.tolist() == truth["stamp_ticks"]
    clock = make_clock(ticks, base, capture_fps=30.0, stored_size=(768, 576))
    np.testing.assert_allclose(clock.frame_s, ticks / 90000, atol=1e-12)
    assert codes(clock) == ["dropped-frames", "variable-frame-rate"]
    assert "3 frames dropped at 1 place: 3 after frame 19 (0.6333 s)" in clock.notices[0].says
    slow = make_clock(ticks, base, capture_fps=240.0, stored_size=(768, 576))
    np.testing.assert_allclose(np.diff(slow.frame_s) / np.diff(clock.frame_s), slow.frame_s[-1] / clock.frame_s[-1], rtol=1e-9)


def test_true_240_with_jitter_is_kept_tick_by_tick() -> None:
    ticks, base = stamps_of("made-here/walkers_hevc_main10_true_240_jitter.mp4")
    clock = make_clock(ticks, base, stored_size=(768, 576))
    np.testing.assert_allclose(clock.frame_s, ticks / 90000, atol=1e-12)
    assert codes(clock) == ["variable-frame-rate"] and clock.capture_fps == pytest.approx(240, rel=2e-3)
    confirmed = make_clock(ticks, base, capture_fps=240.0, stored_size=(768, 576))
    np.testing.assert_array_equal(confirmed.frame_s, clock.frame_s)


def test_real_phone_jitter_is_kept() -> None:
    """MANIFEST.md: a 4K60 phone clip whose steps truly vary from 16.06 to 17.24 ms."""
    ticks, base = stamps_of("container/portrait_4k60.mp4")
    clock = make_clock(ticks, base, capture_fps=60.0, stored_size=(3840, 2160), quarter_turns=1)
    np.testing.assert_allclose(clock.frame_s, (ticks - ticks[0]) * float(base), atol=1e-12)
    assert "16.06 to 17.24 ms" in clock.notices[0].says and clock.scan == "left"


def test_a_gap_of_no_whole_number_of_frames_is_a_gap() -> None:
    """MANIFEST.md: one 325 ms step, then 33.3 ms; and one 100 ms step (two frames lost) after a first step of 1.55."""
    ticks, base = stamps_of("container/sample_android_slow_motion.mp4")
    clock = make_clock(ticks, base, tag_fps=240.0, stored_size=SIZE)
    assert codes(clock) == ["gap-in-stamps"] and "9.76 usual steps after frame 0" in clock.notices[0].says
    np.testing.assert_allclose(np.diff(clock.frame_s), np.r_[29281 / 3000, np.ones(5)] / 240, rtol=1e-4)
    ticks, base = stamps_of("container/hdr10-video-with-sdr-container.mp4")
    clock = make_clock(ticks, base, tag_fps=30.0, stored_size=(1920, 1080))
    assert codes(clock) == ["dropped-frames", "gap-in-stamps"]
    assert "2 frames dropped at 1 place: 2 after frame 15" in clock.notices[0].says
    np.testing.assert_allclose(clock.frame_s, (ticks - ticks[0]) * float(base), atol=1.2e-5)


def test_repeated_stamps_take_the_free_place() -> None:
    clock = make_clock([0, 375, 750, 750, 1500, 1875, 2250, 2625], N90K, stored_size=SIZE)
    np.testing.assert_allclose(clock.frame_s, np.arange(8) / 240, atol=1e-9)
    assert codes(clock) == ["repeated-stamps"] and "at frame 3 (0.0125 s)" in clock.notices[0].says
    at_end = make_clock([0, 375, 750, 1125, 1500, 1500], N90K, stored_size=SIZE)
    np.testing.assert_allclose(at_end.frame_s, np.arange(6) / 240, atol=1e-9)


def test_stamps_that_are_no_time_are_refused() -> None:
    with pytest.raises(CannotMeasure, match="1 frame"):
        make_clock([5], N90K, stored_size=SIZE)
    with pytest.raises(CannotMeasure, match="carry one stamp"):
        make_clock([5, 5, 5], N90K, stored_size=SIZE)
    with pytest.raises(ValueError, match="stamps fall after frame 1"):
        make_clock([0, 375, 374], N90K, stored_size=SIZE)
    with pytest.raises(ValueError, match="integers"):
        make_clock([0.0, 1.5], N90K, stored_size=SIZE)


@settings(max_examples=150, deadline=None)
@given(
    fps=st.floats(70, 1000),
    base=st.sampled_from([Fraction(1, 90000), Fraction(1, 600), Fraction(1, 15360), Fraction(1, 1000), Fraction(1001, 240000)]),
    start=st.integers(-(10**7), 10**7),
    lost=st.dictionaries(st.integers(3, 100), st.integers(1, 6), max_size=3),
    jitter=st.sampled_from([0.0, 0.03, 0.08]),
    seed=st.integers(0, 2**32 - 1),
)
@example(fps=907.75, base=Fraction(1, 15360), start=0, lost={12: 3}, jitter=0.03, seed=21)  # was called a gap of no whole number
@example(fps=70.0, base=N90K, start=0, lost={3: 1, 4: 1, 5: 1}, jitter=0.0, seed=0)  # was called a ramp
@example(fps=70.0, base=Fraction(1001, 240000), start=0, lost={3: 1, 5: 1, 6: 1}, jitter=0.0, seed=0)  # was called a glide
def test_laws_of_every_clock(fps: float, base: Fraction, start: int, lost: dict[int, int], jitter: float, seed: int) -> None:
    """Zero at the first frame, rising, true within a tick whatever is lost, shifted or jittered; losses counted."""
    periods = np.ones(120, dtype=int)
    for place, count in lost.items():
        periods[place] += count
    true = np.concatenate([[0], np.cumsum(periods)]) / fps
    true = true + np.random.default_rng(seed).uniform(-jitter, jitter, len(true)) / fps
    ticks = start + np.rint(true / float(base)).astype(np.int64)
    if (np.diff(ticks) <= 0).any() or 1 / fps < 2.5 * float(base):
        return
    clock = make_clock(ticks, base, stored_size=SIZE)
    assert clock.frame_s[0] == 0 and (np.diff(clock.frame_s) > 0).all() and np.isfinite(clock.frame_s).all()
    assert np.abs(clock.frame_s - (true - true[0])).max() <= 1.6 * float(base)
    assert clock.capture_fps == pytest.approx(fps, rel=0.01)
    said = [n for n in clock.notices if n.code == "dropped-frames"]
    if jitter < 0.05:
        assert bool(said) == bool(lost)
        if said:
            assert said[0].says.split(": ")[1].split()[0] == str(sum(lost.values()))
    again = make_clock(ticks + 12345, base, stored_size=SIZE)
    np.testing.assert_allclose(again.frame_s, clock.frame_s, atol=1e-9)
    assert codes(again) == codes(clock)


# --- rows ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("mirrored", [False, True])
@pytest.mark.parametrize("turns", [0, 1, 2, 3])
def test_each_pixel_has_the_time_of_its_stored_row(turns: int, mirrored: bool) -> None:
    """Turn an array whose value is its stored row, as numpy turns it; the clock must give that row's time."""
    rows, columns, readout = 5, 7, -0.003
    stored = np.repeat(np.arange(rows)[:, None], columns, axis=1)
    upright = np.rot90(stored, -turns)  # clockwise
    upright = upright[:, ::-1] if mirrored else upright
    stored_as = {"stored_size": (columns, rows), "quarter_turns": turns, "mirrored": mirrored}
    clock = clock_of(np.arange(10) / 240, readout_s=readout, u_readout_s=1e-4, **stored_as)
    y, x = np.indices(upright.shape)
    times = clock.at(4, np.stack([x, y], axis=-1))
    np.testing.assert_allclose(times, 4 / 240 + readout * upright / (rows - 1), atol=1e-12)
    expected = {(0, False): "down", (1, False): "left", (2, False): "up", (3, False): "right"}
    assert scan_direction(turns, mirrored) == expected.get((turns, mirrored), {0: "down", 1: "right", 2: "up", 3: "left"}[turns])


def test_times_of_points_broadcast_and_nan_stays() -> None:
    clock = clock_of(np.arange(10) / 240, readout_s=0.004)
    points = np.array([[[0.0, 0.0], [10.0, 719.0]], [[5.0, 359.5], [np.nan, np.nan]]])
    times = clock.at(np.array([[2], [3]]), points)
    np.testing.assert_allclose(times, [[2 / 240, 2 / 240 + 0.004], [3 / 240 + 0.002, np.nan]], atol=1e-12)
    with pytest.raises(IndexError, match="expected 0 to 9"):
        clock.at(10, [0.0, 0.0])
    with pytest.raises(IndexError):
        clock.at(-1, [0.0, 0.0])
    with pytest.raises(ValueError, match=r"shape \(\.\.\., 2\)"):
        clock.at(0, [0.0, 0.0, 0.0])


def test_an_unknown_readout_is_up_to_a_frame_period_of_either_sign() -> None:
    """Design, section 3. A uniform distribution over +-a has u = a/sqrt(3) (JCGM 100:2008, 4.3.7)."""
    clock = clock_of(np.arange(50) / 30, capture_fps=240.0)
    assert clock.readout_s == 0 and clock.u_readout_s == pytest.approx(1 / 240 / np.sqrt(3))
    with pytest.raises(BadInput, match=r"clock\.readout_s is -0\.02, longer than the frame period of 0\.00417 s"):
        clock_of(np.arange(50) / 240, readout_s=-0.02)


def test_scaling_and_another_readout_for_the_budget() -> None:
    clock = clock_of(np.arange(50) / 240, readout_s=0.004, u_readout_s=2e-4)
    longer = clock.scaled(1.001)
    np.testing.assert_allclose(longer.frame_s, clock.frame_s * 1.001)
    assert (longer.readout_s, longer.capture_fps) == (0.004, pytest.approx(240 / 1.001))
    assert longer.u_stamp_s == pytest.approx(1.001 * clock.u_stamp_s)
    other = clock.with_readout(0.005)
    assert other.at(3, [0.0, 719.0]) == pytest.approx(3 / 240 + 0.005) and clock.readout_s == 0.004


def test_a_clock_cannot_be_born_wrong_or_changed() -> None:
    clock = clock_of(np.arange(5) / 240)
    with pytest.raises(ValueError, match="read-only"):
        clock.frame_s[0] = 1
    for wrong in ([0.1, 0.2], [0.0, 0.0], [0.0, np.nan], []):
        with pytest.raises(ValueError, match=r"Clock\.frame_s"):
            Clock(np.array(wrong), 0.0, 0.0, 720, "down", 1e-4, 0.0, 240.0, "made here")


def test_a_free_fall_on_each_way_of_slow_motion_gives_the_same_g() -> None:
    """The point of it all: one motion, stored in three ways, one g."""
    true = np.arange(120) / 240
    z = 0.5 * 9.8123 * true**2
    ways = {
        "true": clock_of(true),
        "stretched": clock_of(true * 8, tag_fps=240.0),
        "ramped": clock_of(np.concatenate([[0], np.cumsum(np.where(np.arange(119) // 40 == 1, 8 / 30, 1 / 30))]), capture_fps=240.0),
    }
    for way, clock in ways.items():
        assert 2 * np.polyfit(clock.frame_s, z, 2)[0] == pytest.approx(9.8123, rel=1e-6), way


# --- behind good stamps -----------------------------------------------------------------------------------------------


def test_the_repeated_picture_of_the_footage_is_found() -> None:
    """truth.json: source frame 40 stands at the place of 41, which is frame 38 of the file."""
    truth = json.loads(footage("made-here/truth.json").read_text(encoding="utf-8"))["walkers_vfr.mp4"]["source_frame"]
    pictures = []
    with av.open(str(footage("made-here/walkers_vfr.mp4"))) as container:
        for frame in container.decode(video=0):
            plane = frame.planes[0]
            pictures.append(np.frombuffer(plane, np.uint8).reshape(-1, plane.line_size)[: frame.height, : frame.width].astype(np.int16))
    change = [np.abs(b - a).mean() for a, b in pairwise(pictures)]
    assert hidden_steps(change).repeated.tolist() == [i for i in range(1, len(truth)) if truth[i] == truth[i - 1]] == [38]


@settings(max_examples=80, deadline=None)
@given(repeats=st.sets(st.integers(2, 110), max_size=4), seed=st.integers(0, 2**32 - 1))
def test_repeats_are_found_and_none_invented(repeats: set[int], seed: int) -> None:
    draw = np.random.default_rng(seed)
    change = (2.0 + np.sin(np.arange(119) / 15)) * draw.lognormal(0, 0.1, 119)
    repeats = {r for r in repeats if r - 1 not in repeats}
    change[[r - 1 for r in repeats]] *= 0.05
    assert hidden_steps(change).repeated.tolist() == sorted(repeats)


def test_still_or_noiseless_pictures_accuse_nobody(rng: np.random.Generator) -> None:
    assert hidden_steps(np.zeros(50)).repeated.size == 0
    assert hidden_steps(rng.uniform(0.0, 0.02, 50) + 1.0).repeated.size == 0
    assert hidden_steps([1.0, 0.0]).repeated.size == 0


@pytest.mark.parametrize("lost", [1, 2, 5])
def test_frames_lost_behind_good_stamps_leap(lost: int, rng: np.random.Generator) -> None:
    """A ball falling from 1 m/s, seen at 240 fps and 1 mm a pixel; frames are lost without a trace in the stamps."""
    t = np.delete(np.arange(80), np.arange(40, 40 + lost)) / 240
    track = np.c_[np.full(len(t), 300.0), 1000 * t + 4905 * t**2] + rng.normal(0, 0.1, (len(t), 2))
    found = hidden_steps(np.ones(len(t) - 1), track)
    assert found.jumps.tolist() == [40] and found.missing.tolist() == [lost]
    whole = np.arange(80) / 240
    assert hidden_steps(np.ones(79), np.c_[whole, 1000 * whole + 4905 * whole**2]).jumps.size == 0


def test_a_repeat_in_place_of_a_frame_is_a_repeat_and_a_leap(rng: np.random.Generator) -> None:
    t = np.arange(60) / 240
    track = np.c_[1500 * t, 200 * t] + rng.normal(0, 0.05, (60, 2))
    track[30] = track[29]
    change = rng.uniform(1.8, 2.2, 59)
    change[29] = 0.01
    found = hidden_steps(change, track)
    assert (found.repeated.tolist(), found.jumps.tolist(), found.missing.tolist()) == ([30], [31], [1])
    with pytest.raises(ValueError, match=r"track: expected \(60, 2\)"):
        hidden_steps(change, track[:-1])


def test_this_room_stands_without_the_application() -> None:
    source = Path(__file__).resolve().parents[2] / "calibration" / "clock.py"
    assert "tracker" not in source.read_text(encoding="utf-8")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        clock_of(np.arange(2) / 240)  # the shortest clip there is
