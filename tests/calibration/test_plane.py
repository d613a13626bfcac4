"""The plane of motion: geometry against OpenCV, each source against a second fit, coverage, and clips with truth."""

import csv
import json
import time
import tomllib
from pathlib import Path

import cv2
import numpy as np
import pytest
from scipy import stats

from calibration.board import BoardFind, BoardSpec, find_in_frames, marks_board
from calibration.lens import Lens
from calibration.notice import BadInput, CannotMeasure
from calibration.plane import AT, PARAMETERS, Plane, fit_plane
from tests.studies.plane_coverage import study

SIZE = (720, 1280)
SPEC = BoardSpec("checkerboard", (9, 6), 0.025)
SHARED = Path(__file__).resolve().parents[3] / "shared" / "clips"
CLIPS = ("cable", "control", "drop", "fountain", "held", "surface")
needs_clips = pytest.mark.skipif(not SHARED.is_dir(), reason="no ../shared/clips beside the checkout")


def seen_board(focal=1300.0, turn=(0.02, -0.03, 0.01), place=(0.15, 0.05, 1.5), k=(0, 0, 0, 0, 0), noise=0.0, rng=None,
               square=0.025, across=6, high=9):
    """A board before an OpenCV camera with its principal point in the picture's middle."""
    rows, columns = np.mgrid[0:high, 0:across]
    grid = np.stack([columns.ravel(), rows.ravel()], axis=1)
    points = (grid - [(across - 1) / 2, (high - 1) / 2]) * square
    camera = np.array([[focal, 0, 359.5], [0, focal, 639.5], [0, 0, 1.0]])
    turn, place, k = (np.array(values, dtype=float) for values in (turn, place, k))
    seen, _ = cv2.projectPoints(np.c_[points, np.zeros(len(points))], turn, place, camera, k)
    seen = seen.reshape(-1, 2)
    if noise:
        seen = seen + rng.normal(0, noise, seen.shape)
    px = float(np.linalg.norm(seen[1] - seen[0]))
    return BoardFind(seen, grid, points, max(noise, 0.03), square_px=px)


def exact_lens(focal=1300.0, u=1e-6):
    return Lens(focal, focal, 359.5, 639.5, np.zeros(5), u**2 * np.diag([1e6, 1e6, 1e4, 1e4, 1, 1, 1, 1, 1.0]), SIZE)


def fit(find, **changes):
    told = {"size": SIZE, "origin_px": (330.0, 400.0), "distance_m": 1.5, "u_square_m": 5e-5}
    return fit_plane(find, SPEC, **{**told, **changes})


def test_places_on_the_board_are_their_own():
    """With the board in the plane of motion and a known lens, corners map to their printed places."""
    find = seen_board()
    plane = fit(find, lens=exact_lens(), origin_px=tuple(find.corners_px[20]), distance_m=None, u_lean_deg=0, u_yaw_deg=0, u_offset_m=0)
    expected = (find.points_m - find.points_m[20]) * [1, -1]
    np.testing.assert_allclose(plane.to_metres(find.corners_px), expected, atol=2e-8)


def test_maps_back_and_forth_keeps_shape_and_gaps(rng):
    plane = fit(seen_board(k=(0.05, -0.1, 0, 0, 0)))
    points = rng.uniform(0, SIZE, (6, 4, 2))
    points[1, 2] = np.nan
    np.testing.assert_allclose(plane.to_pixels(plane.to_metres(points)), points, atol=1e-9)
    assert np.isnan(plane.to_metres(points)[1, 2]).all()
    assert plane.to_metres([330.0, 400.0]).shape == (2,)
    np.testing.assert_allclose(plane.to_metres([330.0, 400.0]), 0, atol=1e-12)


def test_axes_right_and_up():
    plane = fit(seen_board())
    assert plane.to_metres([430.0, 400.0])[0] > 0.05
    assert plane.to_metres([330.0, 300.0])[1] > 0.05


def test_board_behind_the_plane_scales_as_similar_triangles():
    """60 mm behind at 2.20 m: lengths read on the board's scale are 2.73 % long (facts, section 4; pinhole)."""
    find = seen_board(turn=(0, 0, 0), place=(0, 0, 2.26))
    flat = dict(lens=exact_lens(), distance_m=None, u_lean_deg=0, u_yaw_deg=0)
    on, behind = fit(find, **flat), fit(find, offset_m=0.060, **flat)
    ends = np.array([[360.0, 300.0], [360.0, 900.0]])
    ratio = np.ptp(on.to_metres(ends)[:, 1]) / np.ptp(behind.to_metres(ends)[:, 1])
    assert ratio == pytest.approx(1.0273, abs=5e-5)
    assert behind.distance_m == pytest.approx(2.20, abs=1e-4)


@pytest.mark.parametrize(("attitude", "turn"), [
    ({"lean_deg": 10.0}, (-np.radians(10), 0, 0)),  # the board's top away from the camera: its bottom comes nearer
    ({"yaw_deg": 10.0}, (0, -np.radians(10), 0)),  # its right side away
])
def test_a_board_known_to_stand_askew_does_not_tilt_the_plane(attitude, turn):
    """A camera square to the plane of motion sees the board lean: with the lean told, the plane is square again."""
    find = seen_board(turn=turn, place=(0.1, 0.05, 1.5))
    told = dict(lens=exact_lens(), distance_m=None, origin_px=(350.0, 600.0))
    assert fit(find, **told).tilt_deg == pytest.approx(10.0, abs=0.01)
    plane = fit(find, **attitude, **told)
    assert plane.tilt_deg == pytest.approx(0.0, abs=0.01)
    rows = plane.to_metres([[350.0, 100.0], [350.0, 600.0], [350.0, 1100.0]])[:, 1]
    assert rows[0] - rows[1] == pytest.approx(rows[1] - rows[2], rel=1e-4)  # one scale from top to bottom


@pytest.mark.parametrize(("name", "changes"), [
    ("offset", {"offset_m": 0.02 + 1e-4}), ("lean", {"lean_deg": 0.02}), ("yaw", {"yaw_deg": 0.02}),
    ("distance", {"distance_m": 1.5 * 1.004})])
def test_each_source_moves_the_plane_as_a_second_fit_with_that_input(name, changes, rng):
    """The sign and size of a sensitivity, against the fit done again with the input moved."""
    find = seen_board(noise=0.03, rng=rng)
    base = {"offset_m": 0.02, "u_offset_m": 0.002}
    plane = fit(find, **base)
    moved = fit(find, **{**base, **changes})
    amount = {"offset": 1e-4 / 0.002, "lean": 0.02 / 0.5, "yaw": 0.02 / 0.5, "distance": 0.006 / 0.03}[name]
    index = [source.name for source in plane.sources].index(name)
    points = rng.uniform([50, 50], [670, 1230], (30, 2))
    expected = moved.to_metres(points) - plane.to_metres(points)
    got = plane.shifted(index, amount).to_metres(points) - plane.to_metres(points)
    assert np.abs(expected).max() > 1e-7
    # The distance enters through the curved fit, where Gauss and Newton's slopes are good to some per cent of its own
    # small effect (0.1 mm at the picture's edge); the others enter directly.
    share = 0.15 if name == "distance" else 0.02
    np.testing.assert_allclose(got, expected, atol=share * np.abs(expected).max())


def test_square_scales_everything(rng):
    find = seen_board()
    plane = fit(find, distance_m=None)
    index = [source.name for source in plane.sources].index("log_square")
    points = rng.uniform([50, 50], [670, 1230], (30, 2))
    np.testing.assert_allclose(plane.shifted(index).to_metres(points), plane.to_metres(points) * (1 + 5e-5 / 0.025), rtol=1e-4)
    assert plane.sources[index].shared == "board"


def test_corner_sources_hold_the_whole_effect_of_corner_noise(rng):
    """Corners moved by draws of the assumed noise and fitted again scatter as the sources say."""
    find = seen_board()
    plane = fit(find)
    ends = np.array([[330.0, 150.0], [330.0, 1100.0]])
    effect = plane.effects(ends)
    length = (effect[:, 1] - effect[:, 0])[:, 1]
    said = np.sqrt(sum(part**2 for part, source in zip(length, plane.sources, strict=True) if source.label == "board corners"))
    apart = np.linalg.norm(find.grid[:, None] - find.grid[None], axis=2) / 2.0
    lower = np.linalg.cholesky(0.03**2 * np.eye(54) + 0.03**2 * np.exp(-0.5 * apart**2))
    drawn = []
    for _ in range(150):
        noisy = BoardFind(find.corners_px + lower @ rng.normal(size=(54, 2)), find.grid, find.points_m, 0.03, square_px=find.square_px)
        drawn.append(np.ptp(fit(noisy).to_metres(ends)[:, 1]))
    # u of a standard deviation of 150 draws is 5.8 %; Birge's widening adds a little to single fits
    assert np.std(drawn) == pytest.approx(said, rel=0.2)


def test_covariance_is_the_sum_of_the_sources_and_as_drawn(rng):
    plane = fit(seen_board(), offset_m=0.03)
    points = np.array([[330.0, 150.0], [400.0, 1100.0], [600.0, 700.0]])
    cov = plane.covariance(points)
    assert cov.shape == (6, 6)
    np.testing.assert_allclose(cov, cov.T, atol=1e-18)
    drawn = np.array([plane.drawn(rng).to_metres(points).ravel() for _ in range(3000)])
    expected = np.cov(drawn.T)
    np.testing.assert_allclose(cov, expected, atol=0.11 * np.sqrt(np.outer(np.diag(expected), np.diag(expected))).max())


def test_names_are_unique_and_labels_few():
    plane = fit(seen_board(), lens=exact_lens())
    names = [source.name for source in plane.sources]
    assert len(set(names)) == len(names)
    assert {source.shared for source in plane.sources} <= {"station", "board", "lens"}
    assert all(len(source.id) == 12 for source in plane.sources)


def test_identity_of_what_is_shared(rng):
    first, second = (seen_board(noise=0.03, rng=rng) for _ in range(2))

    def ids(find, **changes):
        return {source.name: source.id for source in fit(find, **changes).sources}

    apart, other = ids(first), ids(second)
    assert apart["log_square"] == other["log_square"]  # one print
    assert apart["offset"] != other["offset"]  # two clips of which nothing says that the station stayed
    named, again = ids(first, station="bench-2"), ids(second, station="bench-2")
    assert named["offset"] == again["offset"]
    assert named["offset"] != ids(second, station="bench-2", offset_m=0.01)["offset"]
    assert ids(first, board_name="A")["log_square"] != ids(first, board_name="B")["log_square"]


def test_a_lens_file_replaces_the_prior_and_narrows_u():
    find = seen_board()
    lens = Lens(1300, 1300, 359.5, 639.5, np.zeros(5), np.diag([9.0, 9, 4, 4, 1e-5, 1e-4, 1e-9, 1e-9, 1e-6]), SIZE)
    ends = np.array([[330.0, 100.0], [330.0, 1200.0]])

    def u_length(plane):
        return float(np.linalg.norm((plane.effects(ends)[:, 1] - plane.effects(ends)[:, 0])[:, 1]))

    with_lens, without = fit(find, lens=lens, distance_m=None), fit(find, distance_m=None)
    assert u_length(with_lens) < 0.8 * u_length(without)
    assert {source.id for source in with_lens.sources if source.shared == "lens"} == {lens.id}


def test_without_distance_and_lens_an_offset_costs_u():
    find = seen_board()
    near, far = (fit(find, distance_m=distance, offset_m=0.06) for distance in (1.5, None))
    ends = np.array([[330.0, 500.0], [330.0, 700.0]])
    u_near, u_far = (float(np.linalg.norm(np.ptp(plane.effects(ends)[:, :, 1], axis=1))) for plane in (near, far))
    assert u_far > 2 * u_near


def test_a_tilted_board_tells_the_focal_length(rng):
    square_on = fit(seen_board(turn=(0.02, 0, 0)), distance_m=None)
    askew = fit(seen_board(turn=(0.5, 0.3, 0), place=(0.0, 0.0, 0.6), noise=0.02, rng=rng), distance_m=None)
    assert askew.u_parameter("log_focal") < 0.2 * square_on.u_parameter("log_focal")
    focal = np.exp(askew.theta[AT["log_focal"]])
    assert abs(np.log(focal / 1300)) < 3 * askew.u_parameter("log_focal")


def test_a_wrong_distance_is_noticed_against_a_lens_file():
    plane = fit(seen_board(), lens=exact_lens(), distance_m=1.8)
    assert "distance-disagrees" in [notice.code for notice in plane.notices]
    assert "distance-disagrees" not in [notice.code for notice in fit(seen_board(), lens=exact_lens()).notices]


def test_plumb_line_gives_gravity_wherever_it_hangs():
    """A plumb line far behind the plane of motion, seen by a rolled and pitched camera."""
    turn = np.array([0.08, -0.05, np.radians(4.0)])
    find = seen_board(turn=tuple(turn))
    rotation = cv2.Rodrigues(turn)[0]
    down = rotation @ np.array([np.sin(np.radians(-2.0)), np.cos(np.radians(-2.0)), 0])  # the board is 2 degrees off level
    top = np.array([0.4, -0.6, 2.5])
    plumb = np.array([(1300 * p[:2] / p[2]) + [359.5, 639.5] for p in (top, top + 1.0 * down)])
    plane = fit(find, lens=exact_lens(), vertical=plumb)
    board_line = plane.to_metres(find.corners_px[[0, 48]])
    assert np.degrees(np.arctan2(np.diff(board_line[:, 0])[0], -np.diff(board_line[:, 1])[0])) == pytest.approx(2.0, abs=0.02)
    assert "vertical-disagrees" in [notice.code for notice in plane.notices]


def test_camera_roll_is_taken_out_with_the_board():
    plane = fit(seen_board(turn=(0, 0, np.radians(-5.0)), place=(0, 0, 1.5)), lens=exact_lens())
    assert plane.roll_deg == pytest.approx(-5.0, abs=0.01)
    assert "vertical-roll" in [notice.code for notice in plane.notices]


def test_points_beyond_the_horizon_are_refused_with_their_place():
    steep = fit(seen_board(turn=(-1.0, 0, 0), place=(0, 0, 0.8)), distance_m=None, lens=exact_lens(),
                origin_px=(360.0, 700.0))
    with pytest.raises(CannotMeasure, match="column 360, row -400") as told:
        steep.to_metres([[360.0, 700.0], [360.0, -400.0]])
    assert told.value.code == "beyond-horizon"


def test_a_bent_sheet_is_refused_and_a_slightly_bent_one_is_said():
    find = seen_board(turn=(0.3, 0.2, 0))
    wave = np.sin(find.grid[:, 1] * np.pi / 4)[:, None] * [1.0, 0.0]
    with pytest.raises(CannotMeasure, match="not flat") as told:
        fit(BoardFind(find.corners_px + 2.5 * wave, find.grid, find.points_m, 0.05, square_px=find.square_px))
    assert told.value.code == "board-not-flat"
    slightly = fit(BoardFind(find.corners_px + 1.0 * wave, find.grid, find.points_m, 0.05, square_px=find.square_px))
    assert "board-residual" in [notice.code for notice in slightly.notices]


def test_residual_widens_the_corner_noise(rng):
    ends = np.array([[330.0, 150.0], [330.0, 1100.0]])

    def u_corners(find):  # with a known lens: else what the corners lose, the lens's prior takes over
        plane = fit(find, lens=exact_lens(), distance_m=None)
        parts = np.ptp(plane.effects(ends)[:, :, 1], axis=1)
        return np.sqrt(sum(p**2 for p, s in zip(parts, plane.sources, strict=True) if s.label == "board corners"))

    quiet, rough = seen_board(), seen_board(noise=0.15, rng=rng)
    trusting = BoardFind(rough.corners_px, rough.grid, rough.points_m, 0.03, square_px=rough.square_px)
    assert u_corners(trusting) > 2.0 * u_corners(quiet)


def test_marks_on_a_line_give_its_scale():
    spec = BoardSpec("marks", marks_m=(0.0, 0.3, 0.6, 0.9), marks_px=tuple((300.0, 1100.0 - 260 * n) for n in range(4)))
    plane = fit_plane(marks_board(spec), spec, size=SIZE, origin_px=(300.0, 400.0), distance_m=1.5, u_square_m=1e-5)
    ends = np.array([[300.0, 400.0], [300.0, 920.0]])
    assert np.ptp(plane.to_metres(ends)[:, 1]) == pytest.approx(0.6, rel=2e-3)
    effects = np.ptp(plane.effects(ends)[:, :, 1], axis=1)
    assert 0.0005 < np.linalg.norm(effects) / 0.6 < 0.02
    assert plane.describe()["scale"] == "along one line"
    assert "scale-along-one-line" in [notice.code for notice in plane.notices]


@pytest.mark.parametrize(("changes", "says"), [
    ({"origin_px": (900.0, 100.0)}, "outside the upright picture"), ({"distance_m": -1.0}, "distance_m"),
    ({"offset_m": -1.4}, "at the lens"), ({"lean_deg": 80.0}, "lean_deg is 80"),
    ({"vertical": "up"}, "vertical"), ({"vertical": [[1, 1], [2, 2]]}, "plumb_px")])
def test_wrong_inputs_are_sentences(changes, says):
    with pytest.raises(BadInput, match=says):
        fit(seen_board(), **changes)


def test_notices_of_a_small_far_and_tilted_board():
    far = fit(seen_board(place=(0.5, 0.9, 3.0)), distance_m=3.0, origin_px=(100.0, 100.0))
    assert {"board-small-in-picture", "board-far"} <= {notice.code for notice in far.notices}
    tilted = fit(seen_board(turn=(0.45, 0, 0)), origin_px=(360.0, 660.0))
    assert "tilt-large" in {notice.code for notice in tilted.notices}


def test_time_grows_no_faster_than_the_points(rng):
    plane = fit(seen_board(k=(0.05, -0.1, 0, 0, 0)))

    def seconds(count):
        points = rng.uniform([0, 0], SIZE, (count, 2))
        every = []
        for _ in range(5):
            start = time.process_time()
            plane.to_metres(points)
            every.append(time.process_time() - start)
        return min(every)

    assert seconds(200_000) < 9 * seconds(50_000)  # four times the points; a square law would be sixteen


def test_95_percent_intervals_hold_the_truth():
    """60 random stations; the full study is `python -m tests.studies.plane_coverage`."""
    cases = study(60, seed=7)
    z = np.array([(case.measured - case.true) / case.u for case in cases])
    inside = np.abs(z).reshape(-1, 4)[:, 0] < 1.96  # one length a station: those are independent
    low, high = stats.binom.ppf([0.001, 0.999], len(inside), 0.95)
    assert low <= inside.sum() <= high
    assert 0.85 < np.sqrt((z**2).mean()) < 1.15
    assert abs(np.mean([case.measured / case.true - 1 for case in cases])) < 4 * 0.0065 / np.sqrt(60)


def test_a_plane_checks_its_parameters():
    with pytest.raises(ValueError, match="finite"):
        Plane(np.full(len(PARAMETERS), np.nan), (), (1.0, 1.0), SIZE, np.zeros((4, 2)))


# --- clips with truth, made by another program -----------------------------------------------------------------------


def clip_plane(name):
    """The plane of a shared clip, from what its run sheet says, and truth of its point: pixels, metres, seconds."""
    folder = SHARED / name
    sheet = tomllib.loads((folder / "run.toml").read_text(encoding="utf-8"))
    film = cv2.VideoCapture(str(folder / "clip.mp4"))
    grays = []
    for number in range(60):
        got, frame = film.read()
        if not got:
            break
        if number % 15 == 0:
            grays.append(cv2.cvtColor(frame, cv2.COLOR_BGR2GRAY))
    board = sheet["board"]
    find = find_in_frames(grays, SPEC)
    plane = fit_plane(
        find, SPEC, size=(grays[0].shape[1], grays[0].shape[0]), origin_px=tuple(sheet["datum"]["origin_px"]),
        distance_m=sheet["camera"]["distance_m"], offset_m=board["offset_m"], u_offset_m=board["u_offset_m"],
        u_square_m=board["u_square_m"])
    truth, extra = (list(csv.DictReader((folder / file).read_text(encoding="utf-8").splitlines()))
                    for file in ("truth.csv", "truth_extra.csv"))
    kind = "end" if "end_px_x" in extra[0] else "apex"

    def column(rows, key):
        return np.array([float(row[key]) if row.get(key) else np.nan for row in rows])

    pixels = np.stack([column(extra, f"{kind}_px_{axis}") for axis in "xy"], axis=1)
    metres = np.stack([column(truth, f"{kind}_{axis}_m") for axis in "xz"], axis=1)
    seconds = column(truth, "end_t_s" if kind == "end" else "t_s")
    inside = (pixels >= 0).all(axis=1) & (pixels < np.array(plane.size)).all(axis=1) & np.isfinite(metres).all(axis=1)
    return plane, pixels[inside], metres[inside], seconds[inside], json.loads((folder / "scene.json").read_text(encoding="utf-8"))


@needs_clips
@pytest.mark.parametrize("name", CLIPS)
def test_true_pixels_of_a_clip_map_to_true_metres_within_u(name):
    plane, pixels, metres, _, scene = clip_plane(name)
    u = np.sqrt(np.diag(plane.covariance(pixels))).reshape(-1, 2)
    miss = plane.to_metres(pixels) - metres
    assert (np.abs(miss) < 2 * u + 1e-5).all()  # truth is told to 10 um by pixels of 1e-6
    assert u.max() < 0.01
    camera = scene["hidden"]["camera"]
    assert abs(np.log(np.exp(plane.theta[AT["log_focal"]]) / camera["fx"])) < 2 * plane.u_parameter("log_focal")


@needs_clips
@pytest.mark.parametrize("name", ["drop", "held", "control"])
def test_acceleration_of_true_pixels_is_true_within_u(name):
    """Second derivative of z(t), the same quadratic through truth and through mapped pixels, over one window."""
    plane, pixels, metres, seconds, scene = clip_plane(name)
    fallen = -metres[:, 1]
    window = (fallen > 0.02) & (fallen < (0.25 if name == "held" else 0.6))

    def acceleration(z):
        return 2 * np.polyfit(seconds[window] - seconds[window].mean(), z[window], 2)[0]

    true, got = acceleration(metres[:, 1]), acceleration(plane.to_metres(pixels)[:, 1])
    parts = [acceleration(plane.shifted(i)._map(pixels)[:, 1]) - got for i in range(len(plane.sources))]
    u = float(np.linalg.norm(parts))
    assert abs(got - true) < 2 * u
    assert 0.001 < u / abs(true) < 0.03
    if name != "held":  # these fall freely
        assert true == pytest.approx(-scene["site"]["gravity_mps2"], rel=0.004)
