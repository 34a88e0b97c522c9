"""One tone with more noise than before stands out; noise alone gives standard normal deviates."""

import math

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from tracker.engine.detection.drift import largest
from tracker.engine.detection.tones import Tones
from tracker.engine.estimation.delay import delay_basis

RECEIVERS, TONES = 2, 48
BASIS = delay_basis(64, 8, TONES, 10, 1)


def _play(tones: Tones, rng: np.random.Generator, blocks: int, amplitude: NDArray[np.float64]) -> list[float]:
    values = []
    for _ in range(blocks):
        shape = 16, RECEIVERS, TONES
        noise = (rng.normal(size=shape) + 1j * rng.normal(size=shape)) / math.sqrt(2)
        heard = noise.astype(np.complex128) * amplitude
        tones.take(heard, heard @ BASIS.conj())
        values += [one.value for one in tones.readings()]
    return values


def test_noise_alone_gives_standard_normal_deviates() -> None:
    """Once levels are known 1000 samples have mean 0 and variance 1 to 0.2, and tails as thick: none beyond 5.

    Not exactly so: the basis ties neighbouring tones together a little, which makes the largest a little smaller.
    """
    rng = np.random.default_rng(1)
    values = _play(Tones(RECEIVERS, BASIS), rng, 1500, np.ones(TONES))[500:]
    assert abs(np.mean(values)) < 0.2
    assert abs(np.var(values) - 1.0) < 0.2
    assert max(values) < 5.0


def test_interferer_on_one_tone_stands_out_and_noise_on_all_does_not() -> None:
    """Five times the power on one tone of one receiver is beyond 5 deviations at once; on all tones it is nothing."""
    rng = np.random.default_rng(2)
    tones = Tones(RECEIVERS, BASIS)
    _play(tones, rng, 300, np.ones(TONES))
    assert max(_play(tones, rng, 20, np.full(TONES, math.sqrt(5.0)))) < 4.0
    amplitude = np.ones((RECEIVERS, TONES))
    amplitude[1, 20] = math.sqrt(5.0)
    assert _play(tones, rng, 1, amplitude)[0] > 5.0


def test_few_frames_are_gathered() -> None:
    """Bursts of one frame give a sample every 16 bursts; a restored watch gives it at the same burst, and the same."""
    rng = np.random.default_rng(3)
    first, second = Tones(1, BASIS), Tones(1, BASIS)
    heard = rng.normal(size=(40, 1, 1, TONES)) + 1j * rng.normal(size=(40, 1, 1, TONES))
    found = []
    for number, one in enumerate(heard):
        if number == 20:
            second.load(first.snapshot())
        first.take(one, one @ BASIS.conj())
        readings = first.readings()
        found.append(len(readings))
        if number >= 20:
            second.take(one, one @ BASIS.conj())
            assert second.readings() == readings
    assert [number for number, count in enumerate(found) if count] == [15, 31]


def test_largest_of_many_becomes_normal() -> None:
    """Quantiles of the largest of 256 normal variables (order statistics: Φ(x)^256) land on those of the normal law."""
    for chance in (1e-9, 0.01, 0.5, 0.99, 1 - 1e-9):
        value = scipy.stats.norm.ppf(chance ** (1 / 256))
        assert abs(largest(float(scipy.stats.norm.sf(value)), 256) - scipy.stats.norm.ppf(chance)) < 1e-5
