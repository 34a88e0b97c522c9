"""At most so many changes: how far a pattern may move from the one in use."""

import numpy as np
from numpy.typing import NDArray

from .lines import Lines
from .realform import Real


class Allowance:
    """Elements that may change against the pattern in use, line by line.

    Parameters
    ----------
    lines : Lines
    in_use : ndarray, shape (N,)
        Pattern in use. A tied group shown in both states at once, which the panel cannot do, is repaired to the
        state that most of its elements show.
    most_changes : int or None
        Elements that may change; None for any number. A repair counts; what is stuck does not. If repairs alone
        need more, nothing else may change.

    Attributes
    ----------
    base : ndarray of float64, shape (G,)
        The pattern in use, repaired, as states of the lines.
    limited : bool
        Whether some pattern is out of reach.
    """

    def __init__(self, lines: Lines, in_use: NDArray[np.generic], most_changes: int | None) -> None:
        votes = lines.votes(in_use)
        self.base: Real = np.where(votes >= 0, 1.0, -1.0)
        # Turning a line from `base` changes as many elements more as the majority outnumbered the minority.
        self._weight = np.abs(votes)
        repairs = int((lines.sizes() - self._weight).sum()) // 2
        every = int(self._weight.sum())
        self._most = every if most_changes is None else max(0, most_changes - repairs)
        self.limited = self._most < every

    def left(self, states: Real) -> int:
        """Count the elements that may still change when the lines are in `states`, shape (G,)."""
        return self._most - int(self._weight[states != self.base].sum())

    def cost(self, states: Real) -> NDArray[np.int64]:
        """Count what turning each line takes from what is left; negative where it gives back."""
        return np.where(states == self.base, self._weight, -self._weight)

    def queue(self, states: Real, slope: Real, most: int) -> NDArray[np.intp]:
        """Give the lines worth turning first, so that turning the first few, however many, stays within the allowance.

        Parameters
        ----------
        states : ndarray of float64, shape (G,)
        slope : ndarray of float64, shape (G,)
            What turning each line promises.
        most : int
            How many lines to give.

        Returns
        -------
        ndarray of intp
            Lines in falling order of slope, except that where nothing is left, lines turned before turn back first.
        """
        left, cost = self.left(states), self.cost(states)
        ranked = np.argsort(-slope)
        turning = list(ranked[cost[ranked] > 0][:most])
        returning = list(ranked[cost[ranked] <= 0][:most])
        queue: list[np.intp] = []
        while len(queue) < most and (turning or returning):
            fits = bool(turning) and cost[turning[0]] <= left
            if fits and (not returning or slope[turning[0]] >= slope[returning[0]]):
                line = turning.pop(0)
            elif returning:
                line = returning.pop(0)
            else:
                turning.pop(0)  # neither fits nor can room be made
                continue
            left -= int(cost[line])
            queue.append(line)
        return np.array(queue, dtype=np.intp)

    def nearest(self, wish: Real) -> Real:
        """Turn the lines that matter most, as many as may be turned.

        Parameters
        ----------
        wish : ndarray of float64, shape (n, G)
            The sign is the state wished for, the size says how much it matters.

        Returns
        -------
        ndarray of float64, shape (n, G)
            Patterns within the allowance.
        """
        base, weight = self.base.astype(wish.dtype), self._weight.astype(wish.dtype)
        gain = np.maximum(wish * -base, 0.0)
        # A line turns for nothing where as many of its elements show one state as the other; the others cost one
        # change or more each, so no more of them than changes are left can turn: those that gain most for a change.
        free = (weight == 0.0) & (gain > 0.0)
        worth = np.where(free, 0.0, gain / np.maximum(weight, 1.0))
        order = np.argsort(-worth, axis=1)[:, : self._most]
        turned = free.copy()
        turned[np.arange(len(wish))[:, None], order] |= np.cumsum(weight[order], axis=1) <= self._most
        turned &= gain > 0.0
        return np.where(turned, -base, base)
