"""What the innovations hold of changes whose shape is known beforehand: power in that one direction stands out early.

A change of unknown shape shows as power of the innovations, where it drowns in the noise of all directions. What often
happens has a shape: the model Ŷ = Z C is amplified, turned or delayed, or the direct path d is, as when it is blocked.
With E = Y − Z C and M = Ŷᴴ E over the frames of a block, the matched filters are::

    Re tr M / |Ŷ|        gain             Re dᴴ Σ_b e_b / (|d| √B)    direct gain
    Im tr M / |Ŷ|        phase            Im dᴴ Σ_b e_b / (|d| √B)    direct phase
    Im tr Aᴴ M / |Ŷ|     delay, A = Vᵀ diag(k) V* of the delay basis V over tones k about their middle
"""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .drift import Reading

Complex = NDArray[np.complex128]

FLOOR = 1e-30

MATCHED = GAIN, PHASE, DELAY, DIRECT_GAIN, DIRECT_PHASE = ("gain", "phase", "delay", "direct gain", "direct phase")


class Matched:
    """The filters.

    Parameters
    ----------
    basis : ndarray of complex, shape (K, Q)
        Delay basis.
    """

    def __init__(self, basis: Complex) -> None:
        tones, self._size = basis.shape
        slope = np.linspace(-1.0, 1.0, tones) if tones > 1 else np.zeros(1)
        self._slope: Complex = np.asarray((basis.T * slope) @ basis.conj())
        self._begin()

    def _begin(self) -> None:
        self._cross: Complex = np.zeros((self._size, self._size), dtype=np.complex128)
        self._power = 0.0

    def take(self, predicted: Complex, innovation: Complex) -> None:
        """Take in Ŷ and E of frames, shapes (B, R Q)."""
        shown = predicted.reshape(-1, self._size)
        self._cross += shown.conj().T @ innovation.reshape(-1, self._size)
        self._power += float(np.vdot(shown, shown).real)

    def readings(self, common: Complex, frames: int, direct: Complex) -> list[Reading]:
        """Say what was shown since the last call.

        Parameters
        ----------
        common : ndarray of complex, shape (R Q,)
            Sum of the innovations.
        frames : int
            Of so many frames.
        direct : ndarray of complex, shape (R Q,)
        """
        whole = complex(self._cross.trace()) / math.sqrt(self._power + FLOOR)
        delay = complex(np.vdot(self._slope, self._cross)).imag / math.sqrt(self._power + FLOOR)
        along = complex(np.vdot(direct, common)) / math.sqrt(float(np.vdot(direct, direct).real) * frames + FLOOR)
        self._begin()
        values = whole.real, whole.imag, delay, along.real, along.imag
        return [Reading(name, value) for name, value in zip(MATCHED, values, strict=True)]

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {"cross": self._cross.copy(), "power": self._power}

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._cross, self._power = np.array(snapshot["cross"], dtype=np.complex128), float(snapshot["power"])
