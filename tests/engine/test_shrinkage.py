"""Shrinkage: empty delay directions are taken back, full ones left alone."""

import numpy as np
import pytest

from tracker.engine.estimation.shrinkage import shrink


def _estimate(rng: np.random.Generator, truth: np.ndarray, posterior: float, prior: float) -> np.ndarray:
    """Make what an estimator with the given prior and posterior variance would give: a shrunken noisy view."""
    data = posterior * prior / (prior - posterior)
    noise = np.sqrt(data / 2) * (rng.normal(size=truth.shape) + 1j * rng.normal(size=truth.shape))
    return np.asarray((1 - posterior / prior) * (truth + noise))


def test_low_rank_truth_is_found_in_noise() -> None:
    """One path fills one direction of twelve: shrinking takes most of the error away."""
    rng = np.random.default_rng(1)
    path = np.exp(2j * np.pi * rng.uniform(size=(256, 1)))
    delay = rng.normal(size=(1, 12)) + 1j * rng.normal(size=(1, 12))
    truth = 0.1 * path @ delay
    estimate = _estimate(rng, truth, 0.01, 0.05)
    before = np.mean(np.abs(estimate - truth) ** 2)
    after = np.mean(np.abs(shrink(estimate, 0.01, 0.05) - truth) ** 2)
    assert after < 0.25 * before


def test_full_truth_loses_nothing() -> None:
    """Where every direction has the prior's variance, the estimate was best already and stays within 2 %."""
    rng = np.random.default_rng(2)
    truth = np.sqrt(0.05 / 2) * (rng.normal(size=(400, 8)) + 1j * rng.normal(size=(400, 8)))
    estimate = _estimate(rng, truth, 0.01, 0.05)
    before = np.mean(np.abs(estimate - truth) ** 2)
    assert np.mean(np.abs(shrink(estimate, 0.01, 0.05) - truth) ** 2) < 1.02 * before


def test_risk_is_that_of_the_best_linear_estimate() -> None:
    """With known variances the best linear risk is Σ_q a_q d/(a_q + d) (Wiener); shrinking comes within 15 % of it."""
    rng = np.random.default_rng(3)
    variances = np.array([0.05, 0.04, 0.01, 0.002, 0.0005, 0.0, 0.0, 0.0])
    posterior, prior = 0.008, 0.05
    data = posterior * prior / (prior - posterior)
    risk = []
    for _ in range(20):
        shape = (256, variances.size)
        truth = np.sqrt(variances / 2) * (rng.normal(size=shape) + 1j * rng.normal(size=shape))
        found = shrink(_estimate(rng, truth, posterior, prior), posterior, prior)
        risk.append(np.mean(np.abs(found - truth) ** 2))
    assert np.mean(risk) == pytest.approx(np.mean(variances * data / (variances + data)), rel=0.15)


def test_nothing_is_strengthened() -> None:
    """A direction stronger than the prior granted is left as estimated: what a sounded pattern gives is known well."""
    rng = np.random.default_rng(4)
    truth = np.sqrt(0.4 / 2) * (rng.normal(size=(400, 3)) + 1j * rng.normal(size=(400, 3)))
    estimate = _estimate(rng, truth, 0.01, 0.05)
    np.testing.assert_allclose(shrink(estimate, 0.01, 0.05), estimate, atol=1e-12)


def test_without_data_nothing_is_done() -> None:
    """An estimate that knows nothing yet is handed back as it is."""
    estimate = np.ones((4, 2), dtype=complex)
    assert np.array_equal(shrink(estimate, 0.05, 0.05), estimate)
