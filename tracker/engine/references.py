"""Patterns outside of a sweep, sounded now and then: what they say, put to the estimate that the sweeps gave.

The pattern in use is sounded to see how it does. It is no row of the sweep, and taking it in would fill the covariance
that the sweep keeps diagonal. So the response under it, r = z C, is followed for itself: a scalar filter with the
forgetting of the rest, whose mean r̂ and variance ϱ come from frames of this pattern alone. Where an estimate is wanted,
the few latest are put to it as measurements::

    C ← C + P Zᴴ (Z P Zᴴ + diag ϱ)⁻¹ (R̂ − Z C)

with P taken as diagonal. For one pattern and no forgetting since it was first sounded, and rows of the sweep that are
known equally well, that is the exact posterior; otherwise the gain is near the best.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from . import panel

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Patterns kept: those sounded longer ago than that tell of a channel that has moved on.
MOST = 4


class References:
    """Responses under the latest patterns outside of the sweep.

    Parameters
    ----------
    elements : int
        N.
    outputs : int
        D.
    """

    def __init__(self, elements: int, outputs: int) -> None:
        self._elements = elements
        self._patterns: list[bytes] = []  # the latest last
        self.means: Complex = np.zeros((0, outputs), dtype=np.complex128)
        self.variances: Real = np.zeros(0)

    @property
    def count(self) -> int:
        """k, patterns kept."""
        return len(self._patterns)

    @property
    def regressors(self) -> Real:
        """Z of the patterns kept, shape (k, N + 1)."""
        z = np.ones((self.count, self._elements + 1))
        if self.count:
            packed = np.frombuffer(b"".join(self._patterns), dtype=np.uint8).reshape(self.count, -1)
            z[:, 1:] = panel.unpack(packed, self._elements)
        return z

    def update(self, patterns: NDArray[np.uint8], outputs: Complex) -> None:
        """Take in frames: patterns (B, bytes) and what was heard (B, D), in units of the noise."""
        keys = [pattern.tobytes() for pattern in patterns]
        # In the order in which they were sounded last.
        for key in dict.fromkeys(reversed(list(dict.fromkeys(reversed(keys))))):
            heard = outputs[[index for index, other in enumerate(keys) if other == key]]
            precision, total = float(heard.shape[0]), heard.sum(axis=0)
            if key in self._patterns:
                at = self._patterns.index(key)
                before = 1.0 / self.variances[at]
                precision, total = before + precision, before * self.means[at] + total
                self._keep([index for index in range(len(self._patterns)) if index != at])
            self._patterns.append(key)
            self.means = np.concatenate([self.means, (total / precision)[None, :]])
            self.variances = np.append(self.variances, 1.0 / precision)
            self._keep(list(range(max(len(self._patterns) - MOST, 0), len(self._patterns))))

    def forget(self, a: float, b: float, decay: float, prior: float) -> None:
        """Forget as `rls.forgetting` has it; the variance of a response before any data is `prior`."""
        self.variances = a * self.variances + b * prior
        self.means *= decay

    def rescale(self, outputs: Real, variance: float) -> None:
        """Change the unit of the noise: multiply the responses (by factors (D,)) and the variances."""
        self.means *= outputs
        self.variances *= variance

    def correct(self, coefficients: Complex, variances: Real) -> Complex:
        """Put the responses to an estimate.

        Parameters
        ----------
        coefficients : ndarray of complex, shape (N + 1, D)
            C.
        variances : ndarray, shape (N + 1,)
            Of its rows: the diagonal of P.
        """
        if not self._patterns:
            return coefficients
        z = self.regressors
        spread = z * variances
        weights = np.linalg.solve(spread @ z.T + np.diag(self.variances), self.means - z @ coefficients)
        return np.asarray(coefficients + spread.T @ weights)

    def snapshot(self) -> dict[str, Any]:
        """All state; `restore` goes on from it bit by bit."""
        return {
            "elements": self._elements,
            "patterns": list(self._patterns),
            "means": self.means.copy(),
            "variances": self.variances.copy(),
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any]) -> "References":
        """Rebuild from a snapshot."""
        means = np.array(snapshot["means"], dtype=np.complex128)
        references = cls(int(snapshot["elements"]), means.shape[1])
        references._patterns = [bytes(pattern) for pattern in snapshot["patterns"]]
        references.means = means
        references.variances = np.array(snapshot["variances"], dtype=np.float64)
        return references

    def _keep(self, indices: list[int]) -> None:
        self._patterns = [self._patterns[index] for index in indices]
        self.means, self.variances = self.means[indices], self.variances[indices]
