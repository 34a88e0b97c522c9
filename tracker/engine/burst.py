"""A burst of pilot frames as the engine takes it: decoded, shaped and checked at the edge."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, eq=False)
class Burst:
    """B frames, each one pattern and what was received under it.

    Parameters
    ----------
    run : int
        Drawn by the controller when it starts; a new run restarts `seq`.
    seq : int
        0, 1, 2 … within the run.
    t_ns : int
        Time of the first frame, ns since the Unix epoch.
    dt_ns : int
        Spacing of the frames, ns.
    elements : int
        N, number of elements on the panel.
    patterns : ndarray of uint8, shape (B, ceil(N/8))
        Packed patterns; element i is bit i % 8 (least significant first) of byte i // 8; a set bit is state +1.
    response : ndarray of complex64, shape (B, R, K)
        Received over sent on each pilot tone at each receiver.
    keep : ndarray of bool, shape (B,)
        False where a frame holds NaN or infinity and is left out.
    pattern_id : int or None
        Id of the published pattern that payload uses now, when the controller says so.
    """

    run: int
    seq: int
    t_ns: int
    dt_ns: int
    elements: int
    patterns: NDArray[np.uint8]
    response: NDArray[np.complex64]
    keep: NDArray[np.bool_]
    pattern_id: int | None = None

    @property
    def frames(self) -> int:
        """B, frames in the burst, those left out included."""
        return int(self.patterns.shape[0])

    @property
    def end_ns(self) -> int:
        """Time of the last frame, ns since the Unix epoch."""
        return self.t_ns + (self.frames - 1) * self.dt_ns
