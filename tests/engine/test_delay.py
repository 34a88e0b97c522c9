"""The delay basis against the paths that it has to hold."""

import numpy as np
import pytest

from tracker.engine.estimation.delay import delay_basis, frequencies

CASES = [(256, 64, 128, 16, 1), (256, 28, 200, 16, 1), (256, 0, 256, 16, 1), (64, 0, 64, 8, 2), (1024, 384, 256, 32, 0)]


@pytest.mark.parametrize(("fft", "first", "count", "taps", "before"), CASES)
def test_columns_are_orthonormal(fft: int, first: int, count: int, taps: int, before: int) -> None:
    """BᴴB is the identity, with guard bands too."""
    basis = delay_basis(fft, first, count, taps, before)
    assert basis.shape[0] == count
    np.testing.assert_allclose(basis.conj().T @ basis, np.eye(basis.shape[1]), atol=1e-12)


@pytest.mark.parametrize(("fft", "first", "count", "taps", "before"), CASES)
def test_paths_of_any_delay_are_held(fft: int, first: int, count: int, taps: int, before: int) -> None:
    """A path of any delay within the channel leaves less than −36 dB outside, also between taps."""
    basis = delay_basis(fft, first, count, taps, before)
    tone = frequencies(fft, first, count, 30.0)
    delay = np.linspace(-before, taps - 1 - before, 333) / (fft * 30e3)
    path = np.exp(-2j * np.pi * np.outer(tone, delay)) / np.sqrt(count)
    left = 1 - (np.abs(basis.conj().T @ path) ** 2).sum(axis=0)
    assert left.max() < 10**-3.6


def test_number_of_directions_is_the_time_bandwidth_product() -> None:
    """Half the band and 16 taps leave about 16 / 2 directions and a few at the edges (Slepian's 2WT)."""
    size = delay_basis(256, 64, 128, 16, 1).shape[1]
    assert 8 <= size <= 8 + 5


def test_frequencies_are_about_the_carrier() -> None:
    """Tone fft // 2 lies on the carrier, neighbours one spacing apart."""
    np.testing.assert_allclose(frequencies(8, 3, 4, 15.0), [-15e3, 0.0, 15e3, 30e3])
