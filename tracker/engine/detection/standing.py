"""Estimates of the last blocks: what a change is held against that may have gone unseen for as long."""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Blocks that are remembered.
LAG = 4


class Standing:
    """Estimates of the last blocks."""

    def __init__(self) -> None:
        self._before: list[Complex] = []
        self._noise: list[Real] = []

    def remember(self, coefficients: Complex, noise: Real) -> None:
        """Remember an estimate.

        Parameters
        ----------
        coefficients : ndarray of complex, shape (n, R Q)
            The estimate, the direct path first, in units of the noise.
        noise : ndarray, shape (R,)
            Its power.
        """
        if len(self._before) == LAG:
            before = self._before.pop(0)
            self._noise.pop(0)
            np.copyto(before, coefficients)
        else:
            before = coefficients.copy()
        self._before.append(before)
        self._noise.append(noise)

    @property
    def oldest(self) -> tuple[Complex, Real, int] | None:
        """Estimate of some blocks ago, its unit of noise, and how many blocks."""
        return (self._before[0], self._noise[0], len(self._before) - 1) if self._before else None

    def forget(self) -> None:
        """Begin anew: the estimate was changed by hand."""
        self._before.clear()
        self._noise.clear()

    def turn_direct(self, columns: slice, turn: complex) -> None:
        """Turn the direct path along."""
        for before in self._before:
            before[0, columns] *= turn

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "before": [one.copy() for one in self._before],
            "noise": [one.copy() for one in self._noise],
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._before = [np.array(one, dtype=np.complex128) for one in snapshot["before"]]
        self._noise = [np.array(one, dtype=np.float64) for one in snapshot["noise"]]
