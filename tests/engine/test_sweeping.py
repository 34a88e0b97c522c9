"""Sweeps through the engine's front door: what a tracker makes of them with the filter for sweeps, and without."""

from collections.abc import Callable, Iterable
from dataclasses import replace
from pathlib import Path
from typing import TypeVar

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.engine.hadamard import cycle
from tracker.assembly import configure
from tracker.engine import panel
from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Elements
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.events import Alarm, Event, Pattern, State
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.rate import rate
from tracker.engine.tracker import Outcome, Tracker
from tracker.settings import parse
from tracker.simulation.best import best_pattern
from tracker.simulation.motion import Still
from tracker.simulation.sounding import SoundingConfig
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard
from tracker.snapshots import Start, pack_start, unpack_start

TONES, FRAME_NS = 24, 35_714
BASIS = delay_basis(48, 12, TONES, 6, 1)
BUDGET = Steps(300)
Real = NDArray[np.float64]
E = TypeVar("E", bound=Event)


class Link:
    """A link of few paths whose surface is as strong as is told, and the cycle of patterns sounded on it."""

    def __init__(self, order: int, elements: int, seed: int, signal: float = 0.3) -> None:
        self.rng = np.random.default_rng([3, seed])
        self.elements, self.seq, self.t_ns, self.place = elements, 0, 1_700_000_000_000_000_000, 0
        self.cycle = cycle(order, elements, self.rng)
        phases = np.exp(2j * np.pi * self.rng.random((2, elements, 1, 1)))
        delays = self.gaussian(2, 1, 1, BASIS.shape[1]) * np.array([1.0, 0.3])[:, None, None, None]
        self.surface = np.ascontiguousarray(signal * (phases * delays).sum(axis=0))
        self.direct = 2.0 * signal * self.gaussian(1, BASIS.shape[1])

    def gaussian(self, *shape: int) -> NDArray[np.complex128]:
        return np.asarray((self.rng.normal(size=shape) + 1j * self.rng.normal(size=shape)) / np.sqrt(2))

    def config(self, **changes: object) -> Config:
        return replace(Config(1, BASIS, Elements(self.elements), time_constant_s=0.2, sweeps_from=0), **changes)  # type: ignore[arg-type]

    def drawn(self, frames: int) -> Real:
        return np.asarray(self.rng.choice([-1.0, 1.0], (frames, self.elements)))

    def swept(self, frames: int) -> Real:
        self.place += frames
        return np.asarray(self.cycle[(self.place - frames + np.arange(frames)) % self.cycle.shape[0]])

    def burst(self, states: Real) -> Burst:
        frames = states.shape[0]
        heard = (self.direct + np.tensordot(states, self.surface, axes=1)) @ BASIS.T + self.gaussian(frames, 1, TONES)
        self.seq += 1
        self.t_ns += frames * FRAME_NS
        return Burst(
            run=1,
            seq=self.seq,
            t_ns=self.t_ns - frames * FRAME_NS,
            dt_ns=FRAME_NS,
            elements=self.elements,
            patterns=panel.pack(states),
            response=heard.astype(np.complex64),
            keep=np.ones(frames, dtype=np.bool_),
        )


class Both:
    """A tracker that notices sweeps beside one that does not."""

    def __init__(self, config: Config) -> None:
        self.trackers = Tracker(config), Tracker(replace(config, sweeps_from=None))

    def take(self, burst: Burst) -> tuple[Outcome, Outcome]:
        for tracker in self.trackers:
            tracker.admit(burst, burst.end_ns)
        first, second = (tracker.advance([burst], BUDGET) for tracker in self.trackers)
        return first, second


def _of(kind: type[E], outcomes: Iterable[Outcome]) -> list[E]:
    return [event for outcome in outcomes for event in outcome.events if isinstance(event, kind)]


def _same(outcomes: tuple[Outcome, Outcome], *, innovation: bool = True) -> None:
    """Hold one tracker's outcome against the other's, to rounding."""
    ours, theirs = outcomes
    assert ours.error == pytest.approx(theirs.error, rel=1e-8)
    for one, other in zip(_of(Pattern, [ours]), _of(Pattern, [theirs]), strict=True):
        np.testing.assert_array_equal(one.states, other.states)
        assert (one.id, one.cause) == (other.id, other.cause)
        assert (one.rate, one.rate_low) == pytest.approx((other.rate, other.rate_low), rel=1e-8)
    for state, dense in zip(_of(State, [ours]), _of(State, [theirs]), strict=True):
        assert (state.mode, state.pattern) == (dense.mode, dense.pattern)
        if innovation:
            assert state.innovation == pytest.approx(dense.innovation, rel=1e-8)
            assert state.statistic == pytest.approx(dense.statistic, rel=1e-6, abs=1e-6)
    alarms = ([(alarm.kind, alarm.action) for alarm in _of(Alarm, [outcome])] for outcome in outcomes)
    assert next(alarms) == next(alarms)


@pytest.mark.parametrize("forgetting", ["resetting", "exponential"])
@pytest.mark.parametrize("frames", [17, 48])
@pytest.mark.parametrize(("order", "elements"), [(32, 31), (60, 59), (104, 103)])
def test_sweep_upon_sweep_gives_what_the_dense_filter_gives(
    order: int, elements: int, frames: int, forgetting: str
) -> None:
    """Sylvester's and Paley's orders without phantoms, in bursts that do not fit the sweep: all figures to rounding."""
    link = Link(order, elements, order)
    both = Both(link.config(forgetting=forgetting))
    errors = []
    for _ in range(30):
        outcomes = both.take(link.burst(link.swept(frames)))
        _same(outcomes)
        errors.append([outcome.error for outcome in outcomes])
    assert any(ours != theirs for ours, theirs in errors)  # by another filter


@pytest.mark.parametrize(("order", "elements"), [(64, 60), (104, 100), (252, 247)])
def test_a_whole_sweep_with_phantoms_gives_what_the_dense_filter_gives(order: int, elements: int) -> None:
    """To rounding, from pattern to figures; the innovations alone show in mid-sweep what phantoms might have been."""
    link = Link(order, elements, order)
    _same(Both(link.config()).take(link.burst(link.swept(order))), innovation=False)


@pytest.mark.parametrize("afterwards", ["drawn", "near", "single"])
def test_when_the_sweep_ends_the_dense_filter_goes_on(afterwards: str) -> None:
    """Over to random patterns, neighbours of one, or single elements: as if it had been the dense filter all along."""
    link = Link(60, 59, 9)
    both = Both(link.config())
    for _ in range(20):
        both.take(link.burst(link.swept(17)))
    base = link.drawn(1)

    def states() -> Real:
        if afterwards == "drawn":
            return link.drawn(17)
        if afterwards == "near":
            return np.asarray(base * link.rng.choice([-1.0, 1.0], (17, 59), p=[0.1, 0.9]))
        return np.where(np.arange(59) == (17 * link.seq + np.arange(17))[:, None] % 59, 1.0, -1.0)

    for _ in range(30):
        _same(both.take(link.burst(states())))


@pytest.mark.parametrize(("order", "elements"), [(64, 63), (104, 100)])
@pytest.mark.parametrize("every", [0, 8])
def test_with_phantoms_and_the_pattern_in_use_it_is_as_good(order: int, elements: int, every: int) -> None:
    """Errors of prediction are no more than 3 % above the dense filter's, rates no more than 2 % below; no alarm comes.

    Every so many frames a pattern outside of the sweep is sounded, as controllers do with the one in use.
    """
    link = Link(order, elements, 7, signal=0.1)
    both = Both(link.config())
    in_use, errors, patterns = link.drawn(1), [], []
    for _ in range(80):
        states = link.swept(28)
        if every:
            states = np.insert(states, np.arange(0, 28, every - 1), in_use, axis=0)
        outcomes = both.take(link.burst(states))
        errors.append([outcome.error for outcome in outcomes])
        patterns.append([_of(Pattern, [outcome]) for outcome in outcomes])
        assert not _of(Alarm, outcomes)
    ours, theirs = np.mean(errors[20:], axis=0)
    assert ours < 1.03 * theirs
    rates = [
        rate(Channel(BASIS, link.direct, link.surface), [one for one in of if one][-1][-1].states)
        for of in zip(*patterns, strict=True)
    ]
    assert rates[0] > 0.98 * rates[1]


@pytest.mark.parametrize("between", [False, True])
def test_other_patterns_between_are_for_the_dense_filter_unless_it_takes_long(between: bool) -> None:
    """With 255 elements and the settings' work, sweeps alone are taken by a filter of their own.

    When every ninth frame sounds another pattern all is bit by bit as if no sweeps were looked for.
    """
    link = Link(256, 255, 12)
    both = Both(link.config(sweeps_from=Config(1, BASIS, Elements(255)).sweeps_from))
    other, errors = link.drawn(1), []
    for _ in range(12):
        states = link.swept(72)
        if between:
            states = np.insert(states, np.arange(0, 72, 8), other, axis=0)
        outcomes = both.take(link.burst(states))
        _same(outcomes)
        errors.append([outcome.error for outcome in outcomes])
    assert all(ours == theirs for ours, theirs in errors) == between


def test_random_patterns_get_the_dense_filter() -> None:
    """Where no sweep is sounded all is bit by bit as if none were looked for."""
    link = Link(64, 60, 8)
    both = Both(link.config())
    for _ in range(20):
        ours, theirs = both.take(link.burst(link.drawn(16)))
        assert ours.error == theirs.error
        for one, other in zip(_of(Pattern, [ours]), _of(Pattern, [theirs]), strict=True):
            assert (one.rate, one.rate_low, one.states.tolist()) == (other.rate, other.rate_low, other.states.tolist())


def test_sweeps_after_something_else() -> None:
    """A stream that begins with random patterns and goes over to sweeps is as good as the dense filter there too."""
    link = Link(64, 60, 10)
    both = Both(link.config())
    for _ in range(12):
        both.take(link.burst(link.drawn(16)))
    errors = []
    for _ in range(80):
        outcomes = both.take(link.burst(link.swept(16)))
        errors.append([outcome.error for outcome in outcomes])
        assert not _of(Alarm, outcomes)
    ours, theirs = np.mean(errors[20:], axis=0)
    assert ours < 1.03 * theirs
    assert any(one != other for one, other in errors[-10:])  # by another filter


MIXED: dict[str, Callable[[Link, int], Real]] = {
    "sweeps": lambda link, number: np.insert(link.swept(11), [0, 5], link.cycle[0] * link.cycle[1], axis=0),
    "to random and back": lambda link, number: link.drawn(13) if 8 <= number < 16 else link.swept(13),
}


@pytest.mark.parametrize("stream", MIXED)
@pytest.mark.parametrize("bank", [1, 3])
def test_snapshots_go_on_bit_by_bit(stream: str, bank: int) -> None:
    """Taken after any burst, before the first sweep is through and after, through its bytes: the same events."""
    link = Link(44, 42, 11)
    config = link.config(bank=bank)
    tracker, others = Tracker(config), list[Tracker]()
    for number in range(50):
        burst = link.burst(MIXED[stream](link, number))
        tracker.admit(burst, burst.end_ns)
        expected = tracker.advance([burst], BUDGET)
        for other in others:
            other.admit(burst, burst.end_ns)
            got = other.advance([burst], BUDGET)
            assert got.error == expected.error
            for one, two in zip(_of(Pattern, [got]), _of(Pattern, [expected]), strict=True):
                assert (one.id, one.rate, one.rate_low) == (two.id, two.rate, two.rate_low)
                np.testing.assert_array_equal(one.states, two.states)
        if number in (0, 2, 5, 9, 20, 34):
            snapshot = unpack_start(pack_start(Start(1, tracker.snapshot()))).snapshot
            assert snapshot is not None
            others.append(Tracker(config))
            others[-1].load(snapshot)


@pytest.mark.parametrize(("columns", "rows", "order"), [(16, 16, 264), (20, 16, 328)])
def test_closed_loop_in_the_yard(columns: int, rows: int, order: int) -> None:
    """Three sweeps of 256 or 320 elements and phantoms on a still scene give at least 95 % of the best rate there is.

    And as much as the dense filter gives, to 1 %.
    """
    scene = yard((Still(lane(0.0)[0]),), shadow_db=60.0, snr_db=-8.0, columns=columns, rows=rows)
    scenario = Scenario("still", "nothing moves", TestbedConfig(scene, SoundingConfig("hadamard"), 64))
    config = configure(parse(scenario.settings()), Path())
    reached = []
    for sweeps_from in (0, None):
        testbed = Testbed(scenario.testbed, seed=1)
        tracker = Tracker(replace(config, sweeps_from=sweeps_from))
        for number in range(-(-3 * order // 56)):
            burst = testbed.next_burst(number * testbed.burst_ns)
            tracker.admit(burst, burst.end_ns)
            for event in tracker.advance([burst], BUDGET).events:
                if isinstance(event, Pattern):
                    testbed.apply(event.id, event.states)
        reached.append(testbed.report(0))
    _, best = best_pattern(reached[0].channel, reached[0].states, 1000)
    assert reached[0].rate > 0.95 * best
    assert reached[0].rate > 0.99 * reached[1].rate
