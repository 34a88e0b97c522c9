"""What element health is made of, each against a formula or a library of somebody else's."""

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import linalg, stats

from tracker.engine.estimation.rls import BlockRls, forgetting
from tracker.engine.health.answers import Answers
from tracker.engine.health.directions import directions
from tracker.engine.health.fresh import Posterior, Window
from tracker.engine.health.hypotheses import HEALTHY_SPREAD, NOTHING, PRIOR, WEAK_SHARE, WEAK_SPREAD, Beliefs
from tracker.engine.health.neighbours import Neighbours
from tracker.engine.orthogonal.hadamard import hadamard

Complex = NDArray[np.complex128]


def gaussian(rng: np.random.Generator, *shape: int) -> Complex:
    """Circular Gaussian of unit power."""
    return np.asarray((rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) * np.sqrt(0.5))


def posterior(rls: BlockRls, time_constant_s: float) -> Posterior:
    return Posterior(rls.coefficients, rls.variances, rls.prior, np.ones(1), time_constant_s)


@pytest.mark.parametrize("kind", ["resetting", "exponential"])
def test_a_window_shows_what_its_own_frames_show(kind: str) -> None:
    """After a sweep of another channel the view equals least squares over the newest sweep alone (scipy.linalg.lstsq).

    Its noise is 1/n for n orthogonal patterns (common practice: a Hadamard sweep averages every element n times).
    """
    rng, n, time_constant_s, elapsed_s = np.random.default_rng(1), 64, 0.1, 0.01
    sweep = hadamard(n).astype(np.float64)
    rls = BlockRls(np.full(n, 2.0), 3)
    frames = [sweep @ gaussian(rng, n, 3) + gaussian(rng, n, 3) for _ in range(2)]
    rls.update(sweep, frames[0])
    window = Window(kind, posterior(rls, time_constant_s))
    rls.forget(*forgetting(kind, elapsed_s, time_constant_s))
    rls.update(sweep, frames[1])
    window.add(posterior(rls, time_constant_s), n, elapsed_s)
    view = window.view(posterior(rls, time_constant_s))
    assert view is not None
    wanted, *_ = linalg.lstsq(sweep, frames[1])
    np.testing.assert_allclose(view.responses, wanted[1:], rtol=1e-9)
    np.testing.assert_allclose(view.noise, 1.0 / n, rtol=1e-9)


def test_beliefs_follow_from_bayes_and_gaussian_densities() -> None:
    """Probabilities equal prior times density of each hypothesis, by scipy.stats, on two directions."""
    rng, elements = np.random.default_rng(2), 12
    heard, mean = gaussian(rng, 2, elements), gaussian(rng, 2, elements)
    noise, residual = rng.uniform(0.05, 0.2, (2, elements)), rng.uniform(0.05, 0.3, (2, elements))
    power = np.array([1.0, 0.5])
    answers, beliefs = Answers(elements), Beliefs(elements)
    answers.take(heard, noise, power, 1.0)
    beliefs.look(answers, mean, residual, power)
    size = np.abs(mean) ** 2
    means = [mean, 0 * mean, WEAK_SHARE * mean, 0 * mean]
    variances = [
        residual + HEALTHY_SPREAD**2 * size,
        np.broadcast_to(NOTHING**2 * power[:, None], size.shape),
        WEAK_SHARE**2 * residual + WEAK_SPREAD**2 * size,
        np.broadcast_to(power[:, None], size.shape),
    ]
    weights = np.array(PRIOR)[:, None] * np.ones(elements)
    for hypothesis, (centre, variance) in enumerate(zip(means, variances, strict=True)):
        scale = np.sqrt((variance + noise) / 2.0)
        for part, middle in ((heard.real, centre.real), (heard.imag, centre.imag)):
            weights[hypothesis] *= stats.norm.pdf(part, middle, scale).prod(axis=0)
    np.testing.assert_allclose(beliefs.probabilities, weights / weights.sum(axis=0), rtol=1e-9)


def test_pure_noise_fills_no_direction() -> None:
    """The largest eigenvalue of noise lies at (1 + √(Q/N))² (Marchenko & Pastur 1967, from memory): none is taken for a
    signal, where three strong paths are, and only these.
    """
    rng, elements, delays = np.random.default_rng(3), 256, 16
    noise = gaussian(rng, elements, delays)
    largest = linalg.eigvalsh(noise.conj().T @ noise / elements)[-1]
    assert largest == pytest.approx((1.0 + np.sqrt(delays / elements)) ** 2, rel=0.1)
    assert directions(noise, 1, 1.0).kept.shape[1] == 1  # never less
    paths = gaussian(rng, 3, delays)
    found = directions(noise + 3.0 * gaussian(rng, elements, 3) @ paths, 1, 1.0)
    assert found.kept.shape[1] == 3
    # A response times what is kept lies on it: kept is the conjugate of the directions themselves.
    assert linalg.subspace_angles(found.kept.conj(), paths.T).max() < 0.2


def test_neighbours_predict_as_well_as_can_be() -> None:
    """On a field whose correlation falls by ρ a step along either side, the variance of an element given those around
    it is ((1 − ρ²) / (1 + ρ²))² of its power: the precision of a first-order autoregression is tridiagonal, with
    (1 + ρ²) / (1 − ρ²) on the diagonal (Rue & Held, Gaussian Markov Random Fields, 2005, from memory), and that of the
    field is the Kronecker product of two.
    """
    rng, side, fields = np.random.default_rng(4), 16, 40
    for correlation in (0.7, 0.4, 0.0):
        one = linalg.cholesky(correlation ** np.abs(np.subtract.outer(np.arange(side), np.arange(side))), lower=True)
        field = (one @ gaussian(rng, fields, side, side) @ one.T).reshape(fields, -1)
        neighbours = Neighbours(side, side)
        neighbours.fit(field, 0.0)
        inside = np.zeros((side, side), dtype=np.bool_)
        inside[1:-1, 1:-1] = True
        share = ((1 - correlation**2) / (1 + correlation**2)) ** 2
        told = neighbours.residual[:, inside.ravel()].mean()
        error = (np.abs(field - neighbours.predict(field)) ** 2)[:, inside.ravel()].mean()
        assert told == pytest.approx(share, rel=0.25)
        assert error == pytest.approx(share, rel=0.25)
        assert neighbours.power.mean() == pytest.approx(1.0, rel=0.15)


def test_what_an_element_answers_is_the_mean_of_what_was_heard() -> None:
    """Of a channel at rest, after n windows of equal noise, the answer lies about the truth with a variance of 1/n."""
    rng, elements, windows = np.random.default_rng(5), 2000, 8
    truth, answers = gaussian(rng, 1, elements), Answers(elements)
    noise = np.full((1, elements), 0.01)
    for _ in range(windows):
        changed = answers.take(truth + 0.1 * gaussian(rng, 1, elements), noise, np.ones(1), 1.0)
        assert not changed.any()
    error = np.abs(answers.mean - truth) ** 2
    assert error.mean() == pytest.approx(0.01 / windows, rel=0.15)


def test_an_answer_that_changes_is_noticed_and_forgotten() -> None:
    """Elements that fall silent are noticed at once, no others are; a window later the old answer is forgotten."""
    rng, elements = np.random.default_rng(6), 400
    truth, answers = gaussian(rng, 2, elements), Answers(elements)
    truth /= np.abs(truth)
    noise, power = np.full((2, elements), 0.02), np.ones(2)
    failed = np.zeros(elements, dtype=np.bool_)
    failed[[7, 70, 300]] = True
    told = []
    for window in range(12):
        # They fail in the middle of window 6.
        left = np.where(failed, 1.0 if window < 6 else 0.5 if window == 6 else 0.0, 1.0)
        heard = left * truth + np.sqrt(0.02) * gaussian(rng, 2, elements)
        told.append(answers.take(heard, noise, power, 1.0))
    assert np.array_equal(np.flatnonzero(np.any(told, axis=0)), np.flatnonzero(failed))
    assert np.array_equal(told[6] | told[7], failed)
    # Four windows or five of variance 0.02 are left to average over.
    assert (np.abs(answers.mean[:, failed]) ** 2).mean() < 0.02
