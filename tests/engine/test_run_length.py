"""CUSUM run lengths against published tables."""

import math

import numpy as np
import pytest
import scipy.stats
import statsmodels.api as sm
from statsmodels.stats.diagnostic import breaks_cusumolsresid

from tracker.engine.detection.cusum import Cusum
from tracker.engine.detection.run_length import by_chain, gamma_threshold, one_sided, threshold_for, two_sided

SHIFTS = (0, 0.25, 0.5, 0.75, 1, 1.5, 2, 2.5, 3, 4, 5)
# Lucas & Crosier, Technometrics 24 (1982), Table 1, two-sided, k = 0.5, h = 4.
LUCAS_CROSIER_4 = (168, 74.2, 26.6, 13.3, 8.38, 4.75, 3.34, 2.62, 2.19, 1.71, 1.31)


@pytest.mark.parametrize(("shift", "published"), list(zip(SHIFTS, LUCAS_CROSIER_4, strict=True)))
def test_published_table(shift: float, published: float) -> None:
    """Average run lengths equal the published ones to the digits printed."""
    digits = len(str(published).partition(".")[2])
    assert two_sided(4.0, 0.5, shift) == pytest.approx(published, abs=0.51 * 10**-digits)


def test_siegmund_approximation() -> None:
    """At h = 5 the run length at no shift is Siegmund's to 1 % (from memory: b = h + 1.166, 469 two-sided)."""
    slack, threshold = 0.5, 5.0
    drift, bound = -slack, threshold + 1.166
    siegmund = (math.exp(-2 * drift * bound) + 2 * drift * bound - 1) / (2 * drift**2) / 2
    assert two_sided(threshold, slack) == pytest.approx(siegmund, rel=0.01)
    assert siegmund == pytest.approx(469, abs=0.5)


@pytest.mark.parametrize("wanted", [2.0, 168.0, 1e4, 1e8])
def test_threshold_is_the_inverse(wanted: float) -> None:
    """The threshold for a wanted run length gives that run length."""
    assert two_sided(threshold_for(wanted, 0.5), 0.5) == pytest.approx(wanted, rel=1e-4)


def test_impossible_run_length_is_refused() -> None:
    """No threshold cries wolf at every sample and then some."""
    with pytest.raises(ValueError, match="least is 2"):
        threshold_for(0.5, 0.5)


def test_simulated_run_length() -> None:
    """The test as it runs has the run length that the integral equation promises (400 runs, 4 standard errors)."""
    rng = np.random.default_rng(1)
    lengths = []
    for _ in range(400):
        cusum = Cusum(3.0)
        length = 1
        while cusum.update(float(rng.normal())) is None:
            length += 1
        lengths.append(length)
    expected = two_sided(3.0, 0.5)
    assert np.mean(lengths) == pytest.approx(expected, abs=4 * expected / math.sqrt(400))


@pytest.mark.parametrize(("threshold", "year"), [(4.0, 1901), (5.0, 1902)])
def test_nile(threshold: float, year: int) -> None:
    """The Nile fell after 1898 (Cobb, Biometrika 65, 1978); on the baseline 1871 to 1898 the test says so by 1902."""
    data = sm.datasets.nile.load_pandas().data
    flow = data["volume"].to_numpy(dtype=float)
    base = flow[:28]
    cusum = Cusum(threshold)
    for when, value in zip(data["year"], flow, strict=True):
        change = cusum.update(float((value - base.mean()) / base.std(ddof=1)))
        if change is not None:
            assert int(when) == year
            assert not change.up
            assert int(when) - change.since + 1 == 1899
            return
    pytest.fail("no alarm")


@pytest.mark.parametrize(("years", "broken"), [(slice(None), True), (slice(28), False), (slice(28, None), False)])
def test_agrees_with_the_test_of_breaks_in_statsmodels(years: slice, broken: bool) -> None:
    """The Nile as a whole breaks, either part by itself does not: so say OLS-CUSUM at 5 % and the test at h = 5.

    Ploberger & Kraemer (Econometrica 60, 1992) as statsmodels has it; both take mean and spread from the same years.
    """
    flow = sm.datasets.nile.load_pandas().data["volume"].to_numpy(dtype=float)[years]
    residuals = flow - flow.mean()
    assert (breaks_cusumolsresid(residuals, ddof=1)[1] < 0.05) == broken
    cusum = Cusum(5.0)
    alarms = [cusum.update(float(value)) for value in residuals / residuals.std(ddof=1)]
    assert any(alarms) == broken


def test_one_sided_is_about_twice_two_sided_without_shift() -> None:
    """Without shift both sides alarm alike, so one alone lasts twice as long."""
    assert one_sided(4.0, 0.5, 0.0) == pytest.approx(2 * two_sided(4.0, 0.5), rel=1e-9)


def test_markov_chain_agrees_with_the_published_table() -> None:
    """Gaussian increments through the chain of Brook & Evans give twice the two-sided 168 of Lucas & Crosier."""
    assert by_chain(4.0, lambda x: scipy.stats.norm.cdf(x, loc=-0.5)) == pytest.approx(2 * 168, rel=0.005)


@pytest.mark.parametrize("shape", [1.0, 4.0])
def test_gamma_threshold_holds_in_simulation(shape: float) -> None:
    """A likelihood-ratio CUSUM of gamma powers alarms once in 300 samples as asked (400 runs, 4 standard errors)."""
    rng = np.random.default_rng(2)
    factor, wanted = 4.0, 300.0
    threshold = gamma_threshold(wanted, shape, factor)
    total = np.zeros(400)
    length, running = np.zeros(400), np.ones(400, dtype=bool)
    while running.any():
        power = rng.gamma(shape, 1.0 / shape, 400)
        total = np.maximum(total + shape * (power * (1 - 1 / factor) - math.log(factor)), 0.0)
        length += running
        running &= total <= threshold
    assert length.mean() == pytest.approx(wanted, abs=4 * wanted / math.sqrt(400))


def test_a_doubtful_zero_raises_the_threshold_as_much_as_needed() -> None:
    """Averaged over a zero that is off by a normal error of variance 1/400, alarms come as rarely as asked, to 15 %."""
    variance, wanted = 1 / 400, 1e4
    threshold = threshold_for(wanted, 0.5, variance)
    points, weights = np.polynomial.hermite_e.hermegauss(11)
    rates = [1 / two_sided(threshold, 0.5, float(point) * math.sqrt(variance)) for point in points]
    assert 1 / np.average(rates, weights=weights) == pytest.approx(wanted, rel=0.15)
    assert threshold > threshold_for(wanted, 0.5)
    assert math.isinf(threshold_for(1e8, 0.5, 1 / 64))
