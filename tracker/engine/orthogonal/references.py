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

from .. import panel
from .responses import product

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
        self._z: Real | None = None  # of them, while they stay the same
        self.means: Complex = np.zeros((0, outputs), dtype=np.complex128)
        self.variances: Real = np.zeros(0)

    @property
    def count(self) -> int:
        """k, patterns kept."""
        return len(self._patterns)

    @property
    def regressors(self) -> Real:
        """Z of the patterns kept, shape (k, N + 1)."""
        if self._z is None:
            self._z = np.ones((self.count, self._elements + 1))
            if self.count:
                packed = np.frombuffer(b"".join(self._patterns), dtype=np.uint8).reshape(self.count, -1)
                self._z[:, 1:] = panel.unpack(packed, self._elements)
        return self._z

    def regressor(self, pattern: bytes) -> Real:
        """Regressor z of a packed pattern, shape (N + 1,)."""
        if pattern in self._patterns:
            return np.asarray(self.regressors[self._patterns.index(pattern)])
        z = np.ones(self._elements + 1)
        z[1:] = panel.unpack(np.frombuffer(pattern, dtype=np.uint8), self._elements)
        return z

    def gain(self, regressors: Real, direct: float, element: float) -> tuple[Real, Real]:
        """Say what the responses kept tell of those under other patterns.

        Parameters
        ----------
        regressors : ndarray, shape (b, N + 1)
        direct, element : float
            Variances of the direct path and of the elements: the diagonal of P.

        Returns
        -------
        gain : ndarray, shape (b, k)
            By which what is heard under the patterns kept, less what was expected, goes into the others.
        known : ndarray, shape (b,)
            Variance that is taken away.
        """
        variances = np.full(self._elements + 1, element)
        variances[0] = direct
        across = (regressors * variances) @ self.regressors.T
        gain = across @ self._precision(variances)
        return gain, np.asarray((gain * across).sum(axis=1))

    def take(self, pattern: bytes, outputs: Complex) -> None:
        """Take in frames of a packed pattern: what was heard (k, D), in units of the noise."""
        precision, total = float(outputs.shape[0]), outputs.sum(axis=0)
        if pattern in self._patterns:
            at = self._patterns.index(pattern)
            before = 1.0 / float(self.variances[at])
            precision, total = before + precision, before * self.means[at] + total
        if not self._patterns or self._patterns[-1] != pattern:
            others = [index for index, other in enumerate(self._patterns) if other != pattern]
            self._keep(others[-(MOST - 1) :])
            self._patterns.append(pattern)
            self.means = np.concatenate([self.means, np.zeros((1, total.shape[0]))])
            self.variances = np.append(self.variances, 1.0)
        self.means[-1], self.variances[-1] = total / precision, 1.0 / precision

    def forget(self, a: float, b: float, decay: float, prior: float) -> None:
        """Forget as `rls.forgetting` has it; the variance of a response before any data is `prior`."""
        self.variances = a * self.variances + b * prior
        self.means *= decay

    def scale(self, before: Complex, direct: NDArray[Any], surface: NDArray[Any]) -> None:
        """Multiply what the direct path, `before` (D,), adds to the responses by a factor, and the rest by another."""
        self.means = (self.means - before) * surface + before * direct

    def doubt(self, variance: float) -> None:
        """Add to the variance of all: what they have in common may have changed."""
        self.variances = self.variances + variance

    def clear(self) -> None:
        """Drop all."""
        self._keep([])

    def rescale(self, outputs: Real, variance: float) -> None:
        """Change the unit of the noise: multiply the responses (by factors (D,)) and the variances."""
        self.means *= outputs
        self.variances *= variance

    def correct(self, coefficients: Complex, direct: float, element: float) -> Complex:
        """Put the responses to an estimate.

        Parameters
        ----------
        coefficients : ndarray of complex, shape (N + 1, D)
            C.
        direct, element : float
            Variances of the direct path and of the elements: the diagonal of P.
        """
        variances = np.full(self._elements + 1, element)
        variances[0] = direct
        z = self.regressors
        gain = (z * variances).T @ self._precision(variances)
        return np.asarray(coefficients + product(gain, self.means - product(z, coefficients)))

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

    def _precision(self, variances: Real) -> Real:
        """Inverse of Z P Zᴴ + diag ϱ, shape (k, k)."""
        covariance = (self.regressors * variances) @ self.regressors.T
        covariance.ravel()[:: self.count + 1] += self.variances
        return np.asarray(np.linalg.inv(covariance))

    def _keep(self, indices: list[int]) -> None:
        self._z = None
        self._patterns = [self._patterns[index] for index in indices]
        self.means, self.variances = self.means[indices], self.variances[indices]
