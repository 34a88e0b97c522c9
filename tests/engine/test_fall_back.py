"""A basis that no longer fits, through the engine's front door: the alarm says so, and elements take its place."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import ApertureBasis, Columns, Tiles
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.events import Alarm, Mode, Pattern, State
from tracker.engine.panel import pack
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.rate import rate
from tracker.engine.tracker import Outcome, Tracker
from tracker.simulation.best import best_pattern
from tracker.snapshots import Start, pack_start, unpack_start

COLUMNS, ROWS, SIZE, TONES, FRAMES = 8, 8, 10, 32, 16
ELEMENTS = COLUMNS * ROWS
FRAME_NS = 35_714
BEFORE = 250
Complex = NDArray[np.complex128]


class Link:
    """A link, in units of the noise, whose surface lies in a few columns until it is moved out of them."""

    def __init__(self, elements: int = ELEMENTS, seed: int = 4) -> None:
        self.rng = np.random.default_rng(seed)
        self.elements = elements
        self.basis = delay_basis(48, 8, TONES, 8, 1)
        self.columns = np.linalg.qr(self.gaussian(elements, SIZE))[0]
        self.direct = self.gaussian(1, self.basis.shape[1])
        self.surface = self.columns @ self.gaussian(SIZE, self.basis.shape[1]) * np.sqrt(elements / SIZE) / 4
        self.number = 0

    def gaussian(self, *shape: int) -> Complex:
        return np.asarray((self.rng.normal(size=shape) + 1j * self.rng.normal(size=shape)) / np.sqrt(2))

    def config(self, aperture: ApertureBasis | None = None) -> Config:
        learned = aperture or Columns(self.columns, np.ones(SIZE))
        return Config(1, self.basis, learned, time_constant_s=0.2, every_bursts=8)

    @property
    def channel(self) -> Channel:
        return Channel(self.basis, self.direct, self.surface[:, None])

    def move(self) -> None:
        """Bring the receivers where the columns do not reach."""
        self.surface = self.gaussian(self.elements, self.basis.shape[1]) / 4

    def burst(self) -> Burst:
        states = self.rng.choice([-1.0, 1.0], (FRAMES, self.elements))
        heard = (self.direct + states @ self.surface) @ self.basis.T + self.gaussian(FRAMES, TONES)
        self.number += 1
        return Burst(
            run=1,
            seq=self.number,
            t_ns=self.number * FRAMES * FRAME_NS,
            dt_ns=FRAME_NS,
            elements=self.elements,
            patterns=pack(states),
            response=heard[:, None].astype(np.complex64),
            keep=np.ones(FRAMES, dtype=np.bool_),
        )


def take(tracker: Tracker, burst: Burst) -> Outcome:
    tracker.admit(burst, burst.end_ns)
    return tracker.advance([burst], Steps(200))


def until_alarm(tracker: Tracker, link: Link) -> Alarm:
    """Play a still link, move it, and go on until there is an alarm."""
    for _ in range(BEFORE):
        assert not [event for event in take(tracker, link.burst()).events if isinstance(event, Alarm)]
    link.move()
    for _ in range(20):
        alarms = [event for event in take(tracker, link.burst()).events if isinstance(event, Alarm)]
        if alarms:
            return alarms[0]
    raise AssertionError("no alarm came")


def bursts_until_tracking(tracker: Tracker, link: Link) -> int:
    for number in range(1, 40):
        take(tracker, link.burst())
        if tracker.mode is Mode.TRACKING:
            return number
    raise AssertionError("tracking was not reached")


def test_elements_take_the_place_of_columns_that_do_not_fit() -> None:
    """The alarm `basis` names the action; the pattern is soon as good as the elements allow, which the columns do not.

    The mode is `reacquiring` until as many frames are in as there are elements.
    """
    link = Link()
    tracker = Tracker(link.config())
    alarm = until_alarm(tracker, link)
    assert (alarm.kind, alarm.action) == ("basis", "fall back to elements")
    assert tracker.mode is Mode.REACQUIRING
    assert bursts_until_tracking(tracker, link) == pytest.approx(-(-(ELEMENTS + 1) // FRAMES), abs=1)
    states, errors = None, []
    for _ in range(150):
        outcome = take(tracker, link.burst())
        errors.append(outcome.error)
        for event in outcome.events:
            assert not isinstance(event, Alarm)
            states = event.states if isinstance(event, Pattern) else states
    assert states is not None
    best = best_pattern(link.channel, None, 1000)[1]
    assert rate(link.channel, states) > 0.97 * best
    assert np.mean(errors[-50:]) < 1.5  # of the noise, which is 1

    # What columns could have made of it at best: least squares on the channel as it truly is.
    held = Channel(link.basis, link.direct, (link.columns @ (link.columns.conj().T @ link.surface))[:, None])
    assert rate(link.channel, best_pattern(held, None, 1000)[0]) < 0.8 * best


def test_relearn_goes_back_to_the_columns() -> None:
    """The operator's verb takes up the basis of the settings again: it acquires within as few frames as before."""
    link = Link()
    tracker = Tracker(link.config())
    until_alarm(tracker, link)
    link.surface = link.columns @ link.gaussian(SIZE, link.basis.shape[1])
    tracker.relearn()
    assert tracker.mode is Mode.ACQUIRING
    assert bursts_until_tracking(tracker, link) == 1  # 16 frames for 11 unknowns


@pytest.mark.parametrize("later", [0, 3, 20])
def test_a_snapshot_keeps_it(later: int) -> None:
    """Restored right after the alarm or later, through bytes, all goes on bit by bit, in elements."""
    link = Link()
    tracker = Tracker(link.config())
    until_alarm(tracker, link)
    for _ in range(later):
        take(tracker, link.burst())
    snapshot = unpack_start(pack_start(Start(1, tracker.snapshot()))).snapshot
    assert snapshot is not None
    other = Tracker(link.config())
    other.load(snapshot)
    for _ in range(30):
        burst = link.burst()
        expected, got = take(tracker, burst), take(other, burst)
        assert got.error == expected.error
        for one, two in zip(got.events, expected.events, strict=True):
            assert type(one) is type(two)
            if isinstance(one, Pattern) and isinstance(two, Pattern):
                assert (one.id, one.rate, one.rate_low) == (two.id, two.rate, two.rate_low)
                np.testing.assert_array_equal(one.states, two.states)
            elif isinstance(one, State):
                assert one == two


def test_tiles_and_large_panels_stay_as_they_are() -> None:
    """Plans for tiles never tell their elements apart; thousands of elements would take too long: both reacquire."""
    tiled = Link()
    tiles = Tiles(COLUMNS, ROWS, 2, 2)
    tiled.surface = tiles.surface(tiled.gaussian(tiles.size, tiled.basis.shape[1])) / 2
    alarm = until_alarm(Tracker(tiled.config(tiles)), tiled)
    assert (alarm.kind, alarm.action) == ("basis", "reacquire")
    link = Link(elements=1100)
    alarm = until_alarm(Tracker(replace(link.config(), every_bursts=1 << 30)), link)
    assert (alarm.kind, alarm.action) == ("basis", "reacquire")
