"""Distributions through a model by Monte Carlo, and whether the GUM's linear route would have done (JCGM 101:2008).

The budget of a result is made the GUM's way: a standard uncertainty from each cause, combined in squares. That route
leans on a model that is nearly straight over its inputs' spread and on a result that is nearly normal. Here the inputs
themselves are drawn and sent through the model, which leans on neither; held side by side, the two say whether the
short route holds.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Propagated", "Validation", "arcsine", "curved_trapezoid", "propagate", "tolerance", "validate"]

Floats = NDArray[np.float64]
FEWEST_DRAWS = 100


@dataclass(frozen=True, slots=True)
class Propagated:
    """What the model's values look like over all draws."""

    value: float  # mean
    u: float  # standard deviation
    coverage: float  # share of the values inside each interval
    symmetric: tuple[float, float]  # as much below as above
    shortest: tuple[float, float]
    draws: int


@dataclass(frozen=True, slots=True)
class Validation:
    """The GUM's interval held against the Monte Carlo one (JCGM 101:2008, 8.1)."""

    holds: bool
    low: float  # distance of the lower ends
    high: float  # distance of the upper ends
    tolerance: float  # what either may be


def propagate(model: Callable[..., Floats], draws: Mapping[str, ArrayLike], coverage: float = 0.95) -> Propagated:
    """Send draws of the inputs through a model.

    Parameters
    ----------
    model : callable
        Takes the inputs by name, each (m,), and gives (m,) values.
    draws : mapping of str to (m,) array_like
        Draws of each input from its distribution; those of one place belong together, so correlated inputs are drawn
        together.
    coverage : float
        Share of the values that the intervals hold, between 0 and 1.

    Returns
    -------
    Propagated

    Raises
    ------
    ValueError
        Fewer than a hundred draws, inputs of unequal length, a coverage outside 0 to 1, or values that are not finite.

    Notes
    -----
    JCGM 101:2008, 7.5 (model values), 7.6 (estimate and standard uncertainty), 7.7 (coverage intervals: q = p M to the
    nearest integer; symmetric from r = (M - q)/2, shortest by the least y(r + q) - y(r)).
    """
    if not 0 < coverage < 1:
        raise ValueError(f"propagate: coverage lies between 0 and 1, got {coverage}.")
    inputs = {name: np.asarray(values, dtype=float) for name, values in draws.items()}
    sizes = {values.size for values in inputs.values()}
    if len(sizes) != 1 or min(sizes) < FEWEST_DRAWS:
        raise ValueError(f"propagate: expected inputs of one length, {FEWEST_DRAWS} or more, got lengths {sorted(sizes)}.")
    values = np.sort(np.asarray(model(**inputs), dtype=float))
    if values.shape != (min(sizes),) or not np.isfinite(values).all():
        raise ValueError(f"propagate: the model must give ({min(sizes)},) finite values, got shape {values.shape}.")
    count = values.size
    held = min(math.floor(coverage * count + 0.5), count - 1)
    first = (count - held) // 2
    least = int(np.argmin(values[held:] - values[: count - held]))
    return Propagated(
        value=float(values.mean()),
        u=float(values.std(ddof=1)),
        coverage=coverage,
        symmetric=(float(values[first]), float(values[first + held])),
        shortest=(float(values[least]), float(values[least + held])),
        draws=count,
    )


def tolerance(u: float, digits: int = 2) -> float:
    """Half of the last of so many significant digits of u (JCGM 101:2008, 7.9.2); ValueError unless u is above 0."""
    if not (u > 0 and math.isfinite(u)):
        raise ValueError(f"tolerance: u must be above 0, got {u}.")
    power = math.floor(math.log10(u)) - digits + 1
    if round(u / 10.0**power) >= 10**digits:  # 0.0996 to two digits is 0.10: its last digit is one place up
        power += 1
    return 0.5 * 10.0**power


def validate(value: float, u: float, interval: tuple[float, float], drawn: Propagated, digits: int = 2) -> Validation:
    """Hold a GUM interval against Monte Carlo.

    Parameters
    ----------
    value, u : float
        Estimate and standard uncertainty of the GUM's route; u sets the tolerance.
    interval : (float, float)
        Its interval, for the coverage of `drawn`.
    drawn : Propagated
        Of the same model and inputs.
    digits : int
        Significant digits of u that are meant to be told: 1 or 2.

    Returns
    -------
    Validation

    Raises
    ------
    ValueError
        The interval does not hold the value, or u is not above 0.

    Notes
    -----
    JCGM 101:2008, 8.1.3, against the probabilistically symmetric interval. The ends of the Monte Carlo interval scatter
    themselves; 8.2 asks for a tolerance five times finer there, so draw 1e6 for two digits.
    """
    if not interval[0] <= value <= interval[1]:
        raise ValueError(f"validate: the interval {interval} does not hold the value {value}.")
    allowed = tolerance(u, digits)
    low, high = abs(interval[0] - drawn.symmetric[0]), abs(interval[1] - drawn.symmetric[1])
    return Validation(low <= allowed and high <= allowed, low, high, allowed)


def curved_trapezoid(rng: np.random.Generator, low: float, high: float, unsure: float, draws: int) -> Floats:
    """Draws between limits that are themselves known to plus or minus `unsure` only (JCGM 101:2008, 6.4.3.4)."""
    start = (low - unsure) + 2 * unsure * rng.random(draws)
    return np.asarray(start + (low + high - 2 * start) * rng.random(draws), dtype=float)


def arcsine(rng: np.random.Generator, low: float, high: float, draws: int) -> Floats:
    """Draws of a quantity that cycles between limits (JCGM 101:2008, 6.4.6.4)."""
    return np.asarray(0.5 * (low + high) + 0.5 * (high - low) * np.sin(2 * np.pi * rng.random(draws)), dtype=float)
