"""A service that plans the sounding, and a controller that obeys over the sockets."""

import time
from collections.abc import Callable

import numpy as np

from tests.service.station import SCENE, Controller, running
from tracker.engine.events import Mode
from tracker.logs import LogReader
from tracker.messages import decode_plan
from tracker.offline.rerun import Replay
from tracker.simulation.best import best_pattern
from tracker.simulation.sounding import SoundingConfig
from tracker.simulation.testbed import Testbed, TestbedConfig

PLAN = "plan = true\nframe_us = 100.0\nmost_frames = 8\nin_service = true\nleast_share = 0.05"


def obey(controller: Controller, bursts: int) -> Testbed:
    """Send bursts as the plans ask for them; patterns and plans are in force from the next burst on."""
    start_ns = time.time_ns()
    bed = Testbed(TestbedConfig(SCENE, SoundingConfig(kind="random"), 8, 100_000, obeys=True), 3, 7, start_ns)
    heard, at_ns = controller.heard, start_ns
    for _ in range(bursts):
        burst = bed.next_burst(at_ns)
        at_ns += bed.burst_ns
        before = len(heard.plan)
        controller.step(burst)
        assert len(heard.plan) == before + 1
        if heard.pattern:
            bed.apply(heard.pattern[-1].id, heard.pattern[-1].states)
        bed.obey(heard.plan[-1])
    return bed


def test_a_controller_that_obeys_keeps_tracking(make_controller: Callable[..., Controller]) -> None:
    """Each burst leads to a plan; the link is acquired, stays tracked, and most of its frames carry payload."""
    controller = make_controller(sounding=PLAN)
    with running(controller):
        bed = obey(controller, 80)
    assert controller.heard.plan[0].every == 2
    assert [state.mode for state in controller.heard.state[-40:]] == [Mode.TRACKING] * 40
    assert not controller.heard.alarm
    report = bed.report(time.time_ns())
    assert report.net is not None
    assert report.net > 0.7 * report.rate
    _, best = best_pattern(report.channel, report.states, 100)
    assert report.rate > 0.9 * best


def test_plans_are_journaled_and_a_replay_makes_them_again(make_controller: Callable[..., Controller]) -> None:
    """What was published stands in the journal bit by bit, and a replay comes to the same patterns with plans on."""
    controller = make_controller(sounding=PLAN)
    with running(controller):
        obey(controller, 20)
    (path,) = controller.journal.glob("*.mcap")
    kept = [decode_plan(record.body).event for record in LogReader(path) if record.topic == "plan/yard"]
    assert [plan.patterns.tobytes() for plan in kept] == [plan.patterns.tobytes() for plan in controller.heard.plan]
    assert all(np.array_equal(a.in_service, b.in_service) for a, b in zip(kept, controller.heard.plan, strict=True))
    work = Replay(None, controller.journal)
    work.run(path)
    assert work.comparison.same == len(controller.heard.pattern) > 0
    assert work.comparison.unmatched == (0, 0)


def test_no_plan_is_published_unless_it_is_asked_for(make_controller: Callable[..., Controller]) -> None:
    """A controller that chooses for itself hears of none."""
    controller = make_controller()
    bed = Testbed(TestbedConfig(SCENE, SoundingConfig(kind="random"), 8), 3, 7)
    with running(controller):
        start_ns = time.time_ns()
        for number in range(5):
            controller.step(bed.next_burst(start_ns + number * bed.burst_ns))
    assert not controller.heard.plan
