"""The drift alarm: quiet while nothing changes, quick when something does."""

import numpy as np

from tracker.engine.drift import DriftMonitor

DEGREES = 64 * 12
PERIOD_S = 64 / 28_000


def _ratio(rng: np.random.Generator, level: float = 1.0) -> float:
    return level * float(rng.gamma(DEGREES, 1.0 / DEGREES))


def _settled(rng: np.random.Generator, false_alarm_s: float = 3600.0) -> DriftMonitor:
    monitor = DriftMonitor(false_alarm_s)
    for _ in range(500):
        assert monitor.update(_ratio(rng), DEGREES, PERIOD_S) is None
    return monitor


def test_a_rise_is_found_fast_and_dated() -> None:
    """A rise of 20 % (5.5 standard deviations a burst) is found within 6 bursts and dated to about when it began."""
    rng = np.random.default_rng(1)
    monitor = _settled(rng)
    for count in range(1, 7):
        change = monitor.update(_ratio(rng, 1.2), DEGREES, PERIOD_S)
        if change:
            assert change.up
            assert change.since <= count + 20
            assert change.statistic > change.threshold
            return
    raise AssertionError("not found")


def test_false_alarms_come_about_as_rarely_as_asked() -> None:
    """With one in 2 s asked (875 bursts), 40 000 bursts without change bring 25 to 80 alarms (46 expected)."""
    rng = np.random.default_rng(2)
    monitor = DriftMonitor(2.0)
    alarms = 0
    for _ in range(40_000):
        if monitor.update(_ratio(rng), DEGREES, PERIOD_S):
            alarms += 1
            monitor = _copy_without_sums(monitor)
    assert 25 <= alarms <= 80


def _copy_without_sums(monitor: DriftMonitor) -> DriftMonitor:
    """Go on with the same baseline and empty sums, as after an alarm that was looked at."""
    snapshot = monitor.snapshot()
    snapshot["cusum"]["sums"] = [0.0, 0.0]
    copy = DriftMonitor(2.0)
    copy.load(snapshot)
    return copy


def test_a_link_a_little_off_is_no_alarm() -> None:
    """A steady ratio of 1.3 becomes the baseline and raises nothing."""
    rng = np.random.default_rng(3)
    monitor = DriftMonitor(36_000.0)
    assert all(monitor.update(_ratio(rng, 1.3), DEGREES, PERIOD_S) is None for _ in range(2000))


def test_snapshot_goes_on_bit_by_bit() -> None:
    """A restored monitor has the same statistic after the same samples."""
    rng = np.random.default_rng(4)
    monitor = _settled(rng)
    copy = DriftMonitor(3600.0)
    copy.load(monitor.snapshot())
    for _ in range(50):
        ratio = _ratio(rng, 1.02)
        monitor.update(ratio, DEGREES, PERIOD_S)
        copy.update(ratio, DEGREES, PERIOD_S)
    assert copy.statistic == monitor.statistic > 0
