"""What rate to expect under a pattern whose response is known only so well, and how far it may be off.

The response that an estimate predicts is the mean of what it may be. The rate of that mean is not the mean of the
rate: what is not known of the response adds to its power, and the rate bends down as power grows. Let H = Ĥ + e with e
Gaussian, of variance v on a tone. Then |H|² has the mean m = |Ĥ|² + v and the variance u = v (2 |Ĥ|² + v), and to
second order

    E ln(1 + |H|²) = ln(1 + m) − u / (2 (1 + m)²).

While little is known this is a third more than ln(1 + |Ĥ|²). The rate varies with Re(conj(Ĥ) e) and with |e|², which
do not correlate: their variances add.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..estimation.shrinkage import Doubt
from ..search.channel import Channel
from ..search.rate import response

# What the mean is above the rate of the estimate itself rests on variances that are estimates too: it may be off by
# this share.
RAISE_DOUBT = 1.0 / 3.0


@dataclass(frozen=True, slots=True)
class Expectation:
    """What to expect of the rate under a pattern, bit/s/Hz.

    Parameters
    ----------
    rate, spread : float
        Mean and standard deviation.
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
    reflected = (states.astype(np.float64) @ flat).view(np.complex128) @ doubt.raised
    heard = (channel.direct + reflected.reshape(receivers, size)) @ basis.T
    power = heard.real**2 + heard.imag**2
    blocks = doubt.covariance.reshape(receivers, size, receivers, size)
    unsure = np.stack([((basis.conj() @ blocks[one, :, one]) * basis).sum(axis=1).real for one in range(receivers)])
    one_plus = 1.0 + power + unsure
    nats = np.log(one_plus) - 0.5 * unsure * (2.0 * power + unsure) / (one_plus * one_plus)
    # d ln(1 + |H|²) = 2 Re(conj(Ĥ) e) / (1 + m), and a complex error of variance v has v / 2 in each real dimension.
    slope = ((heard.conj() / one_plus) @ basis).reshape(-1)
    linear = 2.0 * float((slope.conj() @ doubt.covariance @ slope).real)
    metric = np.stack([(basis.T / one_plus[one]) @ basis.conj() for one in range(receivers)])
    weighed = (metric @ blocks.reshape(receivers, size, -1)).reshape(receivers * size, -1)
    squares = float(np.einsum("ij,ji->", weighed, weighed).real)
    rate = float(nats.sum())
    plain = float(np.log1p(np.abs(response(channel, states)) ** 2).sum())
    spread = math.sqrt(max(linear + squares, 0.0) + (RAISE_DOUBT * (rate - plain)) ** 2)
    noise = math.sqrt(2.0 * float((np.abs(slope) ** 2).sum()))
    scale = 1.0 / (math.log(2.0) * heard.size)
    return Expectation(rate * scale, spread * scale, noise * scale)
