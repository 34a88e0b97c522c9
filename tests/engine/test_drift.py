"""The drift alarm: quiet while nothing changes, quick when something does."""

import math

import numpy as np
import pytest
import scipy.stats

from tracker.engine.detection.drift import DriftMonitor, Reading, Watch, deviate

DEGREES = 64 * 12
PERIOD_S = 64 / 28_000
HOUR = 3600.0


def _ratio(rng: np.random.Generator, level: float = 1.0, degrees: int = DEGREES) -> float:
    return level * float(rng.gamma(degrees, 1.0 / degrees))


def _settled(rng: np.random.Generator, false_alarm_s: float = HOUR) -> Watch:
    watch = Watch(false_alarm_s)
    for _ in range(1000):
        assert watch.update(_ratio(rng), DEGREES, PERIOD_S) is None
    return watch


@pytest.mark.parametrize("degrees", [1, 16, 768])
def test_powers_become_normal_exactly(degrees: int) -> None:
    """Quantiles of the chi-square distribution (scipy) land on the same quantiles of the normal one."""
    chance = np.array([1e-9, 1e-3, 0.1, 0.5, 0.9, 0.999, 1 - 1e-9])
    power = scipy.stats.chi2(2 * degrees).ppf(chance) / (2 * degrees)
    found = [deviate(float(value), degrees) for value in power]
    np.testing.assert_allclose(found, scipy.stats.norm.ppf(chance), atol=1e-4)


@pytest.mark.parametrize("level", [1.0, 0.7])
def test_a_rise_is_found_fast_and_dated(level: float) -> None:
    """A rise by 20 % (5.5 deviations) is found within 4 bursts, twice Lorden's bound of 1.4 and one, and dated.

    Lorden (Ann. Math. Stat. 42, 1971, from memory): no test with so few false alarms is faster than ln ARL / KL.
    """
    rng = np.random.default_rng(1)
    watch = Watch(HOUR)
    for _ in range(1000):
        watch.update(_ratio(rng, level), DEGREES, PERIOD_S)
    for count in range(1, 5):
        change = watch.update(_ratio(rng, 1.2 * level), DEGREES, PERIOD_S)
        if change:
            assert change.up
            assert change.since <= count + 1
            assert change.statistic > change.threshold
            return
    raise AssertionError("not found")


@pytest.mark.parametrize("degrees", [1, 16, 768])
def test_false_alarms_come_as_rarely_as_asked(degrees: int) -> None:
    """One in 500 samples asked: 50 000 bring 100 alarms within four standard errors, of few degrees of freedom too."""
    rng = np.random.default_rng(2)
    watch = Watch(500 * PERIOD_S)
    for _ in range(5000):
        if watch.update(_ratio(rng, 0.8, degrees), degrees, PERIOD_S):
            watch.clear()
    alarms = 0
    for _ in range(50_000):
        if watch.update(_ratio(rng, 0.8, degrees), degrees, PERIOD_S):
            alarms += 1
            watch.clear()
    assert alarms == pytest.approx(100, abs=40)


def test_correlated_samples_bring_no_more_false_alarms() -> None:
    """Plain values of correlation 0.6 with the next: still one alarm in 500 samples, within four standard errors."""
    rng = np.random.default_rng(3)
    noise = rng.normal(size=60_000)
    values = np.empty_like(noise)
    values[0] = noise[0]
    for index in range(1, noise.size):
        values[index] = 0.6 * values[index - 1] + 0.8 * noise[index]
    watch = Watch(500 * PERIOD_S)
    alarms = 0
    for index, value in enumerate(values):
        if watch.update(3.0 + 0.1 * float(value), 0, PERIOD_S):
            alarms += index >= 10_000
            watch.clear()
    assert alarms == pytest.approx(100, abs=45)


def test_a_link_a_little_off_is_no_alarm() -> None:
    """A steady ratio of 1.3 becomes the baseline and raises nothing."""
    rng = np.random.default_rng(3)
    watch = Watch(10 * HOUR)
    assert all(watch.update(_ratio(rng, 1.3), DEGREES, PERIOD_S) is None for _ in range(2000))


def test_a_baseline_that_wanders_slowly_is_followed() -> None:
    """A ratio that sinks from 1 to 0.6 over 30 000 bursts, as when an estimate forms, raises nothing."""
    rng = np.random.default_rng(5)
    watch = Watch(10 * HOUR)
    for level in np.geomspace(1.0, 0.6, 30_000):
        assert watch.update(_ratio(rng, float(level), 64), 64, PERIOD_S) is None


def test_a_change_cannot_drag_the_baseline_along() -> None:
    """A rise by a tenth of a deviation a burst, from nothing, is found although the baseline adapts."""
    rng = np.random.default_rng(6)
    watch = _settled(rng)
    for count in range(100):
        if watch.update(_ratio(rng, 1.0 + 0.1 * count / math.sqrt(DEGREES)), DEGREES, PERIOD_S):
            assert count < 60
            return
    raise AssertionError("not found")


def test_all_statistics_share_the_false_alarms() -> None:
    """Four statistics together raise one alarm in 500 rounds, as asked, within four standard errors."""
    rng = np.random.default_rng(7)
    names = ("a", "b", "c", "d")
    monitor = DriftMonitor(500 * PERIOD_S, names)
    alarms = 0
    for number in range(30_000):
        readings = [Reading(name, _ratio(rng, 1.0, 16), 16) for name in names]
        if monitor.update(readings, PERIOD_S):
            alarms += number >= 5000
            monitor.clear()
    assert alarms == pytest.approx(50, abs=28)


def test_snapshot_goes_on_bit_by_bit() -> None:
    """A restored monitor has the same statistic after the same samples, from before and from after its warm-up."""
    rng = np.random.default_rng(4)
    monitor = DriftMonitor(HOUR, ("one",))
    for stop in (30, 1000):
        for _ in range(stop):
            monitor.update([Reading("one", _ratio(rng), DEGREES)], PERIOD_S)
        copy = DriftMonitor(HOUR, ("one",))
        copy.load(monitor.snapshot())
        for _ in range(100):
            readings = [Reading("one", _ratio(rng, 1.01), DEGREES)]
            monitor.update(readings, PERIOD_S)
            copy.update(readings, PERIOD_S)
        assert copy.highest == monitor.highest
    assert monitor.highest[0] > 0


def test_alarms_asked_for_more_often_than_the_slack_allows_are_no_crash() -> None:
    """One alarm in 3 samples asked is more than a test of slack 2.5 gives: alarms come, and nothing breaks."""
    rng = np.random.default_rng(9)
    watch = Watch(3 * PERIOD_S)
    alarms = 0
    for _ in range(1000):
        if watch.update(_ratio(rng), DEGREES, PERIOD_S):
            alarms += 1
            watch.clear()
    assert 10 < alarms < 500
