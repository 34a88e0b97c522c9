"""What can be set on its own: the control lines of a panel with stuck and tied elements.

A line drives one element, or a group of tied ones that always show the same state; an element that is stuck, or
tied to a stuck one, is driven by no line and counts as part of the direct path. The optimizer knows lines only, so
no pattern that it can think of breaks a limit.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..panel import Limits
from .channel import Channel


@dataclass(frozen=True, slots=True, eq=False)
class Lines:
    """G lines that drive a panel of N elements.

    Parameters
    ----------
    members : ndarray of intp, shape (driven elements,)
        The elements that lines drive, line by line.
    first : ndarray of intp, shape (G,)
        Where the members of each line begin.
    held : ndarray of int8, shape (N,)
        State of the elements that no line drives; 0 for those that one does.
    """

    members: NDArray[np.intp]
    first: NDArray[np.intp]
    held: NDArray[np.int8]

    @property
    def single(self) -> bool:
        """Whether each line drives one element."""
        return self.first.size == self.members.size

    def join(self, channel: Channel) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        """Work out the channel as the lines see it: direct (R, Q) with what is held, surface (G, R, Q)."""
        if self.members.size == channel.elements and self.single:
            return channel.direct, channel.surface
        stuck = np.flatnonzero(self.held)
        direct = channel.direct + (self.held[stuck, None, None] * channel.surface[stuck]).sum(axis=0)
        surface = channel.surface[self.members]
        return direct, surface if self.single else np.add.reduceat(surface, self.first, axis=0)

    def spread(self, states: NDArray[np.floating[Any]]) -> NDArray[np.int8]:
        """Give the pattern, shape (N,), that lines in these states, shape (G,), make."""
        pattern = self.held.copy()
        pattern[self.members] = states if self.single else np.repeat(states, self.sizes())
        return pattern

    def votes(self, pattern: NDArray[np.generic]) -> NDArray[np.int64]:
        """Add up the states, shape (N,), of the elements of each line, shape (G,)."""
        signs = np.where(np.asarray(pattern)[self.members] > 0, 1, -1)
        return signs if self.single else np.add.reduceat(signs, self.first)

    def sizes(self) -> NDArray[np.int64]:
        """Count the elements of each line, shape (G,)."""
        if self.single:
            return np.ones(self.first.size, dtype=np.int64)
        return np.diff(self.first, append=self.members.size)


def lines_of(limits: Limits, elements: int) -> Lines:
    """Find the lines of a panel.

    Parameters
    ----------
    limits : Limits
    elements : int
        N.

    Raises
    ------
    ValueError
        An element does not exist, is stuck in a state other than +1 and −1, or is tied twice.
    """
    held = np.zeros(elements, dtype=np.int8)
    if not limits.stuck and not limits.tied:
        every = np.arange(elements)
        return Lines(every, every, held)
    for element, state in limits.stuck.items():
        _check(element, elements)
        if state not in (-1, 1):
            raise ValueError(f"element {element} is said to be stuck in state {state}; the states are +1 and -1")
        held[element] = state
    # A line is named by one of its elements.
    line = np.arange(elements)
    tied: set[int] = set()
    for group in limits.tied:
        for element in group:
            _check(element, elements)
            if element in tied:
                raise ValueError(f"element {element} is tied twice")
            tied.add(element)
        stuck = [limits.stuck[element] for element in group if element in limits.stuck]
        for element in group:
            line[element] = group[0]
            if stuck and element not in limits.stuck:
                held[element] = stuck[0]
    driven = np.flatnonzero(held == 0)
    members = driven[np.argsort(line[driven], kind="stable")]
    first = np.flatnonzero(np.diff(line[members], prepend=-1))
    return Lines(members, first, held)


def _check(element: int, elements: int) -> None:
    if not 0 <= element < elements:
        raise ValueError(f"element {element} does not exist, the panel has 0 to {elements - 1}")
