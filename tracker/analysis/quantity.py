"""One measured quantity with the budget of its uncertainty.

The budget is GUM's (JCGM 100:2008): each line is one source, its standard uncertainty u and its signed
sensitivity c, so that its part of the result is c u. Lines of one quantity are independent of each other;
what two quantities, runs or batches have in common is told by `shared` and `id`, so that a comparison can
cancel it.
"""

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from scipy import stats

__all__ = ["BudgetLine", "Quantity", "Shared", "quantity"]

Shared = Literal["run", "station", "board", "lens", "site"]


@dataclass(frozen=True, slots=True)
class BudgetLine:
    """One source of uncertainty of one quantity."""

    source: str  # in a technician's words: "board offset"
    u: float  # standard uncertainty of the source, in the source's own unit
    c: float  # signed sensitivity, unit of the quantity per unit of the source
    kind: Literal["A", "B"] = "B"  # from scatter (A) or from other knowledge (B)
    dof: float = np.inf  # effective degrees of freedom of u
    shared: Shared = "run"  # what else has this very error
    id: str = ""  # hash of the thing shared; empty for a run's own
    unit: str = ""  # unit of u

    @property
    def part(self) -> float:
        """Signed part of the quantity's uncertainty, c u, in the unit of the quantity."""
        return self.c * self.u


@dataclass(frozen=True, slots=True)
class Quantity:
    """A value with its standard and expanded uncertainty.

    `u_run` is the part that a second run on the same station does not share. `interval` covers 95 % and
    may lie unevenly about the value.
    """

    value: float
    unit: str
    u: float
    U: float
    k: float
    dof: float
    interval: tuple[float, float]
    u_run: float
    window_s: tuple[float, float] | None
    definition: str
    budget: tuple[BudgetLine, ...] = ()
    extra: dict[str, object] = field(default_factory=dict)  # at_z_m, drift, window in l/L and the like


def quantity(
    value: float,
    unit: str,
    lines: Iterable[BudgetLine],
    definition: str,
    window_s: tuple[float, float] | None = None,
    interval: tuple[float, float] | None = None,
    extra: dict[str, object] | None = None,
) -> Quantity:
    """Combine independent budget lines into a quantity with U for 95 % coverage.

    Parameters
    ----------
    value : float
        The estimate.
    unit : str
        Its unit, as in "m/s".
    lines : iterable of BudgetLine
        Independent sources.
    definition : str
        The measurand in one sentence.
    window_s : (float, float), optional
        True time the value was taken from and to [s].
    interval : (float, float), optional
        95 % interval where the normal one is wrong; U is then its longer arm.
    extra : dict, optional
        What else belongs to the value.

    Returns
    -------
    Quantity

    Notes
    -----
    JCGM 100:2008, 5.1.2 (combination), G.4.1 (Welch-Satterthwaite; effective degrees of freedom are cut
    to the integer below) and G.3.2 (k from Student's t).
    """
    ordered = tuple(sorted(lines, key=lambda line: -abs(line.part)))
    variances = np.array([line.part**2 for line in ordered])
    u = float(np.sqrt(variances.sum()))
    own = np.array([line.part**2 for line in ordered if line.shared == "run"])
    weight = sum(v**2 / line.dof for v, line in zip(variances, ordered, strict=True) if np.isfinite(line.dof))
    dof = float(np.inf) if weight == 0 else u**4 / weight
    k = 1.96 if not np.isfinite(dof) or dof > 1e6 else float(stats.t.ppf(0.975, max(1.0, np.floor(dof))))
    if interval is None:
        big_u, low, high = k * u, value - k * u, value + k * u
    else:
        low, high = interval
        big_u = max(value - low, high - value)
    return Quantity(
        value=float(value),
        unit=unit,
        u=u,
        U=float(big_u),
        k=k,
        dof=dof,
        interval=(float(low), float(high)),
        u_run=float(np.sqrt(own.sum())),
        window_s=window_s,
        definition=definition,
        budget=ordered,
        extra=extra or {},
    )
