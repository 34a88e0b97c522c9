"""Average run length of the CUSUM test, and the threshold that gives a wanted one.

The one-sided CUSUM S ← max(0, S + x − k) of unit-variance Gaussian x raises an alarm when S exceeds h. Its average run
length from S = 0 solves an integral equation (Page 1954; Lucas & Crosier, Technometrics 24, 1982)::

    L(s) = 1 + L(0) Φ(k − s − μ) + ∫₀ʰ L(u) φ(u + k − s − μ) du

solved here by Gauss-Legendre quadrature (Nyström). Two sides together: 1/L = 1/L₊ + 1/L₋ (exact for this CUSUM).
Increments of any other law are taken by a Markov chain on a grid (Brook & Evans, Biometrika 59, 1972).
"""

import math
from collections.abc import Callable
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammainc, ndtr

NODES = 64
# Steps of the grid of the Markov chain.
STATES = 160
# Run lengths, in samples, between which thresholds are tabled; beyond, log run length is a straight line in h.
LONGEST = 1e9

Real = NDArray[np.float64]


def one_sided(threshold: float, slack: float, shift: float) -> float:
    """Average run length of the upper test under a mean shift, in samples.

    Parameters
    ----------
    threshold, slack : float
        h and k, in standard deviations of a sample.
    shift : float
        Mean of the samples, in standard deviations.
    """
    points, weights = _quadrature()
    node = np.concatenate(([0.0], 0.5 * threshold * (points + 1.0)))
    gap = node[None, :] + slack - node[:, None] - shift
    kernel = np.exp(-0.5 * gap * gap) / math.sqrt(2.0 * math.pi)
    kernel[:, 1:] *= 0.5 * threshold * weights
    kernel[:, 0] = ndtr(slack - node - shift)
    return float(np.linalg.solve(np.eye(NODES + 1) - kernel, np.ones(NODES + 1))[0])


def two_sided(threshold: float, slack: float, shift: float = 0.0) -> float:
    """Average run length of the two-sided test under a mean shift, in samples."""
    return 1.0 / (1.0 / one_sided(threshold, slack, shift) + 1.0 / one_sided(threshold, slack, -shift))


def threshold_for(run_length: float, slack: float, doubt: float = 0.0) -> float:
    """Threshold h at which the two-sided test cries wolf once in `run_length` samples on average.

    The zero of the samples is itself an estimate. Off by δ, false alarms come exp(2 h δ) times as often, on average
    over δ of variance v exp(2 h² v) times; h is raised to make up for it.

    Parameters
    ----------
    run_length : float
    slack : float
        k.
    doubt : float
        v, variance of the zero of the samples, in units of theirs.

    Returns
    -------
    float
        Infinity where so doubtful a zero allows no such threshold.

    Raises
    ------
    ValueError
        When the run length is below 2 samples: no threshold gives that.
    """
    if not run_length >= 2.0:
        raise ValueError(f"a mean run length of {run_length} samples is not possible, the least is 2")
    wanted = math.log(run_length)
    thresholds, logs = _table(slack)
    if wanted > logs[-1]:
        slope = (thresholds[-1] - thresholds[-2]) / (logs[-1] - logs[-2])
        sure = float(thresholds[-1] + (wanted - logs[-1]) * slope)
    else:
        sure = float(np.interp(wanted, logs, thresholds))
    if doubt <= 0.0:
        return sure
    inside = slack * slack - 4.0 * doubt * slack * sure
    return (slack - math.sqrt(inside)) / (2.0 * doubt) if inside >= 0.0 else math.inf


@lru_cache(maxsize=1)
def _quadrature() -> tuple[Real, Real]:
    """Nodes and weights on [−1, 1]; finding them takes longer than all the rest."""
    points, weights = np.polynomial.legendre.leggauss(NODES)
    return np.asarray(points), np.asarray(weights)


@lru_cache(maxsize=16)
def _table(slack: float) -> tuple[Real, Real]:
    """Thresholds, and the logarithm of the two-sided run length at each; the run length rises from 1 up."""
    thresholds, logs, step = [0.0], [math.log(two_sided(1e-9, slack))], 0.02 / slack
    while logs[-1] < math.log(LONGEST):
        thresholds.append(thresholds[-1] + step)
        logs.append(math.log(two_sided(thresholds[-1], slack)))
        step = min(1.05 * step, 0.08 / slack)  # so short that straight lines are right to 1e-3 of the run length
    return np.array(thresholds), np.array(logs)


def by_chain(threshold: float, cdf: Callable[[Real], Real]) -> float:
    """Average run length of S ← max(0, S + x), alarm above a threshold, for x of any law.

    Parameters
    ----------
    threshold : float
    cdf : callable
        Distribution function of x, elementwise.
    """
    width = 2.0 * threshold / (2 * STATES - 1)
    # From one level to another: what counts is how many levels they are apart.
    number = np.arange(STATES)
    steps: Real = np.asarray(width * (np.arange(1 - STATES, STATES) + 0.5))
    below = cdf(steps)[number - number[:, None] + STATES - 1]
    chance = np.diff(below, axis=1, prepend=0.0)
    return float(np.linalg.solve(np.eye(STATES) - chance, np.ones(STATES))[0])


def gamma_threshold(run_length: float, shape: float, factor: float) -> float:
    """Threshold of the likelihood-ratio CUSUM that waits for a power to rise by a factor.

    A power p, mean 1, averaged over `shape` complex samples, is gamma. S ← max(0, S + shape (p (1 − 1/θ) − ln θ)).

    Parameters
    ----------
    run_length : float
        Wanted, in samples.
    shape : float
    factor : float
        θ.
    """
    run_lengths, thresholds = _gamma_table(float(shape), float(factor))
    wanted = math.log(run_length)
    if wanted > run_lengths[-1]:
        return float(thresholds[-1] + wanted - run_lengths[-1])  # a likelihood ratio: one more for one more in the log
    return float(np.interp(wanted, run_lengths, thresholds))


@lru_cache(maxsize=64)
def _gamma_table(shape: float, factor: float) -> tuple[Real, Real]:
    share, toll = 1.0 - 1.0 / factor, shape * math.log(factor)

    def cdf(x: Real) -> Real:
        return np.asarray(gammainc(shape, np.maximum(x + toll, 0.0) / share))

    thresholds = np.linspace(0.5, 20.0, 12)
    return np.log([by_chain(float(h), cdf) for h in thresholds]), thresholds
