"""The line's own texture as a pattern that moves along it: displacement from frame to frame, modulo the pitch.

The brightness along the line is taken to the frequency of the pitch, one complex number per pitch of line. From one
frame to the next all of them turn by -2 pi displacement / pitch, whatever the lamps do to their size. The turn is
known modulo a whole pitch only: what the turn means is decided in `speed`, never here.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["TexturePhases", "displacement_modulo_pitch", "texture_phases"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True, slots=True, eq=False)
class TexturePhases:
    """Texture of one frame at the pitch's frequency.

    Attributes
    ----------
    amplitude : (m,) complex array
        Of the pitch of line number 0, 1, ... from the rim; 0 where the line was not seen [grey levels].
    late_s : (m,) array
        How long after the frame's time that piece was seen [s].
    contrast : float
        Root mean square amplitude relative to the line's brightness difference.
    """

    amplitude: Complexes
    late_s: Floats
    contrast: float


def texture_phases(
    brightness: Floats, sigma_m: Floats, late_s: Floats, seen: NDArray[np.bool_], pitch_m: float, average_px: float
) -> TexturePhases:
    """Texture of one frame.

    Parameters
    ----------
    brightness, sigma_m, late_s, seen : (n,) arrays
        Along the line, about a pixel apart: brightness [grey levels], length from the rim [m], time after the
        frame's [s], and whether it was seen.
    pitch_m : float
        Repeat of the texture [m].
    average_px : float
        The same in points.
    """
    size = max(2, round(average_px))
    wide = np.convolve(np.pad(brightness, size, mode="edge"), np.ones(2 * size + 1) / (2 * size + 1), mode="valid")
    varying = np.where(seen, brightness - wide, 0.0)
    limit = 4.0 * 1.4826 * float(np.median(np.abs(varying[seen]))) if seen.any() else 0.0
    varying = np.clip(varying, -limit, limit)  # a mark is no texture
    inside = (sigma_m >= 0) & seen
    number = np.floor(sigma_m / pitch_m).astype(np.intp)
    m = int(number[inside].max()) + 1 if inside.any() else 0
    turned = varying * np.exp(-2j * np.pi * sigma_m / pitch_m)
    count = np.bincount(number[inside], minlength=m).astype(float)
    total = np.bincount(number[inside], turned[inside].real, m) + 1j * np.bincount(number[inside], turned[inside].imag, m)
    late = np.bincount(number[inside], late_s[inside], m)
    amplitude = np.where(count > 0.5 * size, total / np.maximum(count, 1), 0)
    strength = float(np.sqrt(np.mean(np.abs(_smooth(amplitude)) ** 2))) if m else 0.0
    level = float(np.median(np.abs(brightness[inside]))) if inside.any() else 1.0
    return TexturePhases(amplitude, late / np.maximum(count, 1), strength / max(level, 1.0))


def displacement_modulo_pitch(first: TexturePhases, second: TexturePhases, pitch_m: float) -> tuple[float, float, float]:
    """How far the texture moved from one frame to the next, modulo the pitch.

    Returns
    -------
    displacement_m : float
        In (-pitch/2, pitch/2] [m].
    u_m : float
        Its standard uncertainty [m] from how well the pieces of line agree; infinite without texture.
    late_s : float
        Mean time after the frame's at which the pieces were seen [s].
    """
    m = min(first.amplitude.size, second.amplitude.size)
    if m < 6:
        return 0.0, float("inf"), 0.0
    a, b = _smooth(first.amplitude[:m]), _smooth(second.amplitude[:m])
    turn = b * np.conj(a)
    weight = np.abs(turn)
    if weight.sum() <= 0:
        return 0.0, float("inf"), 0.0
    mean = turn.sum() / weight.sum()
    agreement = float(np.abs(mean))
    independent = float(weight.sum() ** 2 / (weight**2).sum()) / 5.0  # the smoothing ties five neighbours
    if agreement**2 * independent < 4.0:  # no more than a random walk of that many steps gives
        return 0.0, float("inf"), 0.0
    spread = np.sqrt(max(1 - agreement**2, 1e-4) / (2 * agreement**2) / max(independent, 1.0))
    late = float((weight * first.late_s[:m]).sum() / weight.sum())
    return float(-np.angle(mean) / (2 * np.pi) * pitch_m), float(spread / (2 * np.pi) * pitch_m), late


def _smooth(amplitude: Complexes) -> Complexes:
    """Over five pitches, so that a piece has the phase of its neighbourhood and not of its noise."""
    if amplitude.size < 5:
        return amplitude
    return np.convolve(amplitude, np.array([1, 2, 3, 2, 1]) / 9.0, mode="same")
