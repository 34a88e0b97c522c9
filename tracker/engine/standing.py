"""How far the estimate has moved since some blocks ago: shows changes that the filter takes in before they surprise it.

Innovations show a change only until the filter has taken it in, which for a weak change that comes at once is too
short. Where the estimate stands does not forget: held against where it stood some blocks ago, a change shows for as
many blocks. Four things are looked at: how far the direct path moved, how far the surface did, and by how much both
together grew (gain) or turned (phase), for which the old estimate is the matched filter.
"""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .drift import Reading

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Blocks between what is compared.
LAG = 4
FLOOR = 1e-30

MOVED = DIRECT_MOVED, SURFACE_MOVED, GREW, TURNED = ("direct path moved", "surface moved", "gain", "phase")


class Standing:
    """Estimates of the last blocks."""

    def __init__(self) -> None:
        self._before: list[Complex] = []
        self._noise: list[Real] = []

    def readings(self, coefficients: Complex, noise: Real) -> list[Reading]:
        """Compare, and remember.

        Parameters
        ----------
        coefficients : ndarray of complex, shape (n, R Q)
            The estimate, the direct path first, in units of the noise.
        noise : ndarray, shape (R,)
            Its power.
        """
        readings: list[Reading] = []
        if len(self._before) == LAG:
            before, power = self._before.pop(0), self._noise.pop(0)
            readings = _compare(coefficients, before, math.sqrt(float((power / noise).mean())))
            np.copyto(before, coefficients)
        else:
            before = coefficients.copy()
        self._before.append(before)
        self._noise.append(noise)
        return readings

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
        return {"before": [one.copy() for one in self._before], "noise": [one.copy() for one in self._noise]}

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._before = [np.array(one, dtype=np.complex128) for one in snapshot["before"]]
        self._noise = [np.array(one, dtype=np.float64) for one in snapshot["noise"]]


def _compare(now: Complex, before: Complex, scale: float) -> list[Reading]:
    """Compare two estimates, the older to be multiplied by a scale; |a − b|² by its three products, with no copy."""
    outputs = now.shape[1]
    new, old = now.reshape(-1), before.reshape(-1)
    direct_new, direct_old, direct_both = (np.vdot(a[:outputs], b[:outputs]).real for a, b in _pairs(new, old))
    square_new, square_old = np.vdot(new, new).real, np.vdot(old, old).real
    both = complex(np.vdot(old, new))
    direct = direct_new + scale * (scale * direct_old - 2.0 * direct_both)
    surface = square_new + scale * (scale * square_old - 2.0 * both.real) - direct
    length = math.sqrt(square_old) + FLOOR
    return [
        Reading(DIRECT_MOVED, max(float(direct) / outputs, FLOOR), outputs),
        Reading(SURFACE_MOVED, math.log(max(float(surface), FLOOR))),
        Reading(GREW, float(both.real / length - scale * length)),
        Reading(TURNED, both.imag / length),
    ]


def _pairs(new: Complex, old: Complex) -> tuple[tuple[Complex, Complex], ...]:
    return (new, new), (old, old), (old, new)
