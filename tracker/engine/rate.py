"""What a pattern is worth: response, rate and the gradient of the rate."""

import numpy as np
from numpy.typing import NDArray

from .channel import Channel


def response(channel: Channel, states: NDArray[np.generic]) -> NDArray[np.complex128]:
    """Work out the response on every tone, in units of the noise amplitude.

    Parameters
    ----------
    channel : Channel
    states : ndarray, shape (N,)
        States +1 and −1 (the formula is linear and takes any real number).

    Returns
    -------
    ndarray of complex128, shape (R, K)
        H[r, k] = Σ_q basis[k, q] · (direct[r, q] + Σ_n s_n surface[n, r, q]).
    """
    # States are real: multiplying the real and imaginary parts as neighbours halves the work.
    flat = np.ascontiguousarray(channel.surface).reshape(channel.elements, channel.direct.size).view(np.float64)
    reflected = (np.asarray(states, dtype=np.float64) @ flat).view(np.complex128)
    return np.asarray((channel.direct + reflected.reshape(channel.direct.shape)) @ channel.basis.T)


def rate(channel: Channel, states: NDArray[np.generic]) -> float:
    """Work out the rate of a pattern, bit/s/Hz.

    Parameters
    ----------
    channel : Channel
    states : ndarray, shape (N,)
        States +1 and −1.

    Returns
    -------
    float
        Mean over receivers and tones of log2(1 + |H|²), Shannon's capacity of each tone.
    """
    heard = response(channel, states)
    return float(np.log2(1.0 + heard.real**2 + heard.imag**2).mean())


def gradient(channel: Channel, states: NDArray[np.generic]) -> NDArray[np.float64]:
    """Work out how the rate changes with each state, were states real numbers.

    Parameters
    ----------
    channel : Channel
    states : ndarray, shape (N,)

    Returns
    -------
    ndarray of float64, shape (N,)
        ∂rate/∂s_n = 2/(RK ln 2) · Re Σ_rk conj(H[r, k]) (basis · surface[n])[r, k] / (1 + |H[r, k]|²). It is worked
        out in the delay domain, in O(RKQ + NRQ).
    """
    heard = response(channel, states)
    weighted = heard / (1.0 + heard.real**2 + heard.imag**2)
    delays = np.ascontiguousarray(weighted @ channel.basis.conj()).reshape(-1)
    flat = np.ascontiguousarray(channel.surface).reshape(channel.elements, channel.direct.size)
    # Re(v · conj(g)) of two complex vectors is the real inner product of their parts.
    inner = flat.view(np.float64) @ delays.view(np.float64)
    return np.asarray(inner * (2.0 / (np.log(2.0) * heard.size)))
