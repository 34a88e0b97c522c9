"""Promises: kept as often as they claim, whatever the model gets wrong."""

import numpy as np
import pytest
import scipy.stats

from tracker.engine.publishing.calibration import Calibration


def _run(bias: float, scale: float, count: int, seed: int = 1) -> list[bool]:
    """Promise and measure, with a model that is off by `bias` spreads and whose spread is off by `scale`."""
    rng = np.random.default_rng(seed)
    calibration, kept = Calibration(), []
    for pattern in range(count):
        rate, spread = 4.0, 0.1
        low = calibration.promise(pattern, rate, spread)
        measured = rate - bias * spread + scale * spread * rng.standard_t(5)
        calibration.observe(pattern, float(measured))
        kept.append(measured >= low)
    return kept


@pytest.mark.parametrize(("bias", "scale"), [(0.0, 0.8), (2.0, 1.0), (0.5, 4.0), (8.0, 2.0)])
def test_promises_are_kept_as_often_as_claimed(bias: float, scale: float) -> None:
    """After a start of 200 promises, 95 ± 2 % are kept, for heavy tails and a model off by up to 8 spreads."""
    kept = _run(bias, scale, 3200)[200:]
    assert 0.93 <= np.mean(kept) <= 0.97


def test_long_run_share_is_guaranteed() -> None:
    """Over T promises the share broken is off by at most (range of margin) / (step · T): Gibbs & Candès 2021."""
    kept = _run(1.0, 3.0, 4000, seed=2)
    assert abs(np.mean(kept) - 0.95) <= (30.0 + 3.0) / (0.4 * 4000) + 1e-9


def test_first_margin_is_the_normal_quantile() -> None:
    """Before anything is known the promise is the 5 % point of a normal prediction (scipy.stats)."""
    low = Calibration().promise(1, 4.0, 0.1)
    assert low == pytest.approx(scipy.stats.norm.ppf(0.05, 4.0, 0.1), abs=1e-3)


def test_only_the_first_measurement_of_the_promised_pattern_counts() -> None:
    """Another pattern's rate, and a second measurement, settle nothing."""
    calibration = Calibration()
    calibration.promise(7, 4.0, 0.1)
    calibration.observe(6, 0.0)
    calibration.observe(7, None)
    assert calibration.kept_share is None
    calibration.observe(7, 4.1)
    calibration.observe(7, 0.0)
    assert calibration.kept_share == 1.0


def test_snapshot_goes_on() -> None:
    """A restored calibration promises the same."""
    calibration = Calibration()
    calibration.promise(1, 4.0, 0.1)
    calibration.observe(1, 1.0)
    calibration.promise(2, 4.0, 0.1)
    copy = Calibration()
    copy.load(calibration.snapshot())
    for one in (calibration, copy):
        one.observe(2, 3.99)
    assert copy.promise(3, 4.0, 0.1) == calibration.promise(3, 4.0, 0.1)
    assert copy.kept_share == calibration.kept_share
