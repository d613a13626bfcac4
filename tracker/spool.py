"""Decoded pictures kept on disk for a second look, because decoding costs ten times what reading them back does."""

import shutil
import tempfile
import threading

import numpy as np
from numpy.typing import NDArray

__all__ = ["SPOOL_BYTES", "Spool"]

Gray = NDArray[np.uint8]

SPOOL_BYTES = 2 * 2**30  # the most disk a clip may take while it is measured
ROOM = 3  # and only a third of what is free


class Spool:
    """Gray pictures of one size in a nameless file that vanishes with this object. Safe to use from several threads.

    Parameters
    ----------
    shape : (int, int)
        Height and width of every picture.
    """

    def __init__(self, shape: tuple[int, int]) -> None:
        self._shape = shape
        self._file = tempfile.TemporaryFile(prefix="linefall-")  # noqa: SIM115  # open as long as this object lives
        self._lock = threading.Lock()
        self._place: dict[int, int] = {}

    @staticmethod
    def fits(count: int, shape: tuple[int, int]) -> bool:
        """Whether that many pictures may be kept."""
        size = count * shape[0] * shape[1]
        try:
            return size <= min(SPOOL_BYTES, shutil.disk_usage(tempfile.gettempdir()).free // ROOM)
        except OSError:
            return False

    def keep(self, index: int, gray: Gray) -> bool:
        """Keep a picture; False if the disk does not take it."""
        with self._lock:
            at = len(self._place) * gray.size
            try:
                self._file.seek(at)
                self._file.write(np.ascontiguousarray(gray).data)
                self._file.flush()
            except OSError:
                return False
            self._place[index] = at
            return True

    def get(self, index: int) -> Gray | None:
        """A copy of a picture, or None if it was not kept."""
        at = self._place.get(index)
        if at is None:
            return None
        gray = np.empty(self._shape, np.uint8)
        with self._lock:
            self._file.seek(at)
            full = self._file.readinto(gray.data) == gray.size
        return gray if full else None

    def close(self) -> None:
        """Give the disk back."""
        with self._lock:
            self._place.clear()
            self._file.close()
