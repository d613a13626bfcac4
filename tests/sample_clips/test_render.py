"""Rendered pictures against geometry: places to hundredths of a pixel, times of rows, light, noise."""

from dataclasses import dataclass, replace

import cv2
import numpy as np
import pytest
from skimage.filters import unsharp_mask

from sample_clips.camera import Camera, Flicker, Sensor, Shake, truth_pixels
from sample_clips.moving import Ball, Bars, LineStyle
from sample_clips.render import Renderer
from sample_clips.scenery import Board, Box, Container, Light, Print, Scenery, Wall, trace

PLAIN = Wall(y_m=0.5, albedo=0.5, texture=0.0, grain=0.0)
EVEN = Light(ambient=1.0, lamp=0.0)
CAMERA = Camera(
    width=240, height=320, fx=600.0, fy=600.0, cx=121.0, cy=158.0, position_m=(0.0, -1.0, 0.0),
    sensor=Sensor(full_well_e=np.inf), readout_s=0.008, exposure_s=0.001,
)  # fmt: skip
EMPTY = Scenery(PLAIN, EVEN)


@dataclass(frozen=True)
class Strand:
    points_m: np.ndarray
    s_m: np.ndarray
    visible: np.ndarray


class Straight:
    """A straight line that moves as a whole."""

    def __init__(self, a, b, velocity=(0, 0, 0), s_speed=0.0, n=400, visible=True):
        self.a, self.b, self.velocity, self.s_speed, self.n, self.visible = map(np.asarray, (a, b, velocity, s_speed, n, visible))

    def strand(self, t):
        share = np.linspace(0, 1, int(self.n))
        points = self.a + share[:, None] * (self.b - self.a) + self.velocity * t
        s = share * np.linalg.norm(self.b - self.a) + float(self.s_speed) * t
        return Strand(points, s, np.full(s.size, bool(self.visible)))


class Thrown:
    """One ball at constant velocity."""

    def __init__(self, start, velocity=(0, 0, 0), radius=0.012):
        self.start, self.velocity, self.radius = np.array(start, float), np.array(velocity, float), radius

    def at(self, t):
        return self.start + np.asarray(t)[..., None] * self.velocity

    def discs(self, t):
        return [Ball(self.at(t), self.radius, 0.05, specular=0.0)]


def change(motion, camera=CAMERA, style=None, scenery=EMPTY, frame_s=0.0):
    """What the motion takes from the light of the picture."""
    style = style or LineStyle(specular=0.0)
    with_it = Renderer(camera, scenery, motion, style, frame_s=[frame_s]).linear(frame_s).astype(float)
    return Renderer(camera, scenery, None, style, frame_s=[frame_s]).linear(frame_s).astype(float) - with_it


def centroid(weight):
    row, column = np.indices(weight.shape)
    return np.array([(weight * column).sum(), (weight * row).sum()]) / weight.sum()


# --- places -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("where", [(0.0, 0.0, 0.0), (0.0431, 0.0, -0.0777), (-0.0612, 0.03, 0.0523)])
def test_a_still_ball_is_where_it_projects(where):
    found = centroid(change(Thrown(where)))
    np.testing.assert_allclose(found, CAMERA.project(where), atol=0.02)


def test_a_still_ball_takes_the_light_of_its_area():
    ball = Thrown((0.02, 0.0, 0.01))
    area = np.pi * (0.012 * CAMERA.fx) ** 2  # at depth 1 m
    weight = change(ball)
    assert weight.sum() == pytest.approx(area * (0.5 - 0.05), rel=0.003)
    assert weight.max() == pytest.approx(0.45, rel=1e-4)  # its middle is opaque


def test_a_wide_ball_off_the_axis_is_the_ellipse_of_its_cone():
    """Rays brute force: a pixel is covered where its ray passes the centre nearer than the radius."""
    camera = replace(CAMERA, fx=150.0, fy=150.0)
    centre, radius = np.array([0.4, 0.0, 0.6]), 0.2
    weight = change(Thrown(centre, radius=radius), camera)
    found = centroid(weight)
    column, row = np.meshgrid(np.arange(1200) / 5 - 0.4, np.arange(1600) / 5 - 0.4)
    rays = np.stack([(column - camera.cx) / 150, np.ones_like(row), -(row - camera.cy) / 150], axis=-1)
    to_centre = centre - np.array(camera.position_m)
    along = (rays @ to_centre) / (rays**2).sum(axis=-1)
    covered = ((along[..., None] * rays - to_centre) ** 2).sum(axis=-1) < radius**2
    expected = [column[covered].mean(), row[covered].mean()]
    assert np.linalg.norm(expected - camera.project(centre)) > 0.3  # the effect is there
    np.testing.assert_allclose(found, expected, atol=0.02)
    assert weight.sum() / 0.45 == pytest.approx(covered.sum() / 25, rel=1e-3)


def test_a_bead_is_where_it_projects():
    style = LineStyle(kind="beads", radius_m=0.0035, pitch_m=0.05, link_radius_m=0.0, albedo=0.05, specular=0.0)
    motion = Straight((0.0213, 0, -0.025), (0.0413, 0, 0.025))  # one multiple of the pitch in reach, s = 0.05
    length = np.hypot(0.02, 0.05)
    weight = change(motion, style=style)
    at = np.array([0.0213, 0, -0.025]) + 0.05 / length * np.array([0.02, 0, 0.05])
    near = np.zeros_like(weight)
    column, row = np.rint(CAMERA.project(at)).astype(int)
    window = (slice(row - 8, row + 9), slice(column - 8, column + 9))
    near[window] = weight[window]
    np.testing.assert_allclose(centroid(near), CAMERA.project(at), atol=0.02)
    assert near.sum() == pytest.approx(np.pi * (0.0035 * CAMERA.fx) ** 2 * 0.45, rel=0.01)


@pytest.mark.parametrize("radius", [0.0004, 0.003])
@pytest.mark.parametrize("slope", [0.0, 0.37])
def test_a_cable_has_its_axis_and_its_width(radius, slope):
    motion = Straight((-0.3, 0, 0.0113 - 0.3 * slope), (0.3, 0, 0.0113 + 0.3 * slope))
    style = LineStyle(kind="cable", radius_m=radius, albedo=0.05, specular=0.0)
    columns = change(motion, style=style)[:, 40:200]
    row = np.arange(columns.shape[0])[:, None]
    found = (columns * row).sum(axis=0) / columns.sum(axis=0)
    expected = CAMERA.cy - (0.0113 * CAMERA.fx + slope * (np.arange(40, 200) - CAMERA.cx))
    np.testing.assert_allclose(found, expected, atol=0.02)
    across = 2 * radius * CAMERA.fx * np.hypot(1, slope)  # a column cuts the line obliquely
    np.testing.assert_allclose(columns.sum(axis=0), across * 0.45, rtol=0.02)


def test_a_bent_cable_is_painted_once_everywhere():
    """Half a ring with round ends: no pixel is painted twice or left out at the joints."""
    angle = np.linspace(0, np.pi, 1000)

    class Arch:
        def strand(self, t):
            points = np.stack([0.05 * np.cos(angle), 0 * angle, 0.05 * np.sin(angle)], axis=1)
            return Strand(points, 0.05 * angle, np.ones(angle.size, bool))

    weight = change(Arch(), style=LineStyle(kind="cable", radius_m=0.004, albedo=0.05, specular=0.0))
    area = (np.pi * 0.05 * 0.008 + np.pi * 0.004**2) * CAMERA.fx**2
    assert weight.sum() == pytest.approx(area * 0.45, rel=0.005)
    assert weight.max() < 0.4501
    # by Pappus: the arch's centroid is (R^2 + r^2/3) 2/(pi R) above its ends, each round end's is 4 r/(3 pi) below them
    arch, ends = np.pi * 0.05 * 0.008, np.pi * 0.004**2
    height = (arch * 2 / np.pi * (0.05 + 0.004**2 / 3 / 0.05) - ends * 4 * 0.004 / 3 / np.pi) / (arch + ends)
    np.testing.assert_allclose(centroid(weight), CAMERA.project([0, 0, height]), atol=0.02)


def test_marks_lie_where_the_material_has_them():
    style = LineStyle(
        kind="cable", radius_m=0.004, albedo=0.5, mark_albedo=0.05, specular=0.0, mark_spacing_m=0.1, mark_length_m=0.016
    )
    weight = change(Straight((0.02, 0, -0.2), (0.02, 0, 0.2), s_speed=0.0), style=style)  # albedo 0.5: only marks show
    rows = weight.sum(axis=1)
    lit = np.flatnonzero(rows > 0.2 * rows.max())
    groups = np.split(lit, np.flatnonzero(np.diff(lit) > 3) + 1)
    around = [np.arange(g[0] - 4, g[-1] + 5) for g in groups[1:-1]]  # those at the ends are half marks
    found = [(rows[at] * at).sum() / rows[at].sum() for at in around]
    expected = [CAMERA.project([0.02, 0, -0.2 + s])[1] for s in (0.3, 0.2, 0.1)]
    np.testing.assert_allclose(found, expected, atol=0.05)


def test_beads_are_a_pitch_apart_and_move_with_the_material():
    style = LineStyle(kind="beads", radius_m=0.004, pitch_m=0.0123, link_radius_m=0.0, albedo=0.05, specular=0.0)
    still = replace(CAMERA, exposure_s=1e-5, readout_s=1e-6)
    shifts = []
    for s_speed, frame_s in ((0.0, 0.0), (1.0, 0.003)):
        rows = change(Straight((0, 0, -0.5), (0, 0, 0.5), s_speed=s_speed), still, style, frame_s=frame_s).sum(axis=1)
        wave = 2 * np.pi / (0.0123 * still.fx) * np.arange(rows.size)
        shifts.append(np.angle((rows * np.exp(-1j * wave)).sum()))
        away = 2 * np.pi / (0.0140 * still.fx) * np.arange(rows.size)
        assert abs((rows * np.exp(-1j * wave)).sum()) > 10 * abs((rows * np.exp(-1j * away)).sum())
    moved = (shifts[1] - shifts[0]) / (2 * np.pi) * 0.0123  # s grows by 3 mm: a bead of given s sits 3 mm lower, further along rows
    assert (-moved) % 0.0123 == pytest.approx(0.003, abs=1e-4)


# --- time -------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("turns", [0, 1, 2, 3])
@pytest.mark.parametrize("readout", [0.008, -0.012])
def test_a_moving_ball_is_seen_at_mid_exposure_of_its_own_row(readout, turns):
    camera = replace(CAMERA, readout_s=readout, quarter_turns=turns)
    ball = Thrown((-0.05, 0.0, 0.04), (3.0, 0.0, -5.0))
    px, _ = truth_pixels(camera, ball.at, [0.002])
    found = centroid(change(ball, camera, frame_s=0.002))
    np.testing.assert_allclose(found, px[0], atol=0.03)
    assert np.linalg.norm(px[0] - camera.project(ball.at(0.002))) > 3.0  # without the row's time it would be far off


def test_a_moving_ball_agrees_with_brute_force_row_by_row():
    """Each row exposed by itself, 5 x 5 rays a pixel and 200 moments; then the lens' blur."""
    ball = Thrown((-0.02, 0.0, 0.03), (4.0, 0.0, -6.0), radius=0.02)
    frame_s, fine = 0.001, 5
    column = np.arange(CAMERA.width * fine) / fine - 0.4
    expected = np.zeros((CAMERA.height, CAMERA.width))
    rho = CAMERA.readout_s / (CAMERA.height - 1)
    for row in range(90, 230):
        t = frame_s + rho * row + CAMERA.exposure_s * ((np.arange(200) + 0.5) / 200 - 0.5)
        centre = CAMERA.project(ball.at(t))
        for sub in (np.arange(fine) / fine - 0.4):
            half2 = (0.02 * CAMERA.fx) ** 2 - (row + sub - centre[:, 1]) ** 2
            covered = (column[None, :] - centre[:, :1]) ** 2 < half2[:, None]
            expected[row] += covered.mean(axis=0).reshape(-1, fine).mean(axis=1) / fine
    expected = 0.45 * cv2.GaussianBlur(expected, (0, 0), CAMERA.blur_px)
    off = change(ball, frame_s=frame_s) - expected
    assert np.abs(off).max() < 0.03 * 0.45
    assert np.sqrt((off**2).sum() / (expected**2).sum()) < 0.01


@pytest.mark.parametrize("kind", ["beads", "cable"])
@pytest.mark.parametrize("readout", [0.03, -0.03])
def test_a_line_that_runs_fast_along_itself_is_seen_in_every_row(kind, readout):
    """Each row sees other material: over the readout 0.24 m of line run past."""
    camera = replace(CAMERA, readout_s=readout)
    style = LineStyle(kind=kind, radius_m=0.003, pitch_m=0.006, albedo=0.05, specular=0.0)

    class Running:
        def strand(self, t):
            s = np.arange(-2.0, 2.0, 0.002) + 8.0 * t  # always as long, whatever material it is
            points = np.stack([0 * s, 0 * s, s - 8.0 * t], axis=1)
            return Strand(points, s, np.ones(s.size, bool))

    rows = change(Running(), camera, style, frame_s=0.1).sum(axis=1)
    assert rows.min() > 0.5 * np.median(rows) > 0.2


def test_jointed_rods_have_gaps_at_their_joints():
    """Level rods of 50 mm with a 3 mm gap on each side of every joint, and a marked one."""
    style = LineStyle(
        kind="rods", radius_m=0.003, gap_m=0.003, albedo=0.05, specular=0.0, mark_spacing_m=1.0, mark_length_m=0.05,
        mark_offset_m=0.075, mark_albedo=0.25,
    )  # fmt: skip
    columns = change(Straight((-0.1, 0, 0), (0.1, 0, 0), n=5), style=style).sum(axis=0)
    for joint in (-0.05, 0.0, 0.05):
        column = round(float(CAMERA.project([joint, 0, 0])[0]))
        assert columns[column] < 0.15 * columns[column + 10]
    full = 0.006 * CAMERA.fx
    middle = [int(CAMERA.project([x, 0, 0])[0]) for x in (-0.075, -0.025, 0.025)]
    np.testing.assert_allclose(columns[middle], full * np.array([0.45, 0.25, 0.45]), rtol=0.01)


def test_a_falling_rod_leans_as_the_rolling_shutter_makes_it():
    """A level rod under a camera that scans along columns: its ends are seen at different times."""
    camera = replace(CAMERA, quarter_turns=1)

    class Rod:
        def bars(self, t):
            z = 0.05 - 4.0 * t
            return Bars(np.array([[-0.15, 0, z]]), np.array([[0.15, 0, z]]), np.array([0.003]), np.array([0.05]), 0.0)

    weight = change(Rod(), camera)
    for column in (60, 180):
        row = (weight[:, column] * np.arange(320)).sum() / weight[:, column].sum()
        t = camera.readout_s * (239 - column) / 239
        assert row == pytest.approx(camera.cy - (0.05 - 4.0 * t) * camera.fy, abs=0.03)


# --- light ------------------------------------------------------------------------------------------------------------


def test_one_sided_light_moves_the_brightness_centre_off_the_axis():
    lamp = Scenery(replace(PLAIN, albedo=0.02), Light(towards=(-1, -0.6, 0.2), ambient=0.3, lamp=0.8))
    style = LineStyle(kind="cable", radius_m=0.003, albedo=0.8, specular=0.0)
    weight = -change(Straight((0.01, 0, -0.4), (0.01, 0, 0.4)), style=style, scenery=lamp)[100:200]
    weight[weight < 0.02] = 0
    off = centroid(weight)[0] - CAMERA.project([0.01, 0, 0])[0]
    assert -0.7 < off < -0.15  # towards the lamp, at the left


def test_a_line_behind_something_is_hidden_by_depth():
    scenery = Scenery(PLAIN, EVEN, (Box((-0.05, -0.1, -0.5), (0.05, -0.05, 0.5), 0.8),))
    style = LineStyle(kind="cable", radius_m=0.004, albedo=0.05, specular=0.0)
    behind = change(Straight((-0.3, 0.0, 0), (0.3, 0.0, 0)), style=style, scenery=scenery).sum(axis=0)
    before = change(Straight((-0.3, -0.2, 0), (0.3, -0.2, 0)), style=style, scenery=scenery).sum(axis=0)
    assert behind[20] > 1 and abs(behind[121]) < 1e-6
    assert before[20] > 1 and before[121] > 1


def test_a_line_leaves_the_container_over_its_near_wall():
    """What is inside the vessel is hidden by its front, and seen again above the rim."""
    cup = Container((0, 0, 0), 0.06, 0.05, 0.12)
    scenery = Scenery(PLAIN, EVEN, (cup,))
    style = LineStyle(kind="cable", radius_m=0.003, albedo=0.05, specular=0.0)
    rows = np.abs(change(Straight((0, 0, -0.08), (0, 0, 0.1)), style=style, scenery=scenery)).sum(axis=1)
    rim = CAMERA.cy  # at the camera's own height
    assert rows[int(rim) + 3 :].max() < 1e-6
    assert rows[int(rim) - 3] > 0.5


def test_a_ball_hides_the_line_that_is_tied_to_it():
    class Tied(Thrown):
        def bars(self, t):
            return Bars(np.array([[0, 0, 0.0]]), np.array([[0.1, 0, 0]]), np.array([0.004]), np.array([0.9]), 0.0)

    alone, tied = change(Thrown((0, 0, 0), radius=0.02)), change(Tied((0, 0, 0), radius=0.02))
    column, row = np.rint(CAMERA.project([0.01, 0, 0])).astype(int)
    assert tied[row, column] == pytest.approx(alone[row, column], abs=1e-6)
    column = int(CAMERA.project([0.06, 0, 0])[0])
    assert tied[row, column] == pytest.approx(0.5 - 0.9, abs=1e-3)


def test_a_line_flagged_as_hidden_is_not_drawn():
    style = LineStyle(kind="cable", radius_m=0.003, albedo=0.05)
    assert not change(Straight((-0.3, 0, 0), (0.3, 0, 0), visible=False), style=style).any()


def test_the_line_throws_a_soft_shadow_on_the_wall():
    scenery = Scenery(PLAIN, Light(towards=(-0.5, -1.0, 0.5), ambient=0.4, lamp=0.8, softness=0.05))
    style = LineStyle(kind="cable", radius_m=0.005, albedo=0.5, specular=0.0)
    line = change(Straight((-0.1, 0, -0.4), (-0.1, 0, 0.4)), style=style, scenery=scenery)[150]
    at = CAMERA.project([-0.1 + 0.5 * 0.5, 0.5, 0])[0]  # half a metre of throw, moved by half of it
    dark = line[int(at) - 30 : int(at) + 31]
    assert dark.max() > 0.003
    assert (dark * np.arange(-30, 31)).sum() / dark.sum() == pytest.approx(0, abs=1.0)


def test_flicker_bands_have_twice_the_mains_frequency():
    camera = replace(CAMERA, readout_s=0.03, flicker=Flicker(mains_hz=49.7, depth=0.2, phase_rad=1.0))
    rows = Renderer(camera, EMPTY, None, frame_s=[0.0]).linear(0.0).astype(float).mean(axis=1)
    t = camera.readout_s * np.arange(320) / 319
    tried = np.linspace(80, 120, 401)
    left = []
    for f in tried:
        basis = np.stack([np.ones_like(t), np.cos(2 * np.pi * f * t), np.sin(2 * np.pi * f * t)], axis=1)
        left.append(np.linalg.lstsq(basis, rows, rcond=None)[1][0])
    assert tried[int(np.argmin(left))] == pytest.approx(99.4, abs=0.15)


def test_vignetting_darkens_the_corner_by_its_share():
    light = Renderer(replace(CAMERA, cx=119.5, cy=159.5, vignetting=0.3), EMPTY, None, frame_s=[0.0]).linear(0.0)
    assert light[0, 0] / light[160, 120] == pytest.approx(0.7, abs=1e-3)


def test_noise_is_shot_and_read_noise():
    camera = replace(CAMERA, sensor=Sensor(full_well_e=2000.0, read_e=10.0, transfer="linear"))
    picture = Renderer(camera, EMPTY, None, frame_s=[0.0, 0.1], seed=3).frame(1, bits=10)
    expected = np.sqrt(0.5 * 2000 + 10**2) / 2000 * 1023
    assert picture.astype(float).std() == pytest.approx(expected, rel=0.01)
    assert picture.mean() == pytest.approx(0.5 * 1023, abs=0.5)


def test_sharpening_is_unsharp_masking_as_scikit_image_has_it():
    ball = Thrown((0, 0, 0), radius=0.02)
    plain, sharp = (
        Renderer(replace(CAMERA, sensor=Sensor(np.inf, sharpen=amount)), EMPTY, ball, frame_s=[0.0]).frame(0, bits=10) / 1023
        for amount in (0.0, 0.8)
    )
    assert sharp.max() > plain.max() + 0.02  # the halo is there
    np.testing.assert_allclose(sharp, unsharp_mask(plain, radius=1.2, amount=0.8), atol=0.003)


def test_a_frame_is_the_same_whatever_was_rendered_before_it():
    camera = replace(CAMERA, sensor=Sensor())
    ball = Thrown((0, 0, 0.05), (0, 0, -3.0))
    renderer = Renderer(camera, EMPTY, ball, frame_s=camera.frame_times(4), seed=9)
    in_turn = list(renderer.frames())
    np.testing.assert_array_equal(Renderer(camera, EMPTY, ball, frame_s=camera.frame_times(4), seed=9).frame(2), in_turn[2])
    assert (in_turn[2] != in_turn[3]).any()


# --- the still scene --------------------------------------------------------------------------------------------------

BOARD = Board((7, 5), 0.022, centre_m=(0.01, 0.05, -0.02), turn_deg=8.0, lean_deg=5.0, yaw_deg=-7.0, margin_m=0.02)
# 26 px a square: with fewer than some 22, OpenCV's sector finder is itself off by 0.1 px
BOARD_CAMERA = replace(CAMERA, width=480, height=400, cx=240.0, cy=199.0, fx=1250.0, fy=1250.0, blur_px=0.8)


def grey(light, camera=CAMERA):
    return (255 * camera.sensor.encode(light)).round().astype(np.uint8)


def by_nearest(found, expected):
    apart = np.linalg.norm(found[:, None] - expected[None], axis=2)
    assert sorted(apart.argmin(axis=1)) == list(range(len(expected)))  # one to one
    return found - expected[apart.argmin(axis=1)]


def test_board_corners_are_found_where_they_project():
    camera = replace(BOARD_CAMERA, k1=-0.2, p1=0.002)
    picture = grey(Renderer(camera, Scenery(PLAIN, EVEN, (BOARD,)), None, frame_s=[0.0]).linear(0.0))
    good, found = cv2.findChessboardCornersSB(picture, (7, 5), flags=cv2.CALIB_CB_ACCURACY)
    assert good
    off = by_nearest(found.reshape(-1, 2), camera.project(BOARD.corners_world()))
    assert np.sqrt((off**2).sum(axis=1).mean()) < 0.05
    assert np.linalg.norm(off.mean(axis=0)) < 0.02


def test_a_shaken_board_is_where_its_row_sees_it():
    camera = replace(BOARD_CAMERA, readout_s=0.02, shake=Shake(3.0, 0.2, 6.0, 2))
    still, renderer = (Renderer(c, Scenery(PLAIN, EVEN, (BOARD,)), None, frame_s=[0.4]) for c in (BOARD_CAMERA, camera))
    corners = BOARD.corners_world()
    expected = np.array([truth_pixels(camera, lambda t, c=c: np.tile(c, (t.size, 1)), [0.4])[0][0] for c in corners])
    assert np.linalg.norm(expected - camera.project(corners), axis=1).min() > 1.0
    off = []
    for picture, truth in ((still.linear(0.4), camera.project(corners)), (renderer.linear(0.4), expected)):
        good, found = cv2.findChessboardCornersSB(grey(picture), (7, 5), flags=cv2.CALIB_CB_ACCURACY)
        assert good
        off.append(by_nearest(found.reshape(-1, 2), truth))
    off = off[1] - off[0]  # the finder's own part leaves the difference
    assert np.sqrt((off**2).sum(axis=1).mean()) < 0.03


def test_a_ball_seen_by_a_shaken_camera_keeps_to_the_truth():
    camera = replace(CAMERA, shake=Shake(3.0, 0.2, 6.0, 2))
    ball = Thrown((-0.05, 0.0, 0.04), (3.0, 0.0, -5.0))
    px, _ = truth_pixels(camera, lambda t: ball.at(t - 0.4), [0.4])

    class Late(Thrown):
        def discs(self, t):
            return super().discs(t - 0.4)

    found = centroid(change(Late(ball.start, ball.velocity), camera, frame_s=0.4))
    np.testing.assert_allclose(found, px[0], atol=0.03)


def test_board_leans_and_turns_as_it_says():
    along, down, into = Board(lean_deg=10.0).axes
    assert -down[1] > 0.1 and along[1] == pytest.approx(0)  # the top goes away from the camera
    along, _, _ = Board(yaw_deg=10.0).axes
    assert along[1] > 0.1  # so does the right edge
    along, _, _ = Board(turn_deg=10.0).axes
    assert along[2] < -0.1  # clockwise: what was right goes down
    np.testing.assert_allclose(np.linalg.det(Board(lean_deg=3, yaw_deg=4, turn_deg=5).axes), 1.0)
    assert np.asarray(into) @ np.array([0, 1, 0]) > 0.9


def test_a_code_on_a_print_can_be_read():
    dictionary = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_4X4_50)
    marker = np.pad(cv2.aruco.generateImageMarker(dictionary, 23, 120), 30, constant_values=255)
    scenery = Scenery(PLAIN, EVEN, (Print(marker, 0.12, (0, 0, 0), turn_deg=10.0, yaw_deg=15.0),))
    _, ids, _ = cv2.aruco.ArucoDetector(dictionary).detectMarkers(grey(Renderer(CAMERA, scenery, None, frame_s=[0]).linear(0)))
    assert ids is not None and ids.ravel().tolist() == [23]


def test_a_box_covers_its_outline():
    scenery = Scenery(PLAIN, EVEN, (Box((-0.05, -0.02, -0.03), (0.06, 0.4, 0.07), 0.9),))
    front = trace(scenery, CAMERA).front.astype(float)
    px = CAMERA.project([[x, -0.02, z] for x in (-0.05, 0.06) for z in (-0.03, 0.07)])
    extent = px.max(axis=0) - px.min(axis=0)
    assert front.sum() == pytest.approx(extent[0] * extent[1], rel=0.005)


def test_a_slanted_edge_is_resolved_as_finely_as_a_straight_one():
    """A square sheet stood on its corner: its width grows by two pixels a row."""
    sheet = Print(np.full((10, 10), 255, np.uint8), 0.2, (0.0113, 0, 0.0047), turn_deg=45.0)
    widths = trace(Scenery(PLAIN, EVEN, (sheet,)), CAMERA).front.astype(float).sum(axis=1)
    middle = CAMERA.project(sheet.centre_m)[1]
    expected = 2 * (0.2 / 2**0.5 * CAMERA.fx - np.abs(np.arange(320) - middle))
    inside = (expected > 4) & (np.abs(np.arange(320) - middle) > 1)
    np.testing.assert_allclose(widths[inside], expected[inside], atol=0.06)


def test_faces_are_lit_by_their_slope_to_the_lamp():
    lamp = Light(towards=(-2.0, -1.0, 2.0), ambient=0.3, lamp=0.9)
    box = Box((-0.1, 0.0, -0.2), (0.1, 0.3, -0.1), 0.6)
    light = trace(Scenery(PLAIN, lamp, (box,)), CAMERA).light
    for place, slope in (((0, 0, -0.15), 1 / 3), ((0, 0.1, -0.1), 2 / 3)):  # the front, and the top
        column, row = np.rint(CAMERA.project(place)).astype(int)
        assert light[row, column] == pytest.approx(0.6 * (0.3 + 0.9 * slope), rel=1e-5)


def test_a_container_has_its_radii():
    cup = Container((0, 0, 0), 0.06, 0.04, 0.1)
    widths = trace(Scenery(PLAIN, EVEN, (cup,)), CAMERA).front.astype(float).sum(axis=1)
    rim, base = CAMERA.project([[0, 0, -0.002], [0, 0, -0.099]])[:, 1].astype(int)
    assert widths[rim] == pytest.approx(2 * CAMERA.fx * 0.06 / np.sqrt(1 - 0.06**2), rel=0.01)
    assert widths[base] == pytest.approx(2 * CAMERA.fx * 0.04 / np.sqrt(1 - 0.04**2), rel=0.02)
    assert widths[rim - 6] == 0


def test_the_first_square_of_a_board_is_black():
    board = Board((3, 2), 0.05, centre_m=(0, 0, 0), margin_m=0.01)
    light = trace(Scenery(PLAIN, EVEN, (board,)), CAMERA).light
    first, second = (np.rint(CAMERA.project([x, 0, 0.05])).astype(int) for x in (-0.075, -0.025))
    assert light[first[1], first[0]] == pytest.approx(board.black) and light[second[1], second[0]] == pytest.approx(board.white)


def test_a_thing_throws_its_shadow_away_from_the_lamp():
    lamp = Light(towards=(-1.0, -1.0, 0.0), ambient=0.4, lamp=0.8, softness=0.01)
    scenery = Scenery(replace(PLAIN, y_m=0.2), lamp, (Box((-0.06, -0.01, -0.05), (-0.02, 0.0, 0.05), 0.9),))
    direct = trace(scenery, CAMERA).direct
    column, row = np.rint(CAMERA.project([-0.04 + 0.2, 0.2, 0.0])).astype(int)
    assert direct[row, column] < 0.02 < 0.3 < direct[row, 10]


def test_the_wall_is_uneven_by_its_texture():
    wall = Wall(y_m=2.0, albedo=0.5, texture=0.08, grain=0.0, seed=5)
    light = trace(Scenery(wall, EVEN), replace(CAMERA, fx=150.0, fy=150.0)).light
    assert 0.04 < light.std() / light.mean() < 0.12


def test_a_wall_before_the_camera_is_refused():
    with pytest.raises(ValueError, match="wall"):
        trace(Scenery(Wall(y_m=-3.0), EVEN), CAMERA)
