"""A testbed that obeys sounding plans: frames are a stream, and only those that are planned reach the tracker."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine.events import Mode, Pattern, Plan, State
from tracker.engine.panel import pack, unpack
from tracker.settings import parse
from tracker.simulation.best import best_pattern
from tracker.simulation.closed_loop import EngineInLoop, turns
from tracker.simulation.config import SceneConfig, Terminal
from tracker.simulation.impairments import Impairments, Late
from tracker.simulation.motion import Straight
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import scenario

Make = Callable[..., SceneConfig]
ELEMENTS, FRAME_NS = 64, 35_714


def drawn(count: int, seed: int = 4) -> NDArray[np.int8]:
    return np.random.default_rng(seed).choice(np.array([-1, 1], dtype=np.int8), (count, ELEMENTS))


def plan(patterns: NDArray[np.int8], every: int, in_service: tuple[int, ...] = ()) -> Plan:
    served = np.zeros(len(patterns), dtype=np.bool_)
    served[list(in_service)] = True
    return Plan(1, 2, 3, patterns.shape[1], pack(patterns), 0, every, served)


def obeying(config: SceneConfig, plan: Plan | None = None) -> Testbed:
    testbed = Testbed(TestbedConfig(config, frames=12, frame_ns=FRAME_NS, obeys=True), seed=1)
    if plan is not None:
        testbed.obey(plan)
    return testbed


def test_what_is_planned_is_sounded_bit_by_bit(plain: Make) -> None:
    """A burst has the plan's patterns in its order, one frame in `every` of the stream, and so has the next."""
    wanted = plan(drawn(9), every=5)
    testbed = obeying(plain(), wanted)
    first = testbed.next_burst(0)
    second = testbed.next_burst(testbed.burst_ns)
    for burst in (first, second):
        assert burst.patterns.tobytes() == wanted.patterns.tobytes()
        assert burst.dt_ns == 5 * FRAME_NS
        assert burst.frames == 9
    assert testbed.burst_ns == 9 * 5 * FRAME_NS
    assert second.seq == first.seq + 1


def test_frames_are_measured_when_they_are_on_the_air(plain: Make) -> None:
    """Responses are those of the exact channel at the times that dt says, for a terminal that moves."""
    patterns = drawn(6)
    config = plain(terminals=(Terminal(Straight((30.0, -5.0, 3.0), (0.0, 3.0, 0.0))),), noise_power=1e-40)
    testbed = obeying(config, plan(patterns, every=20))
    burst = testbed.next_burst(1_000_000)
    for frame, states in enumerate(patterns):
        expected = testbed.scene.response((1_000_000 + frame * 20 * FRAME_NS) / 1e9, states)
        assert np.max(np.abs(burst.response[frame] - expected)) < 1e-5 * np.sqrt(np.mean(np.abs(expected) ** 2))


def test_a_late_panel_shows_payload_in_the_frames_sounded(plain: Make) -> None:
    """Late by a frame, and the frame before each one sounded carried payload: that pattern is heard instead."""
    patterns, in_force = drawn(4), drawn(1, seed=5)[0]
    config = plain(impairments=Impairments(late=(Late(1),)), noise_power=1e-40)
    testbed = obeying(config, plan(patterns, every=3))
    testbed.apply(7, in_force)
    testbed.next_burst(0)
    burst = testbed.next_burst(testbed.burst_ns)
    expected = testbed.scene.response(0.0, in_force)
    scale = np.sqrt(np.mean(np.abs(expected) ** 2))
    assert np.max(np.abs(burst.response - expected)) < 1e-5 * scale


def test_until_the_first_plan_every_frame_is_sounded(plain: Make) -> None:
    """In bursts of the size set; nothing is left for payload then."""
    testbed = obeying(plain())
    burst = testbed.next_burst(0)
    assert (burst.frames, burst.dt_ns, testbed.burst_ns) == (12, FRAME_NS, 12 * FRAME_NS)
    assert testbed.report(0).net == 0.0


def test_a_testbed_that_does_not_obey_takes_no_notice(plain: Make) -> None:
    """It goes on as it was, and speaks of no net rate."""
    testbed = Testbed(TestbedConfig(plain(), frames=12), seed=1)
    testbed.obey(plan(drawn(3), every=9))
    assert testbed.plan is None
    assert testbed.next_burst(0).frames == 12
    assert testbed.report(0).net is None


def test_a_plan_for_another_panel_is_refused(plain: Make) -> None:
    """The one in force stays."""
    testbed = obeying(plain(), plan(drawn(3), every=2))
    with pytest.raises(ValueError, match="64 elements"):
        testbed.obey(plan(drawn(3)[:, :10], every=2))
    assert testbed.next_burst(0).frames == 3


def test_net_rate_is_the_payload_of_all_frames(plain: Make) -> None:
    """Of 4 frames 3 carry payload under the pattern in force; of 5 sounded 2 are in service, one of them too weakly."""
    testbed = obeying(plain())
    in_force, _ = best_pattern(testbed.report(0).channel, None, 100)
    near, bad = in_force.copy(), drawn(1, seed=6)[0]
    near[:2] *= -1
    rates = [testbed.scene.rate(0.0, states) for states in (in_force, near, bad)]
    floor = 0.5 * (rates[1] + rates[2]) / rates[0]
    assert rates[2] < floor * rates[0] < rates[1]
    config = replace(testbed.config, least_service=floor)
    testbed = Testbed(config, seed=1)
    testbed.apply(1, in_force)
    testbed.obey(plan(np.stack([in_force, near, bad, near, in_force]), every=4, in_service=(1, 2)))
    net = testbed.report(0).net
    assert net == pytest.approx(3 / 4 * rates[0] + 1 / 4 * (0 + rates[1] + 0 + 0 + 0) / 5, rel=1e-12)


def test_the_stream_never_pauses(plain: Make) -> None:
    """Each burst begins one frame after the last of the burst before, by the plan in force."""
    testbed = obeying(plain())
    seen = []
    for number, turn in enumerate(turns(testbed, 500, 1.0, 4)):
        seen.append((turn.burst.t_ns, turn.arrival_ns))
        testbed.obey(plan(drawn(2 + number), every=2))
    assert [begin for begin, _ in seen] == [500, *(end for _, end in seen[:-1])]
    assert [end - begin for begin, end in seen] == [12 * FRAME_NS, 4 * FRAME_NS, 6 * FRAME_NS, 8 * FRAME_NS]


def test_the_engine_plans_and_keeps_a_moving_carrier() -> None:
    """Scene `payload`, 1.2 s at 1 m/s: nine bursts of ten tracked, more than 85 % of the rate left of sounding.

    An alarm now and then, and the sweep that follows it, is the price of sounding near the pattern in use.
    """
    scene = scenario("payload")
    start_s = 6.0  # the carrier sets off at 5 s
    testbed = Testbed(scene.testbed, seed=1, start_ns=0)
    engine = EngineInLoop(parse(scene.settings()))
    kinds: set[type] = set()
    states: list[State] = []
    nets = []
    for turn in turns(testbed, round(start_s * 1e9), 1.0, 10_000, engine):
        if turn.arrival_ns > (start_s + 1.2) * 1e9:
            break
        kinds |= {type(event) for event in turn.events}
        states += [event for event in turn.events if isinstance(event, State)]
        if turn.burst.seq:
            np.testing.assert_array_equal(unpack(turn.burst.patterns[:1], 256)[0], testbed.states)
        if turn.burst.t_ns > (start_s + 0.6) * 1e9 and turn.burst.seq % 10 == 0:
            report = testbed.report(turn.arrival_ns)
            assert report.net is not None
            nets.append(report.net / report.rate)
    assert {Pattern, Plan, State} <= kinds
    later = [state.mode for state in states[len(states) // 2 :]]
    assert later.count(Mode.TRACKING) > 0.9 * len(later)
    assert np.mean(nets) > 0.85
