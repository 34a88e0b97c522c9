"""The engine through its front door: bursts in, events out."""

import warnings
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine import panel
from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Columns, Elements, Tiles
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.events import Alarm, Cause, Event, Mode, Pattern, State
from tracker.engine.refusal import Reason, Refused
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.flips import Effort, optimize
from tracker.engine.search.rate import rate
from tracker.engine.tracker import Tracker

ELEMENTS, TONES, FRAMES, FRAME_NS = 32, 24, 16, 35_714
BASIS = delay_basis(48, 12, TONES, 6, 1)
START_NS = 1_700_000_000_000_000_000
BUDGET = Steps(200)


class Link:
    """A link of few paths with known channel, in units of the noise."""

    def __init__(self, seed: int, receivers: int = 1, signal: float = 0.25) -> None:
        self.rng = np.random.default_rng(seed)
        self.receivers = receivers
        self.run, self.seq, self.t_ns = 1, 0, START_NS
        self.renew(signal)

    def renew(self, signal: float = 0.25) -> None:
        """Draw another channel: two paths by the surface, one direct."""
        phases = np.exp(2j * np.pi * self.rng.random((2, ELEMENTS, self.receivers, 1)))
        delays = self._gaussian(2, 1, self.receivers, BASIS.shape[1]) * np.array([1.0, 0.3])[:, None, None, None]
        self.surface = np.ascontiguousarray(signal * (phases * delays).sum(axis=0))
        self.direct = 2.0 * signal * self._gaussian(self.receivers, BASIS.shape[1])

    @property
    def channel(self) -> Channel:
        """The channel itself."""
        return Channel(BASIS, self.direct, self.surface)

    def best(self) -> float:
        """Rate with the channel known exactly."""
        return optimize(self.channel, None, panel.Limits(), Steps(2000), Effort.THOROUGH).rate

    def burst(self, pattern_id: int | None = None, shown: NDArray[np.int8] | None = None) -> Burst:
        """Sound random patterns, and the one shown in every fourth frame."""
        states = self.rng.choice([-1.0, 1.0], (FRAMES, ELEMENTS))
        if shown is not None:
            states[::4] = shown
        reflected = np.tensordot(states, self.surface, axes=1)
        heard = (self.direct + reflected) @ BASIS.T + self._gaussian(FRAMES, self.receivers, TONES)
        burst = Burst(
            run=self.run,
            seq=self.seq,
            t_ns=self.t_ns,
            dt_ns=FRAME_NS,
            elements=ELEMENTS,
            patterns=panel.pack(states),
            response=heard.astype(np.complex64),
            keep=np.ones(FRAMES, dtype=bool),
            pattern_id=pattern_id,
        )
        self.seq += 1
        self.t_ns += FRAMES * FRAME_NS
        return burst

    def _gaussian(self, *shape: int) -> NDArray[np.complex128]:
        return np.asarray((self.rng.normal(size=shape) + 1j * self.rng.normal(size=shape)) / np.sqrt(2))


def _config(**changes: Any) -> Config:
    receivers = changes.pop("receivers", 1)
    return replace(Config(receivers, BASIS, Elements(ELEMENTS), time_constant_s=0.2), **changes)


def _feed(tracker: Tracker, burst: Burst) -> list[Event]:
    tracker.admit(burst, burst.end_ns)
    return tracker.advance([burst], BUDGET).events


def _run(tracker: Tracker, link: Link, bursts: int) -> list[Event]:
    """Feed bursts; the controller obeys."""
    events: list[Event] = []
    shown: tuple[int | None, NDArray[np.int8] | None] = (None, None)
    for _ in range(bursts):
        for event in _feed(tracker, link.burst(*shown)):
            events.append(event)
            if isinstance(event, Pattern):
                shown = (event.id, event.states)
    return events


def _patterns(events: list[Event]) -> list[Pattern]:
    return [event for event in events if isinstance(event, Pattern)]


def _states(events: list[Event]) -> list[State]:
    return [event for event in events if isinstance(event, State)]


def _alarms(events: list[Event]) -> list[Alarm]:
    return [event for event in events if isinstance(event, Alarm)]


@pytest.mark.parametrize("receivers", [1, 2])
@pytest.mark.parametrize("forgetting", ["resetting", "exponential"])
def test_the_pattern_is_found(receivers: int, forgetting: str) -> None:
    """After twenty sweeps the published pattern gives 0.97 of the rate with the channel known exactly."""
    link = Link(1, receivers)
    tracker = Tracker(_config(receivers=receivers, forgetting=forgetting))
    events = _run(tracker, link, 45)
    last = _patterns(events)[-1]
    assert rate(link.channel, last.states) >= 0.97 * link.best()
    assert tracker.mode is Mode.TRACKING


def test_fewer_frames_than_elements_give_a_useful_pattern() -> None:
    """One burst of 16 frames for 32 elements brings half of what can be gained over a random pattern, in the mean."""
    gained = []
    for seed in range(20):
        link = Link(seed, signal=0.6)
        [first] = _patterns(_feed(Tracker(_config()), link.burst()))
        random = np.mean([rate(link.channel, link.rng.choice([-1, 1], ELEMENTS)) for _ in range(50)])
        gained.append((rate(link.channel, first.states) - random) / (link.best() - random))
        assert first.cause is Cause.FIRST
    assert np.mean(gained) > 0.5


def test_every_pattern_says_what_it_is_worth() -> None:
    """Ids count from one; before ≤ rate ≤ bound, low ≤ rate; steps and the burst it rests on are given."""
    events = _run(Tracker(_config()), Link(2), 30)
    patterns = _patterns(events)
    assert [pattern.id for pattern in patterns] == list(range(1, len(patterns) + 1))
    for pattern in patterns:
        assert pattern.rate_low <= pattern.rate <= pattern.rate_bound
        assert pattern.rate_before <= pattern.rate
        assert set(np.unique(pattern.states)) <= {-1, 1}
    assert patterns[0].seq == 0


def test_measured_rate_is_the_true_rate() -> None:
    """The rate measured under the pattern in use is its true rate within 3 %, over the last 40 bursts."""
    link = Link(3)
    events = _run(Tracker(_config()), link, 80)
    states = _states(events)[-40:]
    measured = np.mean([state.rate_measured for state in states if state.rate_measured is not None])
    assert measured == pytest.approx(rate(link.channel, _patterns(events)[-1].states), rel=0.03)


def test_noise_comes_out_in_its_own_unit() -> None:
    """The noise power on a tone is found within 3 %."""
    states = _states(_run(Tracker(_config()), Link(4), 40))
    assert states[-1].noise[0] == pytest.approx(1.0, rel=0.03)


def test_hold_resume_refresh_adopt_relearn() -> None:
    """Held nothing is published; refresh and adopt publish with cause operator; relearn begins afresh."""
    link, tracker = Link(5), Tracker(_config())
    _run(tracker, link, 20)
    tracker.hold()
    link.renew()
    assert not _patterns(_run(tracker, link, 10))
    assert tracker.mode is Mode.HELD
    tracker.resume()
    tracker.refresh()
    assert _patterns(_feed(tracker, link.burst()))[0].cause is Cause.OPERATOR
    chosen = link.rng.choice([-1, 1], ELEMENTS).astype(np.int8)
    tracker.adopt(chosen)
    [adopted] = _patterns(_feed(tracker, link.burst()))
    assert np.array_equal(adopted.states, chosen)
    assert adopted.cause is Cause.OPERATOR
    tracker.relearn()
    assert str(tracker.mode) == "acquiring"
    with pytest.raises(ValueError, match="32 elements"):
        tracker.adopt(np.ones(5, dtype=np.int8))


def test_losses_and_refusals_are_counted_and_told() -> None:
    """A gap is counted and raises an alarm; duplicates and refusals have their own counts."""
    link, tracker = Link(6), Tracker(_config())
    kept = link.burst()
    _feed(tracker, kept)
    link.burst()
    link.burst()
    [gap] = _alarms(_feed(tracker, link.burst()))
    assert (gap.kind, gap.statistic) == ("gap", 2.0)
    with pytest.raises(Refused) as caught:
        tracker.admit(kept, kept.end_ns)
    tracker.refuse(caught.value.reason)
    tracker.refuse(Reason.VERSION)
    state = _states(_feed(tracker, link.burst()))[-1]
    assert (state.bursts, state.frames, state.lost, state.duplicate, state.refused) == (3, 48, 2, 1, 1)


def test_frames_that_cannot_be_are_left_out() -> None:
    """Frames marked as not to be kept are counted and change nothing: the estimate is that of the others alone."""
    link = Link(7)
    burst = link.burst()
    spoilt = burst.response.copy()
    spoilt[3] = np.nan
    keep = np.ones(FRAMES, dtype=bool)
    keep[3] = False
    tracker, other = Tracker(_config()), Tracker(_config())
    state = _states(_feed(tracker, replace(burst, response=spoilt, keep=keep)))[0]
    _feed(other, replace(burst, keep=keep))
    assert (state.dropped_frames, state.frames) == (1, FRAMES - 1)
    assert np.isfinite(state.noise).all()
    following = link.burst()
    ours, theirs = _patterns(_feed(tracker, following)), _patterns(_feed(other, following))
    assert [pattern.rate for pattern in ours] == [pattern.rate for pattern in theirs]


def test_several_bursts_together_are_one_block() -> None:
    """Four bursts taken together give one state each, say so, and lead to about the same estimate as one by one."""
    link = Link(8)
    bursts = [link.burst() for _ in range(8)]
    one, together = Tracker(_config()), Tracker(_config())
    for burst in bursts:
        single = _feed(one, burst)
    for start in (0, 4):
        for burst in bursts[start : start + 4]:
            together.admit(burst, burst.end_ns)
        block = together.advance(bursts[start : start + 4], BUDGET).events
    states = _states(block)
    assert [state.seq for state in states] == [4, 5, 6, 7]
    assert all(state.together == 4 for state in states)
    assert states[-1].noise[0] == pytest.approx(_states(single)[-1].noise[0], rel=0.03)


def test_limits_of_the_panel_are_kept() -> None:
    """Stuck elements stay, tied ones agree, and no refresh changes more than allowed."""
    limits = panel.Limits(stuck={3: -1, 7: 1}, tied=((10, 11, 12),), most_changes=4)
    events = _run(Tracker(_config(limits=limits)), Link(9), 30)
    before = None
    for pattern in _patterns(events):
        assert pattern.states[3] == -1
        assert pattern.states[7] == 1
        assert len(set(pattern.states[[10, 11, 12]].tolist())) == 1
        if before is not None:
            assert np.count_nonzero(pattern.states != before) <= 4
        before = pattern.states


def test_a_sudden_change_is_noticed_and_learned() -> None:
    """Another channel raises an alarm within ten bursts, the next pattern has cause drift, and the rate comes back."""
    link, tracker = Link(10), Tracker(_config(false_alarm_s=600.0))
    _run(tracker, link, 250)
    link.renew()
    events = _run(tracker, link, 40)
    alarms = [index for index, event in enumerate(events) if isinstance(event, Alarm)]
    assert alarms
    states_before = len(_states(events[: alarms[0]]))
    assert states_before <= 10
    assert any(pattern.cause is Cause.DRIFT for pattern in _patterns(events))
    assert rate(link.channel, _patterns(events)[-1].states) >= 0.95 * link.best()


def test_a_restarted_controller_is_sent_the_pattern_again() -> None:
    """A new run hears of the pattern with its first burst; one that shows an old one is reminded after a while."""
    link, tracker = Link(11), Tracker(_config(least_gain=10.0))
    _run(tracker, link, 10)
    link.run, link.seq = 2, 0
    assert _patterns(_feed(tracker, link.burst()))
    reminded = [bool(_patterns(_feed(tracker, link.burst(pattern_id=1)))) for _ in range(80)]
    assert sum(reminded) == 2


def test_snapshot_goes_on_bit_by_bit() -> None:
    """A tracker restored mid-stream says the same from then on, bit by bit."""
    link, tracker = Link(12), Tracker(_config(bank=3, follow_phase=True))
    _run(tracker, link, 30)
    copy = Tracker(_config(bank=3, follow_phase=True))
    copy.load(tracker.snapshot())
    for _ in range(30):
        burst = link.burst()
        ours, theirs = _feed(tracker, burst), _feed(copy, burst)
        assert len(ours) == len(theirs)
        for mine, other in zip(ours, theirs, strict=True):
            if isinstance(mine, Pattern):
                assert isinstance(other, Pattern)
                assert np.array_equal(mine.states, other.states)
                assert (mine.rate, mine.rate_low, mine.steps) == (other.rate, other.rate_low, other.steps)
            else:
                assert mine == other


def test_few_tones_take_the_noise_from_repeats() -> None:
    """With as many delay directions as tones, frames that repeat the pattern in use measure the noise to 20 %."""
    few = 6
    basis = np.linalg.qr(np.exp(2j * np.pi * np.random.default_rng(0).random((few, few))))[0]
    rng = np.random.default_rng(13)
    surface = 0.3 * (rng.normal(size=(ELEMENTS, 1, few)) + 1j * rng.normal(size=(ELEMENTS, 1, few)))
    tracker = Tracker(Config(1, basis, Elements(ELEMENTS)))
    shown = np.ones(ELEMENTS)
    for seq in range(60):
        states = rng.choice([-1.0, 1.0], (FRAMES, ELEMENTS))
        states[::4] = shown
        noise = (rng.normal(size=(FRAMES, 1, few)) + 1j * rng.normal(size=(FRAMES, 1, few))) / np.sqrt(2)
        heard = np.tensordot(states, surface, axes=1) @ basis.T + 0.5 * noise
        burst = Burst(
            run=1,
            seq=seq,
            t_ns=START_NS + seq * FRAMES * FRAME_NS,
            dt_ns=FRAME_NS,
            elements=ELEMENTS,
            patterns=panel.pack(states),
            response=heard.astype(np.complex64),
            keep=np.ones(FRAMES, dtype=bool),
        )
        events = _feed(tracker, burst)
    assert _states(events)[-1].noise[0] == pytest.approx(0.25, rel=0.2)


def test_tiles_estimate_fewer_unknowns() -> None:
    """With tiles of two the tracker is ready after half a sweep, and serves a surface whose neighbours are alike."""
    link = Link(14)
    link.surface = np.repeat(link.surface[::2], 2, axis=0)
    tracker = Tracker(_config(aperture=Tiles(16, 2, 1, 2)))
    events = _run(tracker, link, 45)
    assert rate(link.channel, _patterns(events)[-1].states) >= 0.97 * link.best()


def test_a_sudden_change_is_noticed_in_a_complex_basis() -> None:
    """With complex columns a new channel raises an alarm too, and nothing complex is taken for real on the way."""
    columns = np.linalg.qr(np.exp(2j * np.pi * np.random.default_rng(0).random((ELEMENTS, ELEMENTS))))[0]
    link = Link(15)
    tracker = Tracker(_config(aperture=Columns(columns, np.ones(ELEMENTS)), false_alarm_s=600.0))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        _run(tracker, link, 250)
        link.renew()
        events = _run(tracker, link, 40)
    assert _alarms(events)
    assert rate(link.channel, _patterns(events)[-1].states) >= 0.95 * link.best()
