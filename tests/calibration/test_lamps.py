"""Lamps of known frequency, seen by a camera of known rate and readout."""

import numpy as np
import pytest

from calibration.lamps import read_lamps


def scene(
    fps: float, lamp_hz: float, n: int, rng: np.random.Generator, *, noise: float = 0.001, rows: int = 0, readout: float = 0.0
) -> np.ndarray:
    """Light 1 + depth cos(2 pi F t + a), averaged over an exposure of 0.5 ms, with drift and noise of the mean."""
    t = np.arange(n)[:, None] / fps + (readout * np.arange(rows) / (rows - 1) if rows else 0.0)
    sinc = np.sinc(lamp_hz * 0.0005)
    light = 1 + 0.03 * sinc * np.cos(2 * np.pi * lamp_hz * t + rng.uniform(0, 7)) + 0.05 * np.sin(np.arange(n)[:, None] / n * 2)
    light = 120 * light * (1 + noise * rng.standard_normal(light.shape))
    return light if rows else light[:, 0]


@pytest.mark.parametrize("mains", [49.9, 49.95, 50.0, 50.05, 50.1])
@pytest.mark.parametrize("fps", [30, 60, 120, 240, 239.76, 480])
def test_the_capture_rate_comes_back_within_the_grids_own_error(mains: float, fps: float, rng: np.random.Generator) -> None:
    """The grid is off by up to 0.2 %, so is the rate; u says 0.05 % and more."""
    reading = read_lamps(scene(fps, 2 * mains, 300, rng), fps)
    assert reading.lamp_hz == 100
    assert reading.capture_fps == pytest.approx(fps * 50 / mains, rel=2e-4)
    assert reading.u_capture_fps == pytest.approx(5e-4 * fps, rel=0.3)
    assert reading.amplitude == pytest.approx(0.03, rel=0.1)


@pytest.mark.parametrize("fps", [30.0, 29.97, 240.0, 239.76])
def test_rates_a_thousandth_apart_are_told_apart(fps: float, rng: np.random.Generator) -> None:
    """100 Hz is seen at 10.09 Hz by 29.97 frames a second, at 10 Hz by 30: abs(100 - f round(100 / f)), computed."""
    reading = read_lamps(scene(fps, 100.0, 600, rng), round(fps))
    assert reading.capture_fps == pytest.approx(fps, rel=1e-4)


def test_60_hz_mains(rng: np.random.Generator) -> None:
    reading = read_lamps(scene(100.0, 120.0, 300, rng), 100.0)
    assert reading.lamp_hz == 120 and reading.capture_fps == pytest.approx(100, rel=2e-4)


@pytest.mark.parametrize("fps, lamp, why", [(240, 120, "120 Hz"), (25, 100, "100 Hz"), (120, 120, "120 Hz"), (50, 100, "100 Hz")])
def test_flicker_that_stands_still_or_alternates_tells_nothing(fps: float, lamp: float, why: str, rng: np.random.Generator) -> None:
    reading = read_lamps(scene(fps, lamp, 300, rng), fps)
    assert reading.capture_fps is None and why in reading.says


def test_a_clock_off_by_half_a_percent_is_caught(rng: np.random.Generator) -> None:
    reading = read_lamps(scene(238.8, 100.0, 300, rng), 240.0)
    assert reading.capture_fps == pytest.approx(238.8, rel=2e-4) and "differ" in reading.says and "-0.50 %" in reading.says


def test_noise_and_motion_are_no_lamps(rng: np.random.Generator) -> None:
    """400 clips of noise and slow motion without lamps: none may be read."""
    for k in range(400):
        n = int(rng.integers(60, 400))
        drift = np.cumsum(rng.standard_normal(n)) * (k % 2)
        assert read_lamps(1000 + drift + rng.standard_normal(n), float(rng.choice([30, 60, 120, 240]))).capture_fps is None
    for still in (np.full(300, 7.0), np.zeros(300)):
        assert "does not change" in read_lamps(still, 240.0).says
    assert "too few" in read_lamps(np.ones(10), 240.0).says


@pytest.mark.parametrize("noise", [0.001, 0.005, 0.02])
def test_u_covers_the_noise(noise: float, rng: np.random.Generator) -> None:
    """With the grid exact, the error is noise alone; its own part of u must fit (4 sigma of a standard deviation of 200 is 20 %)."""
    z, unread = [], 0
    for _ in range(200):
        reading = read_lamps(scene(240.0, 100.0, 200, rng, noise=noise), 240.0)
        if reading.capture_fps is None or reading.u_capture_fps is None:
            unread += 1
            continue
        own = np.sqrt(reading.u_capture_fps**2 - (5e-4 * reading.capture_fps) ** 2)
        z.append((reading.capture_fps - 240.0) / own)
    assert unread < 20
    assert 0.8 < np.std(z) < 1.25


@pytest.mark.parametrize("fps", [240.0, 60.0, 30.0, 120.0])
@pytest.mark.parametrize("readout", [0.004, -0.004, 0.0, 0.0079])
def test_bands_give_the_readout_with_its_sign(fps: float, readout: float, rng: np.random.Generator) -> None:
    """Bands fill the rows; 100 Hz at 60 and 120 frames a second is folded back, which turns the bands' way."""
    reading = read_lamps(scene(fps, 100.0, 240, rng, rows=90, readout=readout, noise=0.01), fps)
    assert reading.readout_s is not None and reading.u_readout_s is not None
    assert reading.readout_s == pytest.approx(readout, abs=max(4 * reading.u_readout_s, 2e-5))
    assert reading.u_readout_s < 2e-4


def test_u_of_the_readout_covers(rng: np.random.Generator) -> None:
    z = []
    for _ in range(150):
        reading = read_lamps(scene(240.0, 100.0, 120, rng, rows=60, readout=0.004, noise=0.02), 240.0)
        assert reading.readout_s is not None and reading.u_readout_s is not None
        z.append((reading.readout_s - 0.004) / np.sqrt(reading.u_readout_s**2 - (5e-4 * 0.004) ** 2))
    assert 0.7 < np.std(z) < 1.3 and abs(np.mean(z)) < 0.4


def test_wrong_shapes_are_refused() -> None:
    for wrong in (np.zeros((2, 2, 2)), np.array([1.0, np.nan] * 40), 3.0):
        with pytest.raises(ValueError, match="brightness: expected"):
            read_lamps(wrong, 240.0)
