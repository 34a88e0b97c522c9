"""Delay basis: the few directions over the tones in which a channel of bounded length can move.

A path of delay τ gives exp(−2πi f_k τ) on tone k. All delays the channel may have, sampled finer than the taps
(a real path does not sit on one), span a space whose singular values fall off a cliff: the left singular vectors
before the cliff are the basis B, orthonormal by construction and well conditioned with guard bands too. What
remains of the K tones holds noise alone.
"""

import numpy as np
from numpy.typing import NDArray

# Delays tried per tap: with 4, paths between the taps leave less than −43 dB outside the basis.
DELAYS_A_TAP = 4
# Directions weaker than this, relative to the strongest, hold less than −40 dB of any path and only add noise.
WEAKEST_DIRECTION = 1e-2


def frequencies(fft: int, first: int, count: int, spacing_khz: float) -> NDArray[np.float64]:
    """Frequencies of the pilot tones relative to the carrier.

    Returns
    -------
    ndarray, shape (K,)
        Hz.
    """
    return np.asarray((np.arange(first, first + count) - fft // 2) * (spacing_khz * 1e3), dtype=np.float64)


def delay_basis(fft: int, first: int, count: int, taps: int, before: int) -> NDArray[np.complex128]:
    """Orthonormal basis over the tones of channels that last `taps` samples.

    Parameters
    ----------
    fft : int
        Length of the OFDM transform; fft // 2 is the carrier.
    first, count : int
        The pilot tones: `count` neighbours from index `first`.
    taps : int
        Length of the channel in samples of 1 / (fft · spacing).
    before : int
        Samples allowed ahead of time zero.

    Returns
    -------
    ndarray, shape (K, Q)
        B; the response of a channel on the tones is B c, its coefficients are c = Bᴴ h.
    """
    tone = (np.arange(first, first + count) - fft // 2) / fft
    delay = np.arange((taps - 1) * DELAYS_A_TAP + 1) / DELAYS_A_TAP - before
    left, values, _ = np.linalg.svd(np.exp(-2j * np.pi * np.outer(tone, delay)), full_matrices=False)
    size = int(np.count_nonzero(values > WEAKEST_DIRECTION * values[0]))
    return np.ascontiguousarray(left[:, :size])
