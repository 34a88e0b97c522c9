"""Frames of a block that sound the same row of a sweep."""

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]


class Repeats:
    """Which frames of a block sound the same row.

    Parameters
    ----------
    rows : ndarray of int, shape (B,), B > 0

    Attributes
    ----------
    order : ndarray of int, shape (B,)
        Frames sorted by row, in time within one.
    place : ndarray of int, shape (B,)
        Frames of the same row before each one.
    last : ndarray of int
        Where in `order` each row is heard last.
    """

    def __init__(self, rows: NDArray[np.intp]) -> None:
        self.rows = rows
        self.order = np.argsort(rows, kind="stable")
        ordered = rows[self.order]
        index = np.arange(rows.shape[0])
        first = np.concatenate(([True], ordered[1:] != ordered[:-1]))
        self._start = np.maximum.accumulate(np.where(first, index, 0))
        self.place = np.empty_like(index)
        self.place[self.order] = index - self._start
        self.last = np.flatnonzero(np.concatenate((first[1:], [True])))

    def before(self, values: Complex) -> Complex:
        """Sum of the values (B, D) over frames of the same row before each one."""
        if not self.place.any():
            return np.zeros_like(values)
        ordered = values[self.order]
        running = np.cumsum(ordered, axis=0) - ordered
        sums = np.empty_like(values)
        sums[self.order] = running - running[self._start]
        return sums
