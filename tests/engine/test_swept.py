"""Sweeps with other patterns between them, against least squares solved at once and against the dense filter."""

import numpy as np
import pytest
import scipy.linalg
from numpy.typing import NDArray

from tests.engine.hadamard import cycle, packed
from tracker.engine.estimation.aperture import Elements
from tracker.engine.estimation.filter import Surprise
from tracker.engine.estimation.rls import BlockRls, forgetting
from tracker.engine.estimation.sounded import Sounded
from tracker.engine.orthogonal.cycle import SweepDetector
from tracker.engine.orthogonal.references import References
from tracker.engine.orthogonal.sweeps import SweepRls
from tracker.engine.orthogonal.swept import Swept

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


def _noise(rng: np.random.Generator, *shape: int) -> Complex:
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2))


class Link:
    """A filter that knows the beginning of its cycle, and the cycle."""

    def __init__(self, order: int, elements: int, prior: float, seed: int, direct: float = 1.0) -> None:
        self.rng = np.random.default_rng(seed)
        self.states = cycle(order, elements, self.rng)
        self.cycle = SweepDetector(elements)
        assert self.cycle.rows(packed(self.states[: order // 2])) is not None
        self.variances = np.full(elements + 1, prior)
        self.variances[0] *= direct
        self.filter = Swept(SweepRls(self.variances, 2, self.cycle))

    def sounded(self, states: Real) -> Sounded:
        return Sounded(packed(states), Elements(self.states.shape[1]), self.cycle.rows(packed(states)))

    def update(self, states: Real, heard: Complex) -> Surprise:
        return self.filter.update(self.sounded(states), heard)

    def drawn(self, frames: int) -> Real:
        return self.rng.choice([-1.0, 1.0], (frames, self.states.shape[1]))


def test_the_pattern_in_use_is_put_to_the_estimate() -> None:
    """Frames of a pattern outside of the sweep join whole sweeps as scipy.linalg.lstsq on all frames has it."""
    link = Link(28, 26, 0.3, seed=5)
    in_use = link.drawn(1)
    heard, aside = _noise(link.rng, 28, 2), 2.0 + _noise(link.rng, 5, 2)
    link.update(np.repeat(in_use, 2, axis=0), aside[:2])
    # The others come among the frames of the sweep.
    places = np.array([3, 9, 9])
    link.update(np.insert(link.states, places, in_use, axis=0), np.insert(heard, places, aside[2:], axis=0))
    rows = np.concatenate([np.ones((28, 1)), link.states], axis=1)
    z = np.concatenate([[1.0], in_use[0]])
    stacked = np.concatenate([np.eye(27) / np.sqrt(0.3), rows, np.repeat(z[None, :], 5, axis=0)])
    expected = scipy.linalg.lstsq(stacked, np.concatenate([np.zeros((27, 2)), heard, aside]))[0]
    sounded = link.sounded(in_use)
    np.testing.assert_allclose(link.filter.estimate, expected, rtol=0, atol=1e-13)
    np.testing.assert_allclose(link.filter.predict(sounded), (z @ expected)[None, :], rtol=0, atol=1e-12)
    dense = link.filter.dense()
    np.testing.assert_allclose(dense.estimate, expected, rtol=0, atol=1e-13)
    assert link.filter.predicted_variance(z) == pytest.approx(dense.predicted_variance(z), rel=1e-9)
    assert np.abs(link.filter.coefficients - expected).max() > 0.01


def test_surprise_of_patterns_outside_is_the_dense_filters() -> None:
    """Of a pattern never heard before, sounded k times, innovations and their spread are those of `BlockRls`."""
    link = Link(44, 43, 0.1, seed=1, direct=300.0)
    states, heard = np.repeat(link.drawn(1), 6, axis=0), 3.0 * _noise(link.rng, 6, 2)
    dense = BlockRls(link.variances, 2)
    for part in (slice(0, 4), slice(4, 6)):
        surprise = link.update(states[part], heard[part])
        innovation, white = dense.update(link.sounded(states[part]).regressors, heard[part])
        np.testing.assert_allclose(surprise.innovation, innovation, rtol=0, atol=1e-12)
        np.testing.assert_allclose(surprise.white, white, rtol=0, atol=1e-12)
        np.testing.assert_allclose(surprise.spread, dense.whitener.diagonal() ** -2, rtol=1e-11)


def test_patterns_outside_follow_a_moving_channel() -> None:
    """A response followed outside of the sweep is scipy.linalg.lstsq's with what was heard before forgotten alike."""
    rng = np.random.default_rng(6)
    references = References(19, 1)
    in_use = packed(rng.choice([-1.0, 1.0], (1, 19)))[0].tobytes()
    first, last = _noise(rng, 4, 1), _noise(rng, 3, 1)
    references.take(in_use, first)
    references.forget(1 / 0.7, 0.0, 1.0, 1.0)
    references.take(in_use, last)
    weight = np.sqrt(0.7)
    stacked = np.concatenate([np.full((4, 1), weight), np.ones((3, 1))])
    expected = scipy.linalg.lstsq(stacked, np.concatenate([weight * first, last]))[0]
    np.testing.assert_allclose(references.means, expected, rtol=1e-12)
    assert references.variances[0] == pytest.approx(1 / (4 * 0.7 + 3))


def test_only_the_latest_patterns_are_kept() -> None:
    """Of many patterns outside of the sweep the oldest are dropped; one that is sounded again is among the latest."""
    rng = np.random.default_rng(7)
    references = References(19, 1)
    patterns = rng.choice([-1.0, 1.0], (9, 19))
    for states in (*patterns[:6], patterns[3], *patterns[6:8]):
        references.take(packed(states[None])[0].tobytes(), _noise(rng, 1, 1))
    assert references.count == 4
    np.testing.assert_array_equal(references.regressors[:, 1:], patterns[[5, 3, 6, 7]])


def test_changes_by_hand_reach_what_is_known_of_patterns_outside() -> None:
    """Paths turned and strengthened, a new unit of the noise and a renewed direct path do to the pattern in use too."""
    link = Link(28, 27, 0.3, seed=8, direct=20.0)
    in_use = link.drawn(1)
    link.update(np.concatenate([link.states, in_use]), 2.0 + _noise(link.rng, 29, 2))
    sounded = link.sounded(in_use)
    z = sounded.regressors[0]
    direct, surface = np.exp(1j * link.rng.uniform(0, 6, 2)), np.array([1.5, 0.8])
    path, before = link.filter.direct.copy(), link.filter.predict(sounded)[0]
    link.filter.scale(direct, surface)
    np.testing.assert_allclose(link.filter.direct, path * direct, rtol=1e-12)
    turned = path * direct + (before - path) * surface
    np.testing.assert_allclose(link.filter.predict(sounded)[0], turned, rtol=1e-12)
    variance = link.filter.predicted_variance(z)
    link.filter.rescale(np.array([0.9, 1.1]), 1.02)
    np.testing.assert_allclose(link.filter.predict(sounded)[0], turned * [0.9, 1.1], rtol=1e-12)
    assert link.filter.predicted_variance(z) == pytest.approx(1.02 * variance, rel=1e-12)
    link.filter.renew_direct()
    jumped = link.filter.predict(sounded) + 5.0
    link.update(in_use, jumped)
    # The direct path is granted about 20 times an element's variance, the noise has one.
    assert np.abs(link.filter.predict(sounded) - jumped).max() < 0.25 * 5.0
    wanted = _noise(link.rng, 28, 2)
    link.filter.put(wanted)
    np.testing.assert_allclose(link.filter.estimate, wanted, rtol=0, atol=1e-12)


def test_back_from_the_dense_filter() -> None:
    """After whole sweeps the dense filter's covariance is what a sweep leaves of it: nothing is lost by going back."""
    link = Link(44, 43, 0.3, seed=9)
    dense = link.filter.dense()
    for _ in range(3):
        dense.update(link.sounded(link.states), _noise(link.rng, 44, 2))
    back = Swept(SweepRls.like(dense.prior, dense.variances, dense.coefficients, link.cycle))
    z = link.sounded(np.concatenate([link.states[:5], link.drawn(5)])).regressors
    np.testing.assert_allclose(back.coefficients, dense.coefficients, rtol=0, atol=1e-12)
    np.testing.assert_allclose(back.predicted_covariance(z), dense.predicted_covariance(z), rtol=0, atol=1e-12)
    np.testing.assert_allclose(back.prior, dense.prior, rtol=1e-12)


@pytest.mark.parametrize("at", [2, 12])
def test_snapshot_goes_on_bit_by_bit(at: int) -> None:
    """Restored in mid-sweep or later, cycle and filter give the same bits as those that went on."""
    link = Link(60, 55, 0.3, seed=12, direct=40.0)
    in_use = link.drawn(1)
    both = {link.cycle: link.filter}
    for block in range(20):
        if block == at:
            restored = SweepDetector.restore(link.cycle.snapshot())
            both[restored] = Swept.restore(link.filter.snapshot(), restored)
        patterns = packed(np.concatenate([in_use, link.states[(6 * block + np.arange(6)) % 60]]))
        heard = _noise(link.rng, 7, 2)
        for known, one in both.items():
            one.forget(*forgetting("resetting", 0.01, 0.5))
            one.update(Sounded(patterns, Elements(55), known.rows(patterns)), heard)
            if block % 2:
                assert np.isfinite(one.estimate).all()
    first, second = both.values()
    assert np.array_equal(first.estimate, second.estimate)
    assert np.array_equal(first.variances, second.variances)


def test_frames_that_nobody_numbered_are_refused() -> None:
    """Without rows of the sweep there is nothing that this filter could do with frames."""
    link = Link(28, 27, 0.3, seed=13)
    sounded = Sounded(packed(link.states), Elements(27))
    with pytest.raises(ValueError, match="no sweep is sounded"):
        link.filter.update(sounded, _noise(link.rng, 28, 2))
