"""A motion in time: states from a time-stepping solver, made continuous, and the line as the camera asks for it.

A solver leaves places and velocities at its own moments. Between two of them a cubic takes both places and both velocities over
(Hermite's interpolation), so that place and velocity are continuous; with steps of 0.1 ms its error is far below a micrometre.
World: x to the right, y away from the camera, z up [m]; the plane of motion is y = 0.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Record", "Strand", "evenly", "in_world", "runge_kutta"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Strand:
    """The line at one moment; see `moving.StrandLike` for what is asked of it.

    Attributes
    ----------
    points_m : (n, 3) array
        World [m].
    s_m : (n,) array
        Material coordinate [m], strictly monotonic.
    visible : (n,) array of bool
        False where it is not to be drawn.
    """

    points_m: Floats
    s_m: Floats
    visible: NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class Record:
    """States at increasing moments.

    Attributes
    ----------
    t_s : (k,) array
        [s], strictly increasing.
    state, rate : (k, ...) array
        Any quantities and their rates of change.
    """

    t_s: Floats
    state: Floats
    rate: Floats

    def at(self, t: ArrayLike) -> Floats:
        """The state at times `t` (...): (..., *shape). Before the first moment it is the first state; after the last, straight on."""
        return self._cubic(t, 0)

    def rate_at(self, t: ArrayLike) -> Floats:
        """Its rate of change: the cubic's own slope; zero before the first moment."""
        return self._cubic(t, 1)

    def _cubic(self, t: ArrayLike, derivative: int) -> Floats:
        when = np.asarray(t, dtype=float)
        i = np.clip(np.searchsorted(self.t_s, when, side="right") - 1, 0, self.t_s.size - 2)
        extra = (1,) * (self.state.ndim - 1)
        step = np.reshape(self.t_s[i + 1] - self.t_s[i], (*when.shape, *extra))
        u = np.reshape(when - self.t_s[i], (*when.shape, *extra)) / step
        late, early = u > 1, u < 0
        u = np.clip(u, 0.0, 1.0)
        a, b, va, vb = self.state[i], self.state[i + 1], step * self.rate[i], step * self.rate[i + 1]
        if derivative == 0:
            value = (
                (1 + 2 * u) * (1 - u) ** 2 * a + u * (1 - u) ** 2 * va + u * u * (3 - 2 * u) * b + u * u * (u - 1) * vb
            )
            over = np.where(late, np.reshape(when - self.t_s[-1], u.shape), 0.0)
            return np.asarray(value + over * self.rate[i + 1])
        slope = (6 * u * (1 - u) * (b - a) + (1 - u) * (1 - 3 * u) * va + u * (3 * u - 2) * vb) / step
        return np.asarray(np.where(early, 0.0, slope))


def evenly(count: int, step: float) -> Floats:
    """0, step, 2 step, ...: (count,)."""
    values: Floats = step * np.arange(count, dtype=float)
    return values


def in_world(plane_m: ArrayLike, y_m: float = 0.0) -> Floats:
    """Points (..., 3) of the world from (..., 2) of x and z in the plane of motion."""
    p = np.asarray(plane_m, dtype=float)
    return np.stack([p[..., 0], np.full(p.shape[:-1], y_m), p[..., 1]], axis=-1)


def runge_kutta(rate: Callable[[float, Floats], Floats], t: float, y: Floats, step: float) -> Floats:
    """One classical fourth-order step of y' = rate(t, y)."""
    k1 = rate(t, y)
    k2 = rate(t + step / 2, y + step / 2 * k1)
    k3 = rate(t + step / 2, y + step / 2 * k2)
    k4 = rate(t + step, y + step * k3)
    new: Floats = y + step / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
    return new
