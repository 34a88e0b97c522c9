"""What the innovations of a block show, as statistics for the drift alarm.

The filter's covariance says how large innovations may be, but it is built on a time constant that somebody chose: a
channel that stands still is predicted better, one that moves faster worse. So the share α of the predicted excess
over noise that really occurs is measured, slowly, frame by frame::

    E|ε_b|² = 1 + α s_b,    s_b = z_b P zᴴ_b given the frames before, ε_b the innovation given them

With L Lᴴ = I + Z P⁻ Zᴴ and w = L⁻¹(Y − Z C) these are s_b = L_bb² − 1 and ε_b = L_bb w_b: the same whether frames come
one by one or in blocks.
"""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..estimation.filter import Surprise
from .drift import Reading

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Blocks over which α is averaged, and how far above its expectation a frame counts, in standard deviations.
MEMORY = 256
BOUND = 3.0
# α cannot be told from anything beyond this.
MOST = 100.0
FLOOR = 1e-30

INNOVATION = "innovation"


class Innovations:
    """Gathers what the frames of a block show.

    Parameters
    ----------
    receivers : int
        R: outputs are R × Q.
    size : int
        Q.
    """

    def __init__(self, receivers: int, size: int) -> None:
        self._outputs = receivers * size
        self._most_ratio = 1.0 + BOUND / math.sqrt(receivers * size)
        self._shown, self._known = 0.0, 0.0  # moments of the regression for α
        self._blocks = 0
        self.excess = 1.0
        self.variance = 1.0  # of an innovation, in the last block
        self._power, self._frames = 0.0, 0

    def take(self, surprise: Surprise) -> None:
        """Take in frames worked off in one step; the spread of the surprise is L_bb²."""
        white, spread = surprise.white, surprise.spread
        predicted = spread - 1.0
        inverse = 1.0 / (1.0 + self.excess * predicted)
        parts = white.view(np.float64)
        ratio = np.einsum("bd,bd->b", parts, parts) * (spread * inverse / white.shape[1])
        frames = white.shape[0]
        self._power += float(ratio.sum())
        self._frames += frames
        self.variance = 1.0 + self.excess * float(predicted.sum()) / frames
        self._calibrate(ratio, predicted, inverse)

    def readings(self) -> list[Reading]:
        """Say what the block showed, and begin the next."""
        power = max(self._power / max(self._frames, 1), FLOOR)
        reading = Reading(INNOVATION, power, self._frames * self._outputs)
        self._power, self._frames = 0.0, 0
        return [reading]

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "moments": [self._shown, self._known],
            "blocks": self._blocks,
            "excess": self.excess,
            "variance": self.variance,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot, made between blocks."""
        self._shown, self._known = (float(moment) for moment in snapshot["moments"])
        self._blocks, self.excess = int(snapshot["blocks"]), float(snapshot["excess"])
        self.variance = float(snapshot["variance"])

    def _calibrate(self, ratio: Real, predicted: Real, inverse: Real) -> None:
        """Regress the innovations' power beyond the noise on what the covariance predicts, weighted by its spread."""
        self._blocks += 1
        gain = 1.0 / min(self._blocks, MEMORY)
        bounded = np.minimum(ratio, self._most_ratio)
        scaled = predicted * inverse
        # Both sides of power = 1 + α s over the expected power, which is how far either may spread.
        self._shown += (float(scaled @ (bounded - inverse)) - self._shown) * gain
        self._known += (float(scaled @ scaled) - self._known) * gain
        if self._known > 0.0:
            self.excess = min(max(self._shown / self._known, 0.0), MOST)
