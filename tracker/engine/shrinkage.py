"""Shrinking the estimate along delays: directions that hold no more than noise are taken back.

The estimator grants every delay the same prior variance, but a channel of few paths fills few directions of the
delay space, the same few for all elements. The rows of the estimate V (one an element) show which: their second
moment is signal plus known estimation noise, and the posterior under the variance so found follows in closed form.
This is the empirical Bayes estimator of Efron & Morris (Biometrika 59, 1972) for the rows of a matrix.
"""

import numpy as np
from numpy.typing import NDArray

# A direction is never taken to be emptier than this share of the prior: the spectrum is itself an estimate.
EMPTIEST = 1e-3


def shrink(surface: NDArray[np.complex128], posterior: float, prior: float) -> NDArray[np.complex128]:
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
    """
    rest = posterior / prior
    learned = 1.0 - rest
    if learned < 1e-3:
        return surface
    moment = (surface.conj().T @ surface) / surface.shape[0]
    values, vectors = np.linalg.eigh(moment)
    alpha = np.maximum(values / (learned * learned * prior) - rest / learned, EMPTIEST)
    factor = np.minimum(1.0 / (1.0 + rest * (1.0 / alpha - 1.0)), 1.0)
    return np.asarray(surface @ ((vectors * factor) @ vectors.conj().T))
