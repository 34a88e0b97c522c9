"""One carrier: the exact optimum over all 2^N patterns, by sorting angles.

The reachable sums Σ s_n h_n, s_n ∈ {−1, +1}, fill a set whose convex hull is a zonogon: a polygon with 2N corners,
and |d + x| is largest at a corner. Walking round it, one element changes sign at a time, in the order of the angles
of the h_n. So sorting N angles and adding up once finds the largest of 2N candidates among 2^N patterns. Zhang,
Shen et al., arXiv 2112.02260, find optimal one-bit patterns in this way; sweeping an angle φ and setting
s_n = sign Re(h_n e^{−jφ}) is the same walk.
"""

from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .channel import Channel
from .rate import rate

Real = NDArray[np.floating[Any]]
Single = NDArray[np.float32]

BLOCK, LEAST_TONES = 1 << 13, 16
"""Responses worked off at once in `rate_bound`, few enough to stay in the cache; and tones at least."""
TONE_BY_TONE = 1 << 14
"""Responses of all elements on all tones up to which `rate_bound` looks at every tone; beyond, at groups of tones."""
NEGLIGIBLE = 1e-3
"""Share of the strongest power of a group below which a direction is bounded coarsely."""


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

    Where that would take too long, tones are taken together by groups in which a response hardly changes. With the
    singular value decomposition of the rows of the delay basis, U diag(σ) W, the power of a group of c tones is
    Σ_i σ_i² |(W x)_i|² for delays x, so it is at most the sum of what each of these few directions reaches alone, and
    the rate of the group at most c log2(1 + power / c), for the logarithm is concave.

    Parameters
    ----------
    channel : Channel

    Returns
    -------
    float
        Mean over receivers and tones of log2(1 + max_s |H|²), above it by no more than what single precision may have
        lost: 10⁻⁵ of the power and 1.2 · 10⁻⁷ for each element; with groups some hundredths of a bit away.
    """
    count, tones = channel.elements, channel.tones
    if count == 0:
        return rate(channel, np.empty(0))
    if count * tones * channel.receivers <= TONE_BY_TONE:
        rows, group, sizes = channel.basis, np.arange(tones), np.ones(tones)
    else:
        rows, group, sizes = _groups(channel.basis.tobytes(), channel.delays, max(1, tones // channel.delays))
    directs, bits = channel.direct @ rows.T, 0.0
    # Single precision takes half the time; the unit keeps any channel within its range.
    unit = float(max(np.abs(channel.surface).max(), np.abs(channel.direct).max())) or 1.0
    for receiver in range(channel.receivers):
        direct, delays = directs[receiver] / unit, channel.surface[:, receiver] / unit
        power = _coarsely(direct, delays, rows)
        strongest = np.zeros(len(sizes))
        np.maximum.at(strongest, group, power)
        counts = power >= NEGLIGIBLE * strongest[group]
        power[counts] = _closely(direct[counts], delays, rows[counts])
        bits += float(sizes @ np.log2(1.0 + unit * unit * np.bincount(group, weights=power) / sizes))
    return bits / (tones * channel.receivers)


@lru_cache(maxsize=4)
def _groups(
    basis: bytes, delays: int, together: int
) -> tuple[NDArray[np.complex128], NDArray[np.intp], NDArray[np.float64]]:
    """Find directions over the delays whose powers add up to those of groups of neighbouring tones.

    Parameters
    ----------
    basis : bytes
        Delay basis, shape (K, Q), which stays as it is for a link: worked out once.
    delays : int
        Q.
    together : int
        Tones of a group at most.

    Returns
    -------
    rows : ndarray of complex, shape (P, Q)
    group : ndarray of intp, shape (P,)
        To which group a row belongs.
    sizes : ndarray, shape (G,)
        Tones of each group.
    """
    tones = np.frombuffer(basis, dtype=np.complex128).reshape(-1, delays)
    parts = np.array_split(tones, -(-len(tones) // together))
    rows = []
    for part in parts:
        _, strength, directions = np.linalg.svd(part, full_matrices=False)
        rows.append(strength[:, None] * directions)
    group = np.repeat(np.arange(len(parts)), [len(row) for row in rows])
    return np.concatenate(rows), group, np.array([float(len(part)) for part in parts])


def _coarsely(
    direct: NDArray[np.complex128], delays: NDArray[np.complex128], rows: NDArray[np.complex128]
) -> NDArray[np.float64]:
    """Bound the power on each row, shape (P,), by |d| + Σ |h_n| ≤ |d| + √(N Σ |h_n|²)."""
    moment = delays.T @ delays.conj()
    energy = np.maximum(((rows @ moment) * rows.conj()).sum(axis=1).real, 0.0)
    return np.asarray((np.abs(direct) + np.sqrt(len(delays) * energy)) ** 2)


def _closely(
    direct: NDArray[np.complex128], delays: NDArray[np.complex128], rows: NDArray[np.complex128]
) -> NDArray[np.float64]:
    """Work out the largest power that a pattern reaches on each row, shape (P,), or a little more."""
    count = len(delays)
    elements = delays.T.astype(np.complex64)
    amplitude = np.abs(direct).astype(np.float32)
    # Turning each row so that its direct path is real changes no power and saves work.
    turned = (np.exp(-1j * np.angle(direct))[:, None] * rows).astype(np.complex64)
    power = np.empty(len(rows))
    block = max(LEAST_TONES, BLOCK // count)
    for first in range(0, len(rows), block):
        some = slice(first, first + block)
        power[some] = _largest_power(amplitude[some], turned[some] @ elements)
    # Covers the rounding of the sums, which grows with their length, and of the sorted angles.
    return power * (1.0 + 1e-5 + count * float(np.finfo(np.float32).eps))


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
