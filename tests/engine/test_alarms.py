"""Alarms of the whole engine: a still link, something happens, the alarm says what and the estimate recovers."""

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Elements
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.events import Alarm, Mode, State
from tracker.engine.panel import pack
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker

ELEMENTS, TONES, FRAMES = 15, 32, 16
FRAME_NS = 35_714
CHANGE_AT = 250
Complex = NDArray[np.complex128]


class Link:
    """A still link, in units of the noise, sounded with random patterns."""

    def __init__(self) -> None:
        self.rng = np.random.default_rng(8)
        self.basis = delay_basis(48, 8, TONES, 8, 1)
        self.direct = 2.0 * self.gaussian(self.basis.shape[1]) @ self.basis.T
        self.surface = self.gaussian(ELEMENTS, self.basis.shape[1]) @ self.basis.T
        self.noise = np.ones(TONES)
        self.late = False
        self._shown = np.ones(ELEMENTS)
        self.tracker = Tracker(
            Config(
                receivers=1,
                delay=self.basis,
                aperture=Elements(ELEMENTS),
                time_constant_s=0.2,
                every_bursts=1 << 30,
            )
        )
        self.number = 0

    def gaussian(self, *shape: int) -> Complex:
        return np.asarray((self.rng.normal(size=shape) + 1j * self.rng.normal(size=shape)) / np.sqrt(2))

    def play(self, blocks: int) -> tuple[list[Alarm], State]:
        """Play blocks; return the alarms and the last state."""
        alarms = []
        for _ in range(blocks):
            told = self.rng.choice([-1.0, 1.0], (FRAMES, ELEMENTS))
            shown = np.concatenate([self._shown[None], told[:-1]]) if self.late else told
            self._shown = told[-1]
            heard = self.direct + shown @ self.surface + self.noise * self.gaussian(FRAMES, TONES)
            burst = Burst(
                run=1,
                seq=self.number,
                t_ns=self.number * FRAMES * FRAME_NS,
                dt_ns=FRAME_NS,
                elements=ELEMENTS,
                patterns=pack(told.astype(np.int8)),
                response=heard[:, None].astype(np.complex64),
                keep=np.ones(FRAMES, dtype=np.bool_),
            )
            self.number += 1
            self.tracker.admit(burst, burst.end_ns)
            for event in self.tracker.advance([burst], Steps(5)).events:
                if isinstance(event, Alarm):
                    alarms.append(event)
                elif isinstance(event, State):
                    state = event
        return alarms, state


def _block(link: Link) -> None:
    link.direct = 0.1 * link.direct


def _turn(link: Link) -> None:
    link.direct, link.surface = np.exp(0.8j) * link.direct, np.exp(0.8j) * link.surface


def _weaken(link: Link) -> None:
    link.direct, link.surface = 0.7 * link.direct, 0.7 * link.surface


def _raise_noise(link: Link) -> None:
    link.noise = 1.4 * link.noise


def _interfere(link: Link) -> None:
    link.noise = np.where(np.arange(TONES) == 20, 5.0, 1.0)


def _delay(link: Link) -> None:
    turn = np.exp(-2j * np.pi * 0.7 * np.arange(TONES) / 48)
    link.direct, link.surface = link.direct * turn, link.surface * turn


def _be_late(link: Link) -> None:
    link.late = True


CASES = [
    (_block, "direct-path", "renew direct path"),
    (_turn, "phase", "turn"),
    (_weaken, "gain", "amplify"),
    (_raise_noise, "noise", "none"),
    (_interfere, "interference", "none"),
    (_delay, "timing", "reacquire"),
    (_be_late, "mismatch", "leave out frames"),
]


@pytest.mark.parametrize(("happen", "kind", "action"), CASES, ids=[kind for _, kind, _ in CASES])
def test_alarm_says_what_happened(happen, kind: str, action: str) -> None:  # type: ignore[no-untyped-def]
    """One alarm within 160 frames, of the right kind and action, dated to the change within 16 blocks; none before."""
    link = Link()
    assert link.play(CHANGE_AT)[0] == []
    happen(link)
    alarms, _ = link.play(10)
    assert [(alarm.kind, alarm.action) for alarm in alarms] == [(kind, action)]
    changed_ns = CHANGE_AT * FRAMES * FRAME_NS
    assert changed_ns - 16 * FRAMES * FRAME_NS <= alarms[0].since_ns <= alarms[0].t_ns
    assert alarms[0].statistic > alarms[0].threshold > 0.0


@pytest.mark.parametrize("happen", [_block, _turn, _weaken])
def test_what_can_be_mended_is_mended_at_once(happen) -> None:  # type: ignore[no-untyped-def]
    """Four blocks after the alarm the innovations are as they were before, within 15 %."""
    link = Link()
    before = link.play(CHANGE_AT)[1].innovation[0]
    happen(link)
    link.play(10)
    ratios = [link.play(1)[1].innovation[0] for _ in range(20)]
    assert np.mean(ratios) == pytest.approx(before, rel=0.15)


def test_frames_under_wrong_patterns_do_no_harm() -> None:
    """When the panel obeys again the estimate is what it was, and the tracker tracks: innovations within 20 %."""
    link = Link()
    before = link.play(CHANGE_AT)[1].innovation[0]
    link.late = True
    alarms, _ = link.play(1)
    more, _ = link.play(1)
    assert [alarm.kind for alarm in alarms + more] == ["mismatch"]
    link.late = False
    ratios = [link.play(1)[1].innovation[0] for _ in range(20)]
    assert np.mean(ratios) == pytest.approx(before, rel=0.2)
    assert link.tracker.mode is Mode.TRACKING


def test_snapshot_amid_a_suspicion_goes_on_bit_by_bit() -> None:
    """A tracker restored right after the change raises the same alarm as the one that went on."""
    link = Link()
    link.play(CHANGE_AT)
    _block(link)
    link.play(1)
    state, rng = link.tracker.snapshot(), link.rng.bit_generator.state
    number = link.number
    first = link.play(12)
    link.tracker.load(state)
    link.rng.bit_generator.state, link.number = rng, number
    assert link.play(12) == first
