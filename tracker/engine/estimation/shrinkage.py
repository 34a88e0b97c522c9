"""Shrinking the estimate along delays: directions that hold no more than noise are taken back.

The estimator grants every delay the same prior variance, but a channel of few paths fills few directions of the
delay space, the same few for all elements. The rows of the estimate V (one an element) show which: their second
moment is signal plus known estimation noise, and the posterior under the variance so found follows in closed form.
This is the empirical Bayes estimator of Efron & Morris (Biometrika 59, 1972) for the rows of a matrix.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]

# A direction is never taken to be emptier than this share of the prior: the spectrum is itself an estimate.
EMPTIEST = 1e-3
# Posterior over prior from which next to nothing has been learned, and nothing shows which directions are in use.
HARDLY_LEARNED = 0.999
# Blocks for which the directions found are used again: paths keep their delays for far longer. A share of the prior
# that has moved by this much since then asks for them to be found anew.
BLOCKS, MOVED = 8, 0.05


def shrink(surface: Complex, posterior: float, prior: float) -> Complex:
    """Estimate under the variances that the rows themselves show.

    With posterior variance p under prior variance p₀, data alone would leave p_d = p p₀ / (p₀ − p), and the estimate
    is v̂ = (1 − p/p₀)(v + noise). Let a direction truly have variance α p₀: its mean |v̂|² is
    (1 − p/p₀)² (α p₀ + p_d), which gives α; its estimate under prior α p₀ is v̂ / (1 + (p/p₀)(1/α − 1)). A direction
    stronger than the prior would be raised by this; it is left as it is: p is a mean over all patterns, and what
    the patterns in use show is known far better than that. For one pattern see `Shrinkage.doubt`.

    Parameters
    ----------
    surface : ndarray of complex, shape (N, D)
        Estimated responses, a row an element.
    posterior, prior : float
        Mean variance of an entry after and before the data, in the same units.

    Returns
    -------
    ndarray of complex, shape (N, D)
        Never the array given.
    """
    found = _Directions.of(surface, posterior / prior, prior)
    return surface.copy() if found is None else np.asarray(surface @ found.factors)


@dataclass(frozen=True, slots=True, eq=False)
class Doubt:
    """What there is to say of the response under one pattern beyond its estimate.

    Parameters
    ----------
    raised : ndarray of complex, shape (D, D)
        By which the surface's part of the estimated response, a row, is to be multiplied for its mean.
    covariance : ndarray of complex, shape (D, D)
        E[conj(e) eᵀ] of the errors e that are left.
    """

    raised: Complex
    covariance: Complex


@dataclass(frozen=True, slots=True, eq=False)
class _Directions:
    """Directions of the delay space, by how much of the surface they hold.

    Parameters
    ----------
    vectors : ndarray of complex, shape (D, D)
        Orthonormal, in columns.
    factor : ndarray, shape (D,)
        By which the rows of the estimate are shrunk along each.
    strength : ndarray, shape (D,)
        Variance along each over that of the prior, no less than 1.
    factors : ndarray of complex, shape (D, D)
        The shrinking as a matrix.
    """

    vectors: Complex
    factor: NDArray[np.float64]
    strength: NDArray[np.float64]
    factors: Complex

    @classmethod
    def of(cls, surface: Complex, rest: float, prior: float) -> "_Directions | None":
        """Find them, given posterior over prior; None where too little has been learned."""
        if rest > HARDLY_LEARNED:
            return None
        learned = 1.0 - rest
        moment = (surface.conj().T @ surface) / surface.shape[0]
        values, vectors = np.linalg.eigh(moment)
        alpha = np.maximum(values / (learned * learned * prior) - rest / learned, EMPTIEST)
        factor = np.minimum(1.0 / (1.0 + rest * (1.0 / alpha - 1.0)), 1.0)
        # While only part of the directions over elements has been sounded, α above exaggerates what stands out by
        # 1 / learned; this errs to the side of the prior.
        strength = np.maximum(values / (learned * prior), 1.0)
        return cls(vectors, factor, strength, np.asarray((vectors * factor) @ vectors.conj().T))


class Shrinkage:
    """Shrinks the estimates of a link block by block, and finds the directions anew only now and then."""

    def __init__(self) -> None:
        self.forget()

    def forget(self) -> None:
        """Find the directions anew: the estimate began anew."""
        self._found: _Directions | None = None
        self._rest = 0.0  # posterior over prior when they were found
        self._blocks = 0  # since then
        self._sweeps = 0.0  # since the estimate began

    def count_block(self, sweeps: float) -> None:
        """Say that the estimate is to take in a block of so many sweeps, a sweep being a frame for each unknown."""
        self._blocks += 1
        self._sweeps += sweeps

    def apply(self, surface: Complex, posterior: float, prior: float) -> Complex:
        """Do as `shrink` does, with directions that may be some blocks old."""
        rest = posterior / prior
        if self._found is None or self._blocks >= BLOCKS or abs(rest - self._rest) > MOVED * self._rest:
            self._found, self._rest, self._blocks = _Directions.of(surface, rest, prior), rest, 0
        return surface.copy() if self._found is None else np.asarray(surface @ self._found.factors)

    def doubt(self, posterior: float, prior: float, size: int) -> Doubt:
        """Say what is left open of the response under a pattern, after `apply`.

        Along a direction of variance α p₀ the prior variance of the response under a pattern is α times what the
        estimator took it for. Its posterior mean and variance, those of one unknown heard in noise, become r times
        what they were, r = 1 / (1 + (p/p₀)(1/α − 1)), with p and p₀ those of this very pattern. For α ≤ 1 this has
        been done to the estimate already. An estimate that forgets does so in its variance alone: what the first
        sweep took back, later ones bring, however large p stays; so p counts for less with every sweep. And what has
        not been sounded at all leaves p large, but takes nothing back: p/p₀ is taken for no more than one sweep leaves
        of p₀.

        Parameters
        ----------
        posterior, prior : float
            Variance of a delay coefficient of the response under the pattern, and before any data.
        size : int
            D.
        """
        if self._found is None:
            unchanged = np.eye(size, dtype=np.complex128)
            return Doubt(unchanged, posterior * unchanged)
        found, sweeps = self._found, max(self._sweeps, 1.0)
        rest = min(posterior / prior, 1.0 / (1.0 + prior)) / sweeps
        raised = 1.0 / (1.0 + rest * (1.0 / found.strength - 1.0))
        adjoint = found.vectors.conj().T
        return Doubt(
            np.asarray((found.vectors * raised) @ adjoint),
            np.asarray((found.vectors * (posterior * found.factor * raised)) @ adjoint),
        )

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        found = self._found
        return {
            "found": [found.vectors, found.factor, found.strength, found.factors] if found is not None else None,
            "rest": self._rest,
            "blocks": self._blocks,
            "sweeps": self._sweeps,
        }

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        found = snapshot["found"]
        self._found = _Directions(*(np.array(each) for each in found)) if found is not None else None
        self._rest, self._blocks = float(snapshot["rest"]), int(snapshot["blocks"])
        self._sweeps = float(snapshot["sweeps"])
