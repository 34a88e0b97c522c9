"""One tone with more noise than before is found and dated; noise alone is as rarely taken for it as is asked."""

import math

import numpy as np
import pytest
import scipy.stats
from numpy.typing import NDArray

from tracker.engine.detection.cusum import Change
from tracker.engine.detection.drift import largest
from tracker.engine.detection.rises import FACTOR, WIDTHS, Groups, Powers, Rises
from tracker.engine.detection.run_length import gamma_threshold
from tracker.engine.detection.tones import FRAMES, TONE, Tones
from tracker.engine.estimation.delay import delay_basis

RECEIVERS, TONES = 2, 48
BASIS = delay_basis(64, 8, TONES, 10, 1)
PERIOD_S = FRAMES / 28_000


def _heard(rng: np.random.Generator, frames: int, amplitude: NDArray[np.float64]) -> NDArray[np.complex128]:
    shape = frames, RECEIVERS, TONES
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / math.sqrt(2) * amplitude)


def _play(
    tones: Tones,
    rises: Rises,
    rng: np.random.Generator,
    blocks: int,
    amplitude: NDArray[np.float64],
    *,
    predicted: bool,
) -> list[Change]:
    """Play blocks of two samples; changes found, after each of which the sums begin anew."""
    changes = []
    for _ in range(blocks):
        heard = _heard(rng, 2 * FRAMES, amplitude)
        tones.take(
            heard, 0.0 * heard[:, :, : BASIS.shape[1]] if predicted else heard @ BASIS.conj(), predicted=predicted
        )
        for powers in tones.readings():
            change = rises.update(powers, 2 * PERIOD_S)
            if change is not None:
                changes.append(change)
                rises.clear()
    return changes


@pytest.mark.parametrize("predicted", [True, False])
def test_noise_alone_is_taken_for_interference_no_more_often_than_asked(predicted: bool) -> None:
    """One alarm in 100 samples asked: 4000 samples bring no more than 40 and three deviations, but at least 8.

    Groups overlap, and some of their alarms are of the same noise.
    """
    rng = np.random.default_rng(1)
    tones = Tones(RECEIVERS, BASIS, predicted=predicted)
    rises = Rises(100 * PERIOD_S, 1.0, tones.groups)
    _play(tones, rises, rng, 500, np.ones(TONES), predicted=predicted)
    found = _play(tones, rises, rng, 2000, np.ones(TONES), predicted=predicted)
    assert 8 <= len(found) <= 40 + 3 * math.sqrt(40)


def test_one_place_cries_wolf_as_often_as_asked() -> None:
    """A single power, gamma of 32 degrees of freedom: 100 alarms due in 50 000 samples, within four deviations."""
    rng = np.random.default_rng(2)
    rises = Rises(500 * PERIOD_S, 1.0, Groups(1, 1, (32.0,)))
    alarms = 0
    for _ in range(500):
        ratio = rng.gamma(32.0, 1.0 / 32.0, (100, 1, 1))
        for sample in ratio:
            if rises.update(Powers(TONE, sample[None]), PERIOD_S):
                alarms += 1
                rises.clear()
    assert alarms == pytest.approx(100, abs=40)


def test_weak_interferer_is_found_as_fast_as_its_likelihood_ratio_allows() -> None:
    """Power up by half on two neighbouring tones is found within twice the threshold over the gain of a sample.

    Wald (Ann. Math. Stat. 16, 1945): the mean time to a threshold is its height over the mean step, ν (p (1 − 1/θ) −
    ln θ) for the two tones together. The change is dated to within that time, and named by neither tone nor noise.
    """
    rng = np.random.default_rng(3)
    tones = Tones(RECEIVERS, BASIS, predicted=True)
    rises = Rises(36_000.0, 30.0, tones.groups)
    assert not _play(tones, rises, rng, 600, np.ones(TONES), predicted=True)
    amplitude = np.ones((RECEIVERS, TONES))
    amplitude[1, 20:22] = math.sqrt(1.5)
    threshold = gamma_threshold(36_000.0 / PERIOD_S * 30.0 * RECEIVERS * 3 * TONES, 64.0, FACTOR)
    needed = threshold / (64.0 * (1.45 * (1.0 - 1.0 / FACTOR) - math.log(FACTOR)))
    for block in range(1, math.ceil(needed) + 1):
        changes = _play(tones, rises, rng, 1, amplitude, predicted=True)
        if changes:
            assert changes[0].up
            assert changes[0].since <= 2 * block + 4
            return
    raise AssertionError("not found")


def test_noise_on_all_tones_is_nothing() -> None:
    """Five times the power on all tones of both receivers brings no alarm of the tones: that is for the noise."""
    rng = np.random.default_rng(4)
    tones = Tones(RECEIVERS, BASIS, predicted=True)
    rises = Rises(36_000.0, 30.0, tones.groups)
    assert not _play(tones, rises, rng, 300, np.ones(TONES), predicted=True)
    assert not _play(tones, rises, rng, 100, np.full(TONES, math.sqrt(5.0)), predicted=True)


def test_group_outside_the_basis_has_the_freedom_that_its_power_spreads_with() -> None:
    """Relative variance of the power of neighbours outside the basis, of 20 000 frames, is 1 / ν, to a twentieth."""
    rng = np.random.default_rng(5)
    heard = _heard(rng, 20_000, np.ones(TONES))[:, 0]
    outside = heard - (heard @ BASIS.conj()) @ BASIS.T
    groups = Tones(1, BASIS, predicted=False).groups
    for width, degrees in zip(WIDTHS, groups.degrees, strict=True):
        power = (np.abs(outside[:, 24 : 24 + width]) ** 2).sum(axis=1)
        assert power.var() / power.mean() ** 2 == pytest.approx(FRAMES / degrees, rel=0.05)


def test_few_frames_are_gathered() -> None:
    """Bursts of 24 frames give whole samples of 32; a restored watch gives them at the same burst, and the same."""
    rng = np.random.default_rng(6)
    first, second = (Tones(RECEIVERS, BASIS, predicted=True) for _ in range(2))
    frames = 0
    for number in range(80):
        if number == 60:
            second.load(first.snapshot())
        heard = _heard(rng, 24, np.ones(TONES))
        nothing = np.zeros((24, RECEIVERS, BASIS.shape[1]), dtype=np.complex128)
        first.take(heard, nothing, predicted=True)
        readings = first.readings()
        if readings:
            assert readings[0].power.shape[0] == (frames + 24) // FRAMES - frames // FRAMES
        frames += 24
        if number >= 60:
            second.take(heard, nothing, predicted=True)
            for one, other in zip(readings, second.readings(), strict=True):
                np.testing.assert_array_equal(one.power, other.power)


def test_tests_go_on_from_a_snapshot() -> None:
    """Restored sums raise the same alarm at the same sample."""
    rng = np.random.default_rng(7)
    groups = Groups(2, 5, (32.0, 64.0, 128.0))
    first, second = Rises(36_000.0, 30.0, groups), Rises(36_000.0, 30.0, groups)
    found = []
    for number in range(300):
        ratio = rng.gamma(32.0, 1.0 / 32.0, (2, 2, 5)) * (1.3 if number > 200 else 1.0)
        if number == 203:
            second.load(first.snapshot())
        change = first.update(Powers(TONE, ratio), PERIOD_S)
        if number >= 203:
            assert second.update(Powers(TONE, ratio), PERIOD_S) == change
        found.append(change is not None)
    assert any(found[203:])


def test_largest_of_many_becomes_normal() -> None:
    """Quantiles of the largest of 256 normal variables (order statistics: Φ(x)^256) land on those of the normal law."""
    for chance in (1e-9, 0.01, 0.5, 0.99, 1 - 1e-9):
        value = scipy.stats.norm.ppf(chance ** (1 / 256))
        assert abs(largest(float(scipy.stats.norm.sf(value)), 256) - scipy.stats.norm.ppf(chance)) < 1e-5
