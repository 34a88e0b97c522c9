"""The exact channel as the optimizer takes it."""

import numpy as np
from numpy.typing import NDArray

from tracker.engine.search.channel import Channel

# Power left outside the basis, relative to the channel's: far below what a rate shows.
LEFT_OUT = 1e-10


def known_channel(
    direct: NDArray[np.complex128], surface: NDArray[np.complex128], noise_power: NDArray[np.float64]
) -> Channel:
    """Turn an exact channel into what the optimizer takes, in as few directions over the tones as hold its power.

    Parameters
    ----------
    direct : ndarray of complex128, shape (R, K)
    surface : ndarray of complex128, shape (N, R, K)
    noise_power : ndarray, shape (R,)
        Noise power on a tone.

    Returns
    -------
    Channel
    """
    amplitude = np.sqrt(noise_power)[:, None]
    tones = direct.shape[1]
    responses = np.concatenate([(surface / amplitude).reshape(-1, tones), (direct / amplitude)])
    powers, directions = np.linalg.eigh(responses.T @ responses.conj())
    powers, directions = np.maximum(powers[::-1], 0.0), directions[:, ::-1]
    left = np.append(np.cumsum(powers[::-1])[::-1], 0.0)
    count = max(1, int(np.argmax(left <= LEFT_OUT * left[0])))
    basis = np.ascontiguousarray(directions[:, :count])
    coefficients = np.ascontiguousarray(responses @ basis.conj())
    receivers = direct.shape[0]
    return Channel(basis, coefficients[-receivers:], coefficients[:-receivers].reshape(-1, receivers, count))
