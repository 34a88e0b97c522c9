"""Average run length of the CUSUM test, and the threshold that gives a wanted one.

The one-sided CUSUM S ← max(0, S + x − k) of unit-variance Gaussian x raises an alarm when S exceeds h. Its average run
length from S = 0 solves an integral equation (Page 1954; Lucas & Crosier, Technometrics 24, 1982)::

    L(s) = 1 + L(0) Φ(k − s − μ) + ∫₀ʰ L(u) φ(u + k − s − μ) du

solved here by Gauss-Legendre quadrature (Nyström). Two sides together: 1/L = 1/L₊ + 1/L₋ (exact for this CUSUM).
"""

import math

import numpy as np
from scipy.optimize import brentq
from scipy.special import ndtr

NODES = 64


def one_sided(threshold: float, slack: float, shift: float) -> float:
    """Average run length of the upper test under a mean shift, in samples.

    Parameters
    ----------
    threshold, slack : float
        h and k, in standard deviations of a sample.
    shift : float
        Mean of the samples, in standard deviations.
    """
    points, weights = np.polynomial.legendre.leggauss(NODES)
    node = np.concatenate(([0.0], 0.5 * threshold * (points + 1.0)))
    gap = node[None, :] + slack - node[:, None] - shift
    kernel = np.exp(-0.5 * gap * gap) / math.sqrt(2.0 * math.pi)
    kernel[:, 1:] *= 0.5 * threshold * weights
    kernel[:, 0] = ndtr(slack - node - shift)
    return float(np.linalg.solve(np.eye(NODES + 1) - kernel, np.ones(NODES + 1))[0])


def two_sided(threshold: float, slack: float, shift: float = 0.0) -> float:
    """Average run length of the two-sided test under a mean shift, in samples."""
    return 1.0 / (1.0 / one_sided(threshold, slack, shift) + 1.0 / one_sided(threshold, slack, -shift))


def threshold_for(run_length: float, slack: float) -> float:
    """Threshold h at which the two-sided test cries wolf once in `run_length` samples on average.

    Raises
    ------
    ValueError
        When the run length is below 2 samples: no threshold gives that.
    """
    if not run_length >= 2.0:
        raise ValueError(f"a mean run length of {run_length} samples is not possible, the least is 2")
    # Beyond 1e11 samples, centuries of bursts, the linear system runs out of digits.
    wanted = math.log(min(run_length, 1e11))
    return float(brentq(lambda h: math.log(two_sided(h, slack)) - wanted, 1e-6, 40.0 / (2.0 * slack), xtol=1e-6))
