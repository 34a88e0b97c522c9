"""How strong the paths may be: variances before any data, from the first frames heard.

Over frames of differing patterns the mean response is the direct path's, and what varies beyond the noise is the
surface's. One variance serves all delays, because one covariance does; each delay counts by the energy that it
holds, so that empty delays do not make the prior too tight for the delays that matter.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

# Where the patterns hardly differ, nothing of the surface shows; it is then granted this share of all that is heard.
UNSEEN_SHARE = 0.2
# Mean variance of the regressors below which the patterns hardly differ.
LEAST_VARIETY = 0.1
# A variance of this many noise units in all is granted at least, or a weak start would never be unlearned.
LEAST_POWER = 0.1


def prior_variances(
    regressors: NDArray[Any], outputs: NDArray[np.complex128], weights: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Prior variances of [direct, r surface coefficients], in units of the noise.

    Parameters
    ----------
    regressors : ndarray, shape (B, r + 1)
        z of each frame; patterns excite all surface coefficients alike.
    outputs : ndarray of complex, shape (B, D)
        Frames on the delay basis, divided by the noise amplitude.
    weights : ndarray, shape (r,)
        Variances of the surface coefficients relative to their mean.

    Returns
    -------
    ndarray, shape (r + 1,)
    """
    frames, size = outputs.shape[0], regressors.shape[1] - 1
    power = np.mean(np.abs(outputs) ** 2, axis=0)
    steady = np.abs(outputs.mean(axis=0)) ** 2
    varying = (power - steady) * (frames / max(frames - 1, 1)) - 1.0
    heard = _energy_mean(power - 1.0)
    direct = max(_energy_mean(steady - 1.0 / frames), LEAST_POWER)
    variety = float(regressors[:, 1:].var(axis=0).mean())
    seen = _energy_mean(varying) / max(variety, LEAST_VARIETY)
    surface = max(seen, LEAST_POWER if variety > LEAST_VARIETY else UNSEEN_SHARE * heard, LEAST_POWER)
    variances = np.concatenate(([0.0], surface / size * weights))
    # Terminals and blockages change the direct path by its whole strength, and one column more costs little.
    variances[0] = 2.0 * direct + surface
    return variances


def _energy_mean(power: NDArray[np.float64]) -> float:
    """Mean of the powers, each weighted by itself; 0 when none is above zero."""
    positive = np.maximum(power, 0.0)
    total = float(positive.sum())
    return float((positive * positive).sum()) / total if total > 0 else 0.0
