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


def promise(channel: Channel, states: NDArray[np.generic]) -> float:
    """Bound what flips could gain, each for itself, added up; bit/s/Hz.

    From ln(1 + x) ≤ x, flipping element n gains at most 4 (slope_n + Σ w |v_n|²) / (RK ln 2) with w = 1 / (1 + |H|²)
    and slope_n = −s_n Re Σ w conj(H) v_n. Flips together may gain more or less than their sum, but where the sum of
    those that may gain is small, the pattern is as good as it gets nearby, and a search would find next to nothing.

    Parameters
    ----------
    channel : Channel
    states : ndarray, shape (N,)
        States +1 and −1.
    """
    heard = response(channel, states)
    weight = 1.0 / (1.0 + heard.real**2 + heard.imag**2)
    elements, receivers, size = channel.surface.shape
    delays = np.ascontiguousarray((weight * heard) @ channel.basis.conj()).reshape(-1)
    flat = np.ascontiguousarray(channel.surface).reshape(elements, receivers * size)
    gain = -np.asarray(states, dtype=np.float64) * (flat.view(np.float64) @ delays.view(np.float64))
    for receiver in range(receivers):
        # Σ_k w_k |v_nk|² in the delay domain: v G vᴴ with G = Bᵀ diag(w) B*.
        metric = (channel.basis.T * weight[receiver]) @ channel.basis.conj()
        part = np.ascontiguousarray(channel.surface[:, receiver])
        product = part @ metric
        gain += np.einsum("np,np->n", product.view(np.float64), part.view(np.float64))
    return float(np.maximum(gain, 0.0).sum() * (4.0 / (np.log(2.0) * heard.size)))
