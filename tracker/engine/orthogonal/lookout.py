"""Noticing that a sweep of orthogonal patterns is sounded, from the first block on or again later on.

A filter for sweeps is exact on them, and cheaper than the dense one where blocks are large. What it makes of patterns
between them, such as the one in use, is near the best but not exact; it is let do so only where the dense filter would
take several times as long, and there it makes the difference between keeping up and not.

The first block decides whether an estimate begins as a sweep. Later on there is an estimate already, and much to be
lost by taking a few patterns for a sweep; so the whole cycle must have been sounded first.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .cycle import SweepDetector

# Blocks from one look to the next: it costs as much as a block of the dense filter.
EVERY = 32
# Patterns outside of a sweep that may come in a block: the one in use, which may change once; and how many times the
# least work in a block there must be for that.
BETWEEN, MIXED = 2, 4


class Lookout:
    """Looks for sweeps.

    Parameters
    ----------
    elements : int
        N.
    least : int
        Elements times frames of a block below which it is not looked at.
    """

    def __init__(self, elements: int, least: int) -> None:
        self._elements = elements
        self._least = least
        self._candidate: SweepDetector | None = None
        self._blocks = 0  # until the next look

    def first(self, patterns: NDArray[np.uint8]) -> SweepDetector | None:
        """Return the cycle to which the first frames belong, packed (B, bytes); None where there is none."""
        work = self._elements * patterns.shape[0]
        if work < self._least:
            return None
        cycle = SweepDetector(self._elements, BETWEEN if work >= MIXED * self._least else 0)
        return cycle if cycle.rows(patterns) is not None else None

    def later(self, patterns: NDArray[np.uint8]) -> SweepDetector | None:
        """Look at a block; return the cycle once all of it was sounded."""
        if self._candidate is None:
            self._blocks -= 1
            if self._blocks < 0:
                self._blocks = EVERY
                self._candidate = self.first(patterns)
            return None
        if self._candidate.rows(patterns) is None:
            self._candidate = None
        elif self._candidate.known == self._candidate.order:
            cycle, self._candidate, self._blocks = self._candidate, None, EVERY
            return cycle
        return None

    def snapshot(self) -> dict[str, Any]:
        """All state; `restore` goes on from it."""
        return {
            "elements": self._elements,
            "least": self._least,
            "candidate": self._candidate.snapshot() if self._candidate is not None else None,
            "blocks": self._blocks,
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any]) -> "Lookout":
        """Rebuild from a snapshot."""
        lookout = cls(int(snapshot["elements"]), int(snapshot["least"]))
        candidate = snapshot["candidate"]
        lookout._candidate = SweepDetector.restore(candidate) if candidate is not None else None
        lookout._blocks = int(snapshot["blocks"])
        return lookout
