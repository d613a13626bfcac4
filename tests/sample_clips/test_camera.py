"""The simulated camera against OpenCV, scikit-image, and closed forms."""

import cv2
import numpy as np
import pytest
from skimage.color import rgb2xyz

from sample_clips.camera import Camera, Flicker, Sensor, Shake, truth_pixels

RNG = np.random.default_rng(20240311)
CROOKED = Camera(
    fx=1180.0, fy=1165.0, cx=352.0, cy=661.0, k1=0.08, k2=-0.21, p1=0.0012, p2=-0.0008, k3=0.05,
    position_m=(0.2, -2.1, 0.15), yaw_deg=4.0, pitch_deg=-3.0, roll_deg=2.0,
)  # fmt: skip


def test_projection_agrees_with_opencv():
    points = RNG.uniform([-0.5, -0.3, -0.9], [0.7, 0.5, 1.0], size=(200, 3))
    turn = CROOKED.rotation
    rvec, _ = cv2.Rodrigues(turn)
    matrix = np.array([[CROOKED.fx, 0, CROOKED.cx], [0, CROOKED.fy, CROOKED.cy], [0, 0, 1]])
    lens = np.array([CROOKED.k1, CROOKED.k2, CROOKED.p1, CROOKED.p2, CROOKED.k3])
    expected, _ = cv2.projectPoints(points, rvec, -turn @ np.array(CROOKED.position_m), matrix, lens)
    np.testing.assert_allclose(CROOKED.project(points), expected[:, 0], atol=1e-8)


@pytest.mark.parametrize(
    ("attitude", "where"),
    [({"yaw_deg": 5.0}, "left"), ({"pitch_deg": 5.0}, "below"), ({"roll_deg": 5.0}, "neither")],
)
def test_attitude_means_what_it_says(attitude, where):
    camera = Camera(**attitude)
    column, row = camera.project([0.0, 0.0, 0.0])  # straight before an upright camera
    if where == "left":  # the camera looks to the right
        assert column < camera.cx - 50 and row == pytest.approx(camera.cy)
    elif where == "below":  # it looks up
        assert row > camera.cy + 50 and column == pytest.approx(camera.cx)
    else:  # turned clockwise: what is above leans to the left, counter-clockwise
        top = camera.project([0.0, 0.0, 0.5])
        assert top[0] < camera.cx - 10 and top[1] < camera.cy


def test_yaw_is_done_first_then_pitch_then_roll():
    yaw, pitch = np.deg2rad([30.0, 20.0])
    forward = [np.sin(yaw) * np.cos(pitch), np.cos(yaw) * np.cos(pitch), np.sin(pitch)]  # azimuth and elevation
    np.testing.assert_allclose(Camera(yaw_deg=30.0, pitch_deg=20.0, roll_deg=40.0).rotation[2], forward, atol=1e-12)
    assert Camera(yaw_deg=30.0, pitch_deg=20.0).rotation[0, 2] == 0  # the picture's rows stay level until it is rolled


def test_rotation_is_a_rotation_and_the_picture_is_not_mirrored():
    assert np.linalg.det(CROOKED.rotation) == pytest.approx(1.0, abs=1e-12)
    right, up = Camera().project([[0.1, 0, 0], [0, 0, 0.1]])
    assert right[0] > Camera().cx and up[1] < Camera().cy


def test_rays_lead_back_to_their_pixels():
    px = np.stack(np.meshgrid([0.0, 200.0, 719.0], [0.0, 700.0, 1279.0]), axis=-1)
    np.testing.assert_allclose(CROOKED.project(np.array(CROOKED.position_m) + 3.0 * CROOKED.rays(px)), px, atol=1e-7)


def test_a_lens_without_an_inverse_is_refused():
    with pytest.raises(ValueError, match="no inverse"):
        Camera(k1=-2.0).undistort([[0.0, 0.0]])


def test_points_behind_the_lens_are_not_seen():
    assert np.isnan(Camera().project([0.0, -5.0, 0.0])).all()


@pytest.mark.parametrize("mirrored", [False, True])
@pytest.mark.parametrize("turns", [0, 1, 2, 3])
def test_stored_rows_are_those_of_the_turned_picture(turns, mirrored):
    camera = Camera(width=6, height=8, quarter_turns=turns, mirrored=mirrored)
    width, height = camera.stored_size
    stored = np.repeat(np.arange(height)[:, None], width, axis=1)  # each pixel holds its stored row
    unmirrored = stored[:, ::-1] if mirrored else stored
    upright = np.rot90(unmirrored, -turns)  # clockwise, as the tag says
    row, column = np.mgrid[0:8, 0:6]
    np.testing.assert_array_equal(camera.stored_row(np.stack([column, row], axis=-1)), upright)
    np.testing.assert_array_equal(camera.turn_to_stored(upright), stored)


@pytest.mark.parametrize("readout", [0.008, -0.008])
@pytest.mark.parametrize("turns", [0, 1, 2, 3])
def test_rolling_shutter_fixed_point_has_its_closed_form(readout, turns):
    """At constant picture speed w along the scan, row r0 + w t is seen at t = t_frame + rho r, so r = (r0 + w t_frame)/(1 - w rho)."""
    camera = Camera(readout_s=readout, quarter_turns=turns)
    speed = np.array([1.5, 0.0, -3.0])
    frame_s = np.array([0.0, 1 / 240, 0.05])
    px, t = truth_pixels(camera, lambda at: np.array([-0.1, 0.0, 0.2]) + at[:, None] * speed, frame_s)
    depth = 2.0
    picture_speed = np.array([speed[0], -speed[2]]) * camera.fx / depth
    zero = camera.stored_row([0.0, 0.0])
    along = camera.stored_row(picture_speed) - zero  # rows a second
    r0 = camera.stored_row(camera.project([-0.1, 0.0, 0.2]))
    rho = readout / (camera.stored_size[1] - 1)
    row = (r0 + along * frame_s) / (1 - along * rho)
    np.testing.assert_allclose(t, frame_s + rho * row, atol=1e-9)
    np.testing.assert_allclose(camera.stored_row(px), row, atol=1e-5)


def test_a_point_that_outruns_the_readout_is_refused():
    camera = Camera(readout_s=0.02, height=1280)
    with pytest.raises(ValueError, match="outruns"):
        truth_pixels(camera, lambda t: np.stack([0 * t, 0 * t, -200.0 * t], axis=-1), [0.0])


def test_shake_starts_at_rest_and_wanders_by_its_rms():
    shake = Shake(rms_px=1.5, rms_roll_deg=0.05, bandwidth_hz=5.0, seed=4)
    assert not shake.angles(0.0, 1150.0).any()
    path = shake.angles(np.linspace(0, 400, 40001), 1150.0)
    expected = [1.5 / 1150, 1.5 / 1150, np.deg2rad(0.05)]
    np.testing.assert_allclose(path.std(axis=0), expected, rtol=0.05)


def test_shake_moves_the_picture_as_a_turned_camera_does():
    camera = Camera(shake=Shake(rms_px=2.0, seed=1))
    t = 0.37
    about_x, about_y, about_z = camera.shake_angles(t)
    moved = camera.project([0.0, 0.0, 0.0], t) - camera.project([0.0, 0.0, 0.0])
    np.testing.assert_allclose(moved, np.array([-np.tan(about_y), np.tan(about_x)]) * camera.fx, rtol=1e-4)
    assert about_z == 0.0


def test_transfer_is_srgb_as_scikit_image_has_it():
    signal = np.linspace(0, 1, 52)
    grey = np.repeat(signal[:, None, None], 3, axis=2)
    sensor = Sensor()
    np.testing.assert_allclose(sensor.decode(signal), rgb2xyz(grey)[:, 0, 1], atol=2e-6)  # luminance Y of grey is its light
    np.testing.assert_allclose(sensor.encode(sensor.decode(signal)), signal, atol=1e-4)  # the standard's two branches meet to 4e-5


def test_flicker_is_averaged_over_the_exposure():
    flicker = Flicker(mains_hz=50.0, depth=0.3, phase_rad=0.4)
    t, exposure = 0.0123, 0.004
    moments = t + exposure * ((np.arange(20000) + 0.5) / 20000 - 0.5)
    expected = np.mean(1 + 0.3 * np.cos(2 * np.pi * 100 * moments + 0.4))
    assert flicker.gain(t, exposure) == pytest.approx(expected, abs=1e-9)
    assert flicker.gain(t, 0.01) == pytest.approx(1.0, abs=1e-12)  # a whole period of 100 Hz
