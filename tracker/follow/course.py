"""Where a thing should be next, from where it was: short polynomials that compete by how well they foretold."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

__all__ = ["Course"]

Floats = NDArray[np.float64]

_KEPT = 6
_WAYS = ((2, 6), (2, 3), (1, 2), (0, 1))  # degree and number of last points; the first serves a fall, the last a rest
_FORGET = 0.6  # weight of earlier errors at each new one
_FLOOR_PX = 0.3


@dataclass(slots=True, eq=False)
class Course:
    """The last places of a thing and what follows from them. No law of motion: a whip, a fall and a rest are followed alike.

    Attributes
    ----------
    t_s, px : list
        Last times and places, (2,) each.
    """

    t_s: list[float] = field(default_factory=list)
    px: list[Floats] = field(default_factory=list)
    _errors: Floats = field(default_factory=lambda: np.array([1.0, 1.5, 1.2, 1.0]))
    _error_px: float = 1.0

    def add(self, t_s: float, px: Floats) -> None:
        """Add a place, and learn from it which of the polynomials foretells best."""
        if self.t_s:
            missed = np.array([float(np.hypot(*(self._extend(way, t_s)[0] - px))) for way in _WAYS])
            self._error_px = _FORGET * self._error_px + (1 - _FORGET) * float(missed[int(np.argmin(self._errors))])
            self._errors = _FORGET * self._errors + (1 - _FORGET) * missed
        self.t_s, self.px = [*self.t_s[1 - _KEPT :], t_s], [*self.px[1 - _KEPT :], px]

    def at(self, t_s: float) -> tuple[Floats, Floats, float]:
        """Place [px], velocity [px/s] and about how far off the place may be [px] at a later time."""
        place, velocity = self._extend(_WAYS[int(np.argmin(self._errors))], t_s)
        steps = 1.0
        if len(self.t_s) > 1:
            steps = max(1.0, (t_s - self.t_s[-1]) / max((self.t_s[-1] - self.t_s[0]) / (len(self.t_s) - 1), 1e-9))
        return place, velocity, (3.0 * self._error_px + _FLOOR_PX) * steps**2

    def _extend(self, way: tuple[int, int], t_s: float) -> tuple[Floats, Floats]:
        degree, count = way
        t = np.array(self.t_s[-count:])
        px = np.array(self.px[-count:])
        degree = min(degree, len(t) - 1)
        span = max(float(t[-1] - t[0]), 1e-6)
        basis = ((t - t[-1]) / span)[:, None] ** np.arange(degree + 1)
        c = np.linalg.solve(basis.T @ basis, basis.T @ px)  # two or three unknowns, times scaled: well conditioned
        ahead = (t_s - t[-1]) / span
        powers = ahead ** np.arange(degree + 1)
        rates = np.arange(degree + 1) * np.concatenate([[0.0], powers[:-1]]) / span
        return powers @ c, rates @ c
