"""What a refreshed pattern must gain to be worth the switch to it.

While the panel switches, and until the controller goes on, the link carries nothing. A switch that takes w costs
rate · w; a pattern that gains g and stays for T brings g · T. So it pays from g = rate · w / T on. T is what lies
ahead, and is taken to be as long as patterns have stayed of late, or as long as the one in use has stayed already.
"""

from typing import Any

# Patterns over whose stays the mean is taken.
MEMORY = 8


class Switching:
    """The stays of the patterns published so far.

    Parameters
    ----------
    least_gain : float
        Gain that is asked for in any case, bit/s/Hz.
    takes_s : float
        Time that a switch takes, s.
    """

    def __init__(self, least_gain: float, takes_s: float) -> None:
        self._least_gain, self._takes_s = least_gain, takes_s
        self._since_ns: int | None = None
        self._stay_s, self._stays = 0.0, 0

    def published(self, time_ns: int) -> None:
        """Note that a pattern was published at a time."""
        if self._since_ns is not None:
            self._stays = min(self._stays + 1, MEMORY)
            self._stay_s += (max(time_ns - self._since_ns, 0) / 1e9 - self._stay_s) / self._stays
        self._since_ns = time_ns

    def worth(self, rate: float, time_ns: int) -> float:
        """Gain from which a switch pays at a time, bit/s/Hz, under a pattern of this rate."""
        if not self._stays or self._since_ns is None:
            return self._least_gain
        ahead_s = max(self._stay_s, (time_ns - self._since_ns) / 1e9)
        # No switch is worth more than the whole rate, however short the stays were.
        cost = rate * min(self._takes_s / ahead_s, 1.0) if ahead_s > 0.0 else rate
        return max(self._least_gain, cost)

    def snapshot(self) -> list[Any]:
        """All state."""
        return [self._since_ns, self._stay_s, self._stays]

    def load(self, snapshot: list[Any]) -> None:
        """Take over a snapshot."""
        since_ns, stay_s, stays = snapshot
        self._since_ns = int(since_ns) if since_ns is not None else None
        self._stay_s, self._stays = float(stay_s), int(stays)
