"""How soon after a change of the direct path the pattern in use is again the right one."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchmarks._still_link import FRAME_NS, Changed, Link
from benchmarks.row import Row
from tracker.assembly import configure
from tracker.engine.events import Pattern
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.rate import rate
from tracker.engine.tracker import Tracker
from tracker.settings import parse
from tracker.simulation.best import best_pattern
from tracker.simulation.motion import Still
from tracker.simulation.schedule import Block
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

FRAMES, SWEEP, ELEMENTS = 64, 257, 63
# Bursts before the direct path is replaced, bursts that are waited, and the first seed of links.
QUIET, PATIENCE, FIRST_SEED = 200, 24, 30_000
# Power of the direct path on a tone, in units of the noise.
DIRECT = 30.0
CHANGED_S = 0.6
# Share of the best possible rate that counts as recovered.
RECOVERED = 0.97


def recovery(seeds: int) -> list[Row]:
    """Measure after a blocked path in the yard, and after a direct path that is replaced by another."""
    return [
        _row("direct path blocked, N 256", [_blocked(seed) for seed in range(seeds)], 2 * SWEEP, "two sweeps"),
        _row(
            f"direct path another one, N {ELEMENTS}",
            [_replaced(seed) for seed in range(3 * seeds)],
            FRAMES,
            f"bursts of {FRAMES} with the change in the middle: what is not seen in that one takes {1.5 * FRAMES:.0f}",
        ),
    ]


def _row(what: str, took: list[tuple[float, float]], allowed: int, note: str) -> Row:
    frames, dropped = (list(each) for each in zip(*took, strict=True))
    middle = float(np.median(frames))
    name = f"{what}, 28 000 frames/s: frames until {RECOVERED} of the best rate"
    note = f"{note}; each: {frames}, from a share of {[round(share, 2) for share in dropped]}"
    return Row(name, middle, "frames", f"<= {allowed}", middle <= allowed, note)


def _blocked(seed: int) -> tuple[float, float]:
    """Frames until recovered, and the share of the best rate that the pattern in use had left."""
    scene = yard((Still(lane(0.0)[0]),), shadow_db=12.0, snr_db=20.0)
    block = Block(CHANGED_S, math.inf, 25.0, 0.0)
    scene = replace(scene, direct=replace(scene.direct, blocks=(block,)))
    scenario = Scenario("blocked", "", TestbedConfig(scene), time_constant_ms=300.0)
    tracker = Tracker(configure(parse(scenario.settings()), Path()))
    testbed = Testbed(scenario.testbed, seed)
    first = int(CHANGED_S * 1e9 / testbed.burst_ns)
    best, dropped = None, 1.0
    for number in range(first + PATIENCE):
        burst = testbed.next_burst(number * testbed.burst_ns)
        tracker.admit(burst, burst.end_ns)
        events = tracker.advance([burst], Steps(400)).events
        if number >= first:
            before = testbed.report((number + 1) * testbed.burst_ns)
            best, most = best_pattern(before.channel, best if best is not None else before.states, 600)
            dropped = min(dropped, before.rate / most)
        for event in events:
            if isinstance(event, Pattern):
                testbed.apply(event.id, event.states)
        if number >= first and testbed.report((number + 1) * testbed.burst_ns).rate >= RECOVERED * most:
            return float(round((number + 1) * FRAMES - CHANGED_S * 1e9 / FRAME_NS)), dropped
    return math.inf, dropped


def _replaced(seed: int) -> tuple[float, float]:
    """Do the same where every path but the direct one stays."""
    link = Link(FIRST_SEED + seed, ELEMENTS, surface=3.0)
    # So strong that it counts beside all elements in phase.
    link.direct, other = link.paths(1, DIRECT)[0], link.paths(1, DIRECT)[0]
    config = replace(link.config(36_000.0), every_bursts=4)
    tracker = Tracker(config)
    states: NDArray[np.int8] = np.ones(ELEMENTS, dtype=np.int8)
    dropped = 1.0
    for number in range(QUIET + PATIENCE):
        sounded = link.states(FRAMES)
        response = link.shown(sounded)
        if number == QUIET:
            response[FRAMES // 2 :] += other - link.direct
            link.direct = other
            truth = Channel(config.delay, other @ config.delay.conj(), np.asarray(link.surface @ config.delay.conj()))
            most = best_pattern(truth, states, 600)[1]
            dropped = rate(truth, states) / most
        burst = link.burst(number, sounded, Changed(response))
        tracker.admit(burst, burst.end_ns)
        for event in tracker.advance([burst], Steps(400)).events:
            if isinstance(event, Pattern):
                states = event.states
        if number >= QUIET and rate(truth, states) >= RECOVERED * most:
            return (number - QUIET + 0.5) * FRAMES, dropped
    return math.inf, dropped
