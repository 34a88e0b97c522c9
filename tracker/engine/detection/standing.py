"""How far the estimate has moved since some blocks ago: shows changes that the filter takes in before they surprise it.

Innovations show a change only until the filter has taken it in, which for a weak change that comes at once is too
short. Where the estimate stands does not forget: held against where it stood some blocks ago, a change shows for as
many blocks. Looked at are how far the direct path moved, how far the surface did, by how much both together grew or
turned (the old estimate is the matched filter), and whether one element lost more of its response than any would by
chance: the largest of N normal variables of unknown scale (Student's t).
"""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtr

from .drift import Reading, largest

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Blocks between what is compared.
LAG = 4
FLOOR = 1e-30
# Fewer elements than these are not told apart.
FEWEST = 8

MOVED = DIRECT_MOVED, SURFACE_MOVED, GREW, TURNED, SHRANK = (
    "direct path moved",
    "surface moved",
    "grew",
    "turned",
    "element shrank",
)


class Standing:
    """Estimates of the last blocks."""

    def __init__(self) -> None:
        self._before: list[Complex] = []
        self._power: list[Real] = []  # of their rows
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
        parts = np.ascontiguousarray(coefficients).view(np.float64)
        power = np.einsum("nd,nd->n", parts, parts)
        if len(self._before) == LAG:
            before, noise_before = self._before.pop(0), self._noise.pop(0)
            both = complex(np.vdot(before, coefficients)), float(np.vdot(before[0], coefficients[0]).real)
            scale = math.sqrt(float((noise_before / noise).mean()))
            readings = _compare(power, self._power.pop(0), both, scale, coefficients.shape[1])
            np.copyto(before, coefficients)
        else:
            before = coefficients.copy()
        self._before.append(before)
        self._power.append(power)
        self._noise.append(noise)
        return readings

    @property
    def oldest(self) -> tuple[Complex, Real, int] | None:
        """Estimate of some blocks ago, its unit of noise, and how many blocks."""
        return (self._before[0], self._noise[0], len(self._before) - 1) if self._before else None

    def forget(self) -> None:
        """Begin anew: the estimate was changed by hand."""
        self._before.clear()
        self._power.clear()
        self._noise.clear()

    def turn_direct(self, columns: slice, turn: complex) -> None:
        """Turn the direct path along."""
        for before in self._before:
            before[0, columns] *= turn

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "before": [one.copy() for one in self._before],
            "power": [one.copy() for one in self._power],
            "noise": [one.copy() for one in self._noise],
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._before = [np.array(one, dtype=np.complex128) for one in snapshot["before"]]
        self._power = [np.array(one, dtype=np.float64) for one in snapshot["power"]]
        self._noise = [np.array(one, dtype=np.float64) for one in snapshot["noise"]]


def _compare(new: Real, old: Real, both: tuple[complex, float], scale: float, outputs: int) -> list[Reading]:
    """Compare two estimates by |a − b|² = |a|² + |b|² − 2 Re aᴴ b, the older to be multiplied by a scale.

    Parameters
    ----------
    new, old : ndarray, shape (n,)
        Powers of the rows.
    both : tuple of complex and float
        Product of both estimates, and the real part of that of the direct paths.
    scale : float
    outputs : int
        Entries of a row.
    """
    whole, direct_both = both
    square = float(old.sum())
    length = math.sqrt(square) + FLOOR
    direct = float(new[0] + scale * (scale * old[0] - 2.0 * direct_both))
    moved = float(new.sum()) + scale * (scale * square - 2.0 * whole.real)
    readings = [
        Reading(DIRECT_MOVED, max(direct / outputs, FLOOR), outputs),
        Reading(SURFACE_MOVED, math.log(max(moved - direct, FLOOR))),
        Reading(GREW, whole.real / length - scale * length),
        Reading(TURNED, whole.imag / length),
    ]
    elements = new.size - 1
    if elements >= FEWEST:
        grown = np.sqrt(new[1:]) - scale * np.sqrt(old[1:])
        readings.append(Reading(SHRANK, _most(-float(grown.min()), float(grown @ grown), elements)))
    return readings


def _most(value: float, square: float, count: int) -> float:
    """Turn the largest of so many normal variables, of this sum of squares, to a standard normal deviate."""
    share = min(value * value / (square + FLOOR), 1.0 - 1e-9)
    student = math.copysign(math.sqrt(share * (count - 1) / (1.0 - share)), value)
    return largest(float(stdtr(count - 1, -student)), count)
