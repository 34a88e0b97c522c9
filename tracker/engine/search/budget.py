"""How long the optimizer may go on.

The optimizer counts its steps and asks once before each whether the budget is spent, and does nothing whose
outcome depends on time. So its result is a function of its inputs and of the step at which the answer first was
yes: the live service answers by the clock, a replay by the count that was written down, and both get the same
pattern bit by bit.
"""

from dataclasses import dataclass
from typing import Protocol


class Budget(Protocol):
    """Decides when the optimizer has to stop."""

    def spent(self, steps: int) -> bool:
        """Tell whether to stop now, with `steps` steps taken."""
        ...


@dataclass(frozen=True, slots=True)
class Steps:
    """A budget counted in steps alone.

    Parameters
    ----------
    most : int
        Steps that may be taken.
    """

    most: int

    def spent(self, steps: int) -> bool:
        """Tell whether `steps` has reached the most that may be taken."""
        return steps >= self.most


@dataclass(slots=True)
class Meter:
    """Counts the steps taken and holds them against a budget.

    Parameters
    ----------
    budget : Budget

    Attributes
    ----------
    steps : int
        Steps taken so far.
    over : bool
        Whether the budget has said that it is spent; it is not asked again.
    """

    budget: Budget
    steps: int = 0
    over: bool = False

    def step(self) -> bool:
        """Ask for one more step; count it if it may be taken."""
        if self.over or self.budget.spent(self.steps):
            self.over = True
            return False
        self.steps += 1
        return True
