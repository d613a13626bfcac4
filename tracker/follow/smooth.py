"""Local polynomials along a curve: they take roughness out without shortening a bend.

Savitzky, Golay, Anal. Chem. 36, 1627 (1964); at either end the polynomial of the last whole window is used. The weights
depend on window and degree only and are kept, as thousands of short curves are smoothed in a clip.
"""

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

__all__ = ["local_polynomial"]

Floats = NDArray[np.float64]


@lru_cache(maxsize=64)
def _hat(size: int, degree: int) -> Floats:
    """(size, size): takes a window's values to those of its polynomial."""
    basis = np.vander(np.linspace(-1.0, 1.0, size), degree + 1)
    hat = basis @ np.linalg.pinv(basis)
    hat.flags.writeable = False
    return np.asarray(hat)


def local_polynomial(values: Floats, half: int, degree: int) -> Floats:
    """Smooth evenly spaced values.

    Parameters
    ----------
    values : (n,) or (n, k) array
    half : int
        Values on either side of the middle of a window; less where the array is shorter.
    degree : int

    Returns
    -------
    array like `values`
        Unchanged where it is too short for the degree.
    """
    n = values.shape[0]
    half = min(int(half), (n - 1) // 2)
    size = 2 * half + 1
    if size <= degree + 1:
        return values
    hat = _hat(size, degree)
    columns = values.reshape(n, -1)
    out = np.empty_like(columns, dtype=np.float64)
    for k in range(columns.shape[1]):
        out[half : n - half, k] = np.convolve(columns[:, k], hat[half][::-1], mode="valid")
    out[:half] = hat[:half] @ columns[:size]
    out[n - half :] = hat[half + 1 :] @ columns[n - size :]
    return out.reshape(values.shape)
