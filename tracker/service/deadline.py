"""The latency budget as the optimizer sees it: a clock, and a bound on steps."""

import time

# Share of the budget kept for what comes after the optimizer: bound, encoding, journal, sending.
RESERVE = 0.25


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
        self._most_steps = most_steps

    def spent(self, steps: int) -> bool:
        """Whether the search must end after this many steps."""
        return steps >= self._most_steps or time.monotonic_ns() >= self._end_ns
