"""Alarms: as rare as promised when nothing changes, as fast as can be when something does, and of the right kind.

False alarms are counted in the whole chain (frames, filter, statistics, tests) at intervals short enough to see many.
For hours, the rate of the same tests at the thresholds that the tracker sets is computed by importance sampling
(Siegmund, Ann. Statist. 4, 1976), which is held against the count where both can be had.
"""

import math
from collections.abc import Iterator

from benchmarks._excursions import interval_ratio
from benchmarks._kinds import kinds
from benchmarks._one_hour import hour
from benchmarks._recovery import recovery
from benchmarks._still_link import FRAME_NS, Link
from benchmarks.row import Row
from tracker.engine.detection.drift import DriftMonitor
from tracker.engine.estimation.estimator import Estimator
from tracker.engine.estimation.frames import Frames

TEN_HOURS_S = 36_000.0
# Blocks played before anything is counted: the estimate is formed, baselines are known to within a few percent.
SETTLED = 1500


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    yield from _intervals(quick)
    yield from _hours(4000 if quick else 40_000)
    yield from hour(*((3, 4000) if quick else (18, 40_000)))
    yield from kinds(*((3, 3) if quick else (200, 40)))
    yield from recovery(1 if quick else 4)


def _intervals(quick: bool) -> Iterator[Row]:
    """Count false alarms of the whole chain."""
    cases = [(16, 1)] if quick else [(frames, receivers) for receivers in (1, 2, 4) for frames in (1, 16, 64, 128)]
    for frames, receivers in cases:
        wanted, blocks = 300, 6000 if quick else 24_000
        alarms = _count(frames, receivers, wanted, blocks)
        ratio = blocks / max(alarms, 1) / wanted
        yield Row(
            f"false alarms, B {frames}, R {receivers}: interval over that asked for",
            ratio,
            "ratio",
            "0.75 to 1.25",
            0.75 <= ratio <= 1.25,
            f"{alarms} in {blocks} blocks, one in {wanted} asked; ± {100 / math.sqrt(max(alarms, 1)):.0f} %",
        )


def _count(frames: int, receivers: int, wanted: int, blocks: int) -> int:
    """Alarms of a still link in so many blocks, `wanted` blocks apart as asked."""
    link = Link(1, 15, receivers, surface=0.5)
    config = link.config(wanted * frames * FRAME_NS / 1e9, time_constant_s=400 * FRAME_NS / 1e9)
    estimator = Estimator(config)
    monitor = DriftMonitor(config.false_alarm_s, estimator.watched, estimator.groups)
    alarms = 0
    settled = max(SETTLED, 4 * link.elements // frames)
    for number in range(settled + blocks):
        fit = estimator.update([Frames.of(link.burst(number, link.states(frames)))])
        readings = estimator.readings()
        if number < 100:
            continue
        if monitor.update(readings, fit.elapsed_s):
            alarms += number >= settled
            monitor.clear()
    return alarms


def _hours(runs: int) -> Iterator[Row]:
    """Rate at the thresholds set for hours, ten bursts a second and bursts of 64 at 28 000 frames a second."""
    watches = len(Estimator(Link(0, 3).config(TEN_HOURS_S)).watched)
    for rate_hz in (10.0, 28_000 / 64):
        for hours in (1 / 3600 * 300 / rate_hz, 1.0, 10.0, 100.0):
            ratio = interval_ratio(hours * 3600.0 * rate_hz, watches, runs)
            name = f"{hours:.0f} h" if hours >= 1 else "300 blocks"
            yield Row(
                f"false alarms at {rate_hz:.0f} bursts/s, {name} asked: interval over that",
                ratio,
                "ratio",
                "0.75 to 1.25",
                0.75 <= ratio <= 1.25,
                "importance sampling of the tests at the thresholds set, baseline uncertain as in the long run",
            )
