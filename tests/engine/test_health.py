"""Element health through the engine's front door: the tracker in closed loop on the stand-in testbed."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tracker.assembly import configure
from tracker.engine.burst import Burst
from tracker.engine.events import Alarm, Event, Pattern, State
from tracker.engine.health.health import LEFT_OUT
from tracker.engine.panel import Limits
from tracker.engine.search.budget import Steps
from tracker.engine.search.flips import Effort, optimize
from tracker.engine.tracker import Tracker
from tracker.settings import parse
from tracker.simulation.config import SceneConfig
from tracker.simulation.impairments import Fault, Impairments, Interference
from tracker.simulation.motion import Still, Waypoints
from tracker.simulation.schedule import Block, Step
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import SCENARIOS, Scenario, lane, yard
from tracker.snapshots import Start, pack_start, unpack_start

START_NS = 1_700_000_000_000_000_000
FRAMES, FRAME_NS = 64, 35_714
BURST_S = FRAMES * FRAME_NS / 1e9
ELEMENTS = 256
SIX_SWEEPS = 25  # bursts
SILENT = {"unmoved", "stuck+", "stuck-"}
BUDGET = Steps(100)


@dataclass
class Told:
    """What the tracker said at one burst, and what the testbed knows."""

    faults: dict[int, str]
    sure: set[int]
    alarms: list[Alarm]
    patterns: list[Pattern]
    bed: Testbed


def scenario(faults: Sequence[Fault] = (), snr_db: float = -2.0, speed: float = 0.0, **changes: Any) -> Scenario:
    """The container yard, the direct path behind stacks, 5 % of the elements faulty as told."""
    track = Waypoints(lane(-2.0, 12.0), speed, from_s=0.0) if speed else Still(lane(-2.0)[0])
    scene: SceneConfig = yard((track,), shadow_db=42.0, snr_db=snr_db)
    impairments = Impairments(faults=tuple(faults), **changes)
    moving: dict[str, Any] = {"time_constant_ms": 60.0, "follow_phase": True} if speed else {}
    return Scenario("yard", "", TestbedConfig(replace(scene, impairments=impairments), frames=FRAMES), **moving)


def tracker_for(told: Scenario, more: str = "") -> Tracker:
    return Tracker(configure(parse(told.settings() + more), Path()))


def step(tracker: Tracker, bed: Testbed, burst: Burst) -> list[Event]:
    """Work off a burst; patterns are in force from the next one on."""
    tracker.admit(burst, burst.end_ns)
    events = tracker.advance([burst], BUDGET).events
    for event in events:
        if isinstance(event, Pattern):
            bed.apply(event.id, event.states)
    return events


def play(told: Scenario, seed: int, bursts: int, more: str = "") -> Iterator[Told]:
    """Run the loop, burst by burst."""
    bed, tracker = Testbed(told.testbed, seed, start_ns=START_NS), tracker_for(told, more)
    for number in range(bursts):
        events = step(tracker, bed, bed.next_burst(START_NS + number * bed.burst_ns))
        state = next(event for event in events if isinstance(event, State))
        yield Told(
            faults={element: fault for element, fault, _ in state.faults},
            sure={element for element, _, confidence in state.faults if confidence >= LEFT_OUT},
            alarms=[event for event in events if isinstance(event, Alarm)],
            patterns=[event for event in events if isinstance(event, Pattern)],
            bed=bed,
        )


def drawn(kind: str, seed: int, count: int, from_s: float = 0.0) -> list[Fault]:
    """Faults at random places; swapped elements come in pairs."""
    rng = np.random.default_rng([5, seed])
    places = [int(place) for place in rng.permutation(ELEMENTS)[:count]]
    if kind == "swapped":
        pairs = zip(places[::2], places[1::2], strict=True)
        return [Fault(one, "swapped", from_s=from_s, other=other) for one, other in pairs]
    if kind == "weak":
        return [Fault(place, "weak", from_s=from_s) for place in places]
    return [Fault(place, "stuck+" if rng.random() < 0.5 else "stuck-", from_s=from_s) for place in places]


def named(faults: Sequence[Fault]) -> set[int]:
    return {each.element for each in faults} | {each.other for each in faults if each.kind == "swapped"}


def test_silent_elements_are_found_and_no_others() -> None:
    """Of 5 % stuck ones on four panels all but a few are named after six sweeps, and no healthy one is."""
    missed = 0
    for seed in range(4):
        faults = drawn("stuck", seed, 13)
        (*_, last) = play(scenario(faults), seed, SIX_SWEEPS)
        assert set(last.faults) <= named(faults)
        missed += sum(last.faults.get(each.element) not in SILENT for each in faults)
    assert missed <= 3


def test_weak_elements_are_found_in_time() -> None:
    """Elements that answer with 0.3 of a full swing, at -2 dB a tone, are nearly all called weak after 120 sweeps."""
    faults = drawn("weak", 0, 13)
    last = list(play(scenario(faults), 0, 20 * SIX_SWEEPS))[-1].faults
    assert set(last) <= named(faults)
    assert sum(last.get(each.element) == "weak" for each in faults) >= 11


def test_a_carrier_that_creeps_makes_no_element_faulty() -> None:
    """At 0.05 m/s and 100 bursts/s paths cancel at an element for seconds: it answers weakly, and is not faulty."""
    creeping = SCENARIOS["slow-carrier"]()
    bed, tracker = Testbed(creeping.testbed, 2, start_ns=START_NS), tracker_for(creeping)
    weak = 0
    for number in range(700, 1280):
        events = step(tracker, bed, bed.next_burst(START_NS + number * 10_000_000))
        weak += sum(fault == "weak" for event in events if isinstance(event, State) for _, fault, _ in event.faults)
    assert weak == 0


def test_swapped_elements_are_found_in_pairs() -> None:
    """Both of a pair are called swapped, and no other element is."""
    faults = drawn("swapped", 3, 12)
    (*_, last) = play(scenario(faults), 3, SIX_SWEEPS)
    assert set(last.faults.values()) == {"swapped"}
    assert set(last.faults) <= named(faults)
    assert all((pair.element in last.faults) == (pair.other in last.faults) for pair in faults)
    assert len(last.faults) >= 10


CALM: dict[str, dict[str, Any]] = {
    "weak signal": {"snr_db": -8.0},
    "a carrier at 1 m/s": {"speed": 1.0},
    "fades and bursts of noise": {
        "transmit_power_db": (Step(20 * BURST_S, -9.0), Step(40 * BURST_S, 9.0)),
        "noise_db": (Step(50 * BURST_S, 6.0),),
        "interference": (Interference(10, 20, 15.0, 25 * BURST_S, 35 * BURST_S),),
    },
}


@pytest.mark.parametrize("name", CALM)
def test_what_is_no_fault_does_not_look_like_one(name: str) -> None:
    """On a healthy panel less than 0.5 % of the elements are called faulty at any time, and none in the end.

    Not in deep fades of single elements, of which 256 elements hold some, nor of all, nor with the receiver in motion.
    """
    wrong = [len(told.faults) for told in play(scenario(**CALM[name]), 7, 90)]
    assert max(wrong) < 0.005 * ELEMENTS
    assert wrong[-1] == 0


def test_what_moves_faster_than_it_is_sounded_does_not_look_faulty() -> None:
    """At 1.2 m/s, with no phase followed, a sweep mixes many channels: hardly anything is said of any element."""
    told = replace(scenario(speed=1.2), follow_phase=False, time_constant_ms=100.0)
    wrong = [len(each.faults) for each in play(told, 4, 200)]
    assert max(wrong) < 0.005 * ELEMENTS


def test_a_still_link_gives_no_false_alarm() -> None:
    """Nothing is found where nothing is wrong."""
    for told in play(scenario(), 8, 90):
        assert not told.faults
        assert "elements" not in {alarm.kind for alarm in told.alarms}


def test_a_blocked_direct_path_is_no_fault_of_elements() -> None:
    """It goes and comes again by itself."""
    told = scenario()
    scene = told.testbed.scene
    blocked = replace(scene, direct=replace(scene.direct, loss_db=26.0, blocks=(Block(0.1, 0.15, 25.0, 0.005),)))
    wrong = [len(each.faults) for each in play(replace(told, testbed=replace(told.testbed, scene=blocked)), 3, 90)]
    assert max(wrong) < 0.005 * ELEMENTS
    assert wrong[-1] == 0


def test_which_way_elements_are_stuck_is_told_when_they_fail_in_service() -> None:
    """First unmoved, then stuck to the side that the jump of the direct path shows; an alarm leaves them out."""
    faults = drawn("stuck", 0, 3, from_s=0.8)
    names, alarms = [], []
    for number, told in enumerate(play(scenario(faults), 0, 440)):
        if number * BURST_S < 0.8:
            assert not told.faults
        names.append(told.faults)
        alarms += told.alarms
    assert names[-1] == {each.element: each.kind for each in faults}
    first = next(each for each in names if each)
    assert set(first.values()) == {"unmoved"}
    assert {alarm.kind for alarm in alarms} == {"elements"}
    left_out = [alarm for alarm in alarms if alarm.action == "leave elements out"]
    assert 1.0 >= left_out[-1].statistic >= left_out[-1].threshold


def test_which_way_elements_are_stuck_is_not_guessed() -> None:
    """Those that never followed, and many that fail at once, stay unmoved."""
    for from_s, bursts in ((0.0, 80), (0.8, 420)):
        (*_, last) = play(scenario(drawn("stuck", 1, 13, from_s)), 1, bursts)
        assert set(last.faults.values()) == {"unmoved"}
        assert len(last.faults) >= 12


def test_patterns_leave_out_what_does_not_answer() -> None:
    """Elements surely found keep one state while they are, and the rate is that of the best pattern of the others.

    The best is the optimizer's under the channel known exactly, with the same elements held.
    """
    faults = drawn("stuck", 2, 13)
    found: set[int] = set()
    published = 0
    for told in play(scenario(faults), 2, 40):
        for pattern in told.patterns:
            still = sorted(found & told.sure)
            assert np.all(pattern.states[still] == 1)
            published += len(still) > 0
        found = told.sure
        last = told
    assert published > 0
    report = last.bed.report(START_NS + 40 * last.bed.burst_ns)
    held = Limits(stuck={each.element: 1 if each.kind == "stuck+" else -1 for each in faults})
    assert report.rate >= 0.98 * optimize(report.channel, report.states, held, Steps(1000), Effort.THOROUGH).rate


def test_an_element_that_answers_again_is_taken_back() -> None:
    """Repaired amid the run, it is no longer listed some sweeps later."""
    faults = drawn("stuck", 4, 3)
    broken, mended = (Testbed(scenario(each).testbed, 4, start_ns=START_NS) for each in (faults, ()))
    tracker, listed = tracker_for(scenario()), []
    for number in range(120):
        bed = broken if number < 40 else mended
        burst = replace(bed.next_burst(START_NS + number * bed.burst_ns), seq=number)
        events = step(tracker, bed, burst)
        listed.append({element for event in events if isinstance(event, State) for element, _, _ in event.faults})
    assert listed[39] == named(faults)
    assert not listed[-1]


def test_elements_that_the_settings_name_are_not_judged() -> None:
    """They are known; the others are found beside them."""
    faults = drawn("stuck", 5, 13)
    known = sorted(named(faults))[:6]
    more = f"[refresh]\nmost_steps = 100\n[panel.stuck]\nplus = {known}\n"
    (*_, last) = play(scenario(faults), 5, SIX_SWEEPS, more)
    assert not set(last.faults) & set(known)
    assert set(last.faults) <= named(faults)
    assert len(last.faults) >= 6


def test_tiles_have_no_health() -> None:
    """Where elements are not estimated one by one nothing is said of any."""
    more = '[aperture]\nbasis = "tiles"\n'
    (*_, last) = play(scenario(drawn("stuck", 6, 13)), 6, SIX_SWEEPS, more)
    assert not last.faults


@pytest.mark.parametrize("at", [3, 12, 30])
def test_judging_goes_on_from_a_snapshot_bit_by_bit(at: int) -> None:
    """Packed and unpacked amid the run, another tracker says the same from then on."""
    told = scenario(drawn("stuck", 1, 13))
    bed, first = Testbed(told.testbed, 1, start_ns=START_NS), tracker_for(told)
    bursts = [bed.next_burst(START_NS + number * bed.burst_ns) for number in range(45)]
    for burst in bursts[:at]:
        first.admit(burst, burst.end_ns)
        first.advance([burst], BUDGET)
    start = unpack_start(pack_start(Start(first.next_id, first.snapshot())))
    second = Tracker(configure(parse(told.settings()), Path()), start.first_id)
    assert start.snapshot is not None
    second.load(start.snapshot)
    faults: list[Any] = []
    for burst in bursts[at:]:
        both = []
        for tracker in (first, second):
            tracker.admit(burst, burst.end_ns)
            both.append([event for event in tracker.advance([burst], BUDGET).events if isinstance(event, State)])
        assert both[0] == both[1]
        faults = list(both[0][0].faults)
    assert len(faults) >= 12
    assert pack_start(Start(1, first.snapshot())) == pack_start(Start(1, second.snapshot()))
