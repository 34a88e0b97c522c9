"""What rate to expect under a pattern whose response is known only so well, and how far it may be off.

Least squares with a prior takes back part of what it has not heard enough of, and the pattern found on it promises
too little by as much: after the first quarter of a sweep a third of the rate. `Shrinkage.doubt` says how much of it is
to be put back, and what is left open then, as a covariance C of the errors e of the response H on the delays. To
second order ln(1 + |H + e|²) then varies with

    2 Re(conj(H) e) w + |e|² w,    w = 1 / (1 + |H|² + E|e|²),

two terms that do not correlate: their variances add.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..estimation.shrinkage import Doubt
from ..search.channel import Channel

# What is put back rests on variances that are estimates too: it may be off by this share.
RAISE_DOUBT = 1.0 / 3.0


@dataclass(frozen=True, slots=True)
class Expectation:
    """What to expect of the rate under a pattern, bit/s/Hz.

    Parameters
    ----------
    rate, spread : float
        The rate, and the standard deviation of the true one about it.
    frame_spread : float
        Standard deviation of a rate measured on one frame, about the true one.
    """

    rate: float
    spread: float
    frame_spread: float


def expectation(channel: Channel, states: NDArray[np.int8], doubt: Doubt) -> Expectation:
    """Work out what to expect of the rate under a pattern.

    Parameters
    ----------
    channel : Channel
    states : ndarray, shape (N,)
    doubt : Doubt
        What is left open of the response under the pattern, over the R Q delay coefficients, in units of the noise.
    """
    basis, receivers, size = channel.basis, channel.receivers, channel.delays
    flat = channel.surface.reshape(channel.elements, -1).view(np.float64)
    estimated = (states.astype(np.float64) @ flat).view(np.complex128)
    both = np.stack([estimated, estimated @ doubt.raised]).reshape(2, receivers, size)
    heard = (channel.direct + both) @ basis.T
    powers = heard.real**2 + heard.imag**2
    plain, rate = np.log1p(powers).sum(axis=(1, 2)).tolist()
    blocks = doubt.covariance.reshape(receivers, size, receivers, size)
    adjoint = basis.conj()
    unsure = np.stack([np.einsum("kq,kq->k", adjoint @ blocks[one, :, one], basis).real for one in range(receivers)])
    weight = 1.0 / (1.0 + powers[1] + unsure)
    # E|2 Re(z)|² = 2 E|z|² for z = Σ slope · e.
    slope = ((heard[1].conj() * weight) @ basis).reshape(-1)
    linear = 2.0 * float((slope.conj() @ doubt.covariance @ slope).real)
    # The variance of eᴴ G e is the trace of (G C)², G = Bᴴ diag(w) B, a block a receiver.
    metric = np.stack([(basis.T * weight[one]) @ adjoint for one in range(receivers)])
    product = (metric @ blocks.reshape(receivers, size, -1)).reshape(receivers * size, -1)
    squares = float((product * product.T).sum().real)
    spread = math.sqrt(max(linear + squares, 0.0) + (RAISE_DOUBT * (rate - plain)) ** 2)
    noise = math.sqrt(2.0 * float((slope.real**2 + slope.imag**2).sum()))
    scale = 1.0 / (math.log(2.0) * heard[1].size)
    return Expectation(rate * scale, spread * scale, noise * scale)
