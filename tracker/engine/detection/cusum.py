"""Two-sided CUSUM: has the mean of a statistic moved, and since when."""

from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, slots=True)
class Change:
    """An alarm of the test.

    Parameters
    ----------
    up : bool
        Whether the mean rose.
    statistic, threshold : float
    since : int
        Samples since the sum last left zero: the usual estimate of when the change began.
    """

    up: bool
    statistic: float
    threshold: float
    since: int


class Cusum:
    """The test; samples are standardised by the caller.

    Parameters
    ----------
    threshold, slack : float
        h and k, in standard deviations of a sample.
    """

    def __init__(self, threshold: float, slack: float = 0.5) -> None:
        self.threshold = threshold
        self.slack = slack
        self.reset()

    def reset(self) -> None:
        """Start afresh, as after an alarm that was acted on."""
        self._high = self._low = 0.0
        self._since_high = self._since_low = 0
        self.statistic = 0.0  # the larger of the two sums

    @property
    def height(self) -> float:
        """The statistic over its threshold; 1 raises an alarm."""
        return self.statistic / self.threshold

    def update(self, sample: float) -> Change | None:
        """Take in one sample; return the change when a sum exceeds the threshold."""
        # Conditions where max() would do: this runs many times a burst, and takes a third of the time so.
        high, low = self._high + sample - self.slack, self._low - sample - self.slack
        self._since_high = self._since_high + 1 if high > 0.0 else 0
        self._since_low = self._since_low + 1 if low > 0.0 else 0
        self._high = high = high if high > 0.0 else 0.0
        self._low = low = low if low > 0.0 else 0.0
        up = high >= low
        self.statistic = high if up else low
        if self.statistic <= self.threshold:
            return None
        return Change(up, self.statistic, self.threshold, self._since_high if up else self._since_low)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "threshold": self.threshold,
            "slack": self.slack,
            "sums": [self._high, self._low],
            "since": [self._since_high, self._since_low],
        }

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        self.threshold, self.slack = float(snapshot["threshold"]), float(snapshot["slack"])
        self._high, self._low = (float(x) for x in snapshot["sums"])
        self._since_high, self._since_low = (int(x) for x in snapshot["since"])
        self.statistic = max(self._high, self._low)
