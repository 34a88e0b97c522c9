"""Has the power of any of many places risen: a test for each place and each group of neighbours.

A rise by a factor θ or more is waited for by the CUSUM of the likelihood ratio of gamma variables, a group at a time::

    S ← max(0, S + ν (p (1 − 1/θ) − ln θ)),    p the group's mean power, mean 1, of ν degrees of freedom a sample

Each power is taken over its own level, which is measured and adapts slowly.

A test of the largest power of each sample would forget which place it was; sums a place do not, and show a weak rise
as soon as it can be told. The groups share the false alarms that are allowed (Bonferroni). The mean run length of one
is known (`run_length.gamma_threshold`).
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from .cusum import Change
from .run_length import gamma_threshold

Real = NDArray[np.float64]

FLOOR = 1e-30
# θ: best for a rise that shows within some ten samples, nearly so for any that is stronger.
FACTOR = 1.5
# Samples over which the level of a place is averaged, the first of them that only make it, and what one may count.
MEMORY, WARM_UP, BOUND = 1024, 32, 4.0
# Groups that overlap hear the same noise, and cry wolf together: this many of them count as one (measured).
OVERLAP = 1.6
# Places in a group, each twice the one before.
WIDTHS = (1, 2, 4)


class Powers(NamedTuple):
    """Samples of the powers of many places, a statistic under watch.

    Parameters
    ----------
    name : str
        Of the statistic.
    power : ndarray, shape (samples, R, K)
    """

    name: str
    power: NDArray[np.floating[Any]]


@dataclass(frozen=True, slots=True)
class Groups:
    """What is watched.

    Parameters
    ----------
    receivers, places : int
        R rows of K places each.
    degrees : tuple of float
        ν of a group of each of `WIDTHS`.
    """

    receivers: int
    places: int
    degrees: tuple[float, ...]

    @property
    def widths(self) -> tuple[int, ...]:
        """Those that fit."""
        return tuple(width for width in WIDTHS if width <= self.places)


class Rises:
    """The tests of one statistic.

    Parameters
    ----------
    false_alarm_s : float
        Wanted mean time between false alarms of all tests of all statistics together, s.
    tests : float
        How many tests share them.
    groups : Groups
    """

    tests = 1.0
    """For how many tests these count."""

    def __init__(self, false_alarm_s: float, tests: float, groups: Groups) -> None:
        self._false_alarm_s, self._all_tests, self._groups = false_alarm_s, tests, groups
        counts = [groups.places - width + 1 for width in groups.widths]
        self._count = groups.receivers * sum(counts) / (OVERLAP if len(counts) > 1 else 1.0)
        self._weights = [
            degrees / width * (1.0 - 1.0 / FACTOR)
            for width, degrees in zip(groups.widths, groups.degrees, strict=False)
        ]
        self._counts = counts
        # The highest of so many sums is about this though nothing happens: one in exp x likelihood ratios exceeds x.
        self._usual = math.log(self._count)
        self._toll: Real = np.repeat(groups.degrees[: len(counts)], counts) * math.log(FACTOR)
        self._thresholds: Real = np.full(sum(counts), math.inf)
        self._per_span: Real = np.zeros(sum(counts))  # one over how far each threshold lies above the usual
        for degrees in groups.degrees[: len(counts)]:
            gamma_threshold(2.0, degrees, FACTOR)  # makes the tables now: later a burst would wait for them
        self.reset()

    def reset(self) -> None:
        """Forget the levels: the next samples make new ones."""
        self._samples, self._elapsed_s = 0, 0.0
        self._level: Real = np.ones((self._groups.receivers, self._groups.places))
        self._set_for, self._known = 0.0, 1
        self.clear()

    def clear(self) -> None:
        """Begin the sums anew."""
        self._sums: Real = np.zeros((self._groups.receivers, self._toll.size))
        self._since: NDArray[np.int64] = np.zeros(self._sums.shape, dtype=np.int64)
        self.height = 0.0
        self.highest = (0.0, 0.0)

    def share(self, tests: float) -> None:
        """Share the false alarms with so many tests in all."""
        self._all_tests = tests
        self._set_for = 0.0

    @property
    def settled(self) -> bool:
        """Whether there are levels."""
        return self._samples >= WARM_UP

    @property
    def period_s(self) -> float:
        """Mean time between samples."""
        return max(self._elapsed_s / max(self._samples, 1), 1e-9)

    def update(self, powers: Powers, elapsed_s: float) -> Change | None:
        """Take in samples.

        Parameters
        ----------
        powers : Powers
        elapsed_s : float
            Time since the samples before, s.
        """
        samples, known = powers.power.shape[0], self._samples
        self._samples += samples
        self._elapsed_s += elapsed_s
        ratio = powers.power / self._level
        self._follow(ratio, bounded=known >= WARM_UP)
        if known < WARM_UP:
            return None
        if self._samples >= 2.0 * self._set_for:
            # In the long run the level is a moving average, which knows the mean as well as twice as many samples do.
            self._set_thresholds(min(known, 2 * MEMORY))
        sums, peak = self._sums, self._sums
        for number, step in enumerate(self._steps(ratio)):
            sums += step
            np.maximum(sums, 0.0, out=sums)
            if samples > 1:
                peak = np.maximum(peak, sums) if number else sums.copy()
        self._since += samples
        np.copyto(self._since, 0, where=sums <= 0.0)
        heights = (peak - self._usual) * self._per_span
        place = int(heights.argmax())
        self.height = max(float(heights.ravel()[place]), 0.0)
        threshold = float(self._thresholds[place % self._thresholds.size])
        self.highest = (float(peak.ravel()[place]), threshold)
        if self.height <= 1.0:
            return None
        since = int(self._since.ravel()[place])
        return Change(True, self.highest[0], threshold, since)

    def _follow(self, ratio: Real, *, bounded: bool) -> None:
        """Let the levels follow the samples just counted, powers over the levels before."""
        samples = ratio.shape[0]
        share = 1.0 / max(min(self._samples, MEMORY), samples)
        change = (np.minimum(ratio, BOUND) if bounded else ratio).sum(axis=0)
        change *= share
        change += 1.0 - samples * share
        self._level *= change
        np.maximum(self._level, FLOOR, out=self._level)

    def _steps(self, ratio: Real) -> Real:
        """Gains in likelihood, shape (samples, R, groups)."""
        steps: Real = np.empty((*ratio.shape[:2], self._toll.size))
        start, width, pooled = 0, 1, ratio
        for count, weight in zip(self._counts, self._weights, strict=True):
            np.multiply(pooled, weight, out=steps[:, :, start : start + count])
            start += count
            pooled = pooled[:, :, : count - width] + pooled[:, :, width:]  # neighbours twice as many
            width *= 2
        steps -= self._toll
        return steps

    def _set_thresholds(self, known: int) -> None:
        """Set thresholds that give the false alarms wanted, as far as the expectation is known."""
        self._set_for, self._known = float(self._samples), known
        wanted = max(self._false_alarm_s / self.period_s * self._all_tests * self._count, 2.0)
        thresholds = []
        for degrees in self._groups.degrees[: len(self._counts)]:
            sure = gamma_threshold(wanted, degrees, FACTOR)
            # Off by a share ε, the expectation makes false alarms exp(c h ε) times as frequent, c from the first two
            # moments of a step (Wald); on average over ε of variance v, exp(c² h² v / 2) times.
            gain = 1.0 - 1.0 / FACTOR
            off = 2.0 / gain * sure
            thresholds.append(sure + 0.5 * off * off / (degrees * known))
        self._put_thresholds(np.repeat(thresholds, self._counts))

    def _put_thresholds(self, thresholds: Real) -> None:
        self._thresholds, self._per_span = thresholds, 1.0 / (thresholds - self._usual)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "sums": self._sums.copy(),
            "since": self._since.copy(),
            "level": self._level.copy(),
            "thresholds": self._thresholds.copy(),
            "numbers": [self._elapsed_s, self._all_tests, self._set_for, self.height, *self.highest],
            "counts": [self._samples, self._known],
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._sums = np.array(snapshot["sums"], dtype=np.float64)
        self._since = np.array(snapshot["since"], dtype=np.int64)
        self._level = np.array(snapshot["level"], dtype=np.float64)
        self._put_thresholds(np.array(snapshot["thresholds"], dtype=np.float64))
        numbers: Sequence[float] = [float(number) for number in snapshot["numbers"]]
        self._elapsed_s, self._all_tests, self._set_for, self.height = numbers[:4]
        self.highest = (numbers[4], numbers[5])
        self._samples, self._known = (int(count) for count in snapshot["counts"])
