"""How soon after a change of the direct path the pattern in use is again the right one."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np

from benchmarks._still_link import FRAME_NS
from benchmarks.row import Row
from tracker.assembly import configure
from tracker.engine.budget import Steps
from tracker.engine.events import Pattern
from tracker.engine.tracker import Tracker
from tracker.settings import parse
from tracker.simulation.best import best_pattern
from tracker.simulation.motion import Still
from tracker.simulation.schedule import Block
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

FRAMES, SWEEP = 64, 257
CHANGED_S = 0.6
# Share of the best possible rate that counts as recovered.
RECOVERED = 0.97


def recovery(seeds: int) -> list[Row]:
    """Measure after a blocked path, and after a direct path that comes out from behind something."""
    blocked = [_frames_until_recovered(seed, 25.0) for seed in range(seeds)]
    freed = [_frames_until_recovered(seed, -12.0) for seed in range(seeds)]
    return [
        _row("direct path blocked", blocked, 2 * SWEEP, "two sweeps"),
        _row("direct path alone 12 dB stronger", freed, FRAMES, f"bursts of {FRAMES}, the change in the middle of one"),
    ]


def _row(what: str, took: list[float], allowed: int, note: str) -> Row:
    middle = float(np.median(took))
    name = f"{what}, N 256, 28 000 frames/s: frames until {RECOVERED} of the best rate"
    return Row(name, middle, "frames", f"<= {allowed}", middle <= allowed, f"{note}; each: {took}")


def _frames_until_recovered(seed: int, loss_db: float) -> float:
    scene = yard((Still(lane(0.0)[0]),), shadow_db=26.0, snr_db=6.0)
    block = Block(CHANGED_S, math.inf, loss_db, 0.0)
    scene = replace(scene, direct=replace(scene.direct, blocks=(block,)))
    scenario = Scenario("blocked", "", TestbedConfig(scene), time_constant_ms=300.0)
    tracker = Tracker(configure(parse(scenario.settings()), Path()))
    testbed = Testbed(scenario.testbed, seed)
    first = int(CHANGED_S * 1e9 / testbed.burst_ns)
    best = None
    for number in range(first + 24):
        burst = testbed.next_burst(number * testbed.burst_ns)
        tracker.admit(burst, burst.end_ns)
        for event in tracker.advance([burst], Steps(400)).events:
            if isinstance(event, Pattern):
                testbed.apply(event.id, event.states)
        if number >= first:
            report = testbed.report((number + 1) * testbed.burst_ns)
            best, most = best_pattern(report.channel, best if best is not None else report.states, 600)
            if report.rate >= RECOVERED * most:
                return float(round((number + 1) * FRAMES - CHANGED_S * 1e9 / FRAME_NS))
    return math.inf
