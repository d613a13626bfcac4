"""Boards with known corners, drawn here; photographs of OpenCV's documentation where they lie beside the checkout."""

from pathlib import Path

import cv2
import numpy as np
import pytest

from calibration.board import BoardSpec, combine, find_board, find_in_frames, marks_board
from calibration.notice import BadInput, CannotMeasure
from tests.calibration.pictures import board_picture, pose_homography

SPEC = BoardSpec("checkerboard", (9, 6), 0.025)
SHARED = Path(__file__).resolve().parents[3] / "shared" / "footage" / "boards"
needs_photographs = pytest.mark.skipif(not SHARED.is_dir(), reason="no ../shared/footage beside the checkout")


def errors(find, corners):
    """Of each found corner against the nearest true one [px]."""
    nearest = np.linalg.norm(find.corners_px[:, None] - corners[None], axis=2).argmin(axis=1)
    assert len(set(nearest)) == len(nearest)  # no true corner found twice
    return find.corners_px - corners[nearest]


@pytest.mark.parametrize(
    ("square", "tilt", "turn", "roll", "limit"),
    [(12, 5, 5, 3, 0.10), (14, 40, 20, 0, 0.12), (25, 5, 5, 0, 0.10), (25, 40, 0, 0, 0.10), (25, 0, 40, 10, 0.10),
     (25, 5, 5, -30, 0.05), (40, 20, 20, 5, 0.08)],
)
def test_corners_are_found_to_a_tenth_of_a_pixel(square, tilt, turn, roll, limit):
    picture, corners = board_picture(pose_homography(square, tilt, turn, roll), 9, 6)
    find = find_board(picture, SPEC)
    rest = errors(find, corners)
    assert len(find.corners_px) == 54
    assert np.sqrt((rest**2).mean()) < limit
    assert np.sqrt((rest**2).mean()) < 2.2 * find.u_px  # and u says so


@pytest.mark.parametrize("roll", [0, 90, 180, 270])
def test_grid_counts_right_and_down_however_the_board_is_turned(roll):
    picture, _ = board_picture(pose_homography(24, 5, 8, roll), 9, 6)
    find = find_board(picture, SPEC)
    assert find.shape == ((9, 6) if roll % 180 == 0 else (6, 9))
    place = {tuple(cell): p for cell, p in zip(find.grid.tolist(), find.corners_px, strict=True)}
    for (i, j), p in place.items():
        if (i + 1, j) in place:
            assert place[i + 1, j][0] - p[0] > 10
        if (i, j + 1) in place:
            assert place[i, j + 1][1] - p[1] > 10
    assert find.grid.tolist() == sorted(find.grid.tolist(), key=lambda cell: (cell[1], cell[0]))
    np.testing.assert_allclose(np.diff(find.points_m[:2], axis=0)[0], [0.025, 0], atol=1e-12)


@pytest.mark.parametrize(("what", "limit"), [
    ({"blur_px": 2.5}, 0.12), ({"shadow": 0.25}, 0.15), ({"noise": 8.0}, 0.15),
    ({"black": 100, "white": 130, "paper": 115}, 0.2)])
def test_poor_light_is_carried_and_owned_up_to(what, limit):
    picture, corners = board_picture(pose_homography(24, 10, 5), 9, 6, **what)
    find = find_board(picture, SPEC)
    rms = np.sqrt((errors(find, corners) ** 2).mean())
    assert rms < limit
    assert rms < 2.0 * find.u_px


def test_a_line_before_the_board_drags_no_corner_along():
    picture, corners = board_picture(pose_homography(25, 5, 5), 9, 6)
    picture[:, 300:304] = 128
    find = find_board(picture, SPEC)
    assert np.abs(errors(find, corners)).max() < 0.4
    assert len(find.corners_px) < 54
    assert "board-partly-hidden" in [notice.code for notice in find.notices]


def test_a_partly_hidden_board_gives_what_can_be_seen():
    picture, corners = board_picture(pose_homography(25, 5, 5), 9, 6)
    picture[100:400, 390:] = 128
    find = find_board(picture, SPEC)
    assert 24 <= len(find.corners_px) < 54
    assert np.sqrt((errors(find, corners) ** 2).mean()) < 0.12
    assert "board-partly-hidden" in [notice.code for notice in find.notices]


def test_refusals_say_what_was_looked_for_and_what_to_do():
    blank = np.full((480, 640), 120, np.uint8)
    with pytest.raises(CannotMeasure, match=r"9 x 6 inner corners.*one fewer than squares") as told:
        find_board(blank, SPEC)
    assert told.value.code == "board-not-found"
    picture, _ = board_picture(pose_homography(8.5), 9, 6)
    with pytest.raises(CannotMeasure, match=r"squares are 8\.\d px") as told:
        find_board(picture, SPEC)
    assert told.value.code == "board-too-small"
    picture, _ = board_picture(pose_homography(24), 9, 6)
    with pytest.raises(CannotMeasure, match=r"the sheet says 7 x 5") as told:
        find_board(picture, BoardSpec("checkerboard", (7, 5), 0.025))
    assert told.value.code == "board-ambiguous"


def test_two_boards_are_ambiguous():
    left, _ = board_picture(pose_homography(18, middle=(160, 240)), 9, 6)
    right, _ = board_picture(pose_homography(18, middle=(480, 240)), 9, 6)
    both = np.concatenate([left[:, :320], right[:, 320:]], axis=1)
    with pytest.raises(CannotMeasure, match="two boards") as told:
        find_board(both, SPEC)
    assert told.value.code == "board-ambiguous"


def test_frames_are_combined_and_scatter_shrinks_but_bias_stays_in_u():
    matrix = pose_homography(20, 8, 5, 2)
    pictures = [board_picture(matrix, 9, 6, noise=8.0, seed=seed) for seed in range(9)]
    one = find_board(pictures[0][0], SPEC)
    every = find_in_frames([picture for picture, _ in pictures], SPEC)
    assert every.frames == 9
    rms_one, rms_every = (np.sqrt((errors(find, pictures[0][1]) ** 2).mean()) for find in (one, every))
    assert rms_every < 0.7 * rms_one
    assert every.u_px >= 0.03
    assert rms_every < 2.2 * every.u_px


def test_a_moved_camera_is_shifted_onto_the_first_picture_and_said():
    matrix = pose_homography(22, 5, 5)
    finds, truth = [], None
    for n, shift in enumerate([(0, 0), (2.3, -1.2), (-1.1, 2.0), (0.8, 0.4), (-2.0, -2.0)]):
        moved = np.array([[1, 0, shift[0]], [0, 1, shift[1]], [0, 0, 1.0]]) @ matrix
        picture, corners = board_picture(moved, 9, 6, seed=n)
        truth = corners if truth is None else truth
        finds.append(find_board(picture, SPEC))
    together = combine(finds)
    assert np.sqrt((errors(together, truth) ** 2).mean()) < 0.12
    assert "board-moved" in [notice.code for notice in together.notices]


def test_pictures_without_the_board_are_left_out():
    matrix = pose_homography(22, 5, 5)
    picture, corners = board_picture(matrix, 9, 6)
    blank = np.full_like(picture, 120)
    find = find_in_frames([blank, picture, picture], SPEC)
    assert find.frames == 2
    assert np.abs(errors(find, corners)).max() < 0.4


def test_marks_lie_on_one_line_and_the_result_says_so():
    spec = BoardSpec("marks", marks_m=(0.0, 0.3, 0.6), marks_px=((300.0, 900.0), (302.0, 600.0), (304.0, 300.0)))
    find = marks_board(spec)
    assert find.along_line
    assert [notice.code for notice in find.notices] == ["scale-along-one-line"]
    assert (np.diff(find.corners_px[:, 1]) > 0).all()  # downwards, as the picture sees them
    np.testing.assert_allclose(np.diff(find.points_m[:, 1]), 0.3, atol=1e-12)
    with pytest.raises(BadInput, match="order"):
        marks_board(BoardSpec("marks", marks_m=(0.0, 0.6, 0.3), marks_px=((300, 900), (302, 600), (304, 300))))


@pytest.mark.parametrize("spec", [
    lambda: BoardSpec(inner_corners=(2, 6)), lambda: BoardSpec(square_m=0.0), lambda: BoardSpec("charuco"),
    lambda: BoardSpec("charuco", dictionary="DICT_5X5_100", marker_m=0.03), lambda: BoardSpec("marks", marks_m=(1.0,))])
def test_a_spec_that_cannot_be_is_refused(spec):
    with pytest.raises(BadInput):
        spec()


def charuco_picture(scale):
    """A board drawn by OpenCV (9 x 7 squares), shown askew; where its inner corners are."""
    dictionary = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_5X5_100)
    board = cv2.aruco.CharucoBoard((9, 7), 0.03, 0.022, dictionary)
    drawn = board.generateImage((1080, 840), marginSize=0)  # 120 px a square
    corner = np.array([[i * 120 - 0.5, j * 120 - 0.5] for j in range(1, 7) for i in range(1, 9)], dtype=float)
    matrix = np.array([[scale, 0.03 * scale, 60], [-0.02 * scale, 0.96 * scale, 50], [3e-5, 4e-5, 1.0]])
    margin = cv2.copyMakeBorder(drawn, 60, 60, 60, 60, cv2.BORDER_CONSTANT, value=255)
    blurred = cv2.GaussianBlur(margin, (0, 0), 0.5 / scale)
    shift = np.array([[1, 0, -60], [0, 1, -60], [0, 0, 1.0]])
    picture = cv2.warpPerspective(blurred, matrix @ shift, (900, 700), flags=cv2.INTER_LINEAR, borderValue=128)
    return picture, cv2.perspectiveTransform(corner[None], matrix)[0]


@pytest.mark.parametrize("hidden", [False, True])
def test_charuco_board_even_where_half_of_it_is_hidden(hidden):
    picture, corners = charuco_picture(0.6)
    if hidden:
        picture[:, 380:] = 128
    find = find_board(picture, BoardSpec("charuco", (8, 6), 0.03, "DICT_5X5_100", 0.022))
    assert len(find.corners_px) == 48 if not hidden else 10 <= len(find.corners_px) < 36
    assert np.sqrt((errors(find, corners) ** 2).mean()) < 0.15
    assert hidden == ("board-partly-hidden" in [notice.code for notice in find.notices])


def test_charuco_with_an_unknown_dictionary_is_bad_input():
    with pytest.raises(BadInput, match="DICT_NO"):
        find_board(np.full((480, 640), 120, np.uint8), BoardSpec("charuco", (8, 6), 0.03, "DICT_NO", 0.022))


@needs_photographs
def test_every_photograph_of_opencvs_checkerboard_is_found_in_milliseconds():
    folder = SHARED / "stereo-checkerboard"
    for path in sorted(folder.glob("left*.jpg")):
        find = find_board(cv2.imread(str(path), cv2.IMREAD_GRAYSCALE), SPEC)
        assert len(find.corners_px) >= 45, path.name
        assert find.u_px < 0.4, path.name  # left02 is blurred by its own movement


@needs_photographs
def test_photograph_of_a_charuco_board():  # 24 corners, OpenCV tutorial picture; corner count from its MANIFEST
    picture = cv2.imread(str(SHARED / "aruco" / "choriginal.jpg"), cv2.IMREAD_GRAYSCALE)
    find = find_board(picture, BoardSpec("charuco", (4, 6), 0.04, "DICT_6X6_250", 0.02))
    assert len(find.corners_px) == 24
    assert find.u_px < 0.4
