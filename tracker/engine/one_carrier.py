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

BLOCK = 1 << 14
"""Responses worked off at once in `rate_bound`: small enough to stay in the cache."""


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
    real, imag = elements.real[None].copy(), elements.imag[None].copy()
    # At corner j the elements first to j-th in the order have turned against the upper half plane.
    states = np.copysign(1.0, imag[0])
    order = _walk(real, imag)[0]
    corner = int(np.argmax(_power(complex(direct), real, imag)))
    states[order[: corner + 1]] *= -1.0
    reflected = complex(states @ elements)
    # The corner opposite is the whole pattern negated.
    turn = -1.0 if abs(direct - reflected) > abs(direct + reflected) else 1.0
    return (turn * states).astype(np.int8), abs(direct + turn * reflected) ** 2


def rate_bound(channel: Channel) -> float:
    """Work out a rate that no pattern exceeds, bit/s/Hz.

    Every tone at every receiver is given the best pattern for itself alone, found exactly; one pattern for all
    cannot do better. The bound is met when there is a single tone and receiver.

    Parameters
    ----------
    channel : Channel

    Returns
    -------
    float
        Mean over receivers and tones of log2(1 + max_s |H|²).
    """
    count, tones = channel.elements, channel.tones
    if count == 0:
        return rate(channel, np.empty(0))
    direct = channel.direct @ channel.basis.T
    power = np.empty(direct.shape)
    block = max(1, BLOCK // count)
    for receiver in range(channel.receivers):
        # Re and Im of basis · surface from real products: [Re B, −Im B] [Re v; Im v] and [Im B, Re B] [Re v; Im v].
        delays = channel.surface[:, receiver]
        parts = np.concatenate([delays.real, delays.imag], axis=1).T
        for first in range(0, tones, block):
            some = slice(first, first + block)
            basis = channel.basis[some]
            real = np.concatenate([basis.real, -basis.imag], axis=1) @ parts
            imag = np.concatenate([basis.imag, basis.real], axis=1) @ parts
            _walk(real, imag)
            np.max(_power(direct[receiver, some, None], real, imag), axis=1, out=power[receiver, some])
    # The sums above round; the slack keeps the bound above the rate of the pattern that meets it.
    slack = 1.0 + 8.0 * (count + 1) * np.finfo(np.float64).eps
    return float(np.log2(1.0 + slack * power).mean())


def _walk(real: NDArray[np.float64], imag: NDArray[np.float64]) -> NDArray[np.intp]:
    """Walk half round the zonogon of each row of elements, shape (T, N).

    Replaces the elements by the N corners, in place, and returns the order in which the elements change sign. The
    other N corners are these negated.
    """
    # Turn every element into the upper half plane. There the cotangent falls as the angle grows and costs only a
    # division. An element on the real axis gives ±∞ and zero gives NaN; both are sorted where they belong.
    real *= np.copysign(1.0, imag)
    np.abs(imag, out=imag)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        order = np.argsort(real / imag, axis=1)
    place = order + np.arange(len(real))[:, None] * real.shape[1]
    for part in (real, imag):
        total = part.sum(axis=1, keepdims=True)
        # corner j = Σ h − 2 (h_1 + … + h_j)
        np.cumsum(part.reshape(-1).take(place), axis=1, out=part)
        np.multiply(part, -2.0, out=part)
        np.add(part, total, out=part)
    return order


def _power(
    direct: complex | NDArray[np.complex128], real: NDArray[np.float64], imag: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Give the larger of |d + x|² and |d − x|² at each corner: |d|² + |x|² + 2 |Re(conj(d) x)|."""
    d = np.asarray(direct)
    power = d.real * real
    power += d.imag * imag
    np.abs(power, out=power)
    power *= 2.0
    power += real * real
    power += imag * imag
    power += d.real**2 + d.imag**2
    return power
