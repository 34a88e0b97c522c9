"""Drift alarm: has any of the statistics under watch left its own baseline.

What is watched is named by the caller: powers over what is expected of them (gamma distributed, with known degrees of
freedom), or plain values. Each becomes a standard normal deviate from its baseline: powers exactly, through the gamma
distribution, so that few degrees of freedom do no harm. Real links sit a little off what theory says, so the baseline
is measured; it adapts slowly, in bounded steps and not while a sum is raised, so that a change cannot drag it along.
Where samples are found to spread or to hang together in time otherwise than theory has it, they are scaled and
whitened.

The deviates go to two two-sided CUSUM tests, one tuned to small changes, one to large. All tests of all statistics
share the false alarms that the user allows: the sum of their rates is the rate asked for (Bonferroni). The test for
small changes sees samples over many blocks. If these hang together its samples are scaled down; if a filter with a
short memory makes them swing to and fro, so that sums stay small, the test hardly ever cries wolf, and its share of
the false alarms goes to the others.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from scipy.special import gammainc, gammaincc, ndtri

from .cusum import Change, Cusum
from .rises import Groups, Powers, Rises
from .run_length import threshold_for

# Samples of a first baseline; it holds when its two halves agree, which they do not while the estimate still forms.
WARM_UP = 64
# Difference of the halves' means that still counts as agreement, in standard errors.
AGREEMENT = 2.0
# Ratio of the halves' variances that still counts as agreement: beyond the 99.9 % point of their F distribution.
STEADY = 3.5
# Samples over which the baseline adapts in the long run; at first it adapts over as many as it has seen.
MEMORY = 4096
# A sample moves the baseline by no more than this many standard deviations' worth.
BOUND = 4.0
# Slacks of the two tests: best for changes of one and of five standard deviations a sample.
SLACKS = (0.5, 2.5)
# Share of a threshold beyond which the baseline stands still.
RAISED = 0.7
# Theory is believed until what is measured differs by this many standard errors.
BELIEF = 3.0
# Samples whose mean shows whether they hang together over longer than a sample, and how many such means are averaged.
LONG, LONG_MEMORY = 16, 4096
# Below this a test is as rare as its slack makes it: rarer than is asked for, where few samples lie between alarms.
LEAST_THRESHOLD = 0.01
# Deviates are cut here: beyond, the distribution functions run out of digits and nothing is to be gained.
MOST = 35.0


def deviate(ratio: float, degrees: int) -> float:
    """Turn a power over its mean, averaged over so many complex degrees of freedom, to a standard normal deviate."""
    shape, at = float(degrees), degrees * ratio
    if ratio <= 1.0:
        return max(float(ndtri(gammainc(shape, at))), -MOST)
    return min(-float(ndtri(gammaincc(shape, at))), MOST)


def largest(chance: float, count: int) -> float:
    """Turn the largest of so many values to a standard normal deviate, given the chance that one value is beyond it."""
    none = count * math.log1p(-min(chance, 1.0 - 1e-12))  # logarithm of the chance that all are below
    above = -math.expm1(none)
    deviate_of = -float(ndtri(above)) if above < 0.5 else float(ndtri(math.exp(none)))
    return min(max(deviate_of, -MOST), MOST)


class Watch:
    """One statistic: baseline, scale, whitening, tests.

    Parameters
    ----------
    false_alarm_s : float
        Wanted mean time between false alarms of all tests together, s.
    tests : float
        How many tests share them, see `tests`.
    """

    def __init__(self, false_alarm_s: float, tests: float = len(SLACKS)) -> None:
        self._false_alarm_s, self._all_tests = false_alarm_s, tests
        self._cusums = [Cusum(math.inf, slack) for slack in SLACKS]
        self.reset()

    def reset(self) -> None:
        """Forget the baseline: the next samples make a new one."""
        self._count = 0  # samples in the baseline
        self._samples, self._elapsed_s = 0, 0.0
        self._level = 0.0  # logarithm of a power's mean; mean of a plain value
        self._scale = 1.0  # standard deviation of a plain value
        self._square = 1.0  # mean squared deviate
        self._product = 0.0  # mean product of neighbouring deviates
        self._before = 0.0  # the last deviate
        self._together, self._whitening, self._shrinking = 0.0, 1.0, 1.0  # scales in use, see _set_scales
        self._sum, self._summed = 0.0, 0  # white deviates over LONG samples
        self._long_square, self._batches = 1.0, 0  # mean of such sums squared, over LONG; of how many
        self._first: list[tuple[float, int]] = []
        self.clear()

    def clear(self) -> None:
        """Begin the sums anew on the same baseline, as after a change that left it as it was."""
        for cusum in self._cusums:
            cusum.reset()
        self.height = 0.0  # the higher sum over its threshold; 1 raises an alarm

    @property
    def settled(self) -> bool:
        """Whether there is a baseline."""
        return self._count > 0

    @property
    def highest(self) -> tuple[float, float]:
        """Statistic and threshold of the test nearest to an alarm; zeros before there is a baseline."""
        if not self.settled:
            return 0.0, 0.0
        cusum = max(self._cusums, key=lambda one: one.height)
        return cusum.statistic, cusum.threshold

    @property
    def tests(self) -> float:
        """For how many tests these two count, by how often they cry wolf.

        The alarm rate of a CUSUM goes with exp(−2 h k / σ²), σ² the variance of sums over their number.
        """
        slow = self._cusums[0]
        if not self.settled or self._long_square >= 1.0 - self._long_doubt:
            return float(len(SLACKS))
        return 1.0 + math.exp(-2.0 * slow.threshold * slow.slack * (1.0 / max(self._long_square, 0.1) - 1.0))

    def share(self, tests: float) -> None:
        """Share the false alarms with so many tests in all."""
        self._all_tests = tests
        if self.settled:
            self._set_thresholds()

    @property
    def period_s(self) -> float:
        """Mean time between samples."""
        return max(self._elapsed_s / max(self._samples, 1), 1e-9)

    def update(self, value: float, degrees: int, elapsed_s: float) -> Change | None:
        """Take in a sample.

        Parameters
        ----------
        value : float
            A power above zero, or a plain value.
        degrees : int
            Complex degrees of freedom that a power was averaged over; 0 for a plain value.
        elapsed_s : float
            Time since the sample before, s.
        """
        self._samples += 1
        self._elapsed_s += elapsed_s
        if not self._count:
            self._warm_up(value, degrees)
            return None
        before = self._before
        sample, unit = self._deviate(value, degrees)
        white = (sample - self._together * before) * self._whitening
        slow, fast = self._cusums
        change = slow.update(white * self._shrinking)
        change = fast.update(white) or change
        high, low = slow.statistic / slow.threshold, fast.statistic / fast.threshold
        self.height = high if high > low else low
        self._before = self._adapt(sample, white, unit)
        if self._count % LONG == 0:
            self._set_scales(degrees)
        return change

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "numbers": [getattr(self, name) for name in _NUMBERS],
            "counts": [getattr(self, name) for name in _COUNTS],
            "first": [[value, degrees] for value, degrees in self._first],
            "cusums": [cusum.snapshot() for cusum in self._cusums],
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        for name, number in zip(_NUMBERS, snapshot["numbers"], strict=True):
            setattr(self, name, float(number))
        for name, count in zip(_COUNTS, snapshot["counts"], strict=True):
            setattr(self, name, int(count))
        self._first = [(float(value), int(degrees)) for value, degrees in snapshot["first"]]
        for cusum, state in zip(self._cusums, snapshot["cusums"], strict=True):
            cusum.load(state)
        self._measure_height()

    def _measure_height(self) -> None:
        self.height = max(cusum.height for cusum in self._cusums)

    def _deviate(self, value: float, degrees: int) -> tuple[float, float]:
        """Deviate from the baseline, and what a unit of it is in the unit of the level."""
        if degrees:
            return deviate(value * math.exp(-self._level), degrees), 1.0 / math.sqrt(degrees)
        return (value - self._level) / self._scale, self._scale

    def _set_scales(self, degrees: int) -> None:
        """Take what was measured of correlation and spread into use, where theory is beyond doubt wrong."""
        gathered = self._gathered
        together = self._product / self._square
        self._together = _bounded(together, 0.9) if abs(together) > BELIEF / math.sqrt(gathered) else 0.0
        other = not degrees or abs(self._square - 1.0) > BELIEF * math.sqrt(2.0 / gathered)
        spread = self._square if other else 1.0
        self._whitening = 1.0 / math.sqrt(spread * (1.0 - self._together**2))
        longer = self._long_square > 1.0 + self._long_doubt
        self._shrinking = 1.0 / math.sqrt(self._long_square) if longer else 1.0

    @property
    def _gathered(self) -> int:
        return min(self._count, MEMORY)

    @property
    def _long_doubt(self) -> float:
        """How far the variance of long sums may be off by chance."""
        return BELIEF * math.sqrt(2.0 / max(self._batches, 1))

    def _adapt(self, sample: float, white: float, unit: float) -> float:
        """Let the baseline follow, slowly and bounded; give back the sample as it was bounded."""
        self._count += 1
        gain = 1.0 / (self._count if self._count < MEMORY else MEMORY)
        bounded = _bounded(sample, BOUND * math.sqrt(self._square))
        if self.height < RAISED:
            self._level += bounded * unit * gain
        self._square += (bounded * bounded - self._square) * gain
        self._product += (bounded * self._before - self._product) * gain
        self._sum += white
        self._summed += 1
        if self._summed == LONG:
            square = min(self._sum**2 / LONG, BOUND**2 * max(self._long_square, 1.0))
            self._batches = min(self._batches + 1, LONG_MEMORY)
            # What theory says counts as a few.
            self._long_square += (square - self._long_square) / (self._batches + 4)
            self._sum, self._summed = 0.0, 0
        if self._count <= MEMORY and self._count & (self._count - 1) == 0:
            self._set_thresholds()
        return bounded

    def _set_thresholds(self) -> None:
        """Set thresholds that give the false alarms wanted, as far as the baseline is known."""
        samples = max(self._false_alarm_s / self.period_s * self._all_tests, 2.0)
        # In the long run the level is a moving average, which knows the mean as well as twice as many samples do.
        doubt = 1.0 / self._count if self._count < MEMORY else 0.5 / MEMORY
        for cusum in self._cusums:
            cusum.threshold = max(threshold_for(samples, cusum.slack, doubt), LEAST_THRESHOLD)
        self._measure_height()

    def _warm_up(self, value: float, degrees: int) -> None:
        """Gather a first baseline, over a sliding window until it is steady."""
        self._first.append((value, degrees))
        if len(self._first) < WARM_UP:
            return
        values, counts = np.array(self._first).T
        late = values[WARM_UP // 2 :]
        if degrees:
            self._level = math.log(float(values @ counts) / float(counts.sum()))
        else:
            self._level, self._scale = float(values.mean()), max(float(late.std(ddof=1)), 1e-12)
        samples = np.array([self._deviate(*one)[0] for one in self._first])
        halves = samples.reshape(2, -1)
        means, squares = halves.mean(axis=1), np.maximum(halves.var(axis=1), 1.0)
        error = math.sqrt(float(squares.min()) * 4.0 / WARM_UP)
        if abs(means[1] - means[0]) > AGREEMENT * error or squares.max() > STEADY * squares.min():
            del self._first[: WARM_UP // 2]
            return
        self._square = float((samples * samples).mean())
        self._product = float((samples[1:] * samples[:-1]).mean())
        self._before = float(samples[-1])
        self._first = []
        self._count = WARM_UP
        self._set_scales(degrees)
        self._set_thresholds()


_NUMBERS = (
    *("_elapsed_s", "_level", "_scale", "_square", "_product", "_before", "_sum", "_long_square"),
    *("_together", "_whitening", "_shrinking", "_all_tests"),
)
_COUNTS = ("_count", "_samples", "_summed", "_batches")


def _bounded(value: float, limit: float) -> float:
    return min(max(value, -limit), limit)


class Reading(NamedTuple):
    """A sample of a statistic under watch; a tuple, as many are made a burst.

    Parameters
    ----------
    name : str
        Of the statistic.
    value : float
    degrees : int
        See `Watch.update`.
    """

    name: str
    value: float
    degrees: int = 0


Sample = Reading | Powers


@dataclass(frozen=True, slots=True)
class Suspicion:
    """A statistic that left its baseline.

    Parameters
    ----------
    name : str
        Of the statistic.
    change : Change
    since_s : float
        For how long, as estimated.
    """

    name: str
    change: Change
    since_s: float

    def snapshot(self) -> dict[str, Any]:
        """All of it as plain values."""
        change = self.change
        return {
            "name": self.name,
            "change": [change.up, change.statistic, change.threshold, change.since],
            "since_s": self.since_s,
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any]) -> "Suspicion":
        """Rebuild from a snapshot."""
        up, statistic, threshold, since = snapshot["change"]
        change = Change(bool(up), float(statistic), float(threshold), int(since))
        return cls(str(snapshot["name"]), change, float(snapshot["since_s"]))


class DriftMonitor:
    """All statistics under watch.

    Parameters
    ----------
    false_alarm_s : float
        Wanted mean time between false alarms of all together, s.
    names : sequence of str
        Of the statistics.
    groups : mapping of str to Groups
        Of those that are the powers of many places: what is watched of them.
    """

    def __init__(self, false_alarm_s: float, names: Sequence[str], groups: Mapping[str, Groups] | None = None) -> None:
        tests = len(SLACKS) * len(names)
        self._rises = {name: Rises(false_alarm_s, tests, one) for name, one in (groups or {}).items()}
        self._plain = {name: Watch(false_alarm_s, tests) for name in names if name not in self._rises}
        self._watches: dict[str, Watch | Rises] = {**self._plain, **self._rises}
        self._blocks = 0
        self._silent_s = dict.fromkeys(names, 0.0)  # since the last reading of each
        for slack in SLACKS:
            threshold_for(2.0, slack)  # makes the tables now: later a burst would wait for them

    def reset(self, kept: Sequence[str] = ()) -> None:
        """Forget all baselines but those named, whose sums begin anew."""
        for name, watch in self._watches.items():
            if name in kept:
                watch.clear()
            else:
                watch.reset()

    def renew(self, name: str) -> None:
        """Forget the baseline of one statistic."""
        self._watches[name].reset()

    def clear(self) -> None:
        """Begin all sums anew on the same baselines."""
        for watch in self._watches.values():
            watch.clear()

    @property
    def height(self) -> float:
        """The highest sum over its threshold; 1 raises an alarm."""
        return max(watch.height for watch in self._watches.values())

    @property
    def highest(self) -> tuple[float, float]:
        """Statistic and threshold of the test that is nearest to an alarm."""
        return max(self._watches.values(), key=lambda watch: watch.height).highest

    def update(self, readings: Sequence[Sample], elapsed_s: float) -> list[Suspicion]:
        """Take in what one block gave.

        Parameters
        ----------
        readings : sequence of Reading and Powers
            Of statistics named at the start; one that has none this time keeps its sums.
        elapsed_s : float
            Time since the block before, s.
        """
        suspicions = []
        for name in self._silent_s:
            self._silent_s[name] += elapsed_s
        for reading in readings:
            silent_s = self._silent_s[reading.name]
            self._silent_s[reading.name] = 0.0
            if isinstance(reading, Powers):
                change = self._rises[reading.name].update(reading, silent_s)
            else:
                change = self._plain[reading.name].update(reading.value, reading.degrees, silent_s)
            if change is not None:
                since_s = change.since * self._watches[reading.name].period_s
                suspicions.append(Suspicion(reading.name, change, since_s))
        self._blocks += 1
        if self._blocks & (self._blocks - 1) == 0 or self._blocks % MEMORY == 0:
            tests = sum(watch.tests for watch in self._watches.values())
            for watch in self._watches.values():
                watch.share(tests)
        return suspicions

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "watches": {name: watch.snapshot() for name, watch in self._watches.items()},
            "silent_s": dict(self._silent_s),
            "blocks": self._blocks,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._blocks = int(snapshot["blocks"])
        for name, watch in self._watches.items():
            watch.load(snapshot["watches"][name])
            self._silent_s[name] = float(snapshot["silent_s"][name])
