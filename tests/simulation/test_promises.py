"""Promised rates in a closed loop, held against what was measured and against the channel known exactly."""

from dataclasses import dataclass, field, replace
from statistics import mean

import numpy as np
import pytest
import scipy.stats

from tracker.engine.events import Pattern, State
from tracker.settings import parse
from tracker.simulation.closed_loop import EngineInLoop
from tracker.simulation.config import ToneGrid
from tracker.simulation.motion import Still, Track, Waypoints
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard


@dataclass
class Kept:
    """What became of a pattern."""

    pattern: Pattern
    true: list[float] = field(default_factory=list)
    measured: list[float] = field(default_factory=list)


def _play(track: Track, seed: int, bursts: int) -> tuple[list[Kept], State]:
    """Run a small yard in which patterns are in force one burst late."""
    scene = yard((track,), shadow_db=42.0, snr_db=-2.0, columns=8, rows=8)
    scene = replace(scene, tones=ToneGrid(fft=64, first=16, count=32, spacing_hz=625e3))
    scenario = Scenario("promises", "", TestbedConfig(scene, frames=32), time_constant_ms=150.0, follow_phase=True)
    bed = Testbed(scenario.testbed, seed)
    engine = EngineInLoop(parse(scenario.settings()))
    became: dict[int, Kept] = {}
    decided = None
    for number in range(bursts):
        burst = bed.next_burst(number * bed.burst_ns)
        if bed.pattern_id is not None:
            became[bed.pattern_id].true.append(bed.report(burst.t_ns + bed.burst_ns // 2).rate)
        if decided is not None:
            bed.apply(decided.id, decided.states)
        decided = None
        for event in engine.take(burst, burst.end_ns):
            if isinstance(event, Pattern):
                decided = event
                became[event.id] = Kept(event)
            elif isinstance(event, State):
                state = event
                if event.pattern in became and event.rate_measured is not None:
                    became[event.pattern].measured.append(event.rate_measured)
    return [each for each in became.values() if each.true and each.measured], state


@pytest.mark.parametrize("speed", [0.0, 3.0])
def test_promises_are_kept_as_often_as_claimed(speed: float) -> None:
    """From a cold start, 95 % of the promises are met: by what was measured, and no less often in truth.

    What was measured lies within the central 99.9 % of the binomial distribution of so many promises (scipy.stats);
    the state says the same as is counted here, but for the last few, still open. Nor are promises met by saying
    nothing: they are nine tenths of the predicted rate in the mean.
    """
    kept: list[Kept] = []
    for seed in range(2):
        track = Waypoints(lane(-4.0, 4.0), speed) if speed else Still(lane(2.0 * seed)[0])
        found, state = _play(track, seed, 200)
        kept += found
        by_measured = mean(mean(each.measured) >= each.pattern.rate_low for each in found[-200:])
        assert state.promise_kept == pytest.approx(by_measured, abs=0.04)
    by_measured = sum(mean(each.measured) >= each.pattern.rate_low for each in kept)
    least, most = scipy.stats.binom.interval(0.999, len(kept), 0.95)
    assert least <= by_measured <= most
    assert sum(mean(each.true) >= each.pattern.rate_low for each in kept) >= least
    assert mean(each.pattern.rate_low / each.pattern.rate for each in kept) > 0.9


def test_the_first_patterns_promise_neither_too_much_nor_too_little() -> None:
    """In the first two sweeps the predicted rate is the true one within 6 % on the mean over eight starts.

    Before anything was put back of what least squares takes for noise, it was below by 15 %.
    """
    ratios = []
    for seed in range(8):
        found, _ = _play(Still(lane(seed - 4.0)[0]), seed, 6)
        ratios += [each.pattern.rate / mean(each.true) for each in found]
    assert len(ratios) > 16
    assert np.mean(ratios) == pytest.approx(1.0, abs=0.06)
