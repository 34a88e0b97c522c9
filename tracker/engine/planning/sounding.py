"""Patterns worth sounding: sweeps of orthogonal patterns, and patterns near the one in use.

Both are made over groups of elements that the estimate cannot or need not tell apart: those on one control line, and
those that share a response (tiles). Stuck elements show their state in every pattern.

A *sweep* takes the rows of a Hadamard matrix in turn, one column a group. The row that is next is the one sounded
longest ago, and that is the direction known least: over orthogonal rows the covariance of the estimate is diagonal in
their directions.

A *near* pattern is the one in use with one block of groups turned. Blocks are disjoint, and a round of them turns each
group once; from round to round the groups are dealt out anew, so that any two meet in a block about equally often.
With a share φ of the groups turned, a frame tells 4 φ (1 − φ) as much about a group as a row of a sweep does: that is
the variance of ±1 with the one state φ of the time.
"""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from ..estimation.aperture import ApertureBasis
from ..orthogonal.hadamard import hadamard_order, hadamard_rows
from ..panel import Limits
from ..search.lines import Lines, lines_of

GOLDEN = 0.618
"""Steps of about this part of a cycle spread neighbours far apart, and few of them come near the start again."""


def groups_of(aperture: ApertureBasis, limits: Limits) -> Lines:
    """Find the groups of elements that are sounded as one.

    Parameters
    ----------
    aperture : ApertureBasis
    limits : Limits

    Returns
    -------
    Lines
        With one line a group.
    """
    lines = lines_of(limits, aperture.elements)
    # Elements whose responses are the same combination of coefficients: no two of distinct numbers with their squares
    # agree, whatever the weights.
    number = np.arange(1.0, aperture.size + 1)
    _, alike = np.unique(aperture.surface((number + 1j * number**2)[:, None])[:, 0], return_inverse=True)
    line = np.repeat(np.arange(lines.first.size), lines.sizes())
    driven = lines.members
    edges = coo_array((np.ones(driven.size), (line, lines.first.size + alike.reshape(-1)[driven])))
    size = max(edges.shape)
    edges.resize((size, size))
    group = connected_components(edges, directed=False)[1][line]
    order = np.argsort(group, kind="stable")
    return Lines(driven[order], np.flatnonzero(np.diff(group[order], prepend=-1)), lines.held)


class Sweep:
    """Rows of a Hadamard matrix over groups, in a scrambled order that comes round.

    Parameters
    ----------
    groups : Lines

    Attributes
    ----------
    length : int
        M ≥ G + 1, patterns until the first comes again.
    """

    def __init__(self, groups: Lines) -> None:
        self._groups = groups
        self.length = hadamard_order(groups.first.size + 1)
        # Neighbouring rows and columns of Sylvester's matrices are much alike; a part of a sweep is to hold all kinds.
        self._step = _coprime(self.length)
        self._columns = 1 + np.arange(groups.first.size) * _coprime(self.length - 1) % max(self.length - 1, 1)

    def take(self, place: int, count: int) -> NDArray[np.int8]:
        """Give the patterns at the places from `place` on, shape (count, N)."""
        index = (place + np.arange(count)) % self.length * self._step % self.length
        return spread(self._groups, hadamard_rows(self.length, index)[:, self._columns])


class Near:
    """Blocks of groups to turn, in an order that comes round.

    Parameters
    ----------
    groups : Lines
    """

    def __init__(self, groups: Lines) -> None:
        self._groups = groups
        self._count = groups.first.size
        self._prime = next(q for q in range(self._count + 1, 2 * self._count + 3) if _is_prime(q))
        self._step, self._shift = _coprime(self._prime - 1), _coprime(self._prime)

    def blocks(self, size: int) -> int:
        """Blocks a round when each has about `size` groups."""
        return max(round(self._count / size), 1)

    def take(self, size: int, place: int, count: int) -> NDArray[np.bool_]:
        """Say which elements are turned at the places from `place` on.

        Parameters
        ----------
        size : int
            Groups a block, 1 to G; some blocks have one more or fewer.
        place, count : int

        Returns
        -------
        ndarray of bool, shape (count, N)
        """
        blocks = self.blocks(size)
        flipped = np.zeros((count, self._count), dtype=np.int8)
        dealt = -1
        for row in range(count):
            deal, block = divmod(place + row, blocks)
            if deal != dealt:
                # Multiplied by every residue of a prime in turn, any two groups come to lie close equally often;
                # shifted as well, not always on either side of the same border.
                factor, shift = 1 + deal * self._step % (self._prime - 1), deal * self._shift
                order = np.argsort((np.arange(self._count) * factor + shift) % self._prime)
                dealt = deal
            flipped[row, order[block * self._count // blocks : (block + 1) * self._count // blocks]] = 1
        turned = np.zeros((count, self._groups.held.size), dtype=np.bool_)
        turned[:, self._groups.members] = np.repeat(flipped, self._groups.sizes(), axis=1)
        return turned


def spread(groups: Lines, states: NDArray[np.integer[Any]]) -> NDArray[np.int8]:
    """Turn states of groups (B, G) into patterns (B, N)."""
    patterns = np.repeat(groups.held[None, :], len(states), axis=0)
    patterns[:, groups.members] = np.repeat(states, groups.sizes(), axis=1)
    return patterns


def _coprime(cycle: int) -> int:
    """Find a step near the golden part of a cycle that visits every place of it."""
    return next(step for step in range(max(round(GOLDEN * cycle), 1), 2 * cycle + 2) if math.gcd(step, cycle) == 1)


def _is_prime(number: int) -> bool:
    return number > 1 and all(number % divisor for divisor in range(2, math.isqrt(number) + 1))
