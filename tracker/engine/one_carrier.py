"""One carrier: the exact optimum over all 2^N patterns, by sorting angles.

The reachable sums Σ s_n h_n, s_n ∈ {−1, +1}, fill a set whose convex hull is a zonogon: a polygon with 2N corners,
and |d + x| is largest at a corner. Walking round it, one element changes sign at a time, in the order of the angles
of the h_n. So sorting N angles and adding up once finds the largest of 2N candidates among 2^N patterns. Zhang,
Shen et al., arXiv 2112.02260, find optimal one-bit patterns in this way; sweeping an angle φ and setting
s_n = sign Re(h_n e^{−jφ}) is the same walk.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from .channel import Channel
from .rate import rate

Real = NDArray[np.floating[Any]]
Single = NDArray[np.float32]

BLOCK, LEAST_TONES = 1 << 13, 16
"""Responses worked off at once in `rate_bound`, few enough to stay in the cache; and tones at least."""


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
        Mean over receivers and tones of log2(1 + max_s |H|²), above it by no more than what single precision may have
        lost: 10⁻⁵ of the power and 1.2 · 10⁻⁷ for each element.
    """
    count, tones = channel.elements, channel.tones
    if count == 0:
        return rate(channel, np.empty(0))
    direct = channel.direct @ channel.basis.T
    power = np.empty(direct.shape)
    block = max(LEAST_TONES, BLOCK // count)
    # Single precision takes half the time; the unit keeps any channel within its range.
    unit = float(max(np.abs(channel.surface).max(), np.abs(direct).max())) or 1.0
    for receiver in range(channel.receivers):
        delays = (channel.surface[:, receiver] / unit).T.astype(np.complex64)
        amplitude = np.abs(direct[receiver]) / unit
        # Turning each tone so that its direct path is real changes no power and saves work.
        turned = (np.exp(-1j * np.angle(direct[receiver]))[:, None] * channel.basis).astype(np.complex64)
        for first in range(0, tones, block):
            some = slice(first, first + block)
            power[receiver, some] = _largest_power(amplitude[some].astype(np.float32), turned[some] @ delays)
    # Covers the rounding of the sums, which grows with their length, and of the sorted angles.
    power *= unit * unit * (1.0 + 1e-5 + count * float(np.finfo(np.float32).eps))
    return float(np.log2(1.0 + power).mean())


def _angle_key(real: Real, imag: Real) -> Real:
    """Give a number in [−1, 1] that falls as the angle of a point in the upper half plane grows; 0 for zero."""
    size = np.abs(real)
    size += imag
    size += np.finfo(np.float32).tiny
    return np.asarray(np.divide(real, size, out=size))


def _largest_power(direct: Single, elements: NDArray[np.complex64]) -> Single:
    """Give the largest power on each of T carriers.

    Parameters
    ----------
    direct : ndarray of float32, shape (T,)
        The direct path, turned so that it is real.
    elements : ndarray of complex64, shape (T, N)
        Overwritten.

    Notes
    -----
    Sorts numbers rather than indices, which is twice as fast: the index of an element takes the place of the last bits
    of its key. Elements whose angles agree in the bits left may swap places. At the best corner these lie across the
    sum, so that each costs no more than its length times the angle by which it is out of order.
    """
    count = elements.shape[1]
    elements *= np.copysign(np.float32(1.0), elements.imag)
    last = np.int32((1 << (count - 1).bit_length()) - 1)
    keys = _angle_key(elements.real, elements.imag)
    order = keys.view(np.int32)
    order &= ~last
    order |= np.arange(count, dtype=np.int32)
    keys.sort(axis=1)
    order &= last
    order += np.arange(len(elements), dtype=np.int32)[:, None] * np.int32(count)
    # x = Σ h − 2 (h_1 + … + h_j), and half of −x costs less: add up from −Σ h / 2.
    walk = elements.reshape(-1).take(order)
    walk[:, 0] -= 0.5 * elements.sum(axis=1)
    np.cumsum(walk, axis=1, out=walk)
    # |d ± x|² at its larger, with d real: (d + 2 |Re x/2|)² + (2 Im x/2)²
    across, along = walk.imag, np.abs(walk.real)
    along += 0.5 * direct[:, None]
    along *= along
    along += across * across
    return np.asarray(4.0 * along.max(axis=1))
