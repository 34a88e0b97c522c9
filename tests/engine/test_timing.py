"""Timing drift: followed within its own claims, and told from a phase."""

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine.estimation.delay import delay_basis, frequencies
from tracker.engine.oscillators.timing import TimingLoop

BASIS = delay_basis(256, 64, 128, 16, 1)
FREQUENCY_HZ = frequencies(256, 64, 128, 156.25)
BURST_S = 64 / 28_000


def _gaussian(rng: np.random.Generator, *shape: int) -> NDArray[np.complex128]:
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2))


def _follow(drift: float, bursts: int, phase_hz: float = 0.0) -> tuple[TimingLoop, float]:
    """Play a channel whose delay grows by `drift` s/s to a loop; return it and the delay at the end."""
    rng = np.random.default_rng(1)
    loop = TimingLoop(BASIS, FREQUENCY_HZ)
    delay = 0.0
    for number in range(bursts):
        delay = drift * number * BURST_S
        coefficients = 2.0 * _gaussian(rng, 64, BASIS.shape[1])
        turned = np.exp(-2j * np.pi * (FREQUENCY_HZ * delay)) * np.exp(2j * np.pi * phase_hz * number * BURST_S)
        tones = (coefficients @ BASIS.T) * turned + _gaussian(rng, 64, 128)
        loop.predict(BURST_S if number else 0.0)
        outputs = loop.take_off(tones) @ BASIS.conj()
        model = coefficients * np.exp(2j * np.pi * phase_hz * number * BURST_S)
        loop.measure(model, outputs - model, 1.0)
    return loop, delay


@pytest.mark.parametrize("drift_ppm", [-1.0, 0.2, 1.0])
def test_drift_is_followed(drift_ppm: float) -> None:
    """After 60 bursts the delay is known to 1 ns, 1/25 of a sample, for drifts of clocks up to 1 ppm."""
    loop, delay = _follow(drift_ppm * 1e-6, 60)
    assert loop.delay_s == pytest.approx(delay, abs=1e-9)


def test_without_drift_nothing_is_made_up() -> None:
    """A clock that stands still is left alone, to 1 ns."""
    loop, _ = _follow(0.0, 60)
    assert abs(loop.delay_s) < 1e-9


def test_taking_off_is_the_shift_theorem() -> None:
    """A delay taken off is multiplication by exp(+2πi f τ): a path at τ comes to stand at zero."""
    loop, _ = _follow(1e-6, 20)
    path = np.exp(-2j * np.pi * FREQUENCY_HZ * loop.delay_s)[None, :]
    np.testing.assert_allclose(loop.take_off(path), np.ones((1, 128)), atol=1e-12)


def test_a_common_phase_is_no_delay() -> None:
    """A residual that a small common phase explains does not move the loop."""
    rng = np.random.default_rng(2)
    loop = TimingLoop(BASIS, FREQUENCY_HZ)
    loop.predict(BURST_S)
    before = loop.delay_s
    model = _gaussian(rng, 64, BASIS.shape[1])
    loop.measure(model, 0.05j * model, 1.0)
    assert loop.delay_s == pytest.approx(before, abs=1e-13)


def test_snapshot_goes_on() -> None:
    """A restored loop has the same delay after the same burst."""
    loop, _ = _follow(1e-6, 10)
    copy = TimingLoop(BASIS, FREQUENCY_HZ)
    copy.load(loop.snapshot())
    for one in (loop, copy):
        one.predict(BURST_S)
    assert copy.delay_s == loop.delay_s
