"""How often stated 95 % intervals hold the truth, from points: ``python -m tests.studies.coverage [RUNS]``.

Truth is integrated from the equation of motion. Each run draws what a bench does to it: white and autoregressive
tracking noise, lost frames, a scale and a rate that are off, a bend of the tracked place along the path. The run then
goes through the same evaluation and budget as a measured one, with every cause pushed, and each interval is held
against the truth. The mean U stands beside the coverage: wide intervals are no merit.
"""

import sys
from collections.abc import Callable
from dataclasses import replace

import numpy as np
from scipy import stats
from scipy.integrate import solve_ivp

from tracker.analysis import free_drop, held_drop, payout, surface_drop
from tracker.analysis.budget import Pushed, make_quantities
from tracker.analysis.tracks import Evaluation, PayoutTrack, Track

__all__ = ["KINDS", "main", "study"]

G = 9.8123
FPS = 240.0
U_SCALE, U_RATE, U_BEND_M = 0.004, 1e-4, 1e-4
NOISE_M = (5e-5, 2e-4)  # drawn between
CORRELATION = (0.0, 0.5)


def _noise(rng: np.random.Generator, n: int) -> np.ndarray:
    sigma, rho = rng.uniform(*NOISE_M), rng.uniform(*CORRELATION)
    e = rng.normal(0, sigma, n)
    for i in range(1, n):
        e[i] = rho * e[i - 1] + np.sqrt(1 - rho**2) * e[i]
    return e


def _seen(rng: np.random.Generator, t: np.ndarray, z: np.ndarray) -> Track:
    """What a tracker and a clock make of a true motion: its own errors, and those of scale, rate and light."""
    phase = np.linspace(-1, 1, t.size)
    seen = z * (1 + rng.normal(0, U_SCALE)) + rng.normal(0, U_BEND_M) * (1 - phase**2) + _noise(rng, t.size)
    seen[rng.random(t.size) < 0.03] = np.nan
    return Track(t * (1 + rng.normal(0, U_RATE)), np.zeros(t.size), seen, np.full(t.size, np.mean(NOISE_M)))


def _measured(
    track: Track, evaluate: Callable[[Track, tuple[float, float] | None], Evaluation]
) -> tuple[dict, Evaluation]:
    """Quantities of a track, causes pushed as a measured run has them."""
    best = evaluate(track, None)
    if best.window_s is None:
        return {}, best
    window = best.window_s
    phase = np.linspace(-1, 1, track.t_s.size)

    def values(scale: float = 1.0, rate: float = 1.0, bend: float = 0.0) -> dict[str, float]:
        other = replace(track, t_s=track.t_s * rate, z_m=track.z_m * scale + bend * (1 - phase**2))
        found = evaluate(other, (window[0] * rate, window[1] * rate))
        return {name: item.value for name, item in found.estimates.items()}

    causes = [
        Pushed("scale", U_SCALE, "1", "station", "s", values(scale=1 + U_SCALE), values(scale=1 - U_SCALE)),
        Pushed("rate", U_RATE, "1", "station", "s", values(rate=1 + U_RATE), values(rate=1 - U_RATE)),
        Pushed("light along the path", U_BEND_M, "m", "run", "", values(bend=U_BEND_M), values(bend=-U_BEND_M)),
    ]
    return make_quantities(best.estimates, causes), best


def _best_fit(motion: Callable[[np.ndarray], np.ndarray], window: tuple[float, float]) -> float:
    t = np.linspace(*window, 400)
    return float(-2 * np.polyfit(t - t.mean(), motion(t), 2)[0])


def free(rng: np.random.Generator) -> tuple[dict, dict[str, float]]:
    """A ball without drag."""
    released = rng.uniform(0.06, 0.12)
    t = np.arange(rng.integers(90, 130)) / FPS
    track = _seen(rng, t, -0.5 * G * np.maximum(t - released, 0) ** 2)
    found, _ = _measured(track, lambda tr, w: free_drop.evaluate(tr, free_drop.FreeDropSetup(G, window_s=w)))
    return found, {"measured_gravity_mps2": G, "release_s": released}


def held(rng: np.random.Generator) -> tuple[dict, dict[str, float]]:
    """A folded line between inelastic and energy-conserving."""
    length, k, released = rng.uniform(0.6, 1.0), rng.uniform(0.6, 1.0), rng.uniform(0.06, 0.12)
    run = solve_ivp(lambda _, s: [s[1], G + k * s[1] ** 2 / (2 * (length - s[0]))], (0, 0.4), [0, 0], rtol=1e-9, atol=1e-11,
                    dense_output=True, events=lambda _, s: s[0] - 0.8 * length)  # fmt: skip
    stop = float(run.t_events[0][0])
    t = np.arange(0, released + stop, 1 / FPS)
    motion = lambda at: -run.sol(np.maximum(at - released, 0))[0]  # noqa: E731
    track = _seen(rng, t, motion(t))
    found, best = _measured(track, lambda tr, w: held_drop.evaluate(tr, held_drop.HeldDropSetup(G, length, w)))
    truth = {"release_s": released, "fold_coefficient": k}
    if best.window_s is not None:
        truth["effective_acceleration_mps2"] = _best_fit(motion, best.window_s)
    return found, truth


def surface(rng: np.random.Generator) -> tuple[dict, dict[str, float]]:
    """A line that lands, with a pull."""
    length, before, b, released = (
        rng.uniform(0.6, 1.0),
        rng.uniform(0.1, 0.2),
        rng.uniform(0.0, 0.15),
        rng.uniform(0.06, 0.1),
    )
    height, v0 = length + before, float(np.sqrt(2 * G * before))
    run = solve_ivp(lambda _, s: [-s[1], G + b * s[1] ** 2 / s[0]], (0, 0.5), [length, v0], rtol=1e-9, atol=1e-11, dense_output=True,
                    events=lambda _, s: s[0] - 0.15 * length)  # fmt: skip
    touch = released + float(np.sqrt(2 * before / G))
    t = np.arange(0, touch + float(run.t_events[0][0]), 1 / FPS)

    def motion(at: np.ndarray) -> np.ndarray:
        hung = -0.5 * G * np.maximum(at - released, 0) ** 2
        return np.where(at < touch, hung, run.sol(np.maximum(at - touch, 0))[0] - height)

    track = _seen(rng, t, motion(t))
    found, best = _measured(
        track,
        lambda tr, w: surface_drop.evaluate(
            tr, surface_drop.SurfaceDropSetup(G, length, height, 0.0, w, touch if w else None)
        ),
    )
    truth = {"release_s": released, "landing_coefficient": b, "first_touch_s": touch}
    if best.window_s is not None:
        truth["effective_acceleration_mps2"] = _best_fit(motion, best.window_s)
        end = best.window_s[1]
        fall = length - float(run.sol(end - touch)[0])
        truth["lead_over_free_fall_s"] = (-v0 + float(np.sqrt(v0**2 + 2 * G * fall))) / G - (end - touch)
    return found, truth


def arc(rng: np.random.Generator) -> tuple[dict, dict[str, float]]:
    """A payout with ripples on its arc."""
    t = np.arange(220) / FPS
    h = rng.uniform(0.1, 0.3) * np.tanh(t / 0.15) + 0.002 * np.sin(2 * np.pi * rng.uniform(3, 8) * t)
    v = rng.uniform(2, 5) * np.tanh(t / 0.12) * (1 + 0.01 * np.sin(2 * np.pi * 4 * t))
    scale, rate = 1 + rng.normal(0, U_SCALE), 1 + rng.normal(0, U_RATE)
    nan = np.full(t.size, np.nan)
    track = PayoutTrack(t * rate, h * scale + _noise(rng, t.size), np.full(t.size, np.mean(NOISE_M)), nan, nan,
                        v * scale / rate + 60 * _noise(rng, t.size), np.full(t.size, 60 * np.mean(NOISE_M)), nan)  # fmt: skip

    def evaluate(a: float, b: float, window: tuple[float, float] | None) -> Evaluation:
        other = replace(track, t_s=track.t_s * b, apex_z_m=track.apex_z_m * a, speed_mps=track.speed_mps * a / b)
        return payout.evaluate(other, payout.PayoutSetup(G, window_s=window))

    best = evaluate(1, 1, None)
    window = best.window_s
    assert window is not None

    def values(a: float = 1.0, b: float = 1.0) -> dict[str, float]:
        return {n: e.value for n, e in evaluate(a, b, (window[0] * b, window[1] * b)).estimates.items()}

    causes = [
        Pushed("scale", U_SCALE, "1", "station", "s", values(a=1 + U_SCALE), values(a=1 - U_SCALE)),
        Pushed("rate", U_RATE, "1", "station", "s", values(b=1 + U_RATE), values(b=1 - U_RATE)),
    ]
    inside = (track.t_s >= window[0] - 1e-9) & (track.t_s <= window[1] + 1e-9)
    return make_quantities(best.estimates, causes), {
        "arc_height_m": float(h[inside].mean()),
        "line_speed_mps": float(v[inside].mean()),
    }


KINDS: dict[str, Callable[[np.random.Generator], tuple[dict, dict[str, float]]]] = {
    "free-drop": free, "held-drop": held, "surface-drop": surface, "payout": arc,
}  # fmt: skip


def study(kind: str, runs: int, seed: int = 1) -> dict[str, np.ndarray]:
    """Error, U and u of each quantity over so many runs: name -> (runs, 3)."""
    rng = np.random.default_rng((seed, *kind.encode()))
    rows: dict[str, list[tuple[float, float, float]]] = {}
    for _ in range(runs):
        found, truth = KINDS[kind](rng)
        for name, goal in truth.items():
            if name in found:
                item = found[name]
                rows.setdefault(name, []).append((item.value - goal, item.U, item.u))
    return {name: np.array(values) for name, values in rows.items()}


def main(arguments: list[str]) -> int:
    """Print the table."""
    runs = int(arguments[0]) if arguments else 2000
    print(f"{runs} runs a kind; 95 % intervals")
    print(
        f"{'kind':13s} {'quantity':30s} {'runs':>5s} {'coverage %':>10s} {'mean U':>10s} {'mean e/u':>9s} {'SD e/u':>7s}"
    )
    for kind in KINDS:
        for name, rows in study(kind, runs).items():
            error, big_u, u = rows.T
            z = error / u
            covered = 100 * np.mean(np.abs(error) <= big_u)
            print(f"{kind:13s} {name:30s} {len(z):5d} {covered:10.2f} {big_u.mean():10.3g} {z.mean():9.3f} {z.std():7.3f}")
    low, high = (100 * stats.binom.ppf(q, runs, 0.95) / runs for q in (0.005, 0.995))
    print(f"chance alone leaves a true 95 % between {low:.1f} and {high:.1f} %")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
