"""Shrinking the estimate along delays: directions that hold no more than noise are taken back.

The estimator grants every delay the same prior variance, but a channel of few paths fills few directions of the
delay space, the same few for all elements. The rows of the estimate V (one an element) show which: their second
moment is signal plus known estimation noise, and the posterior under the variance so found follows in closed form.
This is the empirical Bayes estimator of Efron & Morris (Biometrika 59, 1972) for the rows of a matrix.
"""

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
    the patterns in use show is known far better than that.

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
    factors = _factors(surface, posterior / prior, prior)
    return surface.copy() if factors is None else np.asarray(surface @ factors)


class Shrinkage:
    """Shrinks the estimates of a link block by block, and finds the directions anew only now and then."""

    def __init__(self) -> None:
        self.forget()

    def forget(self) -> None:
        """Find the directions anew: the estimate began anew."""
        self._factors: Complex | None = None
        self._rest = 0.0  # posterior over prior when they were found
        self._blocks = 0  # since then

    def count_block(self) -> None:
        """Say that the estimate has taken in a block."""
        self._blocks += 1

    def apply(self, surface: Complex, posterior: float, prior: float) -> Complex:
        """Do as `shrink` does, with directions that may be some blocks old."""
        rest = posterior / prior
        if self._factors is None or self._blocks >= BLOCKS or abs(rest - self._rest) > MOVED * self._rest:
            self._factors, self._rest, self._blocks = _factors(surface, rest, prior), rest, 0
        return surface.copy() if self._factors is None else np.asarray(surface @ self._factors)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        factors = self._factors.copy() if self._factors is not None else None
        return {"factors": factors, "rest": self._rest, "blocks": self._blocks}

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        factors = snapshot["factors"]
        self._factors = np.array(factors, dtype=np.complex128) if factors is not None else None
        self._rest, self._blocks = float(snapshot["rest"]), int(snapshot["blocks"])


def _factors(surface: Complex, rest: float, prior: float) -> Complex | None:
    """Matrix (D, D) by which rows are shrunk, given posterior over prior; None where too little has been learned."""
    if rest > HARDLY_LEARNED:
        return None
    learned = 1.0 - rest
    moment = (surface.conj().T @ surface) / surface.shape[0]
    values, vectors = np.linalg.eigh(moment)
    alpha = np.maximum(values / (learned * learned * prior) - rest / learned, EMPTIEST)
    factor = np.minimum(1.0 / (1.0 + rest * (1.0 / alpha - 1.0)), 1.0)
    return np.asarray((vectors * factor) @ vectors.conj().T)
