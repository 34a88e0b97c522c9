"""One carrier: the exact optimum over all 2^N patterns, by sorting angles.

The reachable sums Σ s_n h_n, s_n ∈ {−1, +1}, fill a set whose convex hull is a zonogon: a polygon with 2N corners,
and |d + x| is largest at a corner. Walking round it, one element changes sign at a time, in the order of the angles
of the h_n. So sorting N angles and adding up once finds the largest of 2N candidates among 2^N patterns. Zhang,
Shen et al., arXiv 2112.02260, find optimal one-bit patterns in this way; sweeping an angle φ and setting
s_n = sign Re(h_n e^{−jφ}) is the same walk.
"""

import numpy as np
from numpy.typing import NDArray

from .channel import Channel
from .rate import rate

Real = NDArray[np.float64]

BLOCK = 1 << 14
"""Responses worked off at once in `rate_bound`: few enough to stay in the cache."""


def one_carrier_optimum(direct: complex, elements: NDArray[np.complex128]) -> tuple[NDArray[np.int8], float]:
    """Find the pattern with the largest power |d + Σ s_n h_n|² on one carrier.

    Parameters
    ----------
    direct : complex
        d, what arrives whatever the pattern.
    elements : ndarray of complex128, shape (N,)
        h_n, what each element adds in state +1.

    Returns
    -------
    states : ndarray of int8, shape (N,)
        A best pattern.
    power : float
        Its power.
    """
    elements = np.asarray(elements, dtype=np.complex128)
    if elements.size == 0:
        return np.empty(0, dtype=np.int8), abs(direct) ** 2
    # States that turn every element into the upper half plane; at corner j the first j in order have turned back.
    states = np.copysign(1.0, elements.imag)
    upper = states * elements
    order = np.argsort(_angle_key(upper.real, np.abs(upper.imag)))
    corners = np.cumsum(upper[order]) - 0.5 * upper.sum()
    corner = int(np.argmax(np.abs(corners) ** 2 + np.abs((np.conj(direct) * corners).real)))
    states[order[: corner + 1]] *= -1.0
    reflected = complex(states @ elements)
    # The corner opposite is the whole pattern negated.
    turn = -1.0 if abs(direct - reflected) > abs(direct + reflected) else 1.0
    return (turn * states).astype(np.int8), abs(direct + turn * reflected) ** 2


def rate_bound(channel: Channel) -> float:
    """Work out a rate that no pattern exceeds, bit/s/Hz.

    Every tone at every receiver is given the best pattern for itself alone, found as on one carrier; one pattern for
    all cannot do better. The bound is met when there is a single tone and receiver.

    Parameters
    ----------
    channel : Channel

    Returns
    -------
    float
        Mean over receivers and tones of log2(1 + max_s |H|²), at most 10⁻¹⁰ of the power above it.
    """
    count, tones = channel.elements, channel.tones
    if count == 0:
        return rate(channel, np.empty(0))
    direct = channel.direct @ channel.basis.T
    power = np.empty(direct.shape)
    block = max(1, BLOCK // count)
    for receiver in range(channel.receivers):
        delays = channel.surface[:, receiver]
        parts = np.concatenate([delays.real, delays.imag], axis=1).T
        # Turning each tone so that its direct path is real changes no power and saves work.
        turned = np.exp(-1j * np.angle(direct[receiver]))[:, None] * channel.basis
        for first in range(0, tones, block):
            some = slice(first, first + block)
            basis = turned[some]
            # Re and Im of basis · surface from real products.
            real = np.concatenate([basis.real, -basis.imag], axis=1) @ parts
            imag = np.concatenate([basis.imag, basis.real], axis=1) @ parts
            power[receiver, some] = _largest_power(np.abs(direct[receiver, some]), real, imag)
    # Covers the rounding of the sums and of the sorted angles.
    return float(np.log2(1.0 + (1.0 + 1e-10) * power).mean())


def _angle_key(real: Real, imag: Real) -> Real:
    """Give a number in [−1, 1] that falls as the angle of a point in the upper half plane grows; 0 for zero."""
    size = np.abs(real)
    size += imag
    size += np.finfo(np.float64).tiny
    return np.asarray(np.divide(real, size, out=size))


def _largest_power(direct: Real, real: Real, imag: Real) -> Real:
    """Give the largest power on each of T carriers.

    Parameters
    ----------
    direct : ndarray of float64, shape (T,)
        The direct path, turned so that it is real.
    real, imag : ndarray of float64, shape (T, N)
        The elements; overwritten.

    Notes
    -----
    Sorts numbers rather than indices, which is twice as fast: the index of an element takes the place of the last bits
    of its key. Angles that agree in the 38 bits left or more may swap places; that costs the power 10⁻¹¹ of itself.
    """
    real *= np.copysign(1.0, imag)
    np.abs(imag, out=imag)
    count = real.shape[1]
    last = np.int64((1 << (count - 1).bit_length()) - 1)
    keys = _angle_key(real, imag)
    order = keys.view(np.int64)
    order &= ~last
    order |= np.arange(count)
    keys.sort(axis=1)
    order &= last
    order += np.arange(len(real))[:, None] * count
    # x = Σ h − 2 (h_1 + … + h_j), and half of −x costs less: add up from −Σ h / 2.
    for part in (real, imag):
        half = -0.5 * part.sum(axis=1)
        walk = part.reshape(-1).take(order)
        walk[:, 0] += half
        np.cumsum(walk, axis=1, out=part)
    # |d ± x|² at its larger, with d real: (d + 2 |Re x/2|)² + (2 Im x/2)²
    np.abs(real, out=real)
    real += 0.5 * direct[:, None]
    real *= real
    imag *= imag
    real += imag
    return np.asarray(4.0 * real.max(axis=1))
