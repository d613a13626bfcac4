"""A chain of many links in a vertical plane, stepped through time: a folded chain let go, a hung chain that lands.

Point masses are joined by stiff massless links. At each moment the links' tensions follow from the demand that no link changes its
length: one equation a link, coupled to its two neighbours (a tridiagonal, positive definite system). Places and velocities are
stepped by the classical Runge-Kutta rule and put back onto the links' lengths afterwards, so that nothing drifts. No law of falling
chains is used anywhere: what the free end does comes out.

Lagrange multipliers of the first kind; the projection is that of E. Hairer, C. Lubich, G. Wanner, "Geometric Numerical Integration",
IV.4 (2nd ed., 2006; recalled).
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack
from scipy.optimize import brentq

from sample_clips.motion import Record, evenly

__all__ = ["Chain", "Landing", "fold_between", "land_on_surface", "let_go"]

Floats = NDArray[np.float64]
_KEEP_S = 1e-4  # moments kept
_TURN = 0.01  # no link turns further in one step [rad]


@dataclass(frozen=True, slots=True, eq=False)
class Chain:
    """What the chain is made of.

    Attributes
    ----------
    mass_kg : (n + 1,) array
        Of the point masses, in order; infinite: held in place.
    link_m : (n,) array
        Lengths of the links between them [m].
    gravity_mps2 : float
        Downwards.
    joint_damping_nms : float
        Torque at a joint per difference of the turning rates of its two links [N m s]; 0 loses no energy.
    """

    mass_kg: Floats
    link_m: Floats
    gravity_mps2: float = 9.80665
    joint_damping_nms: float = 0.0
    _ease: Floats = field(init=False, repr=False)  # 1/mass, 0 where held
    _weight: Floats = field(init=False, repr=False)  # acceleration of what is not held

    def __post_init__(self) -> None:
        if self.mass_kg.shape != (self.link_m.size + 1,):
            raise ValueError(f"Chain: {self.link_m.size} links join {self.link_m.size + 1} masses, got {self.mass_kg.size}.")
        if not ((self.mass_kg > 0).all() and (self.link_m > 0).all()):
            raise ValueError("Chain: masses and links must be positive.")
        object.__setattr__(self, "_ease", 1 / self.mass_kg)
        object.__setattr__(self, "_weight", np.where(np.isfinite(self.mass_kg)[:, None], [0.0, -self.gravity_mps2], 0.0))

    # --- forces ---------------------------------------------------------------------------------------------------

    def acceleration(self, place: Floats, velocity: Floats, push_n: Floats | None = None) -> Floats:
        """Accelerations (n + 1, 2) [m/s^2] of masses at these places and velocities (n + 1, 2), with outer forces `push_n` besides."""
        along, free, share = self._tensions(place, velocity, push_n)
        return free + self._pulls(along, share)

    def tension(self, place: Floats, velocity: Floats, push_n: Floats | None = None) -> Floats:
        """Pull in each link (n,) [N]."""
        _, _, share = self._tensions(place, velocity, push_n)
        pull: Floats = share * self.link_m
        return pull

    def _tensions(self, place: Floats, velocity: Floats, push_n: Floats | None) -> tuple[Floats, Floats, Floats]:
        """Links (n, 2), accelerations of masses set free (n + 1, 2), and each link's tension over its length (n,)."""
        along, apart = place[1:] - place[:-1], velocity[1:] - velocity[:-1]
        free = self._weight
        if push_n is not None:
            free = free + self._ease[:, None] * push_n
        if self.joint_damping_nms > 0:
            free = free + self._ease[:, None] * self._damping(along, apart)
        # that a link keeps its length means d . d'' + d' . d' = 0
        return along, free, self._solve(along, _dot(apart, apart) + _dot(along, free[1:] - free[:-1]))

    def _damping(self, along: Floats, apart: Floats) -> Floats:
        turning = (along[:, 0] * apart[:, 1] - along[:, 1] * apart[:, 0]) / self.link_m**2
        torque = np.zeros(self.link_m.size + 1)
        torque[1:-1] = self.joint_damping_nms * np.diff(turning)
        on_link = np.diff(torque) / self.link_m**2
        couple = np.stack([-along[:, 1], along[:, 0]], axis=1) * on_link[:, None]
        force = np.zeros((self.mass_kg.size, 2))
        force[1:] += couple
        force[:-1] -= couple
        return force

    def _solve(self, along: Floats, demand: Floats) -> Floats:
        """Tension over length of each link, from demands on d . d'' (all (n,))."""
        ease = self._ease
        middle = _dot(along, along) * (ease[:-1] + ease[1:])
        if along.shape[0] == 1:
            only: Floats = demand / middle
            return only
        beside = -ease[1:-1] * _dot(along[:-1], along[1:])
        _, _, solved, trouble = lapack.dptsv(middle, beside, demand)
        if trouble:
            raise ArithmeticError(f"Chain: the links' equations broke down at link {trouble}; use a smaller step.")
        return np.asarray(solved, dtype=float)

    def _pulls(self, along: Floats, share: Floats) -> Floats:
        """Accelerations of the masses by links of these tensions over length."""
        pull = share[:, None] * along
        total = np.zeros((self.mass_kg.size, 2))
        total[:-1] += pull
        total[1:] -= pull
        total *= self._ease[:, None]
        return total

    # --- stepping -------------------------------------------------------------------------------------------------

    def step(self, state: Floats, step_s: float, push_n: Floats | None = None) -> Floats:
        """One step of a state (2, n + 1, 2) of places and velocities, put back onto the links' lengths."""

        def rate(y: Floats) -> Floats:
            slope = np.empty_like(y)
            slope[0], slope[1] = y[1], self.acceleration(y[0], y[1], push_n)
            return slope

        k1 = rate(state)
        k2 = rate(state + step_s / 2 * k1)
        k3 = rate(state + step_s / 2 * k2)
        k4 = rate(state + step_s * k3)
        return self._onto_lengths(state + step_s / 6 * (k1 + 2 * (k2 + k3) + k4))

    def _onto_lengths(self, state: Floats) -> Floats:
        place, velocity = state
        for _ in range(2):
            along = place[1:] - place[:-1]
            place = place + self._pulls(along, self._solve(along, (_dot(along, along) - self.link_m**2) / 2))
        along = place[1:] - place[:-1]
        velocity = velocity + self._pulls(along, self._solve(along, _dot(along, velocity[1:] - velocity[:-1])))
        return np.stack([place, velocity])

    def turning(self, state: Floats) -> float:
        """The fastest link's turning rate [rad/s]."""
        apart = state[1, 1:] - state[1, :-1]
        return float(np.sqrt((_dot(apart, apart) / self.link_m**2).max()))

    def energy(self, place: Floats, velocity: Floats) -> Floats:
        """Kinetic and potential energy (...) [J] of places and velocities (..., n + 1, 2); held masses left out."""
        mass = np.where(np.isfinite(self.mass_kg), self.mass_kg, 0.0)
        kinetic = (mass * (velocity * velocity).sum(axis=-1)).sum(axis=-1) / 2
        total: Floats = kinetic + self.gravity_mps2 * (mass * place[..., 1]).sum(axis=-1)
        return total


def _dot(a: Floats, b: Floats) -> Floats:
    """Row by row (n,), of (n, 2)."""
    product: Floats = a[:, 0] * b[:, 0] + a[:, 1] * b[:, 1]
    return product


def let_go(chain: Chain, place: Floats, duration_s: float, *, velocity: Floats | None = None) -> Record:
    """What the chain does from a start.

    Parameters
    ----------
    chain : Chain
    place, velocity : (n + 1, 2) array
        x and z at the start [m], [m/s]; no velocity: at rest.
    duration_s : float
        How long [s].

    Returns
    -------
    Record
        Places (k, n + 1, 2) and velocities every 0.1 ms.

    Notes
    -----
    The step is 0.1 ms or less, so that no link turns by more than 0.01 rad in it.
    """
    state = np.stack([place, np.zeros_like(place) if velocity is None else velocity]).astype(float)
    count = int(np.ceil(duration_s / _KEEP_S))
    kept = np.empty((count + 1, *state.shape))
    kept[0] = state
    for k in range(count):
        parts = max(1, int(np.ceil(chain.turning(state) * _KEEP_S / _TURN)))
        for _ in range(parts):
            state = chain.step(state, _KEEP_S / parts)
        kept[k + 1] = state
    return Record(evenly(count + 1, _KEEP_S), kept[:, 0], kept[:, 1])


def fold_between(chain: Chain, spacing_m: float) -> Floats:
    """Places (n + 1, 2) of the chain hung at rest from both its ends, at equal height and a small distance.

    Parameters
    ----------
    chain : Chain
        Its masses but the first and last hang between; those two are taken to be held.
    spacing_m : float
        From the first mass, at (0, 0), to the last, at (spacing_m, 0) [m].

    Notes
    -----
    In rest the horizontal pull is the same in all links, and the vertical pull changes at each mass by its weight. The one unknown
    horizontal pull, and the share of the weight that each end takes, are found so that the chain ends where it should.
    """
    weight = np.where(np.isfinite(chain.mass_kg), chain.mass_kg, 0.0)[1:-1]
    if not 0 < spacing_m < chain.link_m.sum():
        raise ValueError(f"fold_between: spacing {spacing_m} m does not suit a chain of {chain.link_m.sum():.3f} m.")

    def links(level: float, first: float) -> Floats:
        down = first - np.r_[0.0, np.cumsum(weight)]
        arms: Floats = (chain.link_m / np.hypot(level, down))[:, None] * np.stack([np.full(down.size, level), -down], axis=1)
        return arms

    def first_pull(level: float) -> float:
        return float(brentq(lambda first: links(level, first)[:, 1].sum(), 0.0, weight.sum(), xtol=1e-15))

    total = float(weight.sum())
    level = brentq(lambda pull: links(pull, first_pull(pull))[:, 0].sum() - spacing_m, 1e-7 * total, 1e3 * total, xtol=1e-15)
    return np.vstack([[0.0, 0.0], np.cumsum(links(float(level), first_pull(float(level))), axis=0)])


# --- landing ----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class Landing:
    """A chain that falls upright onto a surface.

    Attributes
    ----------
    record : Record
        Places (k, n + 1, 2) of all masses, the top one first; a landed mass stays where it met the surface.
    landed_s : (n + 1,) array
        When each mass landed [s]; NaN: still in the air at the end.
    """

    record: Record
    landed_s: Floats


def land_on_surface(
    chain: Chain, place: Floats, surface_z_m: float, duration_s: float, *, pull: float, velocity: Floats | None = None
) -> Landing:
    """Let a hung chain fall onto a surface that stops each mass dead.

    Parameters
    ----------
    chain : Chain
        Top mass first; its links go slack when their lower mass has landed.
    place, velocity : (n + 1, 2) array
        Start, x and z [m], [m/s]; no velocity: at rest.
    surface_z_m : float
        Where a mass lands [m].
    duration_s : float
        [s]
    pull : float
        The landed part drags at the lowest mass in the air with this times (mass per length of the link that is landing) times (that
        mass' own speed) squared. It begins when the first mass lies.

    Returns
    -------
    Landing
    """
    state = np.stack([place, np.zeros_like(place) if velocity is None else velocity]).astype(float)
    count = int(np.ceil(duration_s / _KEEP_S))
    kept = np.empty((count + 1, *state.shape))
    kept[0] = state
    landed = np.full(chain.mass_kg.size, np.nan)
    flying = chain.mass_kg.size
    now = 0.0
    for k in range(count):
        until = (k + 1) * _KEEP_S
        while until - now > 1e-12 and flying > 1:
            new, used = _fall(chain, state[:, :flying], until - now, pull if flying < landed.size else 0.0, surface_z_m)
            state[:, :flying] = new
            now += used
            while flying > 1 and state[0, flying - 1, 1] <= surface_z_m + 1e-12:
                flying -= 1
                landed[flying] = now
                state[1, flying] = 0.0
        now = until
        kept[k + 1] = state
        if flying == 1:
            kept = kept[: k + 2]
            break
    return Landing(Record(evenly(len(kept), _KEEP_S), kept[:, 0], kept[:, 1]), landed)


def _fall(chain: Chain, state: Floats, step_s: float, pull: float, surface_z_m: float) -> tuple[Floats, float]:
    """One step of what is in the air, or a shorter one that ends when its lowest mass meets the surface."""
    air = Chain(chain.mass_kg[: state.shape[1]], chain.link_m[: state.shape[1] - 1], chain.gravity_mps2, chain.joint_damping_nms)
    push = np.zeros((state.shape[1], 2))
    landing = min(state.shape[1] - 1, chain.link_m.size - 1)
    speed = float(np.linalg.norm(state[1, -1]))
    push[-1, 1] = -pull * air.mass_kg[-1] / chain.link_m[landing] * speed**2
    new = air.step(state, step_s, push)
    if new[0, -1, 1] >= surface_z_m:
        return new, step_s

    def above(part: float) -> float:
        return float(air.step(state, part, push)[0, -1, 1] - surface_z_m)

    if above(1e-12) <= 0:
        return state, 0.0
    used = float(brentq(above, 1e-12, step_s, xtol=1e-13))
    return air.step(state, used, push), used
