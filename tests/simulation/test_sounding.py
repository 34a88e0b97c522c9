"""Patterns that frames sound."""

import numpy as np
import pytest

from tracker.engine.orthogonal.hadamard import hadamard_order
from tracker.simulation.sounding import Sounder, SoundingConfig, one_by_one, sweep


@pytest.mark.parametrize("elements", [7, 64, 100])
def test_a_sweep_sounds_every_coefficient_with_equal_variance(elements: int) -> None:
    """M patterns of a Hadamard sweep give each of N + 1 coefficients variance σ²/M (arXiv 1909.09440)."""
    patterns = sweep(elements, np.random.default_rng(1)).astype(float)
    regressors = np.column_stack([np.ones(len(patterns)), patterns])
    covariance = np.linalg.inv(regressors.T @ regressors)
    np.testing.assert_allclose(covariance, np.eye(elements + 1) / len(patterns), atol=1e-12)


def test_hadamard_beats_one_by_one_as_published() -> None:
    """N + 1 patterns each: σ²/(N + 1) against 2σ² for elements switched on one by one (arXiv 1909.09440).

    The published one-by-one switches elements off (0) and on (1); here 0 stands for state −1.
    """
    elements = 7  # 8 = N + 1 is an order
    rng = np.random.default_rng(2)
    sweeps = sweep(elements, rng).astype(float)
    switched = (one_by_one(elements) + 1) / 2
    truth = rng.standard_normal(elements + 1) + 1j * rng.standard_normal(elements + 1)
    errors = {}
    for name, patterns in (("hadamard", sweeps), ("one by one", switched)):
        regressors = np.column_stack([np.ones(len(patterns)), patterns])
        noise = rng.standard_normal((elements + 1, 20000, 2)) @ np.array([1, 1j]) / np.sqrt(2)
        estimate = np.linalg.solve(regressors, (regressors @ truth)[:, None] + noise)
        errors[name] = np.mean(np.abs(estimate - truth[:, None]) ** 2, axis=1)
    np.testing.assert_allclose(errors["hadamard"], 1 / (elements + 1), rtol=0.05)
    np.testing.assert_allclose(errors["one by one"][1:], 2.0, rtol=0.05)


def test_every_eighth_frame_is_the_pattern_in_force() -> None:
    """References come at even distances over bursts of any length, and follow what is in force."""
    sounder = Sounder(SoundingConfig(reference_every=8), 16, 1)
    first, second = np.ones(16, dtype=np.int8), -np.ones(16, dtype=np.int8)
    patterns = np.concatenate([sounder.take(12, first), sounder.take(20, second)])
    np.testing.assert_array_equal(patterns[[0, 8]], [first, first])
    np.testing.assert_array_equal(patterns[[16, 24]], [second, second])


def test_sweep_goes_on_from_burst_to_burst() -> None:
    """References set aside, every pattern of the sweep comes once before any comes again."""
    sounder = Sounder(SoundingConfig(reference_every=4), 20, 1)
    order = hadamard_order(21)
    frames = np.concatenate([sounder.take(11, np.ones(20, dtype=np.int8)) for _ in range(8)])
    swept = np.delete(frames, np.arange(0, 88, 4), axis=0)
    assert len(np.unique(swept[:order], axis=0)) == order
    np.testing.assert_array_equal(swept[order : order + 10], swept[:10])


def test_near_patterns_differ_from_the_one_in_force_by_the_share_asked_for() -> None:
    """Half of the frames sound patterns with a tenth of the elements turned, the rest random ones with half."""
    config = SoundingConfig("random", reference_every=0, near_share=0.5, near_flips=0.1)
    in_force = np.where(np.random.default_rng(3).random(400) < 0.5, 1, -1).astype(np.int8)
    turned = np.mean(Sounder(config, 400, 1).take(1000, in_force) != in_force, axis=1)
    near = turned < 0.3
    assert np.mean(near) == pytest.approx(0.5, abs=0.06)
    assert turned[near].mean() == pytest.approx(0.1, abs=0.005)
    assert turned[~near].mean() == pytest.approx(0.5, abs=0.005)


def test_same_seed_gives_the_same_patterns() -> None:
    """Patterns are a function of seed and calls."""
    config = SoundingConfig("hadamard", near_share=0.3)
    in_force = np.ones(30, dtype=np.int8)
    taken = [Sounder(config, 30, seed).take(50, in_force) for seed in (1, 1, 2)]
    np.testing.assert_array_equal(taken[0], taken[1])
    assert np.any(taken[0] != taken[2])
