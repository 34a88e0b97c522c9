"""What is expected of a rate, held against responses drawn at random and against exact conditioning."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Elements
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.estimation.frames import Frames
from tracker.engine.estimation.reception import Reception
from tracker.engine.estimation.shrinkage import Doubt, Shrinkage
from tracker.engine.orthogonal.hadamard import hadamard
from tracker.engine.publishing.expectation import expectation
from tracker.engine.search.channel import Channel

TONES, DELAYS, ELEMENTS = 32, 7, 5
ONES = np.ones(ELEMENTS, dtype=np.int8)


def _gaussian(rng: np.random.Generator, *shape: int) -> NDArray[np.complex128]:
    return np.asarray((rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) * math.sqrt(0.5))


def _drawn(
    seed: int, receivers: int, power: float, doubt: float
) -> tuple[Channel, Doubt, NDArray[np.float64], NDArray[np.complex128]]:
    """Make a channel and a covariance of its errors; give 40 000 rates with such errors, and the response."""
    rng = np.random.default_rng(seed)
    basis = np.linalg.qr(_gaussian(rng, TONES, DELAYS))[0]
    direct = math.sqrt(power * TONES / DELAYS) * _gaussian(rng, receivers, DELAYS)
    channel = Channel(basis, direct, np.zeros((ELEMENTS, receivers, DELAYS), dtype=np.complex128))
    size = receivers * DELAYS
    root = _gaussian(rng, size, size) * math.sqrt(doubt * TONES / DELAYS / size)
    errors = (_gaussian(rng, 40_000, size) @ root.T).reshape(-1, receivers, DELAYS)
    rates = np.log2(1.0 + np.abs((direct + errors) @ basis.T) ** 2).mean(axis=(1, 2))
    left = Doubt(np.eye(size, dtype=np.complex128), np.asarray((root @ root.conj().T).conj()))
    return channel, left, rates, direct @ basis.T


@pytest.mark.parametrize(
    ("receivers", "power", "doubt", "within"), [(1, 9.0, 0.1, 0.03), (2, 9.0, 0.1, 0.03), (2, 16.0, 3.0, 0.12)]
)
def test_spread_is_that_of_rates_drawn(receivers: int, power: float, doubt: float, within: float) -> None:
    """Against the standard deviation over 40 000 responses with errors of any covariance (brute force)."""
    channel, left, rates, heard = _drawn(receivers, receivers, power, doubt)
    found = expectation(channel, ONES, left)
    assert found.spread == pytest.approx(rates.std(), rel=within)
    assert found.rate == pytest.approx(np.log2(1.0 + np.abs(heard) ** 2).mean(), rel=1e-12)


def test_what_is_put_back_raises_the_rate_and_is_doubted() -> None:
    """A surface part raised by a factor gives the rate of the raised response; with no errors left, a third of it."""
    channel, left, _, _ = _drawn(3, 1, 4.0, 0.1)
    rng = np.random.default_rng(4)
    surface = _gaussian(rng, ELEMENTS, 1, DELAYS)
    channel = Channel(channel.basis, channel.direct, surface)
    found = expectation(channel, ONES, Doubt(1.5 * left.raised, 0.0 * left.covariance))
    plain, raised = (
        np.log2(1.0 + np.abs((channel.direct + factor * surface.sum(axis=0)) @ channel.basis.T) ** 2).mean()
        for factor in (1.0, 1.5)
    )
    assert found.rate == pytest.approx(raised, rel=1e-12)
    assert found.spread == pytest.approx(abs(raised - plain) / 3.0, rel=1e-9)


def test_what_one_sweep_took_back_is_put_back() -> None:
    """Against the exact conditional mean under the true variances of the delays (multivariate normal conditioning).

    One sweep of a Hadamard matrix sounds the elements; least squares believes all delays to have the same variance,
    while two of eight hold all there is, four times that, and so takes back three tenths of it. Most of that is put
    back, and no more: how strong the two are is an estimate that errs to the side of the prior.
    """
    rng = np.random.default_rng(5)
    elements, delays, prior = 63, 8, 1.0 / 63
    variances = np.array([4.0, 4.0, 0, 0, 0, 0, 0, 0]) * prior
    rows = hadamard(64)[:, 1:].astype(np.float64)
    left = prior / (1.0 + 64.0 * prior)  # of an element's variance, after a sweep
    plain, raised, exact = [], [], []
    for _ in range(20):
        truth = np.sqrt(variances) * _gaussian(rng, elements, delays)
        heard = rows @ truth + _gaussian(rng, 64, delays)
        estimate = left * (rows.T @ heard)
        shrinkage = Shrinkage()
        shrinkage.count_block(1.0)
        surface = shrinkage.apply(estimate, left, prior)
        states = np.sign(surface[:, 0].real)
        doubt = shrinkage.doubt(left * elements, prior * elements, delays)
        known = variances / (1.0 + 64.0 * variances)
        exact.append((states @ (known * (rows.T @ heard)))[0].real)
        plain.append((states @ surface)[0].real)
        raised.append((states @ surface @ doubt.raised)[0].real)
    assert np.mean(plain) < 0.75 * np.mean(exact)
    assert 0.85 * np.mean(exact) < np.mean(raised) < 1.02 * np.mean(exact)


@pytest.mark.parametrize("frames", [2, 8])
def test_measured_rate_is_unbiased_in_noise(frames: int) -> None:
    """At −3 to 7 dB a tone and few frames, the mean over 400 bursts is the rate within 1.5 %; its spread is foretold.

    The logarithm alone would be off by several percent (Jensen).
    """
    rng = np.random.default_rng(6)
    config = Config(1, delay_basis(64, 16, TONES, 8, 1), Elements(8))
    size = config.delay.shape[1]
    heard = (_gaussian(rng, size) * math.sqrt(2.0 * TONES / size)) @ config.delay.T
    rate = np.log2(1.0 + np.abs(heard) ** 2).mean()
    reception, found = Reception(config), []
    for number in range(420):
        response = (heard + _gaussian(rng, frames, TONES))[:, None].astype(np.complex64)
        patterns = np.zeros((frames, 1), dtype=np.uint8)
        taken = Frames.of(Burst(1, number, 0, 1000, 8, patterns, response, np.ones(frames, dtype=np.bool_)))
        reception.take(taken)
        if number >= 20:  # the noise is known by then
            found.append(reception.rate(taken))
    assert np.mean(found) == pytest.approx(rate, rel=0.015)
    channel = Channel(config.delay, (heard @ config.delay.conj())[None], np.zeros((8, 1, size), dtype=np.complex128))
    nothing = Doubt(np.eye(size, dtype=np.complex128), np.zeros((size, size), dtype=np.complex128))
    foretold = expectation(channel, np.ones(8, dtype=np.int8), nothing).frame_spread / math.sqrt(frames)
    assert np.std(found) == pytest.approx(foretold, rel=0.2)
