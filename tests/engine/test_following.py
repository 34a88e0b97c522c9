"""Following: offsets found, phases kept, lock judged."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine import panel
from tracker.engine.oscillators.acquisition import find_offset
from tracker.engine.oscillators.following import Following, Lock
from tracker.engine.oscillators.phases import Overlap, PhaseLoops

FRAME_S = 1 / 28_000
FRAMES, ELEMENTS, DELAYS = 64, 32, 6


def _gaussian(rng: np.random.Generator, *shape: int) -> NDArray[np.complex128]:
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2))


class Link:
    """A small link whose two paths turn as they are told; it knows its channel, the follower is given it."""

    def __init__(self, seed: int) -> None:
        self.rng = np.random.default_rng(seed)
        self.direct = 2.0 * _gaussian(self.rng, DELAYS)
        self.elements = 0.5 * _gaussian(self.rng, ELEMENTS, DELAYS)
        self.frame = 0

    def burst(
        self, direct_hz: float, surface_hz: float, reference_every: int = 8
    ) -> tuple[NDArray[np.uint8], NDArray[np.complex128], NDArray[np.complex128], NDArray[np.int64]]:
        """Sound a burst: patterns, outputs, surface model, times."""
        states = self.rng.choice([-1.0, 1.0], (FRAMES, ELEMENTS))
        states[::reference_every] = 1.0
        number = np.arange(self.frame, self.frame + FRAMES)
        self.frame += FRAMES
        time_s = number * FRAME_S
        surface = states @ self.elements
        heard = np.exp(2j * np.pi * direct_hz * time_s)[:, None] * self.direct
        heard = heard + np.exp(2j * np.pi * surface_hz * time_s)[:, None] * surface
        heard = heard + _gaussian(self.rng, FRAMES, DELAYS)
        return panel.pack(states), heard, surface, np.round(time_s * 1e9).astype(np.int64)


@pytest.mark.parametrize("offset_hz", [-990.0, -410.0, 0.0, 280.0, 940.0])
def test_offset_is_found_without_a_model(offset_hz: float) -> None:
    """A reference in every 8th frame shows any offset up to ±1 kHz within a few of its own standard deviations."""
    patterns, heard, _, time_ns = Link(1).burst(offset_hz, offset_hz)
    found = find_offset(patterns, heard, time_ns / 1e9, 1000.0)
    assert found is not None
    assert abs(found.hz - offset_hz) < 4 * found.spread_hz
    assert found.spread_hz < 40


def test_offset_reaches_the_cramer_rao_bound() -> None:
    """From repeats alone the error is within 1.3 of the bound 6 / (snr n (n² − 1) T² (2π)²) (Rife & Boorstyn 1974)."""
    rng = np.random.default_rng(2)
    amplitude, errors = 1.5 * _gaussian(rng, DELAYS), []
    time_s = np.arange(FRAMES) * FRAME_S
    patterns = np.zeros((FRAMES, 4), dtype=np.uint8)
    for _ in range(200):
        heard = np.exp(2j * np.pi * 123.4 * time_s)[:, None] * amplitude + _gaussian(rng, FRAMES, DELAYS)
        found = find_offset(patterns, heard, time_s, 1000.0)
        assert found is not None
        errors.append(found.hz - 123.4)
    snr = float((np.abs(amplitude) ** 2).sum())
    bound = math.sqrt(6 / (snr * FRAMES * (FRAMES**2 - 1) * FRAME_S**2)) / (2 * np.pi)
    assert bound * 0.8 < float(np.std(errors)) < bound * 1.3


def test_nothing_repeated_and_no_model_shows_nothing() -> None:
    """Without repeats and without a model no offset is claimed."""
    rng = np.random.default_rng(3)
    patterns = np.arange(64, dtype=np.uint8)[:, None]
    assert find_offset(patterns, _gaussian(rng, 64, 3), np.arange(64) * FRAME_S, 1000.0) is None


def test_slow_frames_bound_what_can_be_told() -> None:
    """At 20 frames/s nothing beyond ±10 Hz is claimed, whatever the range asked for."""
    rng = np.random.default_rng(4)
    time_s = np.arange(40) * 0.05
    heard = np.exp(2j * np.pi * 3.0 * time_s)[:, None] * np.full(4, 2.0) + _gaussian(rng, 40, 4)
    found = find_offset(np.zeros((40, 1), dtype=np.uint8), heard, time_s, 1000.0)
    assert found is not None
    assert found.hz == pytest.approx(3.0, abs=0.1)


def test_both_paths_are_followed_each_with_its_rate() -> None:
    """With 300 Hz common and 30 Hz between the paths, both rates come out within 3 Hz and the lock is gained."""
    link, following = Link(5), Following(patience=100)
    stand = np.array(link.direct)
    for _ in range(60):
        patterns, heard, surface, time_ns = link.burst(300.0, 330.0)
        following.begin(time_ns)
        turned = following.turn(patterns, heard, stand, surface, time_ns, 1.0)
        stand = turned.direct
    rates = following.loops.state[[1, 3]] / (2 * np.pi)
    assert following.lock is Lock.LOCKED
    np.testing.assert_allclose(rates, [300.0, 330.0], atol=3.0)
    assert following.quality == pytest.approx(1.0, abs=0.1)


def test_turned_frames_stand_still() -> None:
    """After turning back, the frames are surface plus direct standing still: what is left has unit power (χ² band)."""
    link, following = Link(6), Following(patience=100)
    stand, left = np.array(link.direct), []
    for number in range(60):
        patterns, heard, surface, time_ns = link.burst(-200.0, -180.0)
        following.begin(time_ns)
        turned = following.turn(patterns, heard, stand, surface, time_ns, 1.0)
        stand = turned.direct
        if number >= 20:
            left.append(np.mean(np.abs(turned.outputs - surface - turned.direct) ** 2))
    # Four phases fitted a burst take 4 of its 2 · 64 · 6 real degrees; the band is five standard errors wide.
    assert np.mean(left) == pytest.approx(1 - 2 / (FRAMES * DELAYS), abs=5 / math.sqrt(40 * FRAMES * DELAYS))


def test_lead_says_where_the_direct_path_will_stand() -> None:
    """The phase between the paths one burst ahead is predicted to 0.15 rad."""
    link, following = Link(7), Following(patience=100)
    stand = np.array(link.direct)
    for _ in range(60):
        patterns, heard, surface, time_ns = link.burst(0.0, 35.0)
        following.begin(time_ns)
        stand = following.turn(patterns, heard, stand, surface, time_ns, 1.0).direct
    ahead_ns = int(time_ns[-1]) + round(64 * FRAME_S * 1e9)
    stands = np.angle(np.vdot(link.direct, stand))  # of the direct path against the surface's
    expected = -2 * np.pi * 35.0 * ahead_ns / 1e9
    error = (stands + following.lead(ahead_ns) - expected + np.pi) % (2 * np.pi) - np.pi
    assert abs(error) < 0.15


def test_lock_is_lost_and_gained_again() -> None:
    """Frames of another channel lose the lock and are left out; when the channel returns, so does the lock."""
    link, other, following = Link(8), Link(9), Following(patience=100_000)
    stand = np.array(link.direct)
    for _ in range(20):
        patterns, heard, surface, time_ns = link.burst(100.0, 100.0)
        following.begin(time_ns)
        stand = following.turn(patterns, heard, stand, surface, time_ns, 1.0).direct
    other.frame = link.frame
    lost = False
    for _ in range(10):
        patterns, heard, _, time_ns = other.burst(100.0, 100.0)
        following.begin(time_ns)
        turned = following.turn(patterns, heard, stand, panel.unpack(patterns, ELEMENTS) @ link.elements, time_ns, 1.0)
        stand, lost = turned.direct, lost or turned.lost
    assert lost
    assert str(following.lock) == "lost"
    model = panel.unpack(patterns, ELEMENTS) @ link.elements + turned.direct
    np.testing.assert_allclose(turned.outputs, model, atol=1e-9)
    link.frame = other.frame
    for _ in range(10):
        patterns, heard, surface, time_ns = link.burst(100.0, 100.0)
        following.begin(time_ns)
        stand = following.turn(patterns, heard, stand, surface, time_ns, 1.0).direct
    assert str(following.lock) == "locked"


def test_a_step_of_gain_is_taken_with_the_burst_that_shows_it() -> None:
    """When all grows by half, the follower says so at once, to 5 %, and not a second time."""
    link, following = Link(12), Following(patience=100)
    stand, gains = np.array(link.direct), []
    for number in range(30):
        if number == 20:
            link.direct, link.elements = 1.5 * link.direct, 1.5 * link.elements
        patterns, heard, surface, time_ns = link.burst(20.0, 25.0)
        surface = surface / 1.5 if number == 20 else surface  # the estimate does not know yet
        following.begin(time_ns)
        turned = following.turn(patterns, heard, stand, surface, time_ns, 1.0)
        stand = turned.direct
        gains.append(turned.gain)
    assert gains[20] == pytest.approx(1.5, rel=0.05)
    assert all(gain == 1.0 for number, gain in enumerate(gains) if number != 20)


def test_a_burst_whose_phase_slips_is_no_step_of_gain() -> None:
    """Frames turned to and fro by 1.35 rad show the model at cos 1.35 = 0.22 of its amplitude, but at all its power."""
    link, following = Link(9), Following(ELEMENTS + 1)
    stand, gains = np.array(link.direct), []
    for number in range(22):
        patterns, heard, surface, time_ns = link.burst(0.0, 0.0)
        if number == 20:
            heard *= np.exp(1.35j * (-1.0) ** np.arange(FRAMES))[:, None]
        following.begin(time_ns)
        turned = following.turn(patterns, heard, stand, surface, time_ns, 1.0)
        stand = turned.direct
        gains.append(turned.gain)
    assert gains == [1.0] * 22


def test_loops_are_a_kalman_filter_when_phases_are_small() -> None:
    """The variance that the loops claim for the phase is what repeated runs show (within 25 %, 300 runs)."""
    rng = np.random.default_rng(10)
    time_s = np.asarray((np.arange(FRAMES) - (FRAMES - 1) / 2) * FRAME_S)
    direct, surface = 1.0 * _gaussian(rng, DELAYS), 2.0 * _gaussian(rng, FRAMES, DELAYS)
    errors, claimed = [], 0.0
    for _ in range(300):
        loops = PhaseLoops()
        loops.covariance = np.diag([0.05, 1.0, 0.05, 1.0])
        truth = np.sqrt(np.diag(loops.covariance)) * rng.normal(size=4)
        heard = _gaussian(rng, FRAMES, DELAYS)
        heard += np.exp(1j * (truth[0] + truth[1] * time_s))[:, None] * direct
        heard += np.exp(1j * (truth[2] + truth[3] * time_s))[:, None] * surface
        loops.measure(Overlap.of(heard, direct, surface), time_s, 1.0)
        errors.append(loops.state - truth)
        claimed = float(loops.covariance[2, 2])
    assert np.var(np.array(errors)[:, 2]) == pytest.approx(claimed, rel=0.25)


def test_snapshot_goes_on_bit_by_bit() -> None:
    """A restored follower gives the same turned frames."""
    link, following = Link(11), Following(patience=100)
    stand = np.array(link.direct)
    for _ in range(10):
        patterns, heard, surface, time_ns = link.burst(50.0, 60.0)
        following.begin(time_ns)
        stand = following.turn(patterns, heard, stand, surface, time_ns, 1.0).direct
    copy = Following(patience=100)
    copy.load(following.snapshot())
    patterns, heard, surface, time_ns = link.burst(50.0, 60.0)
    results = []
    for one in (following, copy):
        one.begin(time_ns)
        results.append(one.turn(patterns, heard, stand, surface, time_ns, 1.0).outputs)
    assert np.array_equal(results[0], results[1])
