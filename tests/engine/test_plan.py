"""The sounding plan through the engine's front door: a testbed that obeys it, in simulated time."""

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.assembly import configure
from tracker.engine.burst import Burst
from tracker.engine.events import Event, Mode, Pattern, Plan, State
from tracker.engine.orthogonal.hadamard import hadamard_order
from tracker.engine.panel import unpack
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.settings import parse
from tracker.simulation.config import DirectConfig, SceneConfig, Terminal, ToneGrid
from tracker.simulation.geometry import PanelConfig
from tracker.simulation.motion import Still, Straight, Track
from tracker.simulation.sounding import SoundingConfig
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.snapshots import Start, pack_start, unpack_start

FRAME_NS = 100_000
ELEMENTS = 64
CARRIER = (30.0, -5.0, 3.0)

SETTINGS = """
[link]
name = "yard"
[panel]
columns = 8
rows = 8
[tones]
fft = 64
first = 16
count = 32
spacing_khz = 625.0
[delay]
taps = 8
[estimator]
time_constant_ms = 400.0
[sounding]
plan = true
frame_us = 100.0
most_frames = 16
"""


def scene(track: Track | None = None, **changes: Any) -> SceneConfig:
    plain = SceneConfig(
        carrier_hz=3.75e9,
        tones=ToneGrid(fft=64, first=16, count=32, spacing_hz=625e3),
        panel=PanelConfig(columns=8, rows=8, centre=(20.0, 15.0, 6.0), facing=(-0.2, -1.0, 0.0)),
        mast=Still((0.0, 0.0, 12.0)),
        terminals=(Terminal(track or Still(CARRIER)),),
        direct=DirectConfig(loss_db=50.0),
        snr_db=0.0,
    )
    return replace(plain, **changes)


class Loop:
    """A tracker and a testbed that does as it says."""

    def __init__(self, more: str = "", config: SceneConfig | None = None, seed: int = 1, text: str = SETTINGS) -> None:
        sounding = SoundingConfig(reference_every=8)
        self.testbed = Testbed(TestbedConfig(config or scene(), sounding, 16, FRAME_NS, obeys=True), seed)
        self.config = configure(parse(text + more), Path())
        self.tracker = Tracker(self.config)
        self.now_ns = 0
        self.heard: list[Burst] = []

    def burst(self) -> list[Event]:
        """Sound a burst, work it off, do as is said."""
        burst = self.testbed.next_burst(self.now_ns)
        self.now_ns += burst.frames * burst.dt_ns
        self.heard.append(burst)
        self.tracker.admit(burst, self.now_ns)
        events = self.tracker.advance([burst], Steps(50)).events
        for event in events:
            if isinstance(event, Pattern):
                self.testbed.apply(event.id, event.states)
            elif isinstance(event, Plan):
                self.testbed.obey(event)
        return events

    def plans(self, bursts: int) -> Iterator[Plan]:
        """Plans of so many bursts."""
        for _ in range(bursts):
            yield from (event for event in self.burst() if isinstance(event, Plan))

    def until(self, mode: Mode, most: int = 100) -> list[Plan]:
        """Go on until the tracker is in a mode."""
        made: list[Plan] = []
        for _ in range(most):
            events = self.burst()
            made += [event for event in events if isinstance(event, Plan)]
            if self.tracker.mode is mode:
                return made
        raise AssertionError(f"not {mode} after {most} bursts")


def states(plan: Plan) -> NDArray[np.int64]:
    return unpack(plan.patterns, plan.elements).astype(np.int64)


def references(plan: Plan) -> NDArray[np.bool_]:
    return np.asarray((plan.patterns == plan.patterns[plan.reference]).all(axis=1))


def test_a_plan_comes_with_the_first_burst_and_whenever_one_was_sounded() -> None:
    """Each names the burst that it rests on, and its reference is the pattern published last."""
    loop = Loop()
    for number in range(12):
        events = loop.burst()
        (plan,) = (event for event in events if isinstance(event, Plan))
        state = next(event for event in events if isinstance(event, State))
        assert (plan.run, plan.seq, plan.t_ns) == (state.run, state.seq, state.t_ns) == (1, number, state.t_ns)
        assert plan.elements == ELEMENTS
        np.testing.assert_array_equal(states(plan)[plan.reference], loop.testbed.states)


def test_none_comes_where_none_is_wanted() -> None:
    """Without the setting the controller is left alone."""
    loop = Loop(text=SETTINGS.replace("plan = true", "plan = false"))
    assert not list(loop.plans(10))


def test_while_acquiring_as_much_is_sounded_as_allowed() -> None:
    """No payload is asked for, and references come every 8th frame, for the noise and the offset."""
    made = Loop("most_share = 0.5\n").until(Mode.TRACKING)[:-1]
    assert len(made) > 2
    for plan in made:
        assert plan.every == 2
        assert plan.net_rate is None
        assert not plan.in_service.any()
        assert references(plan)[[0, 8]].all()


def test_plan_upon_plan_makes_up_a_sweep() -> None:
    """ZᵀZ = M · I for z = [1, s] over M patterns, references aside (definition of a Hadamard matrix)."""
    order = hadamard_order(ELEMENTS + 1)
    sounded = []
    for plan in Loop().plans(20):
        places = np.arange(len(plan.patterns))
        sounded.append(states(plan)[places % 8 != 0 if plan.net_rate is None else places > 0])
    swept = np.concatenate(sounded)[:order]
    z = np.column_stack([np.ones(order, dtype=np.int64), swept])
    np.testing.assert_array_equal(z.T @ z, order * np.eye(ELEMENTS + 1, dtype=np.int64))


def test_once_tracking_more_is_left_to_payload() -> None:
    """In a still place sounding falls far below what acquiring took, with one reference a plan."""
    loop = Loop()
    loop.until(Mode.TRACKING)
    plan = list(loop.plans(150))[-1]
    report = loop.testbed.report(loop.now_ns)
    assert plan.every >= 8
    assert references(plan).sum() == 1
    assert plan.net_rate is not None
    assert report.net is not None
    assert 0 < plan.net_rate < report.rate
    assert report.net > 0.85 * report.rate


def test_a_channel_that_changes_is_sounded_more() -> None:
    """The same link with the carrier at 1 m/s: a larger share of the frames, told by the innovations alone."""
    chosen = []
    for track in (Still(CARRIER), Straight(CARRIER, (0.0, 1.0, 0.0))):
        loop = Loop(config=scene(track))
        loop.until(Mode.TRACKING)
        chosen.append(list(loop.plans(60))[-1].every)
    assert chosen[1] < 0.6 * chosen[0]


def test_in_service_frames_are_near_the_pattern_in_use() -> None:
    """They turn a few elements, or all where the link bears it; with them the link keeps 80 % of its rate."""
    loop = Loop("in_service = true\n", scene(snr_db=10.0))
    loop.until(Mode.TRACKING)
    plan = list(loop.plans(60))[-1]
    assert plan.in_service.sum() >= 0.8 * len(plan.patterns)
    assert not plan.in_service[plan.reference]
    turned = (states(plan) != states(plan)[plan.reference]).sum(axis=1)[~references(plan)]
    few = turned[turned < ELEMENTS]
    assert few.size >= turned.size - 1
    assert few.min() >= 1
    assert few.max() <= 0.2 * ELEMENTS
    rates = [loop.testbed.scene.rate(loop.now_ns / 1e9, one) for one in states(plan)[plan.in_service]]
    assert np.mean(rates) > 0.8 * loop.testbed.report(loop.now_ns).rate


def test_in_service_sounding_keeps_the_link_tracked_and_pays() -> None:
    """The rate stays near the best that can be found, and the net rate is above that of sweeps."""
    nets = []
    for more in ("in_service = true\n", ""):
        loop = Loop(more, scene(snr_db=10.0))
        loop.until(Mode.TRACKING)
        found = []
        for _ in range(120):
            loop.burst()
            report = loop.testbed.report(loop.now_ns)
            assert report.net is not None
            found.append((report.net, loop.heard[-1].frames * loop.heard[-1].dt_ns))
        net, lasts = np.array(found[60:]).T
        assert loop.tracker.mode is Mode.TRACKING
        nets.append(np.average(net, weights=lasts))
    assert nets[0] > nets[1]


def test_limits_of_the_panel_hold_in_every_pattern() -> None:
    """Stuck elements show their state, tied ones the same, in sweeps and in service."""
    limits = "[panel]\ncolumns = 8\nrows = 8\nstuck = { plus = [3], minus = [10] }\ntied = [[0, 1], [20, 40, 63]]\n"
    text = SETTINGS.replace("[panel]\ncolumns = 8\nrows = 8\n", limits)
    loop = Loop("in_service = true\n", scene(snr_db=10.0), text=text)
    made = list(loop.plans(60))
    assert any(plan.in_service.any() for plan in made)
    shown = np.concatenate([states(plan) for plan in made[1:]])
    assert (shown[:, 3] == 1).all()
    assert (shown[:, 10] == -1).all()
    assert (shown[:, 0] == shown[:, 1]).all()
    assert (shown[:, [20, 40]] == shown[:, [63]]).all()


def test_share_stays_within_its_limits() -> None:
    """Neither fewer nor more frames than allowed, however good or bad the link."""
    loop = Loop("least_share = 0.1\nmost_share = 0.25\n")
    every = {plan.every for plan in loop.plans(100)}
    assert min(every) == 4
    assert max(every) <= 10


def test_with_following_frames_stay_close_enough_to_follow() -> None:
    """A millisecond apart at most, so that motion is followed in full, however little there is to learn."""
    loop = Loop("[follow]\nphase = true\n")
    loop.until(Mode.TRACKING)
    assert {plan.every for plan in loop.plans(100)} <= set(range(1, 11))


def test_a_plan_that_was_not_sounded_yet_is_not_sent_again() -> None:
    """A controller with bursts shorter than the plan hears of the next one when this one is through."""
    loop = Loop(text=SETTINGS.replace("most_frames = 16", "most_frames = 8"))
    loop.until(Mode.TRACKING)
    loop.tracker.hold()  # the pattern in use stays
    list(loop.plans(3))
    burst = loop.testbed.next_burst(loop.now_ns)
    made = []
    assert burst.frames == 8
    for number in range(4):
        part = slice(2 * number, 2 * number + 2)
        at_ns = loop.now_ns + 2 * number * burst.dt_ns
        cut = replace(
            burst,
            seq=burst.seq + number,
            t_ns=at_ns,
            patterns=burst.patterns[part],
            response=burst.response[part],
            keep=burst.keep[part],
        )
        loop.tracker.admit(cut, at_ns + 2 * burst.dt_ns)
        events = loop.tracker.advance([cut], Steps(50)).events
        made.append(sum(isinstance(event, Plan) for event in events))
    assert made == [0, 0, 0, 1]


def test_a_loss_of_the_channel_brings_sweeps_back() -> None:
    """After `relearn` everything is as at the beginning."""
    loop = Loop("in_service = true\n", scene(snr_db=10.0))
    loop.until(Mode.TRACKING)
    list(loop.plans(40))
    loop.tracker.relearn()
    (plan,) = loop.plans(1)
    assert plan.every == 2
    assert not plan.in_service.any()


def test_the_same_frames_give_the_same_plans_over_a_snapshot() -> None:
    """Bit by bit, from a tracker that went on and from one restored from bytes half way."""

    def same(one: list[Event], other: list[Event]) -> bool:
        def packed(events: list[Event]) -> list[Any]:
            return [
                (plan.every, plan.net_rate, plan.patterns.tobytes(), plan.in_service.tobytes())
                for plan in events
                if isinstance(plan, Plan)
            ]

        return packed(one) == packed(other) and bool(packed(one))

    loop = Loop("in_service = true\n", scene(snr_db=10.0))
    list(loop.plans(30))
    restored = Tracker(loop.config, loop.tracker.next_id)
    snapshot = unpack_start(pack_start(Start(1, loop.tracker.snapshot()))).snapshot
    assert snapshot is not None
    restored.load(snapshot)
    for _ in range(20):
        events = loop.burst()
        restored.admit(loop.heard[-1], loop.now_ns)
        assert same(restored.advance([loop.heard[-1]], Steps(50)).events, events)
