"""Elements that answer to each other's bits: pairs whose responses fit when exchanged."""

import math

import numpy as np
from numpy.typing import NDArray

from .answers import Answers, power_of
from .hypotheses import FOREIGN, HEALTHY_SPREAD, PRIOR, Beliefs

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Log-evidence for being foreign, under the best, from which an element is tried; and how many are tried at most.
WORTH_A_TRY = -4.0
MOST_TRIED = 24


def swapped(
    beliefs: Beliefs, answers: Answers, mean: Complex, residual: Real, least: float
) -> list[tuple[int, int, float]]:
    """Find pairs of elements that are surely swapped.

    A pair that is swapped has two responses to explain, and explains both: i's by what is predicted for j and j's by
    what is predicted for i. Its prior is that of one foreign element with one partner among all others.

    Parameters
    ----------
    beliefs : Beliefs
    answers : Answers
    mean, residual : ndarray, shape (k, N)
        What an element should answer, and the variance about it.
    least : float
        Probability from which a pair counts as found.

    Returns
    -------
    list of (int, int, float)
        Pairs, the surest first, and their probability; no element stands in two of them.
    """
    totals = beliefs.totals
    tried = np.flatnonzero(totals[FOREIGN] > WORTH_A_TRY)
    if tried.size < 2:
        return []
    tried = tried[np.argsort(-totals[FOREIGN, tried], kind="stable")][:MOST_TRIED]
    size = power_of(mean[:, tried])
    healthy = residual[:, tried] + HEALTHY_SPREAD**2 * size
    variance = healthy[:, None] + answers.variance[:, tried, None]
    off = answers.mean[:, tried, None] - mean[:, None, tried]
    fits = beliefs.foreign_past[tried, None] - (np.log(variance) + power_of(off) / variance).sum(axis=0)
    prior = math.log(PRIOR[FOREIGN] / (totals.shape[1] - 1)) - 2.0 * math.log(PRIOR[FOREIGN])
    pair = fits + fits.T + prior
    np.fill_diagonal(pair, -np.inf)
    # Against the best that each can do alone, which is 0, and against all other partners.
    top = np.maximum(pair.max(axis=1), 0.0)
    whole = np.exp(-top) + np.exp(pair - top[:, None]).sum(axis=1)
    likely = np.exp(pair - top[:, None]) / whole[:, None]
    likely = np.minimum(likely, likely.T)
    found: list[tuple[int, int, float]] = []
    taken: set[int] = set()
    for place in np.argsort(-likely, axis=None, kind="stable"):
        one, other = divmod(int(place), tried.size)
        if likely[one, other] < least:
            break
        if one not in taken and other not in taken:
            taken |= {one, other}
            first, second = sorted((int(tried[one]), int(tried[other])))
            found.append((first, second, float(likely[one, other])))
    return found
