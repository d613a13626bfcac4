"""Line speed: texture modulo its pitch, marks without it, honest about which; whole clips drawn here and shared ones."""

import csv
import tomllib
from itertools import pairwise
from types import SimpleNamespace

import numpy as np
import pytest
from skimage.registration import phase_cross_correlation

from calibration.board import BoardSpec, find_board
from calibration.clock import Clock
from calibration.plane import fit_plane
from tests.footage import clips
from tests.tracker.follow.line_pictures import Hoop, bare, draw, seen, wall
from tracker.clip import Clip
from tracker.follow.background import Background
from tracker.follow.marks import MarkSight, MarkTrack, follow_marks, see_marks
from tracker.follow.payout import follow_payout
from tracker.follow.speed import TextureSteps, alias_candidates, speed_series
from tracker.follow.texture import displacement_modulo_pitch, texture_phases

PITCH, FPS = 0.006, 240.0
PIXEL_M = 0.0008


def beads(paid_out, rng, length_m=0.7, noise=4.0):
    """Brightness along a beaded line, a sample a pixel: three harmonics of the pitch under uneven light."""
    sigma = np.arange(0.0, length_m, PIXEL_M)
    phase = 2 * np.pi * (sigma - paid_out) / PITCH
    light = 60 + 25 * np.cos(sigma * 9.0)
    bright = light * (1 + 0.5 * np.cos(phase) + 0.2 * np.cos(2 * phase + 0.7) + 0.1 * np.cos(3 * phase))
    return sigma, bright + rng.normal(0, noise, sigma.size)


def phases(paid_out, rng, **k):
    sigma, bright = beads(paid_out, rng, **k)
    return texture_phases(bright, sigma, np.zeros(sigma.size), np.ones(sigma.size, bool), PITCH, PITCH / PIXEL_M)


def clock_of(n, fps=FPS, readout=0.0, rows=480):
    return Clock(np.arange(n) / fps, readout, 1e-4, rows, "down", 1e-4, 0.0, fps, "test")


def test_displacement_agrees_with_phase_cross_correlation(rng):
    """Against scikit-image's registration of the same two lines (Guizar-Sicairos, Thurman, Fienup, Opt. Lett. 33, 156, 2008)."""
    for moved in (0.3e-3, 1.1e-3, -0.9e-3, 2.2e-3):
        a, b = beads(0.0, rng), beads(moved, rng)
        light = 60 + 25 * np.cos(a[0] * 9.0)
        shift, _, _ = phase_cross_correlation(b[1] / light, a[1] / light, upsample_factor=100, normalization=None)
        theirs = (shift[0] * PIXEL_M + PITCH / 2) % PITCH - PITCH / 2
        one, two = (texture_phases(x[1], x[0], 0 * x[0], np.ones(x[0].size, bool), PITCH, PITCH / PIXEL_M) for x in (a, b))
        ours, u, _ = displacement_modulo_pitch(one, two, PITCH)
        assert ours == pytest.approx(moved, abs=4 * u)
        assert ours == pytest.approx(theirs, abs=0.05 * PIXEL_M + 4 * u)
        assert u < 0.05 * PIXEL_M


def test_stated_u_of_a_displacement_is_true(rng):
    errors, us = [], []
    for _ in range(200):
        d, u, _ = displacement_modulo_pitch(phases(0.0, rng, noise=25.0), phases(1e-3, rng, noise=25.0), PITCH)
        errors.append(d - 1e-3)
        us.append(u)
    assert 0.6 < np.std(errors) / np.mean(us) < 1.5


def test_alias_is_the_published_one(rng):
    """f p / 2 = 0.72 m/s at 6 mm and 240/s; 4.61166 m/s is read as 0.29166 and 1.0 as -0.44: (v + pf/2) % (pf) - pf/2."""
    for v, read in ((4.61166, 0.29166), (1.0, -0.44)):
        assert (v + PITCH * FPS / 2) % (PITCH * FPS) - PITCH * FPS / 2 == pytest.approx(read, abs=1e-9)
        d, _, _ = displacement_modulo_pitch(phases(0.0, rng), phases(v / FPS, rng), PITCH)
        assert d * FPS == pytest.approx(read, abs=0.01)
        assert np.abs(alias_candidates(read, PITCH, FPS, 10.0) - v).min() < 1e-9


def test_line_without_texture_has_no_displacement(rng):
    sigma = np.arange(0.0, 0.7, PIXEL_M)
    flat = [texture_phases(60 + rng.normal(0, 4, sigma.size), sigma, 0 * sigma, np.ones(sigma.size, bool), PITCH, 7.5) for _ in range(20)]
    none = [not np.isfinite(displacement_modulo_pitch(a, b, PITCH)[1]) for a, b in pairwise(flat)]
    assert np.mean(none) > 0.85  # agreement by chance of a few pieces of line is rare


def steps_of(speed, rng, n=80, noise=1.0):
    """Texture steps of a speed history (n,) [m/s]."""
    paid = np.concatenate([[0.0], np.cumsum(speed[:-1]) / FPS])
    seen_ = [phases(s, rng, noise=4 * noise) for s in paid]
    d = np.array([displacement_modulo_pitch(a, b, PITCH)[:2] for a, b in pairwise(seen_)])
    t = np.arange(n) / FPS
    return TextureSteps(d[:, 0], d[:, 1], t[:-1], t[1:], PITCH), t


def test_texture_alone_is_never_called_sure_and_lists_the_truth(rng):
    """Speeds drawn at random from 0.2 to 8 m/s: what is stated may be an alias, so it must not be sure, and the truth must be
    the stated speed or among its candidates."""
    for _ in range(25):
        v0, ramp = rng.uniform(0.2, 8.0), rng.uniform(-3.0, 6.0)
        v = np.clip(v0 + ramp * np.arange(80) / FPS, 0.1, 12.0)
        texture, t = steps_of(v, rng)
        series = speed_series([], texture, t, t)
        assert set(series.verdict) == {"ambiguous"}
        off = [np.abs(c - v)[5:-5].max() for c in (series.v_mps, *series.candidates_mps)]
        assert min(off) < 0.05


def test_unwrapped_from_rest_is_sure_and_right(rng):
    v = 3.5 * np.clip((np.arange(140) - 12) / 127, 0, 1) ** 1.5  # passes 0.72 m/s, the first alias, and 2.16, the second
    texture, t = steps_of(v, rng, n=140)
    series = speed_series([], texture, t, t, at_rest_first=True)
    assert set(series.verdict) == {"sure"}
    assert np.abs(series.v_mps - v)[8:-8].max() < 0.03
    assert series.paid_out_m[-1] - series.paid_out_m[0] == pytest.approx(np.sum(v[:-1]) / FPS, abs=2e-3)


def marks_of(paid, t, spacing, rng, noise=0.3e-3, visible=0.8):
    """Tracks of marks `spacing` apart on a line of which `visible` metres are seen."""
    tracks = []
    for j in range(-int(visible / spacing) - 1, int(paid[-1] / spacing) + 1):
        sights = []
        for k in range(t.size):
            sigma = paid[k] - j * spacing
            if 0.02 < sigma < visible:
                sights.append(MarkSight(k, 0.0, np.zeros(2), sigma + rng.normal(0, noise), t[k], 100.0, noise))
        if len(sights) >= 3:
            tracks.append(MarkTrack(tuple(sights)))
    return tracks


def test_marks_give_the_speed_and_do_not_drift(rng):
    t = np.arange(240) / FPS
    v = 0.3 + 3.0 / (1 + np.exp(-(t - 0.4) / 0.06))
    paid = np.concatenate([[0.0], np.cumsum(0.5 * (v[1:] + v[:-1]) / FPS)])
    series = speed_series(marks_of(paid, t, 0.25, rng), None, t, t, spacing_m=0.25)
    error = (series.v_mps - v)[4:-4]
    assert np.sqrt(np.mean((error / v[4:-4]) ** 2)) < 0.01
    assert 0.3 < np.sqrt(np.mean((error / series.u_v_mps[4:-4]) ** 2)) < 1.4  # one history: few independent errors
    assert series.paid_out_m[-1] - series.paid_out_m[0] == pytest.approx(paid[-1], abs=2e-3)
    assert series.mark_ratio == pytest.approx(1.0, abs=3 * series.u_mark_ratio)
    assert set(series.verdict) == {"sure"}


def test_marks_tell_a_wrong_scale(rng):
    t = np.arange(200) / FPS
    paid = 2.5 * t
    tracks = marks_of(paid, t, 0.25 * 1.02, rng)  # lengths read two per cent too long
    series = speed_series(tracks, None, t, t, spacing_m=0.25)
    assert series.mark_ratio == pytest.approx(1.02, abs=0.003)
    assert series.v_mps[100] == pytest.approx(2.5, abs=0.02)  # speed stays on the plane's scale
    odd = speed_series(marks_of(paid, t, 0.30, rng), None, t, t, spacing_m=0.25)
    assert "sure" not in set(odd.verdict)


def test_marks_resolve_the_texture(rng):
    n = 100
    v = np.linspace(2.0, 4.0, n)  # one to three aliases up
    texture, t = steps_of(v, rng, n=n)
    paid = np.concatenate([[0.0], np.cumsum(v[:-1]) / FPS])
    series = speed_series(marks_of(paid, t, 0.25, rng), texture, t, t, spacing_m=0.25)
    assert "texture's displacement" in series.basis
    assert np.abs(series.v_mps - v)[4:-4].max() < 0.06
    assert series.pitch_ratio == pytest.approx(1.0, abs=0.01)


def test_gap_without_marks_has_no_speed(rng):
    t = np.arange(200) / FPS
    tracks = [MarkTrack(tuple(s for s in m.sights if not 80 < s.frame < 130)) for m in marks_of(2.0 * t, t, 0.25, rng)]
    series = speed_series([m for m in tracks if len(m.sights) > 2], None, t, t, spacing_m=0.25)
    assert np.isnan(series.v_mps[100]) and series.verdict[100] == "none"
    assert np.isfinite(series.v_mps[50])


def test_marks_are_placed_and_strangers_left_out(rng):
    """Three marks pass an edge of the scene that stands still: only they are followed, to a fifth of a pixel."""
    n, pixels = 60, 800
    t = np.arange(n) / FPS
    sights = []
    for k in range(n):
        bright = 80 + rng.normal(0, 3, pixels)
        true = [s for s in (2.3 * k * np.array([1, 1, 1]) + [60.4, 260.4, 460.4]) if s < pixels - 20]
        for s in true:
            bright += 120 * np.clip(8 - np.abs(np.arange(pixels) - s), 0, 1)
        bright[600:612] += 60  # an edge of the board, seen past the line
        here = see_marks(bright, np.ones(pixels, bool), 6.0, 150.0)
        sights.append([MarkSight(k, a, np.array([a, 0.0]), a * PIXEL_M, t[k], h, 3e-4) for a, h, _ in here])
    tracks = follow_marks(sights, t, 200 * PIXEL_M)
    long = [m for m in tracks if len(m.sights) > 30]
    assert len(long) == 3
    for m in long:
        frames = np.array([s.frame for s in m.sights])
        at = np.array([s.at for s in m.sights]) - 2.3 * frames
        middle = np.median(at)
        assert 1.4826 * np.median(np.abs(at - middle)) < 0.2  # but for the frames in which it passes the edge
        assert min(abs(middle - s) for s in (60.4, 260.4, 460.4)) < 0.2


# whole clips --------------------------------------------------------------------------------------------------------


class Flat:
    """A plane seen squarely: PIXEL_M metres a pixel."""

    def __init__(self, origin):
        self.origin = np.asarray(origin, float)

    def to_metres(self, points_px):
        return (np.asarray(points_px, float) - self.origin) * [PIXEL_M, -PIXEL_M]


def hints(origin, **k):
    base = {"kind": "payout", "origin_px": origin, "pitch_m": None, "mark_spacing_m": None, "exposure_s": None, "length_m": None}
    return SimpleNamespace(**{**base, **k})


def test_drawn_payout_is_measured(rng):
    """A smooth dark line with marks every 160 px, paid out ever faster under a growing arc, global shutter."""
    n, scene = 40, wall()
    t = np.arange(n) / FPS
    v = 900.0 + 4000.0 * t  # px/s
    paid = 900.0 * t + 2000.0 * t**2
    hoops = [Hoop(height=70.0 + 180.0 * ti) for ti in t]
    marks = tuple(np.arange(-4, 3) * 160.0 - 60.0)
    frames = [seen(draw(scene, h, 5.0, 40.0, paid_out=p, marks=marks), rng) for h, p in zip(hoops, paid, strict=True)]
    background = Background.from_frames([seen(bare(scene), rng) for _ in range(12)])
    follow = follow_payout(enumerate(frames), background, Flat(hoops[0].rim), clock_of(n), hints(hoops[0].rim, mark_spacing_m=0.128))
    assert not any(f.flags for f in follow.frames)
    apex = np.array([f.apex_px for f in follow.frames]) - [h.apex for h in hoops]
    assert np.sqrt(np.mean(apex[:, 1] ** 2)) < 0.1
    assert np.abs([f.width_m / PIXEL_M - 48 for f in follow.frames]).max() < 0.3
    error = follow.speed.v_mps / (v * PIXEL_M) - 1
    assert np.sqrt(np.mean(error[3:-3] ** 2)) < 0.015
    assert set(follow.speed.verdict) == {"sure"}
    assert follow.polarity == "darker"


def test_no_line_nothing_measured(rng):
    scene = wall()
    frames = [seen(scene, rng) for _ in range(20)]
    for k, f in enumerate(frames):
        f[200:330, 5 * k : 5 * k + 60] = 60  # somebody walks through
    background = Background.from_frames(frames)
    follow = follow_payout(enumerate(frames), background, Flat((80.3, 240.0)), clock_of(20), hints((80.3, 240.0), pitch_m=0.006))
    assert all("line-lost" in f.flags or not np.isfinite(f.apex_m).any() for f in follow.frames)
    assert np.isnan([f.apex_m for f in follow.frames]).all()
    assert set(follow.speed.verdict) == {"none"}


def test_arc_that_leaves_the_picture_is_said(rng):
    scene, hoop = wall(), Hoop(height=120.0, radius=30.0)
    hoops = [Hoop(height=120.0 + 4 * i, radius=30.0) for i in range(20)]
    cut = 110  # rows taken off the top: the arc passes the border after a few frames
    frames = [seen(draw(scene, h, 5.0, 40.0), rng)[cut:] for h in hoops]
    background = Background.from_frames([seen(bare(scene), rng)[cut:] for _ in range(12)])
    rim = (hoop.rim[0], hoop.rim[1] - cut)
    follow = follow_payout(enumerate(frames), background, Flat(rim), clock_of(20), hints(rim))
    for f, h in zip(follow.frames, hoops, strict=True):
        if h.apex[1] - cut < -3:
            assert np.isnan(f.apex_m).all()
            assert f.flags


@pytest.mark.parametrize("name", ["fountain", "cable"])
def test_shared_clip(name):
    """Truth of the shared clips, made independently of this project; used to judge, never to measure."""
    folder = clips(name)
    sheet = tomllib.loads((folder / "run.toml").read_text("utf-8"))
    with (folder / "truth.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    truth = {k: np.array([float(r[k]) for r in rows]) for k in ("apex_z_m", "arc_width_m", "line_speed_mps", "paid_out_m")}
    board, origin = sheet["board"], tuple(sheet["datum"]["origin_px"])
    with Clip(folder / "clip.mp4") as clip:
        n = clip.frame_count
        sample = clip.sample(list(np.linspace(0, n - 1, 31).astype(int)))
        spec = BoardSpec(board["kind"], tuple(board["inner_corners"]), board["square_m"])
        plane = fit_plane(
            find_board(sample[15], spec), spec, size=(clip.width, clip.height), origin_px=origin, offset_m=board["offset_m"],
            distance_m=sheet["camera"]["distance_m"], u_offset_m=board["u_offset_m"], u_square_m=board["u_square_m"],
        )  # fmt: skip
        clock = clock_of(n, sheet["clock"]["capture_fps"], sheet["clock"]["readout_s"], clip.height)
        line = sheet["line"]
        told = hints(origin, pitch_m=line.get("pitch_m"), mark_spacing_m=line["mark_spacing_m"], exposure_s=sheet["clock"]["exposure_s"])
        follow = follow_payout(clip.frames(), Background.from_frames(sample), plane, clock, told)
    px = 1 / plane.scale_px_per_m()
    off = (np.array([f.apex_m[1] for f in follow.frames]) - truth["apex_z_m"]) / px
    assert np.isfinite(off).mean() > 0.95
    assert off.std() < 0.3  # the bar: 0.3 px about a steady offset of at most 0.5 px that is inside its own u
    assert abs(off.mean()) < min(0.5, 2 * follow.bias_px)
    assert abs(np.mean([f.width_m for f in follow.frames] - truth["arc_width_m"])) < 1e-3
    fast = truth["line_speed_mps"] > 0.2
    error = follow.speed.v_mps - truth["line_speed_mps"]
    assert np.sqrt(np.mean((error / truth["line_speed_mps"])[fast] ** 2)) < 0.01
    assert set(follow.speed.verdict) == {"sure"}
    assert follow.speed.mark_ratio == pytest.approx(1.0, abs=0.01)
