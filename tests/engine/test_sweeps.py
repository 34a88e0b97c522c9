"""The filter for sweeps against the dense one, least squares solved at once, and published variances."""

import numpy as np
import pytest
import scipy.linalg
import scipy.stats
from numpy.typing import NDArray

from tests.engine.hadamard import completed, cycle, hadamard, packed
from tracker.engine.estimation.rls import BlockRls, forgetting
from tracker.engine.orthogonal.cycle import SweepDetector
from tracker.engine.orthogonal.sweeps import SweepRls

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Order and elements: no phantoms, few, and more; Sylvester, Paley's first and second, and doubled orders.
SHAPES = [
    (12, 11),
    (20, 18),
    (24, 23),
    (28, 27),
    (28, 24),
    (32, 31),
    (36, 35),
    (44, 43),
    (44, 37),
    (64, 60),
    (104, 100),
]


def _noise(rng: np.random.Generator, *shape: int) -> Complex:
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2))


def _begun(states: Real, prior: float, outputs: int, direct: float = 1.0) -> tuple[SweepRls, BlockRls, Real]:
    """A filter for a sweep, the dense one with phantoms, and its rows; the direct path has `direct` times the prior."""
    detector = SweepDetector(states.shape[1])
    assert detector.rows(packed(states[: max(states.shape[0] // 2, 16)])) is not None
    variances = np.full(states.shape[0], prior)
    variances[0] *= direct
    sweep = SweepRls(variances[: states.shape[1] + 1], outputs, detector)
    return sweep, BlockRls(variances, outputs), completed(states)


def _rows(sweep: SweepRls, states: Real) -> NDArray[np.intp]:
    rows = sweep.cycle.rows(packed(states))
    assert rows is not None
    assert (rows >= 0).all()
    return rows


@pytest.mark.parametrize("order", [12, 20, 24, 28, 32, 36, 44, 56, 60, 104])
def test_matrices_are_hadamard(order: int) -> None:
    """The matrices sounded here meet Hadamard's bound: H Hᵀ = M I, |det H| = M^(M/2), as scipy.linalg's do."""
    matrix = hadamard(order)
    assert set(np.unique(matrix)) == {-1.0, 1.0}
    assert np.array_equal(matrix @ matrix.T, order * np.eye(order))
    assert np.linalg.slogdet(matrix)[1] == pytest.approx(order / 2 * np.log(order))


@pytest.mark.parametrize("direct", [1.0, 200.0])
@pytest.mark.parametrize("kind", ["exponential", "resetting", "none"])
@pytest.mark.parametrize(("order", "elements"), SHAPES)
def test_equals_the_dense_filter(order: int, elements: int, kind: str, direct: float) -> None:
    """Over unfinished and finished sweeps, in order and scrambled, with repeats, all equals the dense filter's.

    Also with a direct path that is granted more than the elements are.
    """
    rng = np.random.default_rng([order, elements])
    states, outputs = cycle(order, elements, rng), 3
    sweep, dense, rows = _begun(states, 0.3, outputs, direct)
    visible = elements + 1
    place = 0
    for block in range(4 * order // 7):
        index = (place + np.arange(7)) % order
        place = (place + 7) % order
        if block % 5 == 3:
            index = rng.integers(0, order, 7)  # in no order, some twice
        if block % 5 == 4:
            index[2:5] = index[0]
        heard = 2.0 * _noise(rng, 7, outputs)
        forgotten = forgetting(kind, 0.002, 0.08) if kind != "none" else (1.0, 0.0, 1.0)
        sweep.forget(*forgotten)
        dense.forget(*forgotten)
        probe = np.concatenate([[1.0], rng.choice([-1.0, 1.0], elements), np.zeros(order - visible)])
        assert sweep.predicted_variance(probe[:visible]) == pytest.approx(dense.predicted_variance(probe), rel=1e-11)
        here = _rows(sweep, states[index])
        visibly = np.concatenate([rows[index, :visible], probe[None, :visible]])
        for asked in (visibly, visibly * (np.arange(visible) > 0)):  # with the direct path, and without
            hidden = np.concatenate([asked, np.zeros((asked.shape[0], order - visible))], axis=1)
            covariance = dense.predicted_covariance(hidden)
            np.testing.assert_allclose(sweep.predicted_covariance(asked), covariance, rtol=0, atol=1e-12 * order)
        surprise = sweep.update(here, heard)
        expected = dense.update(rows[index], heard)
        np.testing.assert_allclose(surprise.innovation, expected[0], rtol=0, atol=1e-11)
        np.testing.assert_allclose(surprise.white, expected[1], rtol=0, atol=1e-11)
        np.testing.assert_allclose(surprise.spread, dense.whitener.diagonal() ** -2, rtol=1e-11)
        np.testing.assert_allclose(sweep.coefficients, dense.coefficients[:visible], rtol=0, atol=1e-12)
        np.testing.assert_allclose(sweep.direct, dense.coefficients[0], rtol=0, atol=1e-12)
        np.testing.assert_allclose(sweep.variances, dense.variances[:visible], rtol=1e-11)
        assert sweep.element_variance == pytest.approx(dense.variances[1:visible].mean(), rel=1e-11)
        assert sweep.mean_variance == pytest.approx(dense.variances[:visible].sum(), rel=1e-11)
        np.testing.assert_allclose(sweep.respond(probe[None, :visible]), probe[None] @ dense.coefficients, atol=1e-11)
        np.testing.assert_allclose(sweep.predict(here), rows[index] @ dense.coefficients, rtol=0, atol=1e-11)
    np.testing.assert_allclose(sweep.dense().covariance, dense.covariance[:visible, :visible], rtol=0, atol=1e-13)


@pytest.mark.parametrize(("order", "elements"), [(28, 27), (44, 40), (64, 63)])
def test_equals_weighted_least_squares(order: int, elements: int) -> None:
    """With exponential forgetting the coefficients are scipy.linalg.lstsq's on all frames and the prior at once."""
    rng = np.random.default_rng(order)
    states, decay, prior, blocks, frames = cycle(order, elements, rng), 0.97, 0.5, 17, 5
    sweep, _, complete = _begun(states, prior, 2)
    stacked = [np.sqrt(decay**blocks / prior) * np.eye(order)]
    targets: list[Complex] = [np.zeros((order, 2), dtype=np.complex128)]
    for block in range(blocks):
        index = (frames * block + np.arange(frames)) % order
        heard = _noise(rng, frames, 2)
        sweep.forget(1 / decay, 0.0)
        sweep.update(_rows(sweep, states[index]), heard)
        weight = decay ** ((blocks - 1 - block) / 2)
        stacked.append(weight * complete[index])
        targets.append(weight * heard)
    expected = scipy.linalg.lstsq(np.concatenate(stacked), np.concatenate(targets))[0]
    np.testing.assert_allclose(sweep.coefficients, expected[: elements + 1], rtol=0, atol=1e-12)


def test_phantoms_do_not_matter_after_whole_sweeps() -> None:
    """After three whole sweeps the answer is scipy.linalg.lstsq's on the true unknowns alone."""
    rng = np.random.default_rng(1)
    states, prior = cycle(60, 52, rng), 0.2
    sweep, _, _ = _begun(states, prior, 2)
    rows = np.concatenate([np.ones((60, 1)), states], axis=1)
    heard = _noise(rng, 3, 60, 2)
    for one in heard:
        sweep.update(_rows(sweep, states), one)
    stacked = np.concatenate([np.eye(53) / np.sqrt(prior), rows, rows, rows])
    expected = scipy.linalg.lstsq(stacked, np.concatenate([np.zeros((53, 2)), *heard]))[0]
    np.testing.assert_allclose(sweep.coefficients, expected, rtol=0, atol=1e-13)


@pytest.mark.parametrize("order", [12, 20, 24, 28, 44, 64])
def test_variance_of_a_full_sweep(order: int) -> None:
    """A sweep gives each coefficient with σ² / (N + 1); switching elements on one by one gives 2 σ².

    Jensen & De Carvalho, arXiv 1909.09440.
    """
    elements = order - 1
    states = cycle(order, elements, np.random.default_rng(order))
    sweep, _, _ = _begun(states, 1e7, 1)
    sweep.update(_rows(sweep, states), np.zeros((order, 1), dtype=np.complex128))
    np.testing.assert_allclose(sweep.variances, 1.0 / (elements + 1), rtol=1e-6)
    switching = BlockRls(np.full(order, 1e7), 1)
    on = np.concatenate([np.ones((order, 1)), np.eye(order, elements, -1)], axis=1)
    switching.update(on, np.zeros((order, 1), dtype=np.complex128))
    np.testing.assert_allclose(switching.variances[1:], 2.0, rtol=1e-5)
    np.testing.assert_allclose(switching.variances[1:] / sweep.variances[1:], 2.0 * (elements + 1), rtol=1e-5)


@pytest.mark.parametrize("repeats", [False, True])
def test_a_strong_direct_path_is_exact_within_a_block(repeats: bool) -> None:
    """With a direct path of its own prior the first block gives what scipy.linalg.lstsq does, and white innovations."""
    rng = np.random.default_rng(2)
    states = cycle(44, 40, rng)
    sweep, dense, complete = _begun(states, 0.1, 2, direct=300.0)
    index = rng.integers(0, 44, 30) if repeats else rng.permutation(44)[:30]
    heard = 3.0 * _noise(rng, 30, 2)
    white = sweep.update(_rows(sweep, states[index]), heard).white
    prior = np.full(44, 0.1)
    prior[0] = 30.0
    stacked = np.concatenate([np.diag(prior**-0.5), complete[index]])
    expected = scipy.linalg.lstsq(stacked, np.concatenate([np.zeros((44, 2)), heard]))[0]
    np.testing.assert_allclose(sweep.coefficients, expected[:41], rtol=0, atol=1e-12)
    np.testing.assert_allclose(white, dense.update(complete[index], heard)[1], rtol=0, atol=1e-12)


@pytest.mark.parametrize(("frames", "time_constant_s"), [(1, 0.05), (16, 0.01), (64, 0.05)])
def test_a_strong_direct_path_over_many_blocks(frames: int, time_constant_s: float) -> None:
    """On a Gauss-Markov channel errors stay within 6 % of those of a filter that knows that 7 of 68 rows are phantoms'.

    The direct path's error stays well below what one prior for all gives; innovations are white to 8 %.
    """
    rng = np.random.default_rng(3)
    states, outputs, spacing_s = cycle(68, 60, rng), 8, 1 / 28_000
    prior = np.full(61, 0.05)
    prior[0] = 6.0
    detector = SweepDetector(60)
    detector.rows(packed(states))
    sweep, weak = SweepRls(prior, outputs, detector), SweepRls(np.full(61, 0.05), outputs, detector)
    dense = BlockRls(prior, outputs)
    rows = np.concatenate([np.ones((68, 1)), states], axis=1)
    scale, decay = np.sqrt(prior)[:, None], np.exp(-frames * spacing_s / time_constant_s)
    truth = scale * _noise(rng, 61, outputs)
    errors, power = [], []
    for block in range(40 * 68 // frames):
        truth = decay * truth + np.sqrt(1 - decay**2) * scale * _noise(rng, 61, outputs)
        index = (block * frames + np.arange(frames)) % 68
        heard = rows[index] @ truth + _noise(rng, frames, outputs)
        here = _rows(sweep, states[index])
        for one, regressors in ((sweep, here), (weak, here)):
            one.forget(*forgetting("resetting", frames * spacing_s, time_constant_s))
            white = one.update(regressors, heard).white
            if one is sweep:
                power.append(float((np.abs(white) ** 2).mean()))
        dense.forget(*forgetting("resetting", frames * spacing_s, time_constant_s))
        dense.update(rows[index], heard)
        estimates = (one.coefficients for one in (sweep, dense, weak))
        errors.append([np.abs(estimate - truth) ** 2 for estimate in estimates])
    late = np.mean(errors[len(errors) // 4 :], axis=(0, 3))
    elements, direct = late[:, 1:].mean(axis=1), late[:, 0]
    assert elements[0] < 1.06 * elements[1]
    assert direct[0] < 1.06 * direct[1]
    assert direct[0] < 0.3 * direct[2]
    assert np.mean(power) == pytest.approx(1.0, abs=0.08)


def test_a_sweep_in_ever_new_order_stays_close_to_the_dense_filter() -> None:
    """Where hardly two rows have the same history, what is kept for all is near enough: to 1 % of the variances.

    And to 1 % of the noise in what is predicted.
    """
    rng = np.random.default_rng(14)
    states = cycle(512, 511, rng)
    sweep, dense, rows = _begun(states, 0.1, 1, direct=300.0)
    for _ in range(60):
        index, heard = rng.integers(0, 512, 24), 2.0 * _noise(rng, 24, 1)
        for one in (sweep, dense):
            one.forget(*forgetting("resetting", 0.002, 0.2))
        sweep.update(_rows(sweep, states[index]), heard)
        dense.update(rows[index], heard)
    np.testing.assert_allclose(sweep.variances, dense.variances, rtol=0.01)
    difference = sweep.respond(rows) - rows @ dense.coefficients
    assert 0.0 < float((np.abs(difference) ** 2).mean()) < 0.01


def test_to_the_dense_filter_and_on() -> None:
    """Turned dense, the filter goes on over patterns of any kind as the one that was dense all along."""
    rng = np.random.default_rng(4)
    states = cycle(44, 38, rng)
    sweep, dense, rows = _begun(states, 0.4, 2)
    for start in range(0, 35, 5):
        heard = _noise(rng, 5, 2)
        for one in (sweep, dense):
            one.forget(*forgetting("resetting", 0.003, 0.1))
        sweep.update(_rows(sweep, states[start : start + 5]), heard)
        dense.update(rows[start : start + 5], heard)
    turned = sweep.dense()
    for _ in range(4):
        z = np.ones((9, 39))
        z[:, 1:] = rng.choice([-1.0, 1.0], (9, 38))
        heard = _noise(rng, 9, 2)
        for one in (turned, dense):
            one.forget(*forgetting("resetting", 0.003, 0.1))
        turned.update(z, heard)
        dense.update(np.concatenate([z, np.zeros((9, 5))], axis=1), heard)
    np.testing.assert_allclose(turned.coefficients, dense.coefficients[:39], rtol=0, atol=1e-12)
    np.testing.assert_allclose(turned.covariance, dense.covariance[:39, :39], rtol=0, atol=1e-13)


def test_white_innovations_when_the_model_holds() -> None:
    """Over 3 000 frames the power of white innovations lies within the 95 % band of χ² (scipy.stats)."""
    rng = np.random.default_rng(7)
    states, prior = cycle(60, 59, rng), 0.2
    sweep, _, rows = _begun(states, prior, 2)
    truth = np.sqrt(prior) * _noise(rng, 60, 2)
    total, decay = 0.0, np.exp(-0.02)
    for block in range(300):
        truth = decay * truth + np.sqrt(prior * (1 - decay**2)) * _noise(rng, 60, 2)
        index = (10 * block + np.arange(10)) % 60
        sweep.forget(*forgetting("resetting", 0.02, 1.0))
        white = sweep.update(_rows(sweep, states[index]), rows[index] @ truth + _noise(rng, 10, 2)).white
        total += float((np.abs(white) ** 2).sum())
    low, high = scipy.stats.chi2.ppf([0.025, 0.975], 12_000) / 12_000
    assert low < total / 6_000 < high


def test_forgetting_far_and_long() -> None:
    """After many strong forgettings and long silences all equals the dense filter's; in the end the prior is left."""
    rng = np.random.default_rng(8)
    states = cycle(20, 17, rng)
    sweep, dense, rows = _begun(states, 0.3, 2)
    for block in range(150):
        index = rng.permutation(20)[:6]
        heard = _noise(rng, 6, 2)
        forgotten = (1.0 - 0.95, 0.95, 0.2) if block % 3 else forgetting("resetting", 60.0 * (block == 99), 0.5)
        for one in (sweep, dense):
            one.forget(*forgotten)
        sweep.update(_rows(sweep, states[index]), heard)
        dense.update(rows[index], heard)
        np.testing.assert_allclose(sweep.coefficients, dense.coefficients[:18], rtol=0, atol=1e-13)
        np.testing.assert_allclose(sweep.variances, dense.variances[:18], rtol=1e-12)
    sweep.forget(*forgetting("resetting", 1e9, 0.5))
    assert not sweep.coefficients.any()
    np.testing.assert_allclose(sweep.variances, 0.3, rtol=1e-12)


def test_exponential_forgetting_without_end() -> None:
    """A row left alone while others are sounded for 200 time constants neither overflows nor spoils the others."""
    rng = np.random.default_rng(9)
    states = cycle(12, 11, rng)
    sweep, _, _ = _begun(states, 0.3, 1)
    for _ in range(4000):
        sweep.forget(*forgetting("exponential", 0.05, 1.0))
        sweep.update(_rows(sweep, states[:11]), np.ones((11, 1), dtype=np.complex128))
    heard = sweep.predict(_rows(sweep, states[:11]))
    np.testing.assert_allclose(heard, 1.0, rtol=1e-12)
    assert np.isfinite(sweep.coefficients).all()


def test_changing_units_and_phases() -> None:
    """Rescaled noise, turned and strengthened paths do what they do to the dense filter."""
    rng = np.random.default_rng(10)
    states = cycle(28, 25, rng)
    sweep, dense, rows = _begun(states, 0.3, 2, direct=30.0)
    turn, gain = np.exp(1j * rng.uniform(0, 6, 2)), np.array([1.5, 0.8])
    for block in range(12):
        index = (7 * block + np.arange(7)) % 28
        heard = _noise(rng, 7, 2)
        sweep.update(_rows(sweep, states[index]), heard)
        dense.update(rows[index], heard)
        sweep.scale(turn, gain)
        dense.coefficients[0] *= turn
        dense.coefficients[1:] *= gain
        sweep.rescale(np.array([0.9, 1.1]), 1.02)
        dense.rescale(np.array([0.9, 1.1]), 1.02)
        np.testing.assert_allclose(sweep.coefficients, dense.coefficients[:26], rtol=1e-11)
        np.testing.assert_allclose(sweep.variances, dense.variances[:26], rtol=1e-11)
        np.testing.assert_allclose(sweep.prior, dense.prior[:26], rtol=1e-12)
    wanted = _noise(rng, 26, 2)
    sweep.put(wanted)
    np.testing.assert_allclose(sweep.coefficients, wanted, rtol=0, atol=1e-13)
    sweep.renew_direct()
    dense.reset(np.array([0]))
    visibly = np.concatenate([rows[:9, :26], np.zeros((9, 2))], axis=1)
    covariance = dense.predicted_covariance(visibly)
    np.testing.assert_allclose(sweep.predicted_covariance(rows[:9, :26]), covariance, rtol=0, atol=1e-12)


def test_resetting_never_winds_up() -> None:
    """After 20 000 blocks of one and the same pattern all variances lie between 0 and the prior."""
    states = cycle(12, 10, np.random.default_rng(11))
    sweep, _, _ = _begun(states, 0.3, 1, direct=50.0)
    row, regressor = _rows(sweep, states[:1]), np.concatenate([np.ones((1, 1)), states[:1]], axis=1)
    for _ in range(20_000):
        sweep.forget(*forgetting("resetting", 0.002, 0.5))
        sweep.update(row, np.full((1, 1), 0.5 + 0.1j))
    assert (sweep.variances > 0).all()
    assert (sweep.variances <= sweep.prior * (1 + 1e-9)).all()
    assert 0 < sweep.predicted_covariance(regressor)[0, 0] < 1


@pytest.mark.parametrize("at", [3, 12])
def test_snapshot_goes_on_bit_by_bit(at: int) -> None:
    """Restored in mid-sweep or later, detector and filter give the same bits as those that went on."""
    rng = np.random.default_rng(12)
    states = cycle(60, 55, rng)
    sweep, _, _ = _begun(states, 0.3, 2, direct=40.0)
    other = sweep
    for block in range(20):
        if block == at:
            detector = SweepDetector.restore(sweep.cycle.snapshot())
            other = SweepRls.restore(sweep.snapshot(), detector)
        index, heard = (6 * block + np.arange(6)) % 60, _noise(rng, 6, 2)
        for one in (sweep, other) if other is not sweep else (sweep,):
            one.forget(*forgetting("resetting", 0.01, 0.5))
            one.update(_rows(one, states[index]), heard)
            if block % 2:
                assert np.isfinite(one.coefficients).all()
    assert sweep.cycle.known == other.cycle.known
    assert np.array_equal(sweep.coefficients, other.coefficients)
    assert np.array_equal(sweep.variances, other.variances)


def test_what_is_no_sweep_is_refused() -> None:
    """Priors that no sweep keeps diagonal, and regressors of no pattern, are refused with a reason."""
    rng = np.random.default_rng(13)
    states = cycle(28, 27, rng)
    sweep, _, _ = _begun(states, 0.3, 1)
    uneven = np.full(28, 0.3)
    uneven[5] = 0.4
    with pytest.raises(ValueError, match="one prior variance for all elements"):
        SweepRls(uneven, 1, sweep.cycle)
    uneven[5], uneven[0] = 0.3, 0.1
    with pytest.raises(ValueError, match="no less for the direct path"):
        SweepRls(uneven, 1, sweep.cycle)
    with pytest.raises(ValueError, match="27 elements"):
        SweepRls(np.full(27, 0.3), 1, sweep.cycle)
    with pytest.raises(ValueError, match=r"\+1 or -1"):
        sweep.predicted_variance(np.full(28, 0.5))
    surprise = sweep.update(np.zeros(0, dtype=np.intp), np.zeros((0, 1), dtype=np.complex128))
    assert surprise.innovation.shape == surprise.white.shape == (0, 1)
