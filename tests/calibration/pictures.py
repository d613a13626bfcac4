"""Pictures of boards with exactly known corners, for tests: drawn sub-pixel by sub-pixel, no library's drawing."""

import numpy as np
from numpy.typing import NDArray

__all__ = ["board_picture", "pose_homography"]


def pose_homography(square_px: float, tilt_deg: float = 0.0, turn_deg: float = 0.0, roll_deg: float = 0.0,
                    middle: tuple[float, float] = (320.0, 240.0), focal_px: float = 900.0) -> NDArray[np.float64]:
    """(3, 3) from squares on the board, from its middle, to pixels: tilt about x, turn about y, roll in the picture."""
    a, b, c = np.radians([tilt_deg, turn_deg, roll_deg])
    rx = np.array([[1, 0, 0], [0, np.cos(a), -np.sin(a)], [0, np.sin(a), np.cos(a)]])
    ry = np.array([[np.cos(b), 0, np.sin(b)], [0, 1, 0], [-np.sin(b), 0, np.cos(b)]])
    rz = np.array([[np.cos(c), -np.sin(c), 0], [np.sin(c), np.cos(c), 0], [0, 0, 1]])
    turn = rz @ ry @ rx
    camera = np.array([[focal_px, 0, middle[0]], [0, focal_px, middle[1]], [0, 0, 1.0]])
    return camera @ np.c_[turn[:, :2], [0, 0, focal_px / square_px]]


def board_picture(
    matrix: NDArray[np.float64], across: int, high: int, *, size: tuple[int, int] = (640, 480), blur_px: float = 0.7,
    noise: float = 1.5, black: float = 40.0, white: float = 215.0, paper: float = 120.0, shadow: float = 1.0,
    seed: int = 0, bow: float = 0.0,
) -> tuple[NDArray[np.uint8], NDArray[np.float64]]:
    """A checkerboard with across x high inner corners, and where those are.

    Parameters
    ----------
    matrix : (3, 3) array
        From squares on the board, from its middle, to pixels.
    blur_px : float
        Standard deviation of a Gaussian blur [px].
    shadow : float
        Light on the right half of the picture against the left.
    bow : float
        How far the sheet's middle is moved to the right against its edges [squares]: a sheet that is not flat.

    Returns
    -------
    picture : (h, w) uint8 array
    corners : (n, 2) array
        Row by row, in the board's own order.
    """
    width, height = size
    fine = 4
    columns = (np.arange(width * fine) + 0.5) / fine - 0.5
    rows = (np.arange(height * fine) + 0.5) / fine - 0.5
    inverse = np.linalg.inv(matrix)
    x, y = np.meshgrid(columns, rows)
    w = inverse[2, 0] * x + inverse[2, 1] * y + inverse[2, 2]
    u = (inverse[0, 0] * x + inverse[0, 1] * y + inverse[0, 2]) / w
    v = (inverse[1, 0] * x + inverse[1, 1] * y + inverse[1, 2]) / w
    u = u - bow * np.clip(1 - (2 * v / high) ** 2, 0, None)
    i, j = np.floor(u + (across + 1) / 2), np.floor(v + (high + 1) / 2)
    on = (i >= 0) & (i <= across) & (j >= 0) & (j <= high)
    sheet = (i >= -1) & (i <= across + 1) & (j >= -1) & (j <= high + 1)
    grey = np.where(on, np.where((i + j) % 2 == 0, black, white), np.where(sheet, white, paper))
    grey = grey.reshape(height, fine, width, fine).mean(axis=(1, 3))
    if shadow != 1.0:
        ramp = 1 / (1 + np.exp(-(np.arange(width) - matrix[0, 2] / matrix[2, 2]) / 4.0))
        grey = grey * (1 + (shadow - 1) * ramp)
    if blur_px > 0:
        n = int(np.ceil(4 * blur_px))
        kernel = np.exp(-0.5 * (np.arange(-n, n + 1) / blur_px) ** 2)
        kernel /= kernel.sum()
        grey = np.apply_along_axis(np.convolve, 0, np.pad(grey, ((n, n), (0, 0)), mode="edge"), kernel, "valid")
        grey = np.apply_along_axis(np.convolve, 1, np.pad(grey, ((0, 0), (n, n)), mode="edge"), kernel, "valid")
    grey = grey + np.random.default_rng(seed).normal(0, noise, grey.shape)
    cj, ci = np.mgrid[0:high, 0:across]
    board = np.stack([ci.ravel() - (across - 1) / 2, cj.ravel() - (high - 1) / 2], axis=1)
    board[:, 0] += bow * np.clip(1 - (2 * board[:, 1] / high) ** 2, 0, None)
    seen = np.c_[board, np.ones(len(board))] @ matrix.T
    return np.clip(np.round(grey), 0, 255).astype(np.uint8), seen[:, :2] / seen[:, 2:]
