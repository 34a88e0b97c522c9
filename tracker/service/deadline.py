"""The latency budget as the optimizer sees it: a clock, and a bound on steps."""

import time

# Share of the budget kept for what comes after the optimizer (bound, encoding, journal, sending) at least; more where
# that has lately taken longer, as it does on large panels.
RESERVE = 0.4
# Share of the budget that a search gets even when the estimate has used all of it up: else a service that is behind
# would go on estimating and never publish.
LEAST = 0.2
# What came after the search is followed up by the first of these shares of the difference, down by the second: it
# settles where one in seventeen takes longer, and a single stall moves it little.
UP, DOWN = 1 / 4, 1 / 64


class Reserve:
    """How long to keep for what comes after the search: as long as that has lately taken.

    Parameters
    ----------
    budget_ms : float
        From arrival to the published pattern.
    """

    def __init__(self, budget_ms: float) -> None:
        self._least_ns = budget_ms * 1e6 * RESERVE
        self._most_ns = budget_ms * 1e6 * (1.0 - LEAST)
        self._kept_ns = self._least_ns

    @property
    def kept_ns(self) -> int:
        """Time to keep, ns."""
        return round(self._kept_ns)

    def observe(self, took_ns: int) -> None:
        """Take how long it took from the end of a search until its pattern was out."""
        took = min(max(took_ns, self._least_ns), self._most_ns)
        self._kept_ns += (took - self._kept_ns) * (UP if took > self._kept_ns else DOWN)


class Deadline:
    """Budget of one block.

    Parameters
    ----------
    arrival_ns : int
        Monotonic time at which its first burst arrived, ns.
    budget_ms : float
        From arrival to the published pattern.
    most_steps : int
        Steps after which the search ends whatever the clock says.
    reserve : Reserve

    Attributes
    ----------
    asked_ns : int or None
        When the search asked last, which is about when it ended; None when there was none.
    """

    def __init__(self, arrival_ns: int, budget_ms: float, most_steps: int, reserve: Reserve) -> None:
        self._end_ns = arrival_ns + round(budget_ms * 1e6) - reserve.kept_ns
        self._least_ns = round(budget_ms * 1e6 * LEAST)
        self._most_steps = most_steps
        self.asked_ns: int | None = None

    def spent(self, steps: int) -> bool:
        """Whether the search must end after this many steps; the first question begins it."""
        now_ns = time.monotonic_ns()
        if self.asked_ns is None:
            self._end_ns = max(self._end_ns, now_ns + self._least_ns)
        self.asked_ns = now_ns
        return steps >= self._most_steps or now_ns >= self._end_ns
