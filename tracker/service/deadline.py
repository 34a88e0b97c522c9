"""The latency budget as the optimizer sees it: a clock, and a bound on steps."""

import time

# Share of the budget kept for what comes after the optimizer: bound, encoding, journal, sending.
RESERVE = 0.4
# Share of the budget that a search gets even when the estimate has used all of it up: else a service that is behind
# would go on estimating and never publish.
LEAST = 0.2


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
    """

    def __init__(self, arrival_ns: int, budget_ms: float, most_steps: int) -> None:
        self._end_ns = arrival_ns + round(budget_ms * 1e6 * (1.0 - RESERVE))
        self._least_ns = round(budget_ms * 1e6 * LEAST)
        self._most_steps = most_steps
        self._begun = False

    def spent(self, steps: int) -> bool:
        """Whether the search must end after this many steps; the first question begins it."""
        now_ns = time.monotonic_ns()
        if not self._begun:
            self._begun = True
            self._end_ns = max(self._end_ns, now_ns + self._least_ns)
        return steps >= self._most_steps or now_ns >= self._end_ns
