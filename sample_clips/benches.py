"""The scenes of the sample clips: an invented line-test bench at a place called Harrow Point, and what its technician wrote down.

Each scene says what stands there, what moves, which phone films it, and what the sheet says. A sheet is honest: it holds what a tape,
a level and a look at the picture give, each within its stated uncertainty of what the scene really has, but not equal to it.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sample_clips.camera import Camera, Flicker, Sensor, Shake
from sample_clips.falls import drop_ball, slide_over_edge
from sample_clips.links import Chain, fold_between, land_on_surface, let_go
from sample_clips.moving import Ball, LineStyle, Motion
from sample_clips.payout import Drawing, PayoutRig, Ripple, pay_out
from sample_clips.rigs import BallRig, DrawnRig, EdgeRig, HeldRig, PayoutRun, SurfaceRig
from sample_clips.scenery import Board, Box, Container, Light, Scenery, Wall

__all__ = ["BENCHES", "Bench", "Made", "Recording"]

Floats = NDArray[np.float64]
GRAVITY = 9.8123  # of the invented place [m/s^2]
_TICK = Fraction(1, 90000)


@dataclass(frozen=True, slots=True, eq=False)
class Made:
    """A rig that was stepped through time, with what only its making tells."""

    rig: Any  # one of the rigs of `rigs.py`
    window_s: tuple[float, float]  # of the headline truths
    truths: dict[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, eq=False)
class Recording:
    """How the phone stores it.

    Attributes
    ----------
    frame_s : (n,) array
        Mid-exposure of stored row 0 of each frame [s], the first 0.
    ticks : (n,) array of int
        Stamps.
    time_base : Fraction
        Seconds a tick.
    codec, bits, full_range, crf, tag_fps, tint
        See `encode.write_clip`.
    """

    frame_s: Floats
    ticks: NDArray[np.int64]
    time_base: Fraction = _TICK
    codec: str = "h264"
    bits: int = 8
    full_range: bool = False
    crf: float = 20.0
    tag_fps: float | None = None
    tint: tuple[float, float] = (0.0, 0.0)


@dataclass(frozen=True, slots=True, eq=False)
class Bench:
    """One scene.

    Attributes
    ----------
    name, kind : str
        Of the folder; the test's kind.
    says : str
        What is in it and what is hard about it.
    camera, scenery, style, recording
        What films, what stands, what the line is made of, how it is stored.
    make : callable
        Steps the rig through time.
    sheet : mapping
        Tables of the run sheet.
    seed : int
        Of the noise.
    end_radius_m : float
        Of the ball at the end, or the dropped ball [m]; 0: none.
    measurable : bool
        False: the right answer is to refuse, see `says`.
    beside : mapping
        Text files that the sheet names, by file name.
    """

    name: str
    kind: str
    says: str
    camera: Camera
    scenery: Scenery
    style: LineStyle
    recording: Recording
    make: Callable[[], Made]
    sheet: Mapping[str, Mapping[str, Any]]
    seed: int
    end_radius_m: float = 0.0
    measurable: bool = True
    beside: Mapping[str, str] = field(default_factory=dict)

    def motion(self) -> Motion:
        """What moves, for the renderer."""
        moving: Motion = self.make().rig
        return moving


# --- parts ------------------------------------------------------------------------------------------------------------


def _steady(fps: float, frames: int, **how: Any) -> Recording:
    """Even frames with exact stamps of 1/90000 s."""
    number = np.arange(frames)
    return Recording(number / fps, np.rint(number / fps / float(_TICK)).astype(np.int64), **how)


def _uneven(fps: float, frames: int, jitter_s: float, lost: tuple[int, ...], seed: int, **how: Any) -> Recording:
    """Frames that come a little early or late, or not at all; the stamps tell it."""
    number = np.delete(np.arange(frames + len(lost)), lost)
    late = np.random.default_rng(seed).uniform(-jitter_s, jitter_s, number.size)
    late[0] = 0.0
    ticks = np.rint((number / fps + late) / float(_TICK)).astype(np.int64)
    return Recording(np.asarray(ticks * float(_TICK), dtype=np.float64), ticks, **how)


def _stretched(fps: float, stored_fps: int, frames: int, **how: Any) -> Recording:
    """Slow motion: each frame stamped as if at the stored rate, the true rate in a tag."""
    number = np.arange(frames)
    return Recording(number / fps, number.astype(np.int64), Fraction(1, stored_fps), tag_fps=fps, **how)


def _stand(board: Board, floor_m: float = -1.5) -> Box:
    """A thin post that carries the board."""
    x, y, z = board.centre_m
    return Box((x - 0.009, y + 0.012, floor_m), (x + 0.009, y + 0.03, z), albedo=0.25)


def _seen(camera: Camera, place: tuple[float, float, float]) -> list[float]:
    """Where a place is seen, as read off the picture to a tenth of a pixel."""
    return [round(float(v), 1) for v in camera.project(place)]


def _board_table(board: Board, **more: Any) -> dict[str, Any]:
    return {"kind": "checkerboard", "inner_corners": list(board.inner_corners), "square_m": 0.025, "u_square_m": 5e-5, **more}


def _test_table(kind: str, specimen: str, **more: Any) -> dict[str, Any]:
    return {"kind": kind, **more, "batch": "HP-SAMPLE", "specimen": specimen}


_SITE = {"gravity_mps2": GRAVITY, "u_gravity_mps2": 0.0001}


# --- payout of a ball chain -------------------------------------------------------------------------------------------


def _payout_beads() -> Bench:
    camera = Camera(
        fx=1502, fy=1502, cx=354.5, cy=645.5, k1=-0.03, k2=0.02, position_m=(0.075, -1.253, -0.05), yaw_deg=-1.1, pitch_deg=0.6,
        roll_deg=0.7, fps=240, exposure_s=0.0004, readout_s=0.0041, vignetting=0.12, sensor=Sensor(full_well_e=4000),
    )  # fmt: skip
    board = Board((9, 6), 0.02502, (0.235, 0.0256, 0.02), turn_deg=90, lean_deg=0.15, yaw_deg=0.3)
    cup = Container((0, 0, 0), 0.06, 0.05, 0.13, albedo=0.62)
    light = Light((-0.7, -0.9, 0.7), ambient=0.42, lamp=0.6)
    top, leg = Box((-0.6, -0.12, -0.16), (0.052, 0.14, -0.13), 0.42), Box((-0.1, 0.05, -1.5), (-0.05, 0.11, -0.16), 0.3)
    things = (board, _stand(board), cup, top, leg)
    style = LineStyle(
        "beads", radius_m=0.0016, pitch_m=0.0045, link_radius_m=0.0004, mark_spacing_m=0.2475, mark_length_m=0.012,
        mark_radius_m=0.0019, albedo=0.62, mark_albedo=0.95, specular=0.5,
    )  # fmt: skip
    waves = (Ripple(0.0012, 0.075, 1.6, 0.3), Ripple(0.0006, 0.041, -0.8, 1.1))
    rig = PayoutRig(
        push=0.158, pull=0.045, drop_m=1.502, pile_m=(0.035, 0.052), length_m=12.0, ripples=waves, gravity_mps2=GRAVITY
    )

    def make() -> Made:
        run = PayoutRun(pay_out(rig, 1.1), release_s=0.04)
        return Made(run, (0.8, 1.03), {"pickup_coefficient": rig.push, "landing_coefficient": rig.pull})

    return Bench(
        "payout-beads", "payout",
        "A ball chain runs out of a bowl from rest: its texture aliases from 0.54 m/s on, painted beads every 0.2475 m carry the speed. "
        "Board 25 mm behind the plane of motion, distorted lens.",
        camera, Scenery(Wall(0.42, 0.27, 0.05, 0.012, seed=11), light, things), style, _steady(240, 252, crf=15), make,
        {
            "clip": {"file": "clip.mp4"},
            "clock": {"capture_fps": 240.0, "readout_s": 0.0041, "exposure_s": 0.0004},
            "board": _board_table(board, offset_m=0.025, u_offset_m=0.001, lean_deg=0.0, u_lean_deg=0.3, yaw_deg=0.0, u_yaw_deg=0.5),
            "camera": {"distance_m": 1.25, "u_distance_m": 0.01},
            "datum": {"origin_px": _seen(camera, (0, 0, 0)), "u_origin_px": 0.7, "origin_frame": 0, "vertical": "board"},
            "line": {
                "kind": "ball chain, 3.2 mm", "pitch_m": 0.0045, "mark_spacing_m": 0.2478, "u_mark_spacing_m": 0.0005,
                "length_m": 12.0, "u_length_m": 0.02, "mass_per_length_kg_per_m": 0.0158,
            },
            "test": _test_table("payout", "payout-beads", drop_height_m=1.5, u_drop_height_m=0.002, pile_depth_m=[0.035, 0.05]),
            "site": _SITE,
        }, seed=101,
    )  # fmt: skip


# --- payout of a cable ------------------------------------------------------------------------------------------------


def _payout_cable() -> Bench:
    camera = Camera(
        fx=1248, fy=1248, cx=362.0, cy=634.0, k1=0.045, k2=-0.06, position_m=(0.1, -1.447, -0.06), yaw_deg=1.2, pitch_deg=-0.7,
        roll_deg=-1.1, fps=120, exposure_s=0.0011, readout_s=0.0074, vignetting=0.2, flicker=Flicker(50, 0.04, 0.7),
        sensor=Sensor(full_well_e=5000),
    )  # fmt: skip
    board = Board((8, 5), 0.03003, (0.30, 0.0003, -0.07), turn_deg=90, lean_deg=-0.1, yaw_deg=-0.2)
    cup = Container((0, 0, 0), 0.085, 0.085, 0.15, albedo=0.25)
    light = Light((0.9, -0.7, 0.8), ambient=0.4, lamp=0.75, softness=0.04)
    top, leg = Box((-0.7, -0.15, -0.19), (0.078, 0.15, -0.15), 0.35), Box((-0.1, 0.02, -1.6), (-0.05, 0.07, -0.19), 0.3)
    things = (board, _stand(board), cup, top, leg)
    style = LineStyle(
        "cable", radius_m=0.003, mark_spacing_m=0.40, mark_length_m=0.016, mark_radius_m=0.0032, albedo=0.045, mark_albedo=0.85,
        specular=0.12,
    )  # fmt: skip
    rig = PayoutRig(
        push=1 / 6, pull=0.03, drop_m=1.401, pile_m=(0.05, 0.07), length_m=9.0, lip_m=0.006, lip_width_m=0.016,
        arc_width_m=0.14, width_height_m=0.07, out_m=0.092, ripples=(Ripple(0.001, 0.16, 1.1, 0.8),), wander_m=0.004,
        gravity_mps2=GRAVITY,
    )  # fmt: skip

    def make() -> Made:
        run = PayoutRun(pay_out(rig, 1.6), release_s=0.07)
        return Made(run, (1.15, 1.5), {"pickup_coefficient": rig.push, "landing_coefficient": rig.pull})

    sheet_board = _board_table(board, offset_m=0.0, u_offset_m=0.0005, u_lean_deg=0.3, lean_deg=0.0, u_yaw_deg=0.5, yaw_deg=0.0)
    return Bench(
        "payout-cable", "payout",
        "A smooth black cable without texture leaves a drum: tape marks every 0.40 m, 120 frames/s, lamps that flicker, light from the "
        "right, 10-bit HEVC.",
        camera, Scenery(Wall(0.5, 0.42, 0.06, 0.01, seed=12), light, things), style,
        _steady(120, 184, codec="hevc", bits=10, crf=14, tint=(-3.0, 5.0)), make,
        {
            "clip": {"file": "clip.mp4"},
            "clock": {"capture_fps": 120.0, "readout_s": 0.0074, "exposure_s": 0.0011},
            "board": {**sheet_board, "square_m": 0.030},
            "camera": {"distance_m": 1.45, "u_distance_m": 0.01},
            "datum": {"origin_px": _seen(camera, (0, 0, 0)), "u_origin_px": 0.7, "origin_frame": 0, "vertical": "board"},
            "line": {
                "kind": "smooth cable, 6 mm", "mark_spacing_m": 0.3995, "u_mark_spacing_m": 0.0008, "length_m": 9.0,
                "mass_per_length_kg_per_m": 0.047,
            },
            "test": _test_table("payout", "payout-cable", drop_height_m=1.4, u_drop_height_m=0.002, pile_depth_m=[0.05, 0.065]),
            "site": _SITE,
        }, seed=102,
    )  # fmt: skip


# --- a chain that lands -----------------------------------------------------------------------------------------------


_LENS = """# Invented: the phone of the Harrow Point bench, calibrated from 18 views; true to its stated uncertainty, not exact.
format = 1
camera = "Harrow Point bench phone, main camera, 240 per second"
size = [720, 1280]
views = 18
residual_px = 0.09

[lens]
fx = 1475.2
fy = 1475.0
cx = 366.3
cy = 640.2
k1 = -0.047
k2 = 0.043
p1 = 0.0
p2 = 0.0
k3 = 0.0
# covariance of fx, fy, cx, cy, k1, k2, p1, p2, k3
covariance = [
    [2.56, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    [0.0, 2.56, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    [0.0, 0.0, 3.24, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    [0.0, 0.0, 0.0, 3.24, 0.0, 0.0, 0.0, 0.0, 0.0],
    [0.0, 0.0, 0.0, 0.0, 3.6e-05, 0.0, 0.0, 0.0, 0.0],
    [0.0, 0.0, 0.0, 0.0, 0.0, 0.0004, 0.0, 0.0, 0.0],
    [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 4e-08, 0.0, 0.0],
    [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 4e-08, 0.0],
    [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 1e-12],
]
"""


def _surface_drop() -> Bench:
    camera = Camera(
        fx=1476, fy=1476, cx=365.5, cy=641.0, k1=-0.05, k2=0.05, position_m=(0.09, -1.302, -0.41), yaw_deg=0.8, pitch_deg=-0.6,
        roll_deg=0.4, fps=240, exposure_s=0.0006, readout_s=-0.0040, vignetting=0.1,
    )  # fmt: skip
    pitch, links, clear, pull = 0.006, 104, 0.11, 0.12
    length = pitch * links
    surface = -length - clear
    board = Board((9, 6), 0.02499, (0.225, 0.0097, -0.36), turn_deg=90, lean_deg=-0.2, yaw_deg=0.4)
    light = Light((-0.9, -0.8, 0.9), ambient=0.35, lamp=0.75)
    ball = Ball(np.zeros(3), 0.006, 0.05, 0.25)
    table = Box((-0.45, -0.15, surface - 0.05), (0.5, 0.2, surface - 0.0021), 0.33)
    hook = Box((-0.12, -0.012, 0.0065), (0.012, 0.012, 0.03), 0.3)
    style = LineStyle("beads", radius_m=0.0021, pitch_m=pitch, link_radius_m=0.0006, albedo=0.72, specular=0.4)

    def make() -> Made:
        bead = 0.031 * pitch
        chain = Chain(np.r_[2e-5 + bead / 2, np.full(links, bead)], np.full(links, pitch), GRAVITY)
        place = np.stack([np.zeros(links + 1), -pitch * np.arange(links + 1)], axis=1)
        drift = np.stack([np.full(links + 1, 0.009), np.zeros(links + 1)], axis=1)
        landing = land_on_surface(chain, place, surface, 0.5, pull=pull, velocity=drift)
        rig = SurfaceRig(landing, 0.075, pitch, ball)
        touch = rig.release_s + float(landing.landed_s[-1])
        quarter = _reaches(rig, surface + length / 4, touch)
        return Made(rig, (touch, quarter), {"landing_coefficient": pull, **_lead(rig, touch, quarter)})

    return Bench(
        "surface-drop", "surface-drop",
        "A hung ball chain is let go and lands on a bench top, which pulls at what still falls. Frames with uneven stamps, three of them "
        "lost; the rows are read from the bottom up.",
        camera, Scenery(Wall(0.4, 0.3, 0.05, 0.01, seed=13), light, (board, _stand(board, surface), table, hook)), style,
        _uneven(240, 120, 0.0002, (37, 38, 71), seed=5, crf=16), make,
        {
            "clip": {"file": "clip.mp4"},
            "clock": {"capture_fps": 240.0, "readout_s": -0.0040, "exposure_s": 0.0006},
            "board": _board_table(board, offset_m=0.010, u_offset_m=0.0005, lean_deg=0.0, u_lean_deg=0.3, yaw_deg=0.0, u_yaw_deg=0.5),
            "camera": {"lens": "phone.lens.toml", "distance_m": 1.30, "u_distance_m": 0.01},
            "datum": {
                "origin_px": _seen(camera, (0, 0, 0)), "u_origin_px": 0.7, "origin_frame": 0,
                "floor_px": _seen(camera, (0, 0, surface)), "u_floor_px": 0.7, "vertical": "board",
            },
            "line": {
                "kind": "ball chain, 4.2 mm", "pitch_m": 0.006, "length_m": round(length, 3), "u_length_m": 0.001,
                "mass_per_length_kg_per_m": 0.031, "end_mark_m": 0.012,
            },
            "test": _test_table("surface-drop", "surface-drop", drop_height_m=round(-surface + 0.0005, 4), u_drop_height_m=0.001),
            "site": _SITE,
        }, seed=103, end_radius_m=0.006, beside={"phone.lens.toml": _LENS},
    )  # fmt: skip


def _reaches(rig: Any, z_m: float, since_s: float) -> float:
    """When a falling end first passes a height [s]."""
    t = since_s + 1e-4 * np.arange(10001)
    first = int(np.argmax(rig.end(t)[:, 2] <= z_m))
    low, high = float(t[first - 1]), float(t[first])
    while high - low > 1e-10:
        middle = (low + high) / 2
        low, high = (middle, high) if float(rig.end(middle)[2]) > z_m else (low, middle)
    return low


def _lead(rig: Any, touch_s: float, until_s: float) -> dict[str, Any]:
    """How far the end is ahead, at the window's end, of a fall with its own place and speed at first touch."""
    z0, v0, z1 = float(rig.end(touch_s)[2]), -float(rig.end_velocity(touch_s)[2]), float(rig.end(until_s)[2])
    free = (np.sqrt(v0 * v0 + 2 * GRAVITY * (z0 - z1)) - v0) / GRAVITY
    return {"first_touch_s": touch_s, "lead_over_free_fall_s": {"at_z_m": z1, "lead": free - (until_s - touch_s)}}


# --- a folded chain ---------------------------------------------------------------------------------------------------


def _held_drop() -> Bench:
    camera = Camera(
        fx=1453, fy=1453, cx=357.0, cy=648.5, k1=0.02, k2=-0.03, position_m=(0.08, -1.251, -0.33), yaw_deg=-0.9, pitch_deg=0.8,
        roll_deg=-0.5, fps=240, exposure_s=0.0004, readout_s=0.0040, vignetting=0.08, shake=Shake(0.9, 0.02, 4.0, seed=4),
        sensor=Sensor(full_well_e=2600, sharpen=0.3),
    )  # fmt: skip
    pitch, links, spacing = 0.006, 110, 0.026
    board = Board((9, 6), 0.02503, (0.225, 0.0004, -0.42), turn_deg=90, lean_deg=0.1, yaw_deg=0.2)
    light = Light((0.8, -0.9, 0.6), ambient=0.5, lamp=0.55)
    ball = Ball(np.zeros(3), 0.005, 0.9, 0.2)
    beam = Box((-0.25, -0.02, 0.006), (-spacing + 0.008, 0.03, 0.036), 0.4)
    clip = Box((-0.007, -0.006, 0.0055), (0.007, 0.01, 0.026), 0.15)
    style = LineStyle("beads", radius_m=0.0019, pitch_m=pitch, link_radius_m=0.0005, albedo=0.1, specular=0.35)

    def make() -> Made:
        bead = 0.025 * pitch
        mass = np.r_[np.inf, np.full(links - 1, bead), bead / 2 + 2e-5]
        chain = Chain(mass, np.full(links, pitch), GRAVITY, joint_damping_nms=2e-8)
        place = fold_between(chain, spacing)
        record = let_go(chain, place, 0.46)
        rig = HeldRig(record, 0.08, pitch, ball)
        length = pitch * links
        window = (_reaches(rig, -0.1 * length, rig.release_s), _reaches(rig, -0.5 * length, rig.release_s))
        energy = chain.energy(record.state, record.rate)
        k = int(np.searchsorted(record.t_s, window[1] - rig.release_s))
        lost = float((energy[0] - energy[k]) / (record.rate[k] ** 2).sum(axis=-1)[1:].dot(mass[1:] / 2))
        return Made(rig, window, {"length_m": length, "energy_lost_to_motion_at_half_length": lost})

    return Bench(
        "held-drop", "held-drop",
        "A folded ball chain: one end held, the other let go, which falls faster than free and whips round. The phone is held by hand.",
        camera, Scenery(Wall(0.38, 0.5, 0.05, 0.012, seed=14), light, (board, _stand(board), beam, clip)), style,
        _steady(240, 128, crf=17), make,
        {
            "clip": {"file": "clip.mp4"},
            "clock": {"capture_fps": 240.0, "readout_s": 0.0040, "exposure_s": 0.0004},
            "board": _board_table(board, offset_m=0.0, u_offset_m=0.0005, lean_deg=0.0, u_lean_deg=0.3, yaw_deg=0.0, u_yaw_deg=0.5),
            "camera": {"distance_m": 1.25, "u_distance_m": 0.01},
            "datum": {"origin_px": _seen(camera, (0, 0, 0)), "u_origin_px": 0.7, "origin_frame": 0, "vertical": "board"},
            "line": {
                "kind": "ball chain, 3.8 mm", "pitch_m": 0.006, "length_m": 0.66, "u_length_m": 0.001,
                "mass_per_length_kg_per_m": 0.025, "end_mark_m": 0.010,
            },
            "test": _test_table("held-drop", "held-drop"),
            "site": _SITE,
        }, seed=104, end_radius_m=0.005,
    )  # fmt: skip


# --- a ball that falls ------------------------------------------------------------------------------------------------


def _free_drop() -> Bench:
    camera = Camera(
        fx=1421, fy=1421, cx=361.5, cy=636.5, k1=-0.02, k2=0.03, position_m=(0.07, -1.496, -0.44), yaw_deg=0.7, pitch_deg=-0.5,
        roll_deg=1.5, fps=240, exposure_s=0.0005, readout_s=0.0040, vignetting=0.1,
    )  # fmt: skip
    board = Board((9, 6), 0.02501, (0.2, 0.0594, -0.42), turn_deg=90, lean_deg=0.2, yaw_deg=-0.3)
    light = Light((-0.8, -0.9, 0.8), ambient=0.42, lamp=0.6, softness=0.03)
    ball = Ball(np.zeros(3), 0.02, 0.07, 0.35)
    hook = Box((-0.2, -0.015, 0.0205), (0.015, 0.015, 0.045), 0.4)

    def make() -> Made:
        path = drop_ball(0.04, 0.0459, 0.56, gravity_mps2=GRAVITY, start_mps=(0.012, 0.0))
        rig = BallRig(path, 0.07, ball)
        return Made(rig, (0.07 + 2 / 240, 0.49), {"measured_gravity_mps2": GRAVITY})

    return Bench(
        "free-drop", "free-drop",
        "A ball of 40 mm and 46 g falls, with air drag: 240 frames/s stored as 30, the true rate in a tag. Board 60 mm behind the plane of "
        "motion, camera rolled by 1.5 degrees.",
        camera, Scenery(Wall(0.35, 0.42, 0.05, 0.01, seed=15), light, (board, _stand(board), hook)), LineStyle(),
        _stretched(240, 30, 128, crf=20), make,
        {
            "clip": {"file": "clip.mp4"},
            "clock": {"readout_s": 0.0040, "exposure_s": 0.0005},
            "board": _board_table(board, offset_m=0.060, u_offset_m=0.001, lean_deg=0.0, u_lean_deg=0.3, yaw_deg=0.0, u_yaw_deg=0.5),
            "camera": {"distance_m": 1.50, "u_distance_m": 0.01},
            "datum": {"origin_px": _seen(camera, (0, 0, 0)), "u_origin_px": 0.7, "origin_frame": 0, "vertical": "board"},
            "line": {"kind": "painted ball, 40 mm", "end_mark_m": 0.04, "object_diameter_m": 0.04, "object_mass_kg": 0.046},
            "test": _test_table("free-drop", "free-drop"),
            "site": _SITE,
        }, seed=105, end_radius_m=0.02,
    )  # fmt: skip


# --- a chain over a table's edge --------------------------------------------------------------------------------------


def _edge_slide() -> Bench:
    pitch, links, overhang, friction, guide = 0.005, 128, 0.262, 0.27, 0.004
    length = pitch * links
    x, z = -guide, overhang + guide * (1 - np.pi / 2)  # of the edge, seen from the leading end's place at release
    camera = Camera(
        fx=1464, fy=1464, cx=355.5, cy=643.5, k1=0.03, k2=-0.02, position_m=(x - 0.06, -1.418, z - 0.32), yaw_deg=0.5,
        pitch_deg=0.9, roll_deg=-1.6, fps=240, exposure_s=0.0006, readout_s=0.0041, quarter_turns=1, vignetting=0.15,
    )  # fmt: skip
    board = Board((9, 6), 0.02498, (x + 0.175, 0.0303, z - 0.25), turn_deg=90, lean_deg=-0.1, yaw_deg=0.2)
    light = Light((-0.5, -1.0, 0.9), ambient=0.45, lamp=0.6)
    ball = Ball(np.zeros(3), 0.005, 0.9, 0.2)
    table = Box((x - 0.7, -0.004, z - 0.032), (x - 0.001, 0.3, z - 0.0019), 0.22)
    leg = Box((x - 0.3, 0.1, z - 1.5), (x - 0.25, 0.15, z - 0.03), 0.25)
    style = LineStyle("beads", radius_m=0.0018, pitch_m=pitch, link_radius_m=0.0005, albedo=0.75, specular=0.4)

    def make() -> Made:
        slide = slide_over_edge(
            beads=links + 1, length_m=length, overhang_m=overhang, friction=friction, guide_m=guide, gravity_mps2=GRAVITY,
            duration_s=0.6,
        )  # fmt: skip
        rig = EdgeRig(slide, 0.07, pitch, ball)
        last = float(slide.record.t_s[np.searchsorted(slide.record.state[:, 0], length - overhang)])
        truths = {"friction_coefficient": friction, "overhang_at_release_m": overhang, "guide_radius_m": guide}
        return Made(rig, (rig.release_s, rig.release_s + last), truths)

    return Bench(
        "edge-slide", "edge-slide",
        "A ball chain slides over a table's edge, drawn by what hangs. Stored lying on its side with a rotation tag, so that the rows are "
        "read across the upright picture.",
        camera, Scenery(Wall(0.45, 0.33, 0.05, 0.01, seed=16), light, (board, _stand(board), table, leg)), style,
        _steady(240, 134, crf=16), make,
        {
            "clip": {"file": "clip.mp4"},
            "clock": {"capture_fps": 240.0, "readout_s": 0.0041, "exposure_s": 0.0006},
            "board": _board_table(board, offset_m=0.030, u_offset_m=0.001, lean_deg=0.0, u_lean_deg=0.3, yaw_deg=0.0, u_yaw_deg=0.5),
            "camera": {"distance_m": 1.42, "u_distance_m": 0.01},
            "datum": {"origin_px": _seen(camera, (0, 0, 0)), "u_origin_px": 0.7, "origin_frame": 0, "vertical": "board"},
            "line": {
                "kind": "ball chain, 3.6 mm", "pitch_m": 0.005, "length_m": 0.64, "u_length_m": 0.001,
                "mass_per_length_kg_per_m": 0.022, "end_mark_m": 0.010,
            },
            "test": _test_table("edge-slide", "edge-slide"),
            "site": _SITE,
        }, seed=106, end_radius_m=0.005,
    )  # fmt: skip


# --- a drawn line -----------------------------------------------------------------------------------------------------


def _drawn() -> Bench:
    camera = Camera(
        width=1280, height=720, fx=1390, fy=1390, cx=645.0, cy=357.5, k1=-0.04, k2=0.04, position_m=(0.22, -1.204, 0.0), yaw_deg=0.6,
        pitch_deg=-1.0, roll_deg=-0.9, fps=240, exposure_s=0.0007, readout_s=-0.0041, vignetting=0.15,
    )  # fmt: skip
    board = Board((9, 6), 0.02502, (0.34, 0.0197, -0.15), lean_deg=0.1, yaw_deg=0.3)
    cup = Container((0, 0, 0), 0.07, 0.06, 0.14, albedo=0.5)
    light = Light((-1.2, -0.7, 0.5), ambient=0.25, lamp=0.85, softness=0.03)
    things = (board, _stand(board), cup, Box((-0.5, -0.15, -0.18), (0.12, 0.15, -0.14), 0.4))
    style = LineStyle(
        "beads", radius_m=0.0022, pitch_m=0.006, link_radius_m=0.0006, mark_spacing_m=0.15, mark_length_m=0.015,
        mark_radius_m=0.0025, albedo=0.2, mark_albedo=0.95, specular=0.4,
    )  # fmt: skip
    drawing = Drawing(
        speed_mps=1.1, ripple=0.06, ripple_hz=6.5, snag_s=0.52, snag_length_s=0.018, snag_depth=0.65, rim_radius_m=0.07, rise=0.14,
        ripples=(Ripple(0.0009, 0.19, 2.6, 0.4), Ripple(0.0005, 0.09, -1.7, 1.0)),
    )  # fmt: skip

    def make() -> Made:
        rig = DrawnRig(drawing, 0.05)
        window = (0.25, 0.93)
        t = np.arange(*window, 1e-4)
        calm = np.abs(t - rig.release_s - drawing.snag_s) > 3 * drawing.snag_length_s + 0.02
        speed = np.asarray(drawing.speed(t - rig.release_s))
        rest = speed[calm] - np.polyval(np.polyfit(t[calm], speed[calm], 1), t[calm])
        truths = {"speed_ripple": float(rest.std() / speed.mean()), "snag_count": 1, "snag_s": rig.release_s + drawing.snag_s}
        return Made(rig, window, truths)

    return Bench(
        "drawn", "drawn",
        "A winch out of the picture draws a marked ball chain from a bowl, with a ripple in its speed and one snag. A wide picture, hard "
        "light from the left, full-range luma.",
        camera, Scenery(Wall(0.4, 0.36, 0.06, 0.012, seed=17), light, things), style, _steady(240, 226, crf=17.5, full_range=True), make,
        {
            "clip": {"file": "clip.mp4"},
            "clock": {"capture_fps": 240.0, "readout_s": -0.0041, "exposure_s": 0.0007},
            "board": _board_table(board, offset_m=0.020, u_offset_m=0.001, lean_deg=0.0, u_lean_deg=0.3, yaw_deg=0.0, u_yaw_deg=0.5),
            "camera": {"distance_m": 1.20, "u_distance_m": 0.01},
            "datum": {"origin_px": _seen(camera, (0, 0, 0)), "u_origin_px": 0.7, "origin_frame": 0, "vertical": "board"},
            "line": {
                "kind": "ball chain, 4.4 mm", "pitch_m": 0.006, "mark_spacing_m": 0.15, "u_mark_spacing_m": 0.0004, "length_m": 6.0,
                "mass_per_length_kg_per_m": 0.034,
            },
            "test": _test_table("drawn", "drawn", pile_depth_m=[0.05, 0.055]),
            "site": _SITE,
        }, seed=107,
    )  # fmt: skip


# --- a clip that cannot be measured -----------------------------------------------------------------------------------


def _board_hidden() -> Bench:
    camera = Camera(
        fx=1440, fy=1440, cx=360.0, cy=642.0, k1=-0.03, k2=0.02, position_m=(0.08, -1.4, -0.38), yaw_deg=0.4, pitch_deg=0.3, fps=240,
        exposure_s=0.0006, readout_s=0.004,
    )  # fmt: skip
    board = Board((9, 6), 0.025, (0.2, 0.02, -0.45), turn_deg=90)
    crate = Box((0.07, -0.2, -1.5), (0.42, -0.02, -0.364), 0.3)
    light = Light((-0.8, -0.9, 0.8), ambient=0.42, lamp=0.6)
    ball = Ball(np.zeros(3), 0.015, 0.08, 0.35)
    hook = Box((-0.2, -0.015, 0.0155), (0.015, 0.015, 0.04), 0.4)

    def make() -> Made:
        rig = BallRig(drop_ball(0.03, 0.11, 0.5, gravity_mps2=GRAVITY), 0.06, ball)
        return Made(rig, (0.06 + 2 / 240, 0.37), {})

    return Bench(
        "board-hidden", "free-drop",
        "A crate stands before all but the topmost squares of the board: no scale can be had, and the right answer is to say "
        "so (exit 3) and to have the crate moved.",
        camera, Scenery(Wall(0.4, 0.42, 0.05, 0.01, seed=18), light, (board, _stand(board), crate, hook)), LineStyle(),
        _steady(240, 90, crf=19), make,
        {
            "clip": {"file": "clip.mp4"},
            "clock": {"capture_fps": 240.0, "readout_s": 0.004, "exposure_s": 0.0006},
            "board": _board_table(board, offset_m=0.020, u_offset_m=0.001),
            "camera": {"distance_m": 1.40, "u_distance_m": 0.01},
            "datum": {"origin_px": _seen(camera, (0, 0, 0)), "u_origin_px": 0.7, "origin_frame": 0, "vertical": "board"},
            "line": {"kind": "steel ball, 30 mm", "end_mark_m": 0.03, "object_diameter_m": 0.03, "object_mass_kg": 0.11},
            "test": _test_table("free-drop", "board-hidden"),
            "site": _SITE,
        }, seed=108, end_radius_m=0.015, measurable=False,
    )  # fmt: skip


_ALL = (_payout_beads, _payout_cable, _surface_drop, _held_drop, _free_drop, _edge_slide, _drawn, _board_hidden)
BENCHES: dict[str, Bench] = {bench.name: bench for bench in (build() for build in _ALL)}
