"""Responses under the rows of a sweep, and the elements that follow from them.

Forgetting multiplies all of them alike, so the factor is kept apart, and a block touches no rows but those heard. The
same rows alone change the elements, when they are next asked for.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .cycle import CHUNK, SweepDetector

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# The common factor is carried out on all rows before it gets larger or smaller than this.
FARTHEST = 1e60


class Responses:
    """Means x of all rows.

    Parameters
    ----------
    cycle : SweepDetector
        Of M rows over N elements.
    outputs : int
        D.
    """

    def __init__(self, cycle: SweepDetector, outputs: int) -> None:
        self._cycle = cycle
        self._x: Complex = np.zeros((cycle.order, outputs), dtype=np.complex128)  # x = σ X
        self._sum: Complex = np.zeros(outputs, dtype=np.complex128)  # of X over all rows
        self._scale: Complex = np.ones(outputs, dtype=np.complex128)  # σ
        # AᵀX / M over the elements for X as it was when it was last asked for: only rows touched since add to it.
        self._surface: Complex = np.zeros((cycle.elements, outputs), dtype=np.complex128)
        self._shown: Complex = np.zeros_like(self._x)
        self._touched: NDArray[np.bool_] = np.zeros(cycle.order, dtype=np.bool_)

    @property
    def mean(self) -> Complex:
        """Mean of all M responses, shape (D,)."""
        return np.asarray(self._scale * self._sum / self._cycle.order)

    def of(self, rows: NDArray[np.intp]) -> Complex:
        """Responses under some rows, shape (k, D)."""
        return np.asarray(self._scale * self._x[rows])

    def surface(self, out: Complex) -> None:
        """Write Aᵀx / M over the elements, shape (N, D): O(N D) for each row moved since it was last asked for."""
        np.multiply(self._gathered_surface(), self._scale, out=out)

    def reflected(self, states: Real) -> Complex:
        """Give what the elements add under any states (k, N), shape (k, D)."""
        return np.asarray(product(states, self._gathered_surface()) * self._scale)

    def move(self, rows: NDArray[np.intp], change: Complex) -> None:
        """Add to the responses of some rows, each named once."""
        change = change / self._scale
        self._x[rows] += change
        self._sum = self._sum + change.sum(axis=0)
        self._touched[rows] = True

    def put(self, surface: Complex) -> None:
        """Set the responses to those of given elements, shape (N, D); rows not yet known cannot say their part."""
        self._carry_out()
        known = self._cycle.known
        self._x[...] = 0.0
        for start in range(0, known, CHUNK):
            rows = np.arange(start, min(start + CHUNK, known))
            self._x[rows] = product(self._cycle.states(rows), surface)
        self._touched[:known] = True
        self._sum = self._x.sum(axis=0)

    def scale(self, factor: NDArray[Any]) -> None:
        """Multiply all responses by factors, one for all outputs or (D,)."""
        self._scale = self._scale * factor
        # All outputs forget alike: one shows how far it has gone.
        if not 1.0 / FARTHEST < abs(self._scale[0]) < FARTHEST:
            self._carry_out()

    def snapshot(self) -> dict[str, Any]:
        """All state but that of the cycle, as copies; `restore` goes on from it bit by bit."""
        return {
            "x": self._x.copy(),
            "sum": self._sum.copy(),
            "scale": self._scale.copy(),
            "surface": self._surface.copy(),
            "shown": self._shown.copy(),
            "touched": self._touched.copy(),
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any], cycle: SweepDetector) -> "Responses":
        """Rebuild from a snapshot, with the cycle that was restored from its own."""
        x = np.array(snapshot["x"], dtype=np.complex128)
        responses = cls(cycle, x.shape[1])
        responses._x = x
        responses._touched = np.array(snapshot["touched"], dtype=np.bool_)
        responses._sum, responses._scale, responses._surface, responses._shown = (
            np.array(snapshot[name], dtype=np.complex128) for name in ("sum", "scale", "surface", "shown")
        )
        return responses

    def _gathered_surface(self) -> Complex:
        """Bring AᵀX / M up to date."""
        order = self._cycle.order
        touched = np.flatnonzero(self._touched)
        if not touched.size:
            return self._surface
        if touched.shape[0] == order:
            self._surface[...] = 0.0  # anew, so that rounding errors never add up
            self._shown[...] = 0.0
        for start in range(0, touched.shape[0], CHUNK):
            rows = touched[start : start + CHUNK]
            self._surface += product(self._cycle.states(rows).T, (self._x[rows] - self._shown[rows]) / order)
            self._shown[rows] = self._x[rows]
        self._touched[...] = False
        return self._surface

    def _carry_out(self) -> None:
        """Do to all rows what has gathered."""
        self._x *= self._scale
        self._shown *= self._scale
        self._surface *= self._scale
        self._sum = self._x.sum(axis=0)
        self._scale = np.ones_like(self._scale)


def product(left: Real, right: Complex) -> Complex:
    """Multiply a real matrix with a complex one, at real cost."""
    return np.asarray(left @ np.ascontiguousarray(right).view(np.float64)).view(np.complex128)
