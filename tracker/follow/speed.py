"""Line speed at the rim, from marks and texture that move along the line.

For a line that does not stretch, the length along it from the rim to any bit of it grows at the speed with which
line crosses the rim, whatever the arc does meanwhile: read in that coordinate, both legs give the rim's speed. So
every sight of a mark is one equation

    S(t) - M = sigma,

S(t) the length paid out at the time that very place was seen, M the mark's place on the line. S is a cubic spline
under a penalty on its third derivative whose weight the data choose by leaving out whole stretches of frames in
turn (neighbouring frames share errors, and leaving out single ones would take those for motion); marks of known
spacing tie their M together, so that nothing drifts. The texture adds displacements known modulo its pitch. They
join where the marks say beyond doubt which whole number of pitches belongs to them; without marks the speed is
unwrapped from rest if the clip shows the rest, else it is given with its other candidates and called ambiguous.
"""

import itertools
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline
from scipy.linalg import cho_factor, cho_solve

from tracker.follow.marks import MarkTrack

__all__ = ["SpeedSeries", "TextureSteps", "Verdict", "alias_candidates", "speed_series"]

Floats = NDArray[np.float64]
Verdict = Literal["sure", "ambiguous", "none"]

_KNOT_FRAMES = 4.0
_MOST_KNOTS = 500
_REACH_FRAMES = 6  # a frame farther than this from any observation has no speed
_U_RATIO = 0.05  # of spacing or pitch as measured to as stated, before anything is measured
_U_PLACEMENT = 0.005  # relative, of one mark's place on the line where nothing else is said
_ODD_RATIO = 0.06
_MOST_ACCELERATION = 100.0  # m/s^2
_USUAL_BENDS, _ADAPTED_ROUNDS = 3.0, 2  # where the speed bends more often than usual, it is smoothed less
_POWERS = np.arange(-2.0, 5.01, 0.5)
_BLOCK_FRAMES, _FOLDS = (4.0, 12.0), 4  # a twentieth of the clip, but no fewer and no more
_MOST_HEAVIER = 4


@dataclass(frozen=True, slots=True, eq=False)
class TextureSteps:
    """Displacements of the texture between frames k and k + 1, modulo the pitch.

    Attributes
    ----------
    step_m : (n - 1,) array
        In (-pitch/2, pitch/2].
    u_m : (n - 1,) array
        Infinite where there is no texture.
    from_s, to_s : (n - 1,) arrays
        The mean times at which the pieces of line were seen in the two frames.
    pitch_m : float
    """

    step_m: Floats
    u_m: Floats
    from_s: Floats
    to_s: Floats
    pitch_m: float


@dataclass(frozen=True, slots=True, eq=False)
class SpeedSeries:
    """Line speed at the rim and length paid out.

    Attributes
    ----------
    t_s, v_mps, u_v_mps, paid_out_m, u_paid_out_m : (n,) arrays
        Per frame; NaN where nothing carries a speed. The uncertainties are each frame's independent part.
    verdict : (n,) array of str
        "sure", "ambiguous" or "none".
    candidates_mps : tuple of (n,) arrays
        The other speeds that fit as well where the verdict is ambiguous, the stated one apart.
    basis : str
        What it rests on, one sentence.
    mark_ratio, u_mark_ratio : float
        Marks' spacing as measured along the line over the spacing stated; NaN without two marks.
    pitch_ratio, u_pitch_ratio : float
        The same of the texture's pitch; NaN where it was not measured.
    alias_step_mps : float
        Pitch times frame rate: speeds that far apart look alike in the texture; NaN without texture.
    """

    t_s: Floats
    v_mps: Floats
    u_v_mps: Floats
    paid_out_m: Floats
    u_paid_out_m: Floats
    verdict: NDArray[np.str_]
    candidates_mps: tuple[Floats, ...]
    basis: str
    mark_ratio: float
    u_mark_ratio: float
    pitch_ratio: float
    u_pitch_ratio: float
    alias_step_mps: float


def alias_candidates(v_mps: float, pitch_m: float, fps: float, most_mps: float) -> Floats:
    """All speeds from 0 to `most_mps` that a texture of this pitch cannot tell apart at this frame rate."""
    step = pitch_m * fps
    lowest = v_mps % step
    return np.arange(lowest, most_mps + 1e-12, step)


def speed_series(
    tracks: list[MarkTrack],
    texture: TextureSteps | None,
    frame_s: Floats,
    at_s: Floats,
    *,
    spacing_m: float | None = None,
    most_mps: float = 15.0,
    at_rest_first: bool = False,
) -> SpeedSeries:
    """Speed and length paid out of a clip.

    Parameters
    ----------
    tracks : list of MarkTrack
    texture : TextureSteps or None
    frame_s : (n,) array
        True time of the frames [s].
    at_s : (n,) array
        Times at which the speed is wanted [s].
    spacing_m : float or None
        Of the marks, as stated.
    most_mps : float
        Candidates up to this speed are listed.
    at_rest_first : bool
        The picture shows that the line was at rest in the first frames.
    """
    if tracks:
        return _from_marks(tracks, texture, frame_s, at_s, spacing_m)
    if texture is not None and np.isfinite(texture.u_m).mean() > 0.3:
        return _from_texture(texture, frame_s, at_s, most_mps, at_rest_first)
    return _nothing(at_s, "No marks and no texture that could carry a speed were seen along the line.")


# marks --------------------------------------------------------------------------------------------------------------


def _from_marks(
    tracks: list[MarkTrack], texture: TextureSteps | None, frame_s: Floats, at_s: Floats, spacing_m: float | None
) -> SpeedSeries:
    tracks = _on_the_comb(tracks, spacing_m)
    rows = _mark_rows(tracks)
    fit = _Fit(frame_s, rows, spacing_m)
    fit.solve()
    pitch_ratio = u_pitch = alias = np.nan
    basis = f"{len(tracks)} marks followed along the line, {rows.t.size} sights"
    if texture is not None and np.isfinite(texture.u_m).sum() >= 5:
        alias = texture.pitch_m / float(np.median(np.diff(frame_s)))
        joined = _join(texture, fit)
        if joined is not None:
            joined = replace(joined, u=np.hypot(joined.u, fit.common_error()))
            fit = _Fit(frame_s, rows, spacing_m, joined)
            fit.solve()
            pitch_ratio, u_pitch = 1.0 / (1.0 + fit.stretch), fit.u_stretch
            basis += ", with the texture's displacement between frames"
        else:
            basis += "; the texture does not follow them and is left out"
    v, u_v, paid, u_paid = fit.at(at_s)
    near = _near(at_s, np.concatenate([rows.t, texture.from_s[np.isfinite(texture.u_m)]] if texture is not None else [rows.t]), frame_s)
    conflict = spacing_m is not None and len(tracks) > 1 and (fit.tied == 0 or abs(fit.ratio - 1.0) > _ODD_RATIO)
    if conflict:  # then they are not the marks that the sheet means, or were joined wrongly
        basis += "; they do not lie a whole number of their stated spacings apart, by more than a scale error explains"
    verdict = np.where(near, "ambiguous" if conflict else "sure", "none")
    v, u_v, paid, u_paid = (np.where(near, x, np.nan) for x in (v, u_v, paid, u_paid))
    return SpeedSeries(
        at_s, v, u_v, paid, u_paid, verdict.astype(np.str_), (), basis + ".", fit.ratio, fit.u_ratio,
        pitch_ratio, u_pitch, alias,
    )  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class _Rows:
    """Sights as equations: S(t) - M[track] = sigma, each with its u."""

    t: Floats
    sigma: Floats
    u: Floats
    track: NDArray[np.intp]


def _mark_rows(tracks: list[MarkTrack]) -> _Rows:
    sights = [(s.t_s, s.sigma_m, s.u_m, j) for j, track in enumerate(tracks) for s in track.sights]
    t, sigma, u, j = (np.array(x) for x in zip(*sights, strict=True))
    return _Rows(t, sigma, u, j.astype(np.intp))


def _on_the_comb(tracks: list[MarkTrack], spacing_m: float | None) -> list[MarkTrack]:
    """Tracks that overlap in time and lie whole spacings apart; what lies elsewhere on the line is no mark."""
    if spacing_m is None or len(tracks) < 3:
        return tracks
    n = len(tracks)
    apart = np.full((n, n), np.nan)
    for i in range(n):
        at_i = {s.frame: s.sigma_m for s in tracks[i].sights}
        for j in range(i + 1, n):
            both = [at_i[s.frame] - s.sigma_m for s in tracks[j].sights if s.frame in at_i]
            if len(both) >= 3:
                whole = float(np.median(both)) / spacing_m
                apart[i, j] = apart[j, i] = abs(whole - round(whole)) if round(whole) != 0 else 0.5
    fits = (apart < 0.08) * np.array([len(t.sights) for t in tracks])[None, :]
    against = (apart >= 0.08) * np.array([len(t.sights) for t in tracks])[None, :]
    keep = [t for t, yes, no in zip(tracks, fits.sum(axis=1), against.sum(axis=1), strict=True) if yes >= no]
    return keep or tracks


@dataclass(frozen=True, slots=True, eq=False)
class _Joined:
    """Texture made a length: S(t) (1 + stretch) + start = length."""

    t: Floats
    length: Floats
    u: Floats
    piece: NDArray[np.intp]


def _join(texture: TextureSteps, fit: "_Fit") -> _Joined | None:
    """Add whole pitches to the texture's steps where the marks leave no doubt which."""
    a, b = fit.at(texture.from_s), fit.at(texture.to_s)
    expected = b[2] - a[2]
    u_expected = np.hypot(a[1] * (texture.to_s - texture.from_s), 2e-4)
    p = texture.pitch_m
    have = np.isfinite(texture.u_m)
    off = texture.step_m - expected
    step = texture.step_m - p * np.round(off / p)
    odd = step - expected
    clear = have & (u_expected < p / 8) & (np.abs(odd) < 0.3 * p)
    if clear.sum() < max(5, 0.4 * have.sum()):
        return None
    pieces = np.cumsum(~clear)
    piece_of = np.concatenate([[0], pieces])  # length k belongs to the piece that begins after the last break
    length = np.concatenate([[0.0], np.cumsum(np.where(clear, step, expected))])
    t = np.concatenate([texture.from_s[:1], texture.to_s])
    used = np.concatenate([clear[:1], clear]) | np.concatenate([clear, clear[-1:]])
    u = np.concatenate([texture.u_m[:1], texture.u_m])
    u = np.where(np.isfinite(u), u, p / 4)
    return _Joined(t[used], length[used], np.maximum(u[used], 2e-5), piece_of[used])


class _Fit:
    """Penalised least squares for S(t), the marks' places, the spacing's ratio and the texture's stretch."""

    def __init__(self, frame_s: Floats, rows: _Rows, spacing_m: float | None, joined: _Joined | None = None) -> None:
        start = min(rows.t.min(), frame_s[0] if joined is None else joined.t.min()) - 1e-9
        end = max(rows.t.max(), start + 1e-6, -np.inf if joined is None else joined.t.max()) + 1e-9
        period = float(np.median(np.diff(frame_s)))
        count = int(np.clip(np.ceil((end - start) / (_KNOT_FRAMES * period)), 4, _MOST_KNOTS))
        step = (end - start) / count
        self.knots = start + step * np.arange(-3, count + 4)
        self.size = count + 3
        self.start, self.end = start, end
        self.rows, self.joined, self.spacing_m = rows, joined, spacing_m
        self.marks = int(rows.track.max()) + 1
        self.stretch = self.u_stretch = self.ratio = self.u_ratio = float("nan")
        self.foretold = 0.0
        self.tied = 0  # pairs of marks that lie a whole number of spacings apart

    def basis(self, t: Floats, order: int = 0) -> Floats:
        inside = np.clip(t, self.start, self.end)
        if order == 0:
            return np.asarray(BSpline.design_matrix(inside, self.knots, 3).toarray())
        spline = BSpline(self.knots, np.eye(self.size), 3).derivative(order)
        return np.asarray(spline(inside))

    def solve(self) -> None:
        """Set up, choose the penalty's weight, solve, and scale the covariance by what the residuals show."""
        x, y, u, frame = self._equations()
        short, long = _BLOCK_FRAMES
        group = np.floor(frame / np.clip(frame.max() / 20, short, long)).astype(np.intp)
        held_x, held_y, held_u = self._held()
        penalty = np.zeros((x.shape[1], x.shape[1]))
        d = np.diff(np.eye(self.size), n=3, axis=0)
        penalty[: self.size, : self.size] = d.T @ d
        weight = 1.0 / u**2
        power = 0.0
        for turn in range(4):  # reweighted: a sight that belongs to another mark or to a glint must not pull
            if turn in (0, 2):
                power = self._power(x, y, weight, penalty, held_x, held_y, held_u, group)
            answer, normal = self._solved(*self._gram(x, y, weight), 10.0**power * penalty, held_x, held_y, held_u)
            left = (y - x @ answer) / u
            scale = max(1.4826 * float(np.median(np.abs(left))), 1e-3)
            weight = np.minimum(1.0, 2.5 * scale / np.maximum(np.abs(left), 1e-12)) / u**2
        penalty, weight = self._adapted(x, y, u, power, d, answer, weight, penalty, held_x, held_y, held_u)
        answer, normal = self._solved(*self._gram(x, y, weight), 10.0**power * penalty, held_x, held_y, held_u)
        left = (y - x @ answer) / u
        if frame.max() >= 6 * long:  # errors that neighbours share show over longer stretches only
            found = self.foretold
            self._power(x, y, weight, penalty, held_x, held_y, held_u, np.floor(frame / long).astype(np.intp))
            self.foretold = max(found, self.foretold)
        self.answer = answer
        inverse = cho_solve(normal, np.eye(x.shape[1]))
        dof = max(y.size - float(np.trace(inverse @ (x.T @ (weight[:, None] * x)))), 1.0)
        variance = float((left**2 * weight * u**2).sum()) / dof
        self.cov = inverse * max(variance, self.foretold, 1e-6)
        last = self.size + self.marks
        if self.spacing_m is not None:
            self.ratio, self.u_ratio = float(answer[last]), float(np.sqrt(self.cov[last, last]))
            if self.marks < 2:
                self.ratio = self.u_ratio = float("nan")
        if self.joined is not None:
            self.stretch, self.u_stretch = float(answer[last + 1]), float(np.sqrt(self.cov[last + 1, last + 1]))

    def _adapted(
        self, x: Floats, y: Floats, u: Floats, power: float, d: Floats, answer: Floats, weight: Floats, penalty: Floats,
        held_x: Floats, held_y: Floats, held_u: Floats,
    ) -> tuple[Floats, Floats]:  # fmt: skip
        """Penalty and weights once more, lighter where the speed bends much more than it usually does.

        One weight for a whole run is a compromise between its calm stretches and a snag: it rounds the snag off. Where a
        first fit bends by more than a few times the usual, the penalty there is lowered by the square of that.
        """
        for _ in range(_ADAPTED_ROUNDS):
            bend = np.abs(d @ answer[: self.size])
            light = 1.0 / (1.0 + (bend / (_USUAL_BENDS * float(np.median(bend)) + 1e-30)) ** 2)
            penalty = penalty.copy()
            penalty[: self.size, : self.size] = d.T @ (light[:, None] * d)
            answer, _ = self._solved(*self._gram(x, y, weight), 10.0**power * penalty, held_x, held_y, held_u)
            left = (y - x @ answer) / u
            scale = max(1.4826 * float(np.median(np.abs(left))), 1e-3)
            weight = np.minimum(1.0, 2.5 * scale / np.maximum(np.abs(left), 1e-12)) / u**2
        return penalty, weight

    def _equations(self) -> tuple[Floats, Floats, Floats, Floats]:
        """Design, right-hand side, u and number of the frame of every observation."""
        r, j = self.rows, self.joined
        pieces = 0 if j is None else int(j.piece.max()) + 1
        width = self.size + self.marks + 2 + pieces
        x = np.zeros((r.t.size, width))
        x[:, : self.size] = self.basis(r.t)
        x[np.arange(r.t.size), self.size + r.track] = -1.0
        y, u, t = r.sigma, r.u, r.t
        if j is not None:
            more = np.zeros((j.t.size, width))
            more[:, : self.size] = self.basis(j.t)
            more[:, self.size + self.marks + 1] = j.length - j.length.mean()
            more[np.arange(j.t.size), self.size + self.marks + 2 + j.piece] = 1.0
            x, y, u = np.concatenate([x, more]), np.concatenate([y, j.length]), np.concatenate([u, j.u])
            t = np.concatenate([t, j.t])
        period = (self.knots[1] - self.knots[0]) / _KNOT_FRAMES
        return x, y, u, np.floor((t - self.start) / period)

    def _held(self) -> tuple[Floats, Floats, Floats]:
        """What is known beforehand: S = 0 at the start, the spacing of the marks, ratios near one."""
        j = self.joined
        width = self.size + self.marks + 2 + (0 if j is None else int(j.piece.max()) + 1)
        first = np.zeros((1, width))
        first[0, : self.size] = self.basis(np.array([self.start]))[0]
        held, y, u = [first[0]], [0.0], [1e-6]
        ratio = np.zeros(width)
        ratio[self.size + self.marks] = 1.0
        held, y, u = [*held, ratio], [*y, 1.0], [*u, _U_RATIO]
        stretch = np.zeros(width)
        stretch[self.size + self.marks + 1] = 1.0
        held, y, u = [*held, stretch], [*y, 0.0], [*u, _U_RATIO]
        if self.spacing_m is not None:
            rows = self._spacings(width)
            self.tied = len(rows)
            for row in rows:
                held, y, u = [*held, row], [*y, 0.0], [*u, _U_PLACEMENT * self.spacing_m]
        return np.array(held), np.array(y), np.array(u)

    def _spacings(self, width: int) -> list[Floats]:
        """Neighbouring marks lie a whole number of spacings apart, seen in common frames or judged by their pace."""
        assert self.spacing_m is not None
        out = []
        r = self.rows
        place = np.array([_rough_place(r, k) for k in range(self.marks)])
        order = np.argsort(place)
        for a, b in itertools.pairwise(order):
            whole = (place[b] - place[a]) / self.spacing_m
            if round(whole) >= 1 and abs(whole - round(whole)) < 0.1 * max(1, round(whole)) and round(whole) <= 3:
                row = np.zeros(width)
                row[self.size + b], row[self.size + a] = 1.0, -1.0
                row[self.size + self.marks] = -round(whole) * self.spacing_m
                out.append(row)
        return out

    def _power(
        self, x: Floats, y: Floats, weight: Floats, penalty: Floats,
        held_x: Floats, held_y: Floats, held_u: Floats, group: NDArray[np.intp],
    ) -> float:  # fmt: skip
        """Weight of the penalty (as a power of ten) that foretells stretches of frames that were left out.

        The heaviest is taken that does no worse than the best by more than one standard error of the difference
        between the stretches: the score is flat on the side of too little smoothing (the usual rule for choosing a
        model by cross-validation, Hastie, Tibshirani, Friedman, The Elements of Statistical Learning, 7.10). How much
        the left-out stretches' means are off, over what independent errors would make of them, goes into the u: sights in
        one frame share the error of the rim's crossing, neighbouring frames that of their shape.
        """
        scores = np.zeros((_POWERS.size, int(group.max()) + 1))
        expected = np.ones_like(scores)
        fold = group % _FOLDS
        grams = [self._gram(x[fold == k], y[fold == k], weight[fold == k]) for k in range(_FOLDS)]
        whole = (sum(g[0] for g in grams), sum(g[1] for g in grams))
        for k in range(_FOLDS):
            out = fold == k
            if not out.any() or out.all():
                continue
            number, member = np.unique(group[out], return_inverse=True)
            count = np.bincount(member, weight[out])
            mean_x = np.zeros((number.size, x.shape[1]))
            np.add.at(mean_x, member, weight[out, None] * x[out])
            mean_x /= count[:, None]
            mean_y = np.bincount(member, weight[out] * y[out]) / count
            rest = (whole[0] - grams[k][0], whole[1] - grams[k][1])
            for i, power in enumerate(_POWERS):
                answer, factor = self._solved(*rest, 10.0**power * penalty, held_x, held_y, held_u)
                scores[i, number] = count * (mean_y - mean_x @ answer) ** 2
                expected[i, number] = 1.0 + count * (mean_x * cho_solve(factor, mean_x.T).T).sum(axis=1)
        best = int(np.argmin(scores.sum(axis=1)))
        worse = scores - scores[best]
        error = worse.std(axis=1) * np.sqrt(worse.shape[1])
        chosen = int(np.nonzero(worse.sum(axis=1) <= error)[0].max(initial=best))
        chosen = min(chosen, best + _MOST_HEAVIER)  # of few stretches the standard error itself is unsure
        told = scores[chosen] > 0
        if told.any():
            self.foretold = float(np.mean(scores[chosen][told] / expected[chosen][told]))
        return float(_POWERS[chosen])

    @staticmethod
    def _gram(x: Floats, y: Floats, weight: Floats) -> tuple[Floats, Floats]:
        xw = x * weight[:, None]
        return x.T @ xw, xw.T @ y

    def _solved(
        self, gram: Floats, right: Floats, penalty: Floats, held_x: Floats, held_y: Floats, held_u: Floats
    ) -> tuple[Floats, tuple[Floats, bool]]:
        held_w = held_x / held_u[:, None] ** 2
        base = float(np.trace(gram[: self.size, : self.size])) / self.size
        tiny = 1e-9 * max(float(np.trace(gram)) / gram.shape[0], 1.0)
        normal = gram + held_x.T @ held_w + base * penalty
        normal[np.diag_indices_from(normal)] += tiny
        factor = cho_factor(normal, check_finite=False)
        return cho_solve(factor, right + held_w.T @ held_y, check_finite=False), factor

    def common_error(self) -> float:
        """What all sights of a frame are off together [m]: the rim's crossing, which the texture shares with the marks."""
        left = self.rows.sigma - (self.basis(self.rows.t) @ self.answer[: self.size] - self.answer[self.size + self.rows.track])
        return 1.4826 * float(np.median(np.abs(left)))

    def at(self, t: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """Speed, its u, length paid out, its u, at the given times."""
        b0, b1 = self.basis(t), self.basis(t, 1)
        c = self.cov[: self.size, : self.size]
        s = self.answer[: self.size]
        u = [np.sqrt(np.maximum(np.einsum("ij,jk,ik->i", b, c, b), 0)) for b in (b1, b0)]
        return b1 @ s, u[0], b0 @ s, u[1]


def _rough_place(rows: _Rows, k: int) -> float:
    """Where mark k lies on the line: later entry, farther up. From common frames through all marks in between."""
    mine = rows.track == k
    return float(_rough_paid_out(rows)(rows.t[mine]).mean() - rows.sigma[mine].mean())


def _rough_paid_out(rows: _Rows):  # type: ignore[no-untyped-def]
    """S(t) by adding up the mean step of all marks between neighbouring times on a coarse grid."""
    order = np.argsort(rows.t)
    grid = np.linspace(rows.t.min(), rows.t.max(), 200)
    speed, count = np.zeros(grid.size - 1), np.zeros(grid.size - 1)
    for k in range(int(rows.track.max()) + 1):
        mine = order[rows.track[order] == k]
        t, s = rows.t[mine], rows.sigma[mine]
        inside = (grid[:-1] >= t[0]) & (grid[1:] <= t[-1])
        step = np.interp(grid[1:], t, s) - np.interp(grid[:-1], t, s)
        speed[inside] += step[inside]
        count[inside] += 1
    have = count > 0
    mean = np.interp(np.arange(count.size), np.nonzero(have)[0], speed[have] / count[have]) if have.any() else speed
    total = np.concatenate([[0.0], np.cumsum(mean)])
    return lambda t: np.interp(t, grid, total)


# texture alone ------------------------------------------------------------------------------------------------------


def _from_texture(
    texture: TextureSteps, frame_s: Floats, at_s: Floats, most_mps: float, at_rest_first: bool
) -> SpeedSeries:
    p = texture.pitch_m
    have = np.isfinite(texture.u_m)
    step = _unwrapped(texture, float(np.median(np.diff(frame_s))))
    dt = texture.to_s - texture.from_s
    length = np.concatenate([[0.0], np.cumsum(np.where(have, step, 0.0))])
    t = np.concatenate([texture.from_s[:1], texture.to_s])
    piece = np.concatenate([[0], np.cumsum(~have)])
    used = np.concatenate([have[:1], have]) | np.concatenate([have, have[-1:]])
    u = np.where(np.isfinite(texture.u_m), texture.u_m, p / 4)
    u = np.concatenate([u[:1], u])
    rows = _Rows(t[used], length[used], np.maximum(u[used], 2e-5), _renumber(piece[used]))
    fit = _Fit(frame_s, rows, None)
    fit.solve()
    v, u_v, paid, u_paid = fit.at(at_s)
    near = _near(at_s, t[used], frame_s)
    alias = p / float(np.median(dt))
    rest = at_rest_first and abs(float(np.nanmedian(step[:5]))) < 0.1 * p
    unbroken = bool(have.mean() > 0.9 and piece[-1] <= 0.1 * piece.size)
    sure = rest and unbroken
    others = tuple(
        np.where(near, v + k * alias, np.nan)
        for k in range(-30, 200)
        if k != 0 and np.nanmedian(v[near] + k * alias) > -0.1 * alias and np.nanmax(v[near] + k * alias) <= most_mps
    ) if near.any() else ()  # fmt: skip
    basis = "The texture's displacement between frames, " + (
        "unwrapped from rest." if sure else "known modulo its pitch only: no marks, and the clip does not show the line at rest."
    )
    verdict = np.where(near, "sure" if sure else "ambiguous", "none")
    v, u_v, paid, u_paid = (np.where(near, x, np.nan) for x in (v, u_v, paid, u_paid))
    return SpeedSeries(
        at_s, v, u_v, paid, u_paid, verdict.astype(np.str_), () if sure else others, basis,
        float("nan"), float("nan"), float("nan"), float("nan"), alias,
    )  # fmt: skip


def _unwrapped(texture: TextureSteps, period: float) -> Floats:
    """Steps with whole pitches added so that each follows from the two before it."""
    p = texture.pitch_m
    out = texture.step_m.copy()
    pace = 0.0
    previous = out[0]
    for k in range(1, out.size):
        if not np.isfinite(texture.u_m[k]):
            out[k] = previous
            continue
        expected = previous + np.clip(pace, -_MOST_ACCELERATION * period**2, _MOST_ACCELERATION * period**2)
        out[k] -= p * np.round((out[k] - expected) / p)
        pace = 0.7 * pace + 0.3 * (out[k] - previous)
        previous = out[k]
    return out


def _renumber(piece: NDArray[np.intp]) -> NDArray[np.intp]:
    return np.asarray(np.unique(piece, return_inverse=True)[1], dtype=np.intp)


def _near(at_s: Floats, seen_s: Floats, frame_s: Floats) -> NDArray[np.bool_]:
    reach = _REACH_FRAMES * float(np.median(np.diff(frame_s)))
    ordered = np.sort(seen_s)
    i = np.clip(np.searchsorted(ordered, at_s), 1, ordered.size - 1)
    return np.asarray(np.minimum(np.abs(at_s - ordered[i - 1]), np.abs(ordered[i] - at_s)) <= reach)


def _nothing(at_s: Floats, why: str) -> SpeedSeries:
    gap = np.full(at_s.shape, np.nan)
    return SpeedSeries(
        at_s, gap, gap, gap, gap, np.full(at_s.shape, "none"), (), why,
        float("nan"), float("nan"), float("nan"), float("nan"), float("nan"),
    )  # fmt: skip
