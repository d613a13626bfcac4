"""Lamps on the mains as a free clock: their flicker, seen between frames, checks the capture rate.

A lamp on alternating current flickers at twice the mains, F = 100 or 120 Hz. Frames taken at a rate f see it at the
fraction F/f of a cycle per frame, folded into 0 to 1/2. Unfolded with the rate that the clock believes, the fraction
gives f = F / (whole cycles ± fraction). Large grids keep F within some 0.05 % (0.05 Hz of 50; common practice, no
source; EN 50160 allows 1 %), so f is checked to about that. Flicker that stands still (F/f a whole number) or jumps
between two states (half a number: 120 Hz at 240 frames a second) tells nothing.

Rows are exposed one after another, so the flicker's phase runs down the picture: the same fit, row by row, gives the
readout time with its sign.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["LampReading", "read_lamps"]

Array = NDArray[np.float64]

U_GRID = 0.0005  # relative; 0.05 Hz of 50 most of the time, taken as a standard uncertainty since islands do worse
SEARCH = 0.02  # relative; how far the clock's rate may be off
FALSE_ALARM = 1e-6  # chance that noise alone is taken for a lamp
SHORTEST = 40  # frames


@dataclass(frozen=True, slots=True)
class LampReading:
    """What the lamps say.

    Attributes
    ----------
    says : str
        One sentence: the finding, or why there is none.
    lamp_hz : float or None
        Flicker frequency that was seen, twice the mains [Hz]; None: the lamps cannot tell.
    capture_fps, u_capture_fps : float or None
        Frames a second by the lamps, and its standard uncertainty.
    amplitude : float
        Of the flicker, relative to the mean brightness.
    readout_s, u_readout_s : float or None
        First to last row of the series given [s], signed; None if no rows were given or the bands do not tell.
    """

    says: str
    lamp_hz: float | None = None
    capture_fps: float | None = None
    u_capture_fps: float | None = None
    amplitude: float = 0.0
    readout_s: float | None = None
    u_readout_s: float | None = None


def read_lamps(brightness: ArrayLike, nominal_fps: float, *, mains_hz: float | None = None) -> LampReading:
    """Check a capture rate by the flicker of lamps.

    Parameters
    ----------
    brightness : (n_frames,) or (n_frames, n_rows) array_like
        Mean brightness of the still scene in each frame, or in each stored row (or band of rows, evenly spaced) of
        each frame, evenly timed, no frame missing. Any unit; display gray is good enough, for only time is read.
    nominal_fps : float
        The rate that the clock believes [1/s]; the true one is looked for within 2 % of it.
    mains_hz : float, optional
        50 or 60; None: both are tried, and must not both fit.

    Returns
    -------
    LampReading

    Raises
    ------
    ValueError
        Wrong shape, or numbers that are not finite.

    Notes
    -----
    The line is found by least squares (a sinusoid beside a cubic trend), its u from the noise beside it by the
    Cramer-Rao bound for a frequency, var(omega) = 24 s^2 / (A^2 n (n^2 - 1)) (Rife and Boorstyn, IEEE Trans. Inf.
    Theory 20, 591 (1974), there for a complex tone; from memory). The chance of a false alarm is Fisher's: the largest
    of m noise powers exceeds z times their mean with probability m exp(-z).
    """
    series = np.asarray(brightness, dtype=float)
    if series.ndim not in (1, 2) or not np.isfinite(series).all() or not (np.isfinite(nominal_fps) and nominal_fps > 0):
        raise ValueError(f"brightness: expected (frames,) or (frames, rows) finite numbers, got shape {series.shape}.")
    n = len(series)
    whole = series if series.ndim == 1 else series.mean(axis=1)
    if n < SHORTEST:
        return LampReading(f"{n} frames are too few to see a flicker; {SHORTEST} are needed.")
    if whole.mean() <= 0 or np.ptp(series) == 0:
        return LampReading("The brightness does not change, so no lamp flickers visibly.")
    rows = series[:, None] if series.ndim == 1 else series
    flat = _without_trend(rows / rows.mean())
    power = _power(flat)  # of all rows: bands that run through the picture cancel in its mean
    found = [
        candidate
        for hertz in ((50.0, 60.0) if mains_hz is None else (float(mains_hz),))
        if (candidate := _line(flat, power, 2 * hertz, nominal_fps)) is not None
    ]
    if len(found) > 1:
        return LampReading("Flicker of 100 Hz and of 120 Hz both fit; give the mains frequency.")
    if not found:
        return LampReading(_why_not(n, nominal_fps, mains_hz))
    return _reading(flat, found[0], nominal_fps)


@dataclass(frozen=True, slots=True)
class _Line:
    """A spectral line: where it lies and how sure that is."""

    lamp_hz: float
    cycles: float  # per frame, unfolded
    folded: float  # per frame, 0 to 1/2
    sign: int  # of the folding: cycles = whole + sign * folded
    u_cycles: float


def _without_trend(series: Array) -> Array:
    """Each column about its own cubic."""
    t = np.linspace(-1, 1, len(series))
    basis = np.linalg.qr(np.stack([t**k for k in range(4)], axis=1))[0]
    return np.asarray(series - basis @ (basis.T @ series), dtype=float)


def _power(flat: Array) -> Array:
    """Mean periodogram of the columns, Hann window, bins of 1/n cycles a frame."""
    window = np.hanning(len(flat) + 1)[:-1, None]
    return np.asarray((np.abs(np.fft.rfft(flat * window, axis=0)) ** 2).mean(axis=1), dtype=float)


def _line(flat: Array, power: Array, lamp_hz: float, nominal_fps: float) -> _Line | None:
    """The flicker line of one lamp frequency near where the nominal rate puts it, if it stands out of the noise."""
    n = len(flat)
    expected = lamp_hz / nominal_fps
    folded, sign = _fold(expected)
    reach = SEARCH * expected + 1 / n
    low, high = max(2.5 / n, folded - reach), min(0.5 - 1.5 / n, folded + reach)
    if low >= high or not 2.5 / n < folded < 0.5 - 1.5 / n:
        return None
    bins = np.arange(len(power)) / n
    near = np.flatnonzero((bins >= low - 0.5 / n) & (bins <= high + 0.5 / n))
    if len(near) == 0:
        return None
    peak = int(near[power[near].argmax()])
    beside = np.abs(np.arange(len(power)) - peak)
    noise = power[(beside > 3) & (beside < max(12, n // 6)) & (bins > 2.5 / n)]
    # The median of exponential noise is ln 2 of its mean; it does not see other lines.
    level = float(np.median(noise)) / np.log(2)
    if level > 0 and len(near) * np.exp(-power[peak] / level) > FALSE_ALARM:
        return None
    at = _refine(flat, bins[peak], 1.0 / n)
    if not low <= at <= high:
        return None
    amplitude, residual = _fit(flat, at)
    a2 = float((np.abs(amplitude) ** 2).sum())
    s2 = max(float(residual.var(axis=0).mean()), level / (3 / 8 * n))  # noise about the line itself, if that is larger
    u_cycles = np.sqrt(24 * s2 / (max(a2, 1e-300) * n * (n**2 - 1))) / (2 * np.pi)
    return _Line(lamp_hz, expected + sign * (at - folded), at, sign, float(u_cycles))


def _fold(cycles: float) -> tuple[float, int]:
    """Cycles a frame as they are seen, and the sign of the folding."""
    off = cycles - round(cycles)
    return abs(off), 1 if off >= 0 else -1


def _fit(flat: Array, folded: float) -> tuple[NDArray[np.complex128], Array]:
    """Complex amplitude of each column at a frequency, and what is left."""
    phase = 2 * np.pi * folded * np.arange(len(flat))
    design = np.stack([np.cos(phase), np.sin(phase)], axis=1)
    part = np.linalg.lstsq(design, flat, rcond=None)[0]
    return part[0] - 1j * part[1], flat - design @ part


def _refine(flat: Array, start: float, bin_width: float) -> float:
    """Frequency of least squares, by narrowing the grid around the periodogram's peak."""
    best, reach = start, bin_width
    for _ in range(6):
        tried = best + reach * np.linspace(-1, 1, 9)
        best = float(tried[int(np.argmin([(_fit(flat, f)[1] ** 2).sum() for f in tried]))])
        reach /= 4
    return best


def _reading(flat: Array, line: _Line, nominal_fps: float) -> LampReading:
    fps = line.lamp_hz / line.cycles
    u_fps = fps * float(np.hypot(U_GRID, line.u_cycles / line.cycles))
    amplitude, residual = _fit(flat, line.folded)
    readout, u_readout = _readout(amplitude, residual, line)
    off = fps / nominal_fps - 1
    agrees = "agree with" if abs(off) * nominal_fps <= 2 * u_fps else "differ from"
    return LampReading(
        f"Lamps at {line.lamp_hz:g} Hz {agrees} {nominal_fps:g} frames a second: "
        f"they give {fps:.2f} with u = {u_fps:.2f} ({100 * off:+.2f} %).",
        line.lamp_hz,
        fps,
        u_fps,
        float(np.sqrt((np.abs(amplitude) ** 2).mean())),
        readout,
        u_readout,
    )


def _readout(amplitude: NDArray[np.complex128], residual: Array, line: _Line) -> tuple[float | None, float | None]:
    """Readout by the slope of the phase from row to row.

    Light goes as cos(2 pi F t + a); row r is exposed readout * r / (rows - 1) later, so its phase is ahead by that
    share of 2 pi F; seen through the folding, by its sign times that.
    """
    rows = len(amplitude)
    if rows < 8:
        return None, None
    # Bands turn less than half a cycle from row to row; the mean turn starts the unwrapping, least squares ends it.
    turn = np.angle((amplitude[1:] * amplitude[:-1].conj()).sum())
    r = np.arange(rows) - (rows - 1) / 2
    rest = np.angle(amplitude * np.exp(-1j * turn * r) / np.exp(1j * np.angle((amplitude * np.exp(-1j * turn * r)).sum())))
    weight = np.abs(amplitude) ** 2
    slope = turn + float((weight * r * rest).sum() / (weight * r * r).sum())
    scatter = np.sqrt((weight * (rest - (slope - turn) * r) ** 2).sum() / weight.sum())
    if scatter > 0.5:  # radians: the bands are not straight, so something else shines or moves
        return None, None
    n = len(residual)
    u_phase = max(scatter, float(np.sqrt(2 * residual.var() / n) / np.sqrt(weight.mean())))
    u_slope = u_phase / np.sqrt((r * r).sum())
    per_radian = (rows - 1) / (2 * np.pi * line.lamp_hz)
    readout = line.sign * slope * per_radian
    return float(readout), float(np.hypot(u_slope * per_radian, U_GRID * readout))


def _why_not(n: int, nominal_fps: float, mains_hz: float | None) -> str:
    still = [
        2 * hertz
        for hertz in ((50.0, 60.0) if mains_hz is None else (mains_hz,))
        if not 2.5 / n < _fold(2 * hertz / nominal_fps)[0] < 0.5 - 1.5 / n
    ]
    if still:
        named = " or ".join(f"{hertz:g} Hz" for hertz in still)
        return f"No flicker that tells; at {nominal_fps:g} frames a second that of {named} stands still or alternates."
    return "No flicker of mains lamps stands out of the noise."
