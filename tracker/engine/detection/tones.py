"""Does one tone have more noise than it used to: a narrow interferer drowns in the noise of all tones together.

What a frame holds outside the delay basis is noise alone. Its power on each tone, over that of all tones, is held
against what it has been on the same tone; the largest ratio x of R K gamma variables, averaged over n frames, becomes a
standard normal deviate: of the chance 1 − (1 − Q(n, n x))^(R K), with Q the upper regularised gamma function.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaincc

from .drift import Reading, largest

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Frames that a sample rests on; of a longer burst as many, evenly spread: more would cost more than all other watching.
FRAMES = 16
# Samples over which the level of a tone is averaged, and what one sample may count at most.
MEMORY, BOUND = 1024, 4.0
# Once the level is known one sample in so many is enough to follow it.
RARELY = 8
FLOOR = 1e-30

TONE = "tone"


class Tones:
    """Watches the noise of the tones.

    Parameters
    ----------
    receivers : int
    delay : ndarray of complex, shape (K, Q)
        Delay basis.
    """

    def __init__(self, receivers: int, delay: Complex) -> None:
        self._transpose = np.ascontiguousarray(delay.T, dtype=np.complex64)
        self._level: Real = np.ones((receivers, delay.shape[0]))
        self._power: Real = np.zeros((receivers, delay.shape[0]))
        self._frames, self._samples = 0, 0

    def take(self, tones: Complex, coefficients: Complex) -> None:
        """Take in frames on the tones, shape (B, R, K), and on the delay basis, (B, R, Q); single precision will do."""
        step = -(-tones.shape[0] // FRAMES)
        inside = coefficients[::step].astype(np.complex64)
        outside = tones[::step].astype(np.complex64) - inside @ self._transpose
        squares = np.square(outside.view(np.float32)).sum(axis=0)
        self._power += squares[:, ::2] + squares[:, 1::2]
        self._frames += outside.shape[0]

    def readings(self) -> list[Reading]:
        """Give a sample once enough frames are in."""
        if self._frames < FRAMES:
            return []
        power = self._power * (self._power.shape[1] / (self._power.sum(axis=1)[:, None] + FLOOR))
        ratio = power / self._level
        chance = float(gammaincc(self._frames, self._frames * float(ratio.max())))
        self._samples += 1
        if self._samples < MEMORY or self._samples % RARELY == 0:
            gain = max(1.0 / self._samples, RARELY / MEMORY if self._samples >= MEMORY else 0.0)
            self._level += (np.minimum(power, BOUND * self._level) - self._level) * gain
            np.maximum(self._level, FLOOR, out=self._level)
        self._power.fill(0.0)
        self._frames = 0
        return [Reading(TONE, largest(chance, ratio.size))]

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        counts = [self._frames, self._samples]
        return {"level": self._level.copy(), "power": self._power.copy(), "counts": counts}

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._level = np.array(snapshot["level"], dtype=np.float64)
        self._power = np.array(snapshot["power"], dtype=np.float64)
        self._frames, self._samples = (int(count) for count in snapshot["counts"])
