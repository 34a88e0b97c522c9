"""Drift alarm: has the innovation ratio left its own baseline.

The ratio of measured to expected innovation power is 1 on average while the model holds; its spread follows from the
degrees of freedom. Real links sit a little off (motion between bursts, imperfect calibration), so the ratio is held
against a baseline of its own that adapts slowly and with bounded steps, so that a change cannot drag it along.
"""

import math
from typing import Any

import numpy as np

from .cusum import Change, Cusum
from .run_length import threshold_for

# Samples of a first baseline; it holds when its two halves agree, which they do not while the estimate still forms.
WARM_UP = 64
# Difference of the halves' means that still counts as agreement, in standard errors.
AGREEMENT = 2.0
# Samples over which the baseline adapts in the long run; at first it adapts over as many as it has seen.
MEMORY = 1024
# A sample moves the baseline by no more than this many standard deviations' worth.
BOUND = 3.0
SLACK = 0.5


class DriftMonitor:
    """Two-sided CUSUM of the standardised innovation ratio.

    Parameters
    ----------
    false_alarm_s : float
        Wanted mean time between false alarms, s.
    """

    def __init__(self, false_alarm_s: float) -> None:
        self._false_alarm_s = false_alarm_s
        self.reset()

    def reset(self) -> None:
        """Forget the baseline: the next samples make a new one."""
        self._count = 0
        self._mean = 0.0
        self._square = 0.0
        self._first: list[float] = []
        self._elapsed_s = 0.0
        self._cusum: Cusum | None = None

    @property
    def statistic(self) -> float:
        """The larger CUSUM sum, 0 while the baseline is being made."""
        return self._cusum.statistic if self._cusum else 0.0

    @property
    def threshold(self) -> float:
        """Alarm threshold, 0 while the baseline is being made."""
        return self._cusum.threshold if self._cusum else 0.0

    def update(self, ratio: float, degrees: int, elapsed_s: float) -> Change | None:
        """Take in the innovation ratio of one block.

        Parameters
        ----------
        ratio : float
            Measured over expected power.
        degrees : int
            Complex degrees of freedom that it was averaged over.
        elapsed_s : float
            Time since the block before, s.
        """
        # |complex unit Gaussian|² has mean 1 and variance 1, so this has unit variance whatever the block's size.
        sample = (ratio - 1.0) * math.sqrt(degrees)
        if self._cusum is None:
            self._warm_up(sample, elapsed_s)
            return None
        spread = math.sqrt(max(self._square, 1.0))
        standard = (sample - self._mean) / spread
        change = self._cusum.update(standard)
        bounded = min(max(standard, -BOUND), BOUND) * spread
        self._count += 1
        gain = 1.0 / min(self._count, MEMORY)
        self._mean += bounded * gain
        self._square += (bounded * bounded - self._square) * gain
        return change

    def _warm_up(self, sample: float, elapsed_s: float) -> None:
        """Gather a first baseline, over a sliding window until it is steady."""
        self._first.append(sample)
        self._elapsed_s += elapsed_s
        self._count += 1
        if len(self._first) < WARM_UP:
            return
        first = np.array(self._first)
        halves = first.reshape(2, -1).mean(axis=1)
        self._mean, self._square = float(first.mean()), float(first.var())
        error = math.sqrt(max(self._square, 1.0) * 2 / (WARM_UP / 2))
        if abs(halves[1] - halves[0]) > AGREEMENT * error:
            del self._first[: WARM_UP // 2]
            return
        period_s = max(self._elapsed_s / self._count, 1e-9)
        self._cusum = Cusum(threshold_for(max(self._false_alarm_s / period_s, 2.0), SLACK), SLACK)
        self._first = []
        self._count = WARM_UP

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "count": self._count,
            "mean": self._mean,
            "square": self._square,
            "first": list(self._first),
            "elapsed_s": self._elapsed_s,
            "cusum": self._cusum.snapshot() if self._cusum else None,
        }

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        self._count = int(snapshot["count"])
        self._mean, self._square = float(snapshot["mean"]), float(snapshot["square"])
        self._first = [float(sample) for sample in snapshot["first"]]
        self._elapsed_s = float(snapshot["elapsed_s"])
        self._cusum = None
        if snapshot["cusum"] is not None:
            self._cusum = Cusum(1.0)
            self._cusum.load(snapshot["cusum"])
