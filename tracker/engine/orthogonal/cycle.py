"""Telling whether the patterns sounded are a cycle of orthogonal ones, and which of them each frame sounds.

==========  ===========================================  ======================================================
verdict     meaning                                      left when
==========  ===========================================  ======================================================
undecided   nothing was looked at yet                    the first block: sweep or other
sweep       patterns belong to one orthogonal cycle;     a block has more than a few patterns outside of it: other
            its rows are learned as they come
other       anything else, for good                      never: begin again with a new detector
==========  ===========================================  ======================================================

Where that is allowed, the pattern in use, sounded now and then, does not speak against the cycle; nor does sounding it
alone for any length of time. It may change within a block, but more patterns than that are something else.
"""

from collections.abc import Mapping
from enum import StrEnum
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .. import panel
from .completion import Completion, begin

Real = NDArray[np.float64]

# Set bits of each number of 16 bits.
ONES = np.unpackbits(np.arange(1 << 16, dtype=np.uint16).view(np.uint8).reshape(-1, 2), axis=1).sum(axis=1, dtype="u1")
# States unpacked at a time where many rows are gone through.
CHUNK = 256


class Verdict(StrEnum):
    """Whether a stream of patterns is a sweep."""

    UNDECIDED = "undecided"
    SWEEP = "sweep"
    OTHER = "other"


class SweepDetector:
    """Learns the cycle of a stream of patterns.

    Parameters
    ----------
    elements : int
        N.
    most_outside : int
        Patterns outside of the cycle in one block that do not end it.
    """

    def __init__(self, elements: int, most_outside: int = 2) -> None:
        self.elements = elements
        self._most_outside = most_outside
        self.verdict = Verdict.UNDECIDED
        self._completion: Completion | None = None
        self._order = 0
        self._numbers: dict[bytes, int] = {}
        self._packed: NDArray[np.uint8] = np.zeros((0, 0), dtype=np.uint8)  # bytes beyond the pattern's are 0
        self._strangers: set[bytes] = set()  # patterns of late that cannot belong to the cycle

    @property
    def order(self) -> int:
        """M, patterns of the whole cycle; 0 where there is none."""
        return self._order

    @property
    def known(self) -> int:
        """Patterns of the cycle seen so far; row i is the i-th of them."""
        return len(self._numbers)

    def rows(self, patterns: NDArray[np.uint8]) -> NDArray[np.intp] | None:
        """Say which row of the cycle each frame sounds.

        Parameters
        ----------
        patterns : ndarray of uint8, shape (B, ceil(N/8))
            Packed, bits beyond N cleared. The first block decides: it must hold a few patterns more than the cycle
            has phantom elements.

        Returns
        -------
        ndarray of int, shape (B,), or None
            −1 for a pattern outside of the cycle. None when the stream is no sweep, this block included.
        """
        if self.verdict is Verdict.OTHER or not patterns.shape[0]:
            return None if self.verdict is Verdict.OTHER else np.zeros(0, dtype=np.intp)
        width = patterns.shape[1]
        blob = patterns.tobytes()
        keys = [blob[at : at + width] for at in range(0, len(blob), width)]
        if self.verdict is Verdict.UNDECIDED and not self._begin(keys):
            return None
        outside = [key for key in keys if key not in self._numbers]
        if outside and self.known < self._order:
            self._learn(outside)
            outside = [key for key in keys if key not in self._numbers]
        if len(set(outside)) > self._most_outside:
            self.verdict = Verdict.OTHER
            return None
        return np.array([self._numbers.get(key, -1) for key in keys], dtype=np.intp)

    def states(self, rows: NDArray[np.intp]) -> Real:
        """States of the elements under rows of the cycle, shape (k, N)."""
        return panel.unpack(self._packed[rows], self.elements)

    def products(self, regressor: Real) -> Real:
        """Products of all rows known with z = [1, s], shape (known,).

        Raises
        ------
        ValueError
            When z is not of a pattern: its entries are ±1.
        """
        if regressor.shape != (self.elements + 1,) or not (np.abs(regressor) == 1.0).all():
            raise ValueError(f"a regressor [1, s] of {self.elements} states +1 or -1 is needed")
        asked = np.zeros(self._packed.shape[1], dtype=np.uint8)
        bits = panel.pack(regressor[1:])
        asked[: bits.shape[0]] = bits
        differing = ONES[(self._packed[: self.known] ^ asked).view(np.uint16)].sum(axis=1, dtype=np.int64)
        return np.asarray(regressor[0] + (self.elements - 2 * differing), dtype=np.float64)

    def snapshot(self) -> dict[str, Any]:
        """All state; `restore` goes on from it."""
        return {
            "elements": self.elements,
            "most_outside": self._most_outside,
            "verdict": str(self.verdict),
            "order": self._order,
            "packed": self._packed[: self.known].copy(),
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any]) -> "SweepDetector":
        """Rebuild from a snapshot."""
        detector = cls(int(snapshot["elements"]), int(snapshot["most_outside"]))
        detector.verdict = Verdict(snapshot["verdict"])
        packed = np.asarray(snapshot["packed"], dtype=np.uint8)
        width = -(-detector.elements // 8)
        if packed.shape[0]:
            detector._order = int(snapshot["order"])
            detector._packed = np.zeros((detector._order, packed.shape[1]), dtype=np.uint8)
            detector._number([row[:width].tobytes() for row in packed])
            if detector.known < detector._order:
                rows = detector._regressors(packed)
                # The rows that were held against each other at the start come first.
                first = begin(rows)
                if first is not None:
                    detector._completion = first[0]
                    detector._completion.take(rows[first[1].shape[0] :])
        return detector

    def _begin(self, keys: list[bytes]) -> bool:
        """Decide on the first block."""
        distinct = list(dict.fromkeys(keys))
        rows = self._regressors(np.frombuffer(b"".join(distinct), dtype=np.uint8).reshape(len(distinct), -1))
        found = begin(rows)
        if found is None:
            self.verdict = Verdict.OTHER
            return False
        self._completion, members = found
        self._order = self._completion.order
        width = -(-self.elements // 8)
        self._packed = np.zeros((self._order, width + width % 2), dtype=np.uint8)
        self._number([distinct[member] for member in members])
        self.verdict = Verdict.SWEEP
        return True

    def _learn(self, keys: list[bytes]) -> None:
        """Take in patterns that belong to the cycle and were not seen before."""
        if self._completion is None:
            return
        # What cannot be completed with the rows known cannot be with more of them.
        distinct = [key for key in dict.fromkeys(keys) if key not in self._strangers]
        for start in range(0, len(distinct), CHUNK):
            part = distinct[start : start + CHUNK]
            rows = self._regressors(np.frombuffer(b"".join(part), dtype=np.uint8).reshape(len(part), -1))
            self._number([part[index] for index in np.flatnonzero(self._completion.take(rows))])
        self._strangers = {key for key in keys if key not in self._numbers}
        if self.known == self._order:
            self._completion = None

    def _number(self, keys: list[bytes]) -> None:
        """Give the next numbers to patterns."""
        for key in keys:
            number = len(self._numbers)
            self._packed[number, : len(key)] = np.frombuffer(key, dtype=np.uint8)
            self._numbers[key] = number

    def _regressors(self, packed: NDArray[np.uint8]) -> Real:
        rows = np.ones((packed.shape[0], self.elements + 1))
        rows[:, 1:] = panel.unpack(packed, self.elements)
        return rows
