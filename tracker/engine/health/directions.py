"""The few directions over the delays of each receiver on which the responses of the elements lie."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]

# Directions kept at most, of all receivers together.
MOST = 8
# A direction counts when its power is this far above the largest that pure noise would show.
CLEAR = 1.4
# Outputs a receiver and elements an output from which on the weaker half of the directions shows the noise.
LEAST_OUTPUTS, LEAST_ELEMENTS = 4, 4
# Entries on the directions left out from which on the noise is measured on them.
LEAST_LEFT = 200


@dataclass(frozen=True, slots=True, eq=False)
class Directions:
    """Orthonormal directions, each over the delays of one receiver, the strongest first.

    Waves to different receivers leave the panel in different directions: together on one they would hide each other.

    Parameters
    ----------
    kept : ndarray of complex, shape (D, k)
        A response (D,) times this lies on them.
    shows_noise : bool
        Whether the directions left out are enough to measure the noise on them.
    """

    kept: Complex
    shows_noise: bool


def directions(responses: Complex, receivers: int, noise: float) -> Directions:
    """Find the directions that hold more than noise.

    Principal components; of pure noise of variance v the largest has power v (1 + √(Q/N))² (Marchenko & Pastur 1967,
    from memory).

    Parameters
    ----------
    responses : ndarray of complex, shape (N, D)
        With noise; D holds Q = D / R columns of each receiver in turn.
    receivers : int
        R.
    noise : float
        Variance of the noise in each entry, for panels too small to show it.
    """
    elements, outputs = responses.shape
    each = outputs // receivers
    by_receiver = responses.reshape(elements, receivers, each).transpose(1, 2, 0)
    values, vectors = np.linalg.eigh(by_receiver.conj() @ by_receiver.swapaxes(1, 2) / elements)
    floor = np.full(receivers, noise)
    if each >= LEAST_OUTPUTS and elements >= LEAST_ELEMENTS * each:
        floor = np.median(values[:, : -(-each // 2)], axis=1)
    clear = values / (CLEAR * floor[:, None] * (1.0 + np.sqrt(each / elements)) ** 2)
    strongest = np.argsort(-values, axis=None, kind="stable")[:MOST]
    count = max(int(np.count_nonzero(clear.flat[strongest] > 1.0)), 1)
    kept = np.zeros((outputs, count), dtype=np.complex128)
    for place, (receiver, column) in enumerate(zip(*np.divmod(strongest[:count], each), strict=True)):
        kept[receiver * each : (receiver + 1) * each, place] = vectors[receiver, :, column]
    left = outputs - count
    return Directions(kept, left >= LEAST_OUTPUTS - 1 and elements * left >= LEAST_LEFT)
