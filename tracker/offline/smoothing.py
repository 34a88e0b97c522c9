"""Kalman filter and smoother of a few coefficients over stretches of frames: what they were, told from both sides.

The coefficients c of one output are first-order Gauss-Markov with prior variances Λ and time constant τ, as under
`resetting` forgetting: over Δt they keep a share a = exp(−Δt / τ) of themselves. The frames of a stretch see them as
y = Z c + unit noise. All outputs share Z, so one covariance serves them all::

    forward    c⁻ = a c,  P⁻ = a² P + (1 − a²) Λ;   S = I + Z P⁻ Zᴴ,  K = P⁻ Zᴴ S⁻¹
               c = c⁻ + K (y − Z c⁻),  P = P⁻ − K Z P⁻
    backward   J = a P (P⁻₊)⁻¹
               c ← c + J (c₊ − c⁻₊),  P ← P + J (P₊ − P⁻₊) Jᴴ

which is the fixed-interval smoother of Rauch, Tung & Striebel (AIAA Journal 3, 1965).
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_factor, cho_solve

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Seen:
    """A stretch of frames as the smoother takes it.

    Parameters
    ----------
    time_s : float
    regressors : ndarray of complex, shape (B, n)
        Z.
    outputs : ndarray of complex, shape (B, D)
        y.
    used : bool
        False when the frames are to be predicted from their neighbours, not to be learned from.
    """

    time_s: float
    regressors: Complex
    outputs: NDArray[np.complexfloating[Any, Any]]
    used: bool = True


@dataclass(slots=True, eq=False)
class Track:
    """Coefficients along the stretches.

    Parameters
    ----------
    means : list of ndarray of complex, shape (n, D)
    covariances : list of ndarray of complex, shape (n, n)
    error : float
        Mean squared error with which used frames were predicted from those before them.
    """

    means: list[Complex]
    covariances: list[Complex]
    error: float


def smooth(stretches: Sequence[Seen], variances: Real, time_constant_s: float, *, backward: bool = True) -> Track:
    """Filter, and smooth unless told not to.

    Parameters
    ----------
    stretches : sequence of Seen
        In the order of time.
    variances : ndarray, shape (n,)
        Λ.
    time_constant_s : float
        τ.
    backward : bool
        Whether the way back is gone too.
    """
    prior = np.diag(variances).astype(np.complex128)
    mean = np.zeros((variances.shape[0], stretches[0].outputs.shape[1]), dtype=np.complex128)
    covariance, before_s = prior, stretches[0].time_s
    ahead: list[tuple[float, Complex, Complex]] = []
    means, covariances = [], []
    squared, count = 0.0, 0
    for seen in stretches:
        kept = float(np.exp(-abs(seen.time_s - before_s) / time_constant_s))
        before_s = seen.time_s
        mean, covariance = kept * mean, kept * kept * covariance + (1.0 - kept * kept) * prior
        ahead.append((kept, mean, covariance))
        if seen.used:
            z = seen.regressors
            innovation = seen.outputs - z @ mean
            squared += float((innovation.real**2 + innovation.imag**2).sum())
            count += innovation.size
            cross = z @ covariance
            spread = np.eye(z.shape[0]) + cross @ z.conj().T
            gain = cho_solve(cho_factor(spread, lower=True), cross).conj().T
            mean = mean + gain @ innovation
            covariance = covariance - gain @ cross
            covariance = 0.5 * (covariance + covariance.conj().T)
        means.append(mean)
        covariances.append(covariance)
    if backward:
        for index in range(len(means) - 2, -1, -1):
            kept, predicted, spread = ahead[index + 1]
            back = kept * cho_solve(cho_factor(spread, lower=True), covariances[index]).conj().T
            means[index] = means[index] + back @ (means[index + 1] - predicted)
            covariances[index] = covariances[index] + back @ (covariances[index + 1] - spread) @ back.conj().T
    return Track(means, covariances, squared / max(count, 1))
