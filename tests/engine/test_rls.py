"""The block filter against least squares solved at once, textbook filters of libraries, and real data."""

import filterpy.kalman
import numpy as np
import padasip
import pytest
import scipy.linalg
import statsmodels.api as sm
from numpy.typing import NDArray

from tracker.engine.estimation.rls import BlockRls, forgetting


def _blocks(
    rng: np.random.Generator, blocks: int, frames: int, size: int, outputs: int, *, complex_regressors: bool
) -> list[tuple[NDArray[np.complex128], NDArray[np.complex128]]]:
    made = []
    for _ in range(blocks):
        z = rng.choice([-1.0, 1.0], (frames, size)).astype(complex)
        if complex_regressors:
            z *= np.exp(1j * rng.uniform(0, 2 * np.pi, (frames, size)))
        made.append((z, rng.normal(size=(frames, outputs)) + 1j * rng.normal(size=(frames, outputs))))
    return made


@pytest.mark.parametrize("complex_regressors", [False, True])
def test_exponential_forgetting_equals_weighted_least_squares(complex_regressors: bool) -> None:
    """Coefficients and covariance equal exponentially weighted least squares solved at once (scipy.linalg.lstsq)."""
    rng = np.random.default_rng(1)
    size, frames, blocks, decay, prior = 20, 7, 12, 0.9, 4.0
    rls = BlockRls(np.full(size, prior), 3, complex_regressors=complex_regressors)
    rows, targets = [], []
    for index, (z, y) in enumerate(_blocks(rng, blocks, frames, size, 3, complex_regressors=complex_regressors)):
        rls.forget(1 / decay, 0.0)
        rls.update(z if complex_regressors else z.real, y)
        weight = decay ** ((blocks - 1 - index) / 2)
        rows.append(weight * z)
        targets.append(weight * y)
    rows.append(np.sqrt(decay**blocks / prior) * np.eye(size))
    targets.append(np.zeros((size, 3)))
    stacked = np.concatenate(rows)
    expected = scipy.linalg.lstsq(stacked, np.concatenate(targets))[0]
    np.testing.assert_allclose(rls.coefficients, expected, rtol=0, atol=1e-12)
    np.testing.assert_allclose(rls.covariance, np.linalg.inv(stacked.conj().T @ stacked), rtol=0, atol=1e-12)


def test_resetting_equals_a_kalman_filter_with_gauss_markov_state() -> None:
    """With resetting forgetting the filter is filterpy's Kalman filter for x ← √λ x + √(1−λ) P₀^½ w."""
    rng = np.random.default_rng(2)
    size, decay = 6, 0.8
    prior = rng.uniform(0.5, 2.0, size)
    rls = BlockRls(prior, 1)
    kalman = filterpy.kalman.KalmanFilter(dim_x=size, dim_z=1)
    kalman.x = np.zeros((size, 1))
    kalman.P, kalman.R = np.diag(prior), np.array([[1.0]])
    kalman.F, kalman.Q = np.sqrt(decay) * np.eye(size), (1 - decay) * np.diag(prior)
    for z, y in _blocks(rng, 40, 1, size, 1, complex_regressors=False):
        rls.forget(decay, 1 - decay, np.sqrt(decay))
        rls.update(z.real, y.real.astype(complex))
        kalman.predict()
        kalman.H = z.real
        kalman.update(y.real)
    np.testing.assert_allclose(rls.coefficients.real, kalman.x, rtol=0, atol=1e-12)
    np.testing.assert_allclose(rls.covariance, kalman.P, rtol=0, atol=1e-12)


def test_exponential_forgetting_equals_fading_memory_kalman() -> None:
    """Exponential forgetting is filterpy's fading-memory filter with α² = 1/λ, Q = 0, R = 1.

    Sayed & Kailath, IEEE Signal Processing Magazine 1994 (from memory).
    """
    rng = np.random.default_rng(3)
    size, decay = 5, 0.95
    rls = BlockRls(np.full(size, 10.0), 1)
    fading = filterpy.kalman.KalmanFilter(dim_x=size, dim_z=1)
    fading.alpha = decay**-0.5
    fading.x, fading.P = np.zeros((size, 1)), 10.0 * np.eye(size)
    fading.F, fading.Q, fading.R = np.eye(size), np.zeros((size, size)), np.array([[1.0]])
    for z, y in _blocks(rng, 60, 1, size, 1, complex_regressors=False):
        rls.forget(1 / decay, 0.0)
        rls.update(z.real, y.real.astype(complex))
        fading.predict()
        fading.H = z.real
        fading.update(y.real)
    np.testing.assert_allclose(rls.coefficients.real, fading.x, rtol=0, atol=1e-11)


def test_one_frame_at_a_time_equals_padasip() -> None:
    """Frame by frame with λ the coefficients are those of padasip's RLS with forgetting μ = λ."""
    rng = np.random.default_rng(4)
    size, decay, prior = 4, 0.97, 10.0
    rls = BlockRls(np.full(size, prior), 1)
    peer = padasip.filters.FilterRLS(n=size, mu=decay, eps=1 / prior, w="zeros")
    for z, y in _blocks(rng, 50, 1, size, 1, complex_regressors=False):
        rls.forget(1 / decay, 0.0)
        rls.update(z.real, y.real.astype(complex))
        peer.adapt(float(y.real[0, 0]), z.real[0])
    np.testing.assert_allclose(rls.coefficients[:, 0].real, peer.w, rtol=0, atol=1e-10)


def test_copper_data() -> None:
    """On statsmodels' copper data (25 × 6) the final coefficients are those that its RecursiveLS gives."""
    data = sm.datasets.copper.load_pandas().data
    names = ["COPPERPRICE", "INCOMEINDEX", "ALUMPRICE", "INVENTORYINDEX"]
    exog = sm.add_constant(data[names]).to_numpy(dtype=float)
    endog = data["WORLDCONSUMPTION"].to_numpy(dtype=float)
    # Diffuse start on columns of unit size and residuals near one, so that a huge prior is not lost to rounding.
    scale, unit = np.abs(exog).max(axis=0), 200.0
    rls = BlockRls(np.full(5, 1e9), 1)
    for row, target in zip(exog / scale, endog, strict=True):
        rls.update(row[None, :], np.array([[target / unit]], dtype=complex))
    published = [-6562.3719, -13.8132, 12102.294, 70.4146, 311.733]  # RecursiveLS, statsmodels
    np.testing.assert_allclose(unit * rls.coefficients[:, 0].real / scale, published, rtol=2e-5)


def test_nile_local_level() -> None:
    """Scalar filter with λ = 0.73205 ends at 798.0849 on the Nile, as the local-level Kalman filter does.

    Variances 15099 and 1469.1: Durbin & Koopman (from memory); the steady gain is 1 − λ.
    """
    flow = sm.datasets.nile.load_pandas().data["volume"].to_numpy(dtype=float)
    rls = BlockRls(np.array([1e7]), 1)
    for value in flow:
        rls.forget(1 / 0.73205, 0.0)
        rls.update(np.ones((1, 1)), np.array([[value]], dtype=complex))
    assert rls.coefficients[0, 0].real == pytest.approx(798.0849, abs=1e-3)


def test_excess_error_on_a_random_walk() -> None:
    """Steady excess error on a random walk is [(1−λ)Mσ² + Tr(QR)/(1−λ)]/2 to 15 % (Haykin; Sayed, from memory)."""
    rng = np.random.default_rng(5)
    size, decay, step = 8, 0.98, 0.01
    rls = BlockRls(np.full(size, 1.0), 1)
    truth = np.zeros(size)
    errors = []
    for index in range(12000):
        truth = truth + step * rng.normal(size=size)
        z = rng.choice([-1.0, 1.0], size)
        if index > 500:
            errors.append(float((z @ (truth - rls.coefficients[:, 0].real)) ** 2))
        rls.forget(1 / decay, 0.0)
        rls.update(z[None, :], np.array([[z @ truth + rng.normal()]], dtype=complex))
    expected = ((1 - decay) * size + size * step**2 / (1 - decay)) / 2
    assert np.mean(errors) == pytest.approx(expected, rel=0.15)


def test_block_size_does_not_matter() -> None:
    """The same frames give the same estimate in blocks of 1, 5 and 60."""
    rng = np.random.default_rng(6)
    [(z, y)] = _blocks(rng, 1, 60, 12, 2, complex_regressors=False)
    results = []
    for block in (1, 5, 60):
        rls = BlockRls(np.full(12, 0.7), 2)
        for start in range(0, 60, block):
            rls.update(z.real[start : start + block], y[start : start + block])
        results.append(rls)
    for other in results[1:]:
        np.testing.assert_allclose(other.coefficients, results[0].coefficients, rtol=0, atol=1e-12)
        np.testing.assert_allclose(other.covariance, results[0].covariance, rtol=0, atol=1e-12)


@pytest.mark.parametrize("complex_regressors", [False, True])
def test_resetting_never_winds_up(complex_regressors: bool) -> None:
    """After 20 000 blocks of one and the same pattern P lies between 0 and the prior in every direction."""
    rls = BlockRls(np.full(9, 0.3), 1, complex_regressors=complex_regressors)
    z = np.array([[1.0, -1, 1, 1, -1, 1, -1, -1, 1]])
    y = np.array([[0.5 + 0.1j]])
    for _ in range(20_000):
        rls.forget(*forgetting("resetting", 0.002, 0.5))
        rls.update(z.astype(complex) if complex_regressors else z, y)
    values = np.linalg.eigvalsh(rls.covariance)
    assert values.min() > 0
    assert values.max() <= 0.3 * (1 + 1e-9)


def test_exponential_winds_up_where_resetting_does_not() -> None:
    """The classic grows without bound under one pattern: the reason why resetting is the default."""
    rls = BlockRls(np.full(3, 0.3), 1)
    for _ in range(400):
        rls.forget(*forgetting("exponential", 0.01, 0.5))
        rls.update(np.ones((1, 3)), np.zeros((1, 1), dtype=complex))
    assert np.linalg.eigvalsh(rls.covariance).max() > 1e5


def test_innovations_are_white_when_the_model_holds() -> None:
    """Whitened innovations have unit power: over 100 blocks within the 95 % band of χ² at 100 · 2 · 8 · 2 degrees."""
    rng = np.random.default_rng(7)
    size, frames, outputs, blocks = 16, 8, 2, 100
    prior = np.full(size, 0.5)
    truth = np.sqrt(prior / 2)[:, None] * (rng.normal(size=(size, outputs)) + 1j * rng.normal(size=(size, outputs)))
    rls = BlockRls(prior, outputs)
    total = 0.0
    for _ in range(blocks):
        z = rng.choice([-1.0, 1.0], (frames, size))
        noise = (rng.normal(size=(frames, outputs)) + 1j * rng.normal(size=(frames, outputs))) / np.sqrt(2)
        _, white = rls.update(z, z @ truth + noise)
        total += float((np.abs(white) ** 2).sum())
    degrees = 2 * blocks * frames * outputs
    low, high = scipy.stats.chi2.ppf([0.025, 0.975], degrees) / degrees
    assert low < total / (blocks * frames * outputs) < high


def test_snapshot_goes_on_bit_by_bit() -> None:
    """A filter restored mid-stream gives the same bits as the one that went on."""
    rng = np.random.default_rng(8)
    blocks = _blocks(rng, 10, 4, 7, 2, complex_regressors=False)
    rls = BlockRls(np.full(7, 0.2), 2)
    copy = rls
    for index, (z, y) in enumerate(blocks):
        if index == 5:
            rls.forget(0.9, 0.1, 0.95)
            copy = BlockRls.restore(rls.snapshot())
        if index >= 5:
            copy.update(z.real, y)
        rls.update(z.real, y)
    assert np.array_equal(rls.coefficients, copy.coefficients)
    assert np.array_equal(rls.covariance, copy.covariance)


def test_rescaling_the_noise_changes_units_only() -> None:
    """Estimates in new noise units equal those of a filter that had them from the start."""
    rng = np.random.default_rng(9)
    (z1, y1), (z2, y2) = _blocks(rng, 2, 10, 5, 2, complex_regressors=False)
    rls = BlockRls(np.full(5, 0.4), 2)
    rls.update(z1.real, y1)
    rls.rescale(np.array([0.5, 0.5]), 0.25)
    rls.update(z2.real, 0.5 * y2)
    # In the new unit the first frames are half as large and their noise has variance 1/4: weight 2.
    rows = np.concatenate([2 * z1.real, z2.real, np.eye(5) / np.sqrt(0.1)])
    targets = np.concatenate([2 * 0.5 * y1, 0.5 * y2, np.zeros((5, 2))])
    expected = scipy.linalg.lstsq(rows, targets)[0]
    np.testing.assert_allclose(rls.coefficients, expected, atol=1e-12)


def test_predicted_variance_is_the_quadratic_form() -> None:
    """z P zᴴ equals the same from the full matrix, forgetting that is still pending included."""
    rng = np.random.default_rng(10)
    [(z, y)] = _blocks(rng, 1, 10, 6, 1, complex_regressors=False)
    rls = BlockRls(np.full(6, 0.4), 1)
    rls.update(z.real, y)
    rls.forget(0.7, 0.3)
    probe = rng.normal(size=6)
    assert rls.predicted_variance(probe) == pytest.approx(probe @ rls.covariance @ probe, rel=1e-12)
    np.testing.assert_allclose(rls.variances, np.diag(rls.covariance), rtol=1e-12)


def test_unknown_forgetting_is_an_error() -> None:
    """A kind of forgetting that does not exist is refused by name."""
    with pytest.raises(ValueError, match="sliding"):
        forgetting("sliding", 0.1, 0.5)
