"""How often the plane's 95 % intervals hold the truth: `python -m tests.studies.plane_coverage [cameras]`.

Random stations: camera, lens, board, offset, distance and datum are drawn, what a technician would write down is
drawn about the truth with the stated standard uncertainties, and the corners get independent noise and the smooth
bias that finders have. From each station lengths in the plane are measured through the fit and held against truth.
A drawn truth may have any lens within the stated prior: a study of the method, not of any particular phone.
"""

import sys
from dataclasses import dataclass

import numpy as np

from calibration.board import BoardFind, BoardSpec
from calibration.lens import Lens, LensPrior
from calibration.plane import AT, BIAS_REACH_SQUARES, PARAMETERS, U_BIAS_PX, Plane, fit_plane
from calibration.plane import _seen as seen_corners

__all__ = ["KINDS", "Case", "Station", "draw_station", "study"]

KINDS = ("distance", "distance, far offset", "lens file", "nothing but the board", "plumb line")


@dataclass(frozen=True, slots=True)
class Station:
    """A true plane and what is known of it."""

    truth: Plane
    fitted: Plane
    ends_px: np.ndarray  # (m, 2, 2), the two ends of each length to measure


@dataclass(frozen=True, slots=True)
class Case:
    """One length: what was measured, the truth, and its standard uncertainty [m]."""

    kind: str
    measured: float
    true: float
    u: float


def draw_station(rng: np.random.Generator, kind: str) -> Station | None:
    """One station, or None where the board does not come to lie in the picture."""
    size = (720, 1280)
    prior = LensPrior()
    spec = BoardSpec(square_m=float(rng.choice([0.02, 0.025, 0.03])))
    across, high = [(6, 9), (9, 6)][rng.integers(2)]
    rows, columns = np.mgrid[0:high, 0:across]
    grid = np.stack([columns.ravel(), rows.ravel()], axis=1)
    points_m = (grid - [(across - 1) / 2, (high - 1) / 2]) * spec.square_m
    distance = rng.uniform(1.0, 2.5)
    focal = rng.uniform(0.85, 1.4) * max(size)
    offset = rng.uniform(-0.03, 0.03) if kind != "distance, far offset" else rng.uniform(0.05, 0.2)
    u_offset = 0.003

    theta = np.zeros(len(PARAMETERS))
    theta[AT["turn_x"]:AT["turn_z"] + 1] = rng.normal(0, np.radians([4.0, 4.0, 1.0]))
    middle_px = rng.uniform([0.3, 0.25], [0.7, 0.75]) * size
    theta[AT["log_focal"]] = np.log(focal)
    theta[AT["cx"]:AT["cy"] + 1] = (np.array(size) - 1) / 2 + rng.normal(0, prior.u_centre * max(size), 2)
    theta[AT["k1"]:AT["p2"] + 1] = rng.normal(0, [prior.u_k1, prior.u_k2, prior.u_p, prior.u_p])
    theta[AT["log_square"]] = rng.normal(0, 0.003)
    theta[AT["offset"]] = offset
    theta[AT["lean"]], theta[AT["yaw"]] = rng.normal(0, np.radians(0.5), 2)
    theta[AT["vertical"]] = rng.normal(0, np.radians(0.3))
    depth = distance + offset
    theta[AT["bearing_x"]:AT["bearing_y"] + 1] = (middle_px - theta[AT["cx"]:AT["cy"] + 1]) / focal
    theta[AT["log_depth"]] = np.log(depth)

    clean = seen_corners(theta, points_m)
    if not ((clean > 10) & (clean < np.array(size) - 11)).all():
        return None
    u_px = 0.04
    apart = np.linalg.norm(grid[:, None] - grid[None], axis=2) / BIAS_REACH_SQUARES
    bias = np.linalg.cholesky(U_BIAS_PX**2 * np.exp(-0.5 * apart**2) + 1e-9 * np.eye(len(grid)))
    noisy = clean + rng.normal(0, u_px, clean.shape) + bias @ rng.normal(size=clean.shape)
    square_px = float(np.linalg.norm(np.diff(clean[:across], axis=0), axis=1).mean())
    find = BoardFind(noisy, grid, points_m, u_px, (), False, 1, square_px)

    datum = rng.uniform([0.3, 0.15], [0.7, 0.85]) * size
    truth = Plane(theta, (), (float(datum[0]), float(datum[1])), size, clean)
    told = datum + rng.normal(0, 1.5, 2)
    extra: dict[str, object] = {}
    lens = None
    if kind != "nothing but the board":
        extra["distance_m"] = truth.distance_m * (1 + rng.normal(0, 0.02))
    if kind == "lens file":
        lens = _draw_lens(rng, theta, size)
    if kind == "plumb line":
        upright = truth.to_pixels([[0.25, -0.3], [0.25, 0.3]])
        plumb = upright + rng.normal(0, 0.7, (2, 2))
        if not ((plumb > 0) & (plumb < size)).all():
            return None
        extra["vertical"] = plumb
    fitted = fit_plane(find, spec, size=size, origin_px=(float(told[0]), float(told[1])), lens=lens,
                       offset_m=offset + rng.normal(0, u_offset), u_offset_m=u_offset, **extra)  # type: ignore[arg-type]
    ends = rng.uniform([0.15, 0.1], [0.85, 0.9], (4, 2, 2)) * size
    ends[0] = datum
    ends[0, 1, 1] += 0.3 * size[1] * (1 if datum[1] < size[1] / 2 else -1)  # a fall, or a rise
    return Station(truth, fitted, ends)


def _draw_lens(rng: np.random.Generator, theta: np.ndarray, size: tuple[int, int]) -> Lens:
    """A lens file about the true lens, with a covariance that is correlated as real ones are."""
    fx = float(np.exp(theta[AT["log_focal"]]))
    values = np.array([fx, fx, *theta[AT["cx"]:AT["k3"] + 1]])
    u = np.array([0.002 * fx, 0.002 * fx, 2.0, 2.0, 0.008, 0.03, 2e-4, 2e-4, 0.03])
    correlation = np.eye(9)
    correlation[0, 1] = correlation[1, 0] = 0.95
    correlation[4, 5] = correlation[5, 4] = -0.9
    correlation[5, 8] = correlation[8, 5] = -0.8
    correlation[4, 8] = correlation[8, 4] = 0.7
    cov = correlation * np.outer(u, u)
    drawn = rng.multivariate_normal(values, cov)
    return Lens(*(float(v) for v in drawn[:4]), k=drawn[4:], cov=cov, size=size)


def study(cameras: int, seed: int) -> list[Case]:
    """Measure lengths from random stations, in equal shares of all kinds."""
    rng = np.random.default_rng(seed)
    cases: list[Case] = []
    done = 0
    while done < cameras:
        kind = KINDS[done % len(KINDS)]
        station = draw_station(rng, kind)
        if station is None:
            continue
        done += 1
        flat = station.ends_px.reshape(-1, 2)
        true, measured = station.truth.to_metres(flat), station.fitted.to_metres(flat)
        effects = station.fitted.effects(flat)
        for n in range(len(station.ends_px)):
            a, b = 2 * n, 2 * n + 1
            length, truth = measured[b] - measured[a], true[b] - true[a]
            way = length / np.linalg.norm(length)
            u = float(np.sqrt((((effects[:, b] - effects[:, a]) @ way) ** 2).sum()))
            cases.append(Case(kind, float(np.linalg.norm(length)), float(np.linalg.norm(truth)), u))
    return cases


def main(cameras: int = 1000) -> None:
    """Print the table of docs: coverage, mean U, and bias of the scale."""
    cases = study(cameras, seed=20)
    print(f"{'what is known':24s} {'lengths':>8s} {'inside 95 %':>12s} {'mean U / %':>11s} {'bias / %':>9s} {'RMS z':>6s}")
    for kind in (*KINDS, "all"):
        some = [case for case in cases if kind in (case.kind, "all")]
        z = np.array([(case.measured - case.true) / case.u for case in some])
        inside = np.abs(z) < 1.96
        ratio = np.array([case.measured / case.true - 1 for case in some])
        big_u = np.array([1.96 * case.u / case.true for case in some])
        print(f"{kind:24s} {len(some):8d} {100 * inside.mean():12.2f} {100 * big_u.mean():11.3f} "
              f"{100 * ratio.mean():9.3f} {np.sqrt((z**2).mean()):6.3f}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1000)
