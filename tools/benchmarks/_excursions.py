"""False alarms too rare to be waited for, by importance sampling (Siegmund, Ann. Statist. 4, 1976)."""

import math

import numpy as np
from numpy.typing import NDArray

from tracker.engine.detection.drift import MEMORY, SLACKS
from tracker.engine.detection.run_length import threshold_for


def interval_ratio(samples: float, watches: int, runs: int) -> float:
    """Mean interval between false alarms of so many statistics together over the interval asked for, in samples.

    Parameters
    ----------
    samples : float
        Interval asked for.
    watches : int
    runs : int
        Excursions that are played a test.
    """
    rate = sum(2 * _rate(samples * watches * len(SLACKS), slack, runs, seed) for seed, slack in enumerate(SLACKS))
    return 1.0 / (rate * watches * samples)


def _rate(run_length: float, slack: float, runs: int, seed: int) -> float:
    """Alarms a sample of one side of one test: chance that an excursion from zero ends in one, over its length."""
    doubt = 0.5 / MEMORY
    threshold = threshold_for(run_length, slack, doubt)
    rng = np.random.default_rng([3, seed])
    off = rng.normal(0.0, math.sqrt(doubt), runs)
    tilt = 2.0 * slack
    hit, weight = _excursions(rng, off, slack, threshold, tilt)
    chance = float((hit * weight).mean())
    return chance / _mean_length(rng, slack, runs)


def _excursions(
    rng: np.random.Generator, off: NDArray[np.float64], slack: float, threshold: float, tilt: float
) -> tuple[NDArray[np.bool_], NDArray[np.float64]]:
    """Play excursions of samples whose mean is raised by `tilt`; which end above, and their likelihood ratios."""
    total, log_weight = np.zeros_like(off), np.zeros_like(off)
    hit, running = np.zeros(off.shape, dtype=bool), np.ones(off.shape, dtype=bool)
    while running.any():
        sample = rng.normal(tilt, 1.0, off.shape)
        log_weight -= np.where(running, tilt * sample - 0.5 * tilt**2, 0.0)
        total += np.where(running, sample + off - slack, 0.0)
        hit |= running & (total > threshold)
        running &= (total > 0.0) & ~hit
    return hit, np.exp(log_weight)


def _mean_length(rng: np.random.Generator, slack: float, runs: int) -> float:
    """Mean length of an excursion from zero when nothing is raised."""
    total, length, running = np.zeros(runs), np.zeros(runs), np.ones(runs, dtype=bool)
    while running.any():
        total += rng.normal(size=runs) - slack
        length += running
        running &= total > 0.0
    return float(length.mean())
