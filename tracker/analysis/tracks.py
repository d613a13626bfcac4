"""What the laws are given, and what they give back. NaN stands where nothing was measured."""

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

__all__ = ["Estimate", "Evaluation", "Finding", "PayoutTrack", "Track"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Track:
    """A free end, top end or dropped object on the plane of motion. All (n,)."""

    t_s: Floats  # true time at which the point was seen
    x_m: Floats
    z_m: Floats
    u_m: Floats  # each frame's independent standard uncertainty of z


@dataclass(frozen=True, slots=True, eq=False)
class PayoutTrack:
    """The arc of a payout and the speed of its line at the rim. All (n,)."""

    t_s: Floats  # the apex's time; where there is no arc, the frame's
    apex_z_m: Floats
    u_apex_m: Floats
    width_m: Floats
    radius_m: Floats  # of curvature at the apex
    speed_mps: Floats
    u_speed_mps: Floats
    paid_out_m: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Estimate:
    """One value with the part of its uncertainty that comes from scatter alone."""

    value: float
    unit: str
    u_random: float
    dof: float
    window_s: tuple[float, float] | None
    definition: str
    extra: Mapping[str, object] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Finding:
    """Something that the analysis noticed, to be said to the user."""

    code: str
    says: str
    damage: str = ""
    remedy: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Evaluation:
    """What a law made of a track: values, what is missing and why, what was noticed, curves to draw."""

    estimates: dict[str, Estimate] = field(default_factory=dict)
    absent: dict[str, str] = field(default_factory=dict)  # quantity -> reason
    findings: tuple[Finding, ...] = ()
    curves: dict[str, Floats] = field(default_factory=dict)  # name -> (n, 2) of time and value
    window_s: tuple[float, float] | None = None
