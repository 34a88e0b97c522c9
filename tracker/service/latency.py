"""Latencies of the last while, for the operator."""

from collections import deque

import numpy as np

KEPT = 4096


class Latencies:
    """Keeps the latest latencies, µs."""

    def __init__(self) -> None:
        self._kept: deque[int] = deque(maxlen=KEPT)

    def add(self, latency_us: int) -> None:
        """Take one in."""
        self._kept.append(latency_us)

    def summary(self) -> dict[str, int]:
        """Median, 99 % and largest, µs; empty before the first."""
        if not self._kept:
            return {}
        half, high, most = np.percentile(np.array(self._kept), [50, 99, 100])
        return {"median": int(half), "p99": int(high), "largest": int(most)}
