"""What innovations say: calibrated against what the covariance promises, the same in blocks of any size."""

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine.detection.innovation import INNOVATION, Innovations
from tracker.engine.estimation.filter import Surprise
from tracker.engine.estimation.rls import BlockRls, forgetting

SIZE, OUTPUTS = 24, 8
FRAME_S, TIME_CONSTANT_S = 1e-3, 0.2


def _play(block: int, moving: bool, frames: int = 6000) -> Innovations:
    """Play a link to a filter; return the statistics."""
    rng = np.random.default_rng(1)
    prior = np.full(SIZE, 0.3)
    rls = BlockRls(prior, OUTPUTS)
    innovations = Innovations(1, OUTPUTS)

    def gaussian(*shape: int) -> NDArray[np.complex128]:
        return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2))

    channel = np.sqrt(0.3) * gaussian(SIZE, OUTPUTS)
    decay = np.exp(-FRAME_S / TIME_CONSTANT_S)
    z = rng.choice([-1.0, 1.0], (frames, SIZE))
    z[:, 0] = 1.0
    y = np.empty((frames, OUTPUTS), dtype=np.complex128)
    for index in range(frames):
        if moving:
            channel = decay * channel + np.sqrt((1 - decay**2) * 0.3) * gaussian(SIZE, OUTPUTS)
        y[index] = z[index] @ channel + gaussian(OUTPUTS)
    for start in range(0, frames, block):
        rls.forget(*forgetting("resetting", block * FRAME_S, TIME_CONSTANT_S))
        innovation, white = rls.update(z[start : start + block], y[start : start + block])
        innovations.take(Surprise(innovation, white, rls.whitener.diagonal() ** -2.0))
        innovations.readings()
    return innovations


def test_a_channel_as_the_filter_has_it_is_as_uncertain_as_it_says() -> None:
    """A first-order Gauss-Markov channel, which the filter is the Kalman filter of, has a share of 1, to 15 %."""
    assert _play(1, moving=True).excess == pytest.approx(1.0, abs=0.15)


def test_a_channel_that_stands_still_is_known_better() -> None:
    """Where nothing moves, innovations exceed the noise by less than half of what the covariance says."""
    assert 0.0 <= _play(1, moving=False).excess < 0.5


def test_power_of_innovations_is_consistent() -> None:
    """Mean calibrated power over 100 blocks of 16 frames lies in the 95 % chi-square band about 1.

    With 2 × 16 × 8 degrees a block: 1 ± 1.96 √(2 / 25600), widened to three standard errors for what α may be off.
    """
    rng = np.random.default_rng(2)
    innovations = Innovations(1, OUTPUTS)
    powers = []
    for _ in range(100):
        white = (rng.normal(size=(16, OUTPUTS)) + 1j * rng.normal(size=(16, OUTPUTS))) / np.sqrt(2)
        innovations.take(Surprise(white, white, np.ones(16)))
        powers += [one.value for one in innovations.readings() if one.name == INNOVATION]
    assert np.mean(powers) == pytest.approx(1.0, abs=3 * np.sqrt(2 / 25_600))


def test_snapshot_goes_on_bit_by_bit() -> None:
    """Restored statistics give the same readings."""
    rng = np.random.default_rng(3)
    first, second = Innovations(1, OUTPUTS), Innovations(1, OUTPUTS)
    for number in range(20):
        white = rng.normal(size=(5, OUTPUTS)) + 1j * rng.normal(size=(5, OUTPUTS))
        surprise = Surprise(white, white, np.full(5, 0.8**-2))
        first.take(surprise)
        if number == 10:
            first.readings()
            second.load(first.snapshot())
        elif number > 10:
            second.take(surprise)
            assert second.readings() == first.readings()
        else:
            first.readings()
    assert second.excess == first.excess
