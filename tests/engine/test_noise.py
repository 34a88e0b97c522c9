"""Noise power, from outside the delay basis and from repeated patterns."""

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from tracker.engine import panel
from tracker.engine.estimation import noise
from tracker.engine.estimation.delay import delay_basis


def _complex(rng: np.random.Generator, shape: tuple[int, ...]) -> NDArray[np.complex128]:
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2))


def test_outside_the_basis_there_is_noise_alone() -> None:
    """Whatever the channel, the estimate lies within the χ² band of the noise of each receiver."""
    rng = np.random.default_rng(1)
    basis = delay_basis(256, 64, 128, 16, 1)
    frames, power = 64, np.array([0.5, 3.0])
    channel = 40 * _complex(rng, (frames, 2, basis.shape[1])) @ basis.T
    heard = channel + np.sqrt(power)[:, None] * _complex(rng, (frames, 2, 128))
    found = noise.outside(heard, heard @ basis.conj())
    degrees = 2 * frames * (128 - basis.shape[1])
    low, high = scipy.stats.chi2.ppf([0.0005, 0.9995], degrees) / degrees
    assert ((low < found / power) & (found / power < high)).all()


def test_repeats_differ_by_noise_alone() -> None:
    """Frames that repeat a pattern give the noise without a model (common practice: sound each pattern twice)."""
    rng = np.random.default_rng(2)
    states = np.repeat(rng.choice([-1, 1], (40, 16)), 3, axis=0)
    channel = np.repeat(5 * _complex(rng, (40, 2, 8)), 3, axis=0)
    power, degrees = noise.repeats(panel.pack(states), channel + 0.3 * _complex(rng, channel.shape))
    assert degrees == 80
    low, high = 0.09 * scipy.stats.chi2.ppf([0.0005, 0.9995], 2 * 80 * 8) / (2 * 80 * 8)
    assert ((low < power) & (power < high)).all()


def test_nothing_repeated_says_nothing() -> None:
    """Without a repeat there are no degrees of freedom and no claim."""
    states = np.array([[1, -1, 1], [1, 1, 1], [-1, -1, 1]])
    _, degrees = noise.repeats(panel.pack(states), np.ones((3, 1, 4), dtype=np.complex128))
    assert degrees == 0


def test_running_estimate_converges_and_goes_on_from_a_snapshot() -> None:
    """The running mean weighs by frames, and a copy goes on bit by bit."""
    estimate = noise.NoiseEstimate(1)
    assert not estimate.known
    estimate.update(np.array([1.0]), 10, 1)
    estimate.update(np.array([3.0]), 30, 1)
    np.testing.assert_allclose(estimate.power, [2.5])
    copy = noise.NoiseEstimate(1)
    copy.load(estimate.snapshot())
    for other in (estimate, copy):
        other.update(np.array([7.0]), 3, 1)
    assert np.array_equal(copy.power, estimate.power)


def test_a_jump_of_the_noise_is_taken_at_once() -> None:
    """Chance leaves the average alone; a noise of four times the power is believed with the burst that shows it."""
    estimate = noise.NoiseEstimate(2)
    for _ in range(100):
        estimate.update(np.array([1.0, 1.0]), 64, 6400)
    estimate.update(np.array([1.05, 4.0]), 64, 6400)
    assert abs(estimate.power[0] - 1.0) < 0.01
    assert estimate.power[1] == 4.0
