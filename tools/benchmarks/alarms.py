"""Alarms: as rare as promised when nothing changes, as fast as can be when something does, and of the right kind.

False alarms are counted in the whole chain (frames, filter, statistics, tests) at intervals short enough to see many.
For hours, the rate of the same tests at the thresholds that the tracker sets is computed by importance sampling
(Siegmund, Ann. Statist. 4, 1976), which is held against the count where both can be had.
"""

import math
from collections import Counter
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchmarks._still_link import CHANGES, FRAME_NS, Changed, Link, information, size_for
from benchmarks.row import Row
from tracker.assembly import configure
from tracker.engine.budget import Steps
from tracker.engine.drift import MEMORY, SLACKS, DriftMonitor
from tracker.engine.estimator import Estimator
from tracker.engine.events import Alarm, Event, Pattern
from tracker.engine.frames import Frames
from tracker.engine.run_length import threshold_for
from tracker.engine.tracker import Tracker
from tracker.settings import parse
from tracker.simulation.best import best_pattern
from tracker.simulation.motion import Still
from tracker.simulation.schedule import Block
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

ELEMENTS, FRAMES = 63, 64
SWEEP = ELEMENTS + 1
TEN_HOURS_S = 36_000.0
# Blocks played before anything is counted: the estimate is formed, baselines are known to within a few percent.
SETTLED = 1500
QUIET_BLOCKS = 400
# Frames in which a change must have been noticed.
PATIENCE = 40 * FRAMES


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    yield from _intervals(quick)
    yield from _hours(4000 if quick else 40_000)
    yield from _kinds(3 if quick else 40)
    yield _recovery(1 if quick else 4)


def _intervals(quick: bool) -> Iterator[Row]:
    """Count false alarms of the whole chain."""
    cases = [(16, 1)] if quick else [(1, 1), (16, 1), (64, 1), (128, 1), (1, 2), (16, 2), (64, 2), (16, 4), (64, 4)]
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
    monitor = DriftMonitor(config.false_alarm_s, estimator.watched)
    alarms = 0
    settled = max(SETTLED, 4 * link.elements // frames)
    for number in range(settled + blocks):
        fit = estimator.update([Frames.of(link.burst(number, link.states(frames)))])
        if number < 100:
            continue
        if monitor.update(fit.readings, fit.elapsed_s):
            alarms += number >= settled
            monitor.clear()
    return alarms


def _hours(runs: int) -> Iterator[Row]:
    """Rate at the thresholds set for hours, ten bursts a second and bursts of 64 at 28 000 frames a second."""
    for rate_hz in (10.0, 28_000 / 64):
        for hours in (1 / 3600 * 300 / rate_hz, 1.0, 10.0, 100.0):
            watches = len(Estimator(Link(0, 3).config(TEN_HOURS_S)).watched)
            samples = hours * 3600.0 * rate_hz
            rate = sum(
                2 * _rate(samples * watches * len(SLACKS), slack, runs, seed) for seed, slack in enumerate(SLACKS)
            )
            ratio = 1.0 / (rate * watches * samples)
            name = f"{hours:.0f} h" if hours >= 1 else "300 blocks"
            yield Row(
                f"false alarms at {rate_hz:.0f} bursts/s, {name} asked: interval over that",
                ratio,
                "ratio",
                "0.75 to 1.25",
                0.75 <= ratio <= 1.25,
                "importance sampling of the tests at the thresholds set, baseline uncertain as in the long run",
            )


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


def _kinds(seeds: int) -> Iterator[Row]:
    """Delay of every kind at two sizes, beside that of a test that knows the change; confusion at the larger."""
    needed = math.log(TEN_HOURS_S * 1e9 / FRAME_NS)  # nats, Lorden
    delays: dict[tuple[str, float], list[float]] = {}
    bounds: dict[tuple[str, float], list[float]] = {}
    told: dict[str, Counter[str]] = {kind: Counter() for kind in CHANGES}
    for seed in range(seeds):
        link = Link(seed, ELEMENTS, surface=3.0)
        tracker = Tracker(link.config(TEN_HOURS_S))
        for number in range(QUIET_BLOCKS):
            _advance(tracker, link, number, link.states(FRAMES))
        settled = tracker.snapshot()
        place = link.place
        for kind in CHANGES:
            for level in (1.0, 10.0):
                link.place = place
                size = size_for(link, kind, needed * level, SWEEP)
                tracker = Tracker(link.config(TEN_HOURS_S))
                tracker.load(settled)
                known = np.cumsum(information(link, kind, size, PATIENCE))
                bounds.setdefault((kind, level), []).append(float(np.searchsorted(known, needed) + 1))
                kind_told, delay = _change(tracker, link, kind, size)
                delays.setdefault((kind, level), []).append(delay)
                if level > 1.0:
                    told[kind][kind_told] += 1
    for (kind, level), values in delays.items():
        bound = float(np.median(bounds[kind, level]))
        median, late = np.percentile(values, [50, 95])
        # A burst is worked off as a whole: half of one is waited for on average.
        allowed = 2.0 * (bound + FRAMES / 2)
        yield Row(
            f"{kind}, {10 * math.log10(level):.0f} dB: frames until the alarm",
            float(median),
            "frames",
            f"<= {allowed:.0f}",
            bool(median <= allowed),
            f"95 %: {late:.0f}; a test that knows the change (Lorden): {bound:.0f}, and bursts of {FRAMES}",
        )
    right = 0.0
    for kind, found in told.items():
        share = (found[kind] + 0.5 * found["unclear"]) / seeds
        right += share / len(told)
        others = ", ".join(f"{name} {count}" for name, count in found.most_common() if name != kind)
        yield Row(f"{kind}, 10 dB: told right", 100 * share, "%", ">= 95", share >= 0.95, others or "no other")
    yield Row("all kinds, 10 dB: told right", 100 * right, "%", ">= 95", right >= 0.95, f"{seeds} links")


def _advance(
    tracker: Tracker, link: Link, number: int, states: NDArray[np.float64], changed: Changed | None = None
) -> list[Event]:
    burst = link.burst(number, states, changed)
    tracker.admit(burst, burst.end_ns)
    return tracker.advance([burst], Steps(20)).events


def _change(tracker: Tracker, link: Link, kind: str, size: float) -> tuple[str, float]:
    """Play a change that begins anywhere in a burst; what the alarm says, and frames until then."""
    begins = int(link.rng.integers(0, FRAMES))
    for number in range(PATIENCE // FRAMES):
        states = link.states(FRAMES)
        since = number * FRAMES - begins + np.arange(FRAMES)
        changed = CHANGES[kind][0](link, states, since * FRAME_NS / 1e9, size)
        if number == 0:
            before = link.shown(states)
            response = np.where((since >= 0)[:, None, None], changed.response, before)
            noise = np.where((since >= 0)[:, None, None], changed.noise, 1.0)
            changed = Changed(response, noise)
        events = _advance(tracker, link, QUIET_BLOCKS + number, states, changed)
        for event in events:
            if isinstance(event, Alarm):
                return event.kind, float((number + 1) * FRAMES - begins)
    return "none", float(PATIENCE)


def _recovery(seeds: int) -> Row:
    """Frames after the direct path is blocked until the rate is back at 0.97 of the best possible."""
    took = []
    blocked_s = 0.6
    for seed in range(seeds):
        scene = yard((Still(lane(0.0)[0]),), shadow_db=26.0, snr_db=6.0)
        block = Block(blocked_s, math.inf, 25.0, 0.0)
        scene = replace(scene, direct=replace(scene.direct, blocks=(block,)))
        scenario = Scenario("blocked", "", TestbedConfig(scene), time_constant_ms=300.0)
        tracker = Tracker(configure(parse(scenario.settings()), Path()))
        testbed = Testbed(scenario.testbed, seed)
        first = int(blocked_s * 1e9 / testbed.burst_ns)
        best, recovered = None, None
        for number in range(first + 24):
            burst = testbed.next_burst(number * testbed.burst_ns)
            tracker.admit(burst, burst.end_ns)
            for event in tracker.advance([burst], Steps(400)).events:
                if isinstance(event, Pattern):
                    testbed.apply(event.id, event.states)
            if number >= first and recovered is None:
                report = testbed.report((number + 1) * testbed.burst_ns)
                best, most = best_pattern(report.channel, best if best is not None else report.states, 600)
                if report.rate >= 0.97 * most:
                    recovered = (number + 1) * FRAMES - blocked_s * 1e9 / FRAME_NS
        took.append(math.inf if recovered is None else round(recovered))
    sweep = 257
    return Row(
        "direct path blocked, N 256, 28 000 frames/s: frames until 0.97 of the best rate",
        float(np.median(took)),
        "frames",
        f"<= {2 * sweep} (two sweeps)",
        bool(np.median(took) <= 2 * sweep),
        f"each: {took}",
    )
