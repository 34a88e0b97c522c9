"""Noise power on a tone, measured where no channel can be, or between repeats of one pattern.

Outside the delay basis there is noise alone, so every frame measures it. Where the tones are too few to leave such
directions, frames that repeat a pattern within a burst differ by noise alone (common practice: sounding each pattern
twice gives the noise from the difference).
"""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

# Fewer directions than this outside the basis are too few: what fractional delays leak there would pass for noise.
LEAST_OUTSIDE = 4
# Frames over which the running noise estimate averages once it is established.
MEMORY_FRAMES = 4096
# A burst whose noise differs from the running one by this share and this many standard deviations is a jump, not
# chance: the average starts anew, or everything would be in a wrong unit for as long as it remembers.
JUMP_SHARE, JUMP_DEVIATIONS = 0.15, 6.0
# Below this the response is exactly zero or a constant; noise then counts as this, so that nothing is divided by zero.
FLOOR = 1e-30

Complex = NDArray[np.complex128]


def outside(response: Complex, coefficients: Complex) -> NDArray[np.float64]:
    """Noise power from the directions outside the delay basis.

    Parameters
    ----------
    response : ndarray of complex, shape (B, R, K)
        On the tones.
    coefficients : ndarray of complex, shape (B, R, Q)
        The same on the orthonormal delay basis, Q < K.

    Returns
    -------
    ndarray, shape (R,)
        Mean power on a tone.
    """
    frames, _, tones = response.shape
    left_over = energy(response) - energy(coefficients)
    return np.asarray(left_over / (frames * (tones - coefficients.shape[2])))


def repeats(patterns: NDArray[np.uint8], coefficients: Complex) -> tuple[NDArray[np.float64], int]:
    """Noise power from frames of a burst that repeat a pattern.

    Parameters
    ----------
    patterns : ndarray of uint8, shape (B, bytes)
        Packed.
    coefficients : ndarray of complex, shape (B, R, Q)

    Returns
    -------
    power : ndarray, shape (R,)
        Unbiased variance within the groups of equal patterns; zeros when nothing repeats.
    degrees : int
        Frames less groups; 0 when nothing repeats.
    """
    _, group = np.unique(patterns, axis=0, return_inverse=True)
    group = group.reshape(-1)
    count = np.bincount(group)
    degrees = int(group.shape[0] - count.shape[0])
    receivers, size = coefficients.shape[1:]
    if degrees == 0:
        return np.zeros(receivers), 0
    total = np.zeros((count.shape[0], receivers, size), dtype=np.complex128)
    np.add.at(total, group, coefficients)
    spread = coefficients - (total / count[:, None, None])[group]
    return energy(spread) / (degrees * size), degrees


class NoiseEstimate:
    """Running noise power of each receiver.

    Parameters
    ----------
    receivers : int
    """

    def __init__(self, receivers: int) -> None:
        self._frames: NDArray[np.float64] = np.zeros(receivers)
        self.power: NDArray[np.float64] = np.zeros(receivers)

    @property
    def known(self) -> bool:
        """True once anything was measured."""
        return bool((self._frames > 0).all())

    def update(self, power: NDArray[np.float64], frames: int, degrees: int) -> None:
        """Take in what `frames` frames measured, with so many complex degrees of freedom each receiver."""
        share = max(JUMP_SHARE, JUMP_DEVIATIONS / math.sqrt(degrees))
        gathered, means = [], []
        for heard, known, before in zip(power.tolist(), self.power.tolist(), self._frames.tolist(), strict=True):
            jumped = abs(heard - known) > share * max(known, FLOOR)
            gathered.append(min((0.0 if jumped else before) + frames, MEMORY_FRAMES))
            means.append(max(known + (heard - known) * (frames / gathered[-1]), FLOOR))
        self._frames, self.power = np.array(gathered), np.array(means)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {"frames": self._frames.copy(), "power": self.power.copy()}

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        self._frames = np.array(snapshot["frames"], dtype=np.float64)
        self.power = np.array(snapshot["power"], dtype=np.float64)


def energy(values: Complex) -> NDArray[np.float64]:
    """Sum of |values|² of each receiver, shape (R,), of values of shape (B, R, anything)."""
    return np.array([np.vdot(part, part).real for part in values.swapaxes(0, 1)])
