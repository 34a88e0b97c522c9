"""Changes of known shape stand out in their own direction and in no other."""

import math

import numpy as np
import pytest
import scipy.stats
from numpy.typing import NDArray

from tracker.engine.detection.matched import DELAY, DIRECT_GAIN, DIRECT_PHASE, GAIN, MATCHED, PHASE, Matched
from tracker.engine.estimation.delay import delay_basis

FRAMES, TONES = 64, 48
BASIS = delay_basis(64, 8, TONES, 10, 1)
SIZE = BASIS.shape[1]
Complex = NDArray[np.complex128]


def _gaussian(rng: np.random.Generator, *shape: int) -> Complex:
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / math.sqrt(2))


def _values(predicted: Complex, error: Complex, direct: Complex) -> dict[str, float]:
    matched = Matched(BASIS)
    matched.take(predicted, error)
    readings = matched.readings(error.sum(axis=0), FRAMES, direct)
    return {one.name: one.value for one in readings}


def test_noise_alone_gives_normal_deviates_of_variance_one_half() -> None:
    """Of 2000 blocks of complex noise each filter but that of the delay passes Kolmogorov and Smirnov at 1e-4.

    A matched filter of unit length keeps the variance of the noise: 1/2 in the real and in the imaginary part.
    """
    rng = np.random.default_rng(1)
    direct = _gaussian(rng, SIZE)
    found: dict[str, list[float]] = {name: [] for name in MATCHED}
    for _ in range(2000):
        predicted = direct + _gaussian(rng, FRAMES, SIZE)
        for name, value in _values(predicted, _gaussian(rng, FRAMES, SIZE), direct).items():
            found[name].append(value)
    for name in (GAIN, PHASE, DIRECT_GAIN, DIRECT_PHASE):
        assert scipy.stats.kstest(found[name], scipy.stats.norm(0, math.sqrt(0.5)).cdf).pvalue > 1e-4


SMALL = 1e-3
CASES = [(GAIN, 1.0 + SMALL), (PHASE, np.exp(1j * SMALL))]


@pytest.mark.parametrize(("name", "factor"), CASES)
def test_model_times_a_factor_shows_as_what_it_is(name: str, factor: complex) -> None:
    """Without noise a factor 1 + ε or exp(iε) gives ε |Ŷ| in its own filter, and no thousandth of it in the other."""
    rng = np.random.default_rng(2)
    predicted = _gaussian(rng, FRAMES, SIZE)
    found = _values(predicted, (factor - 1.0) * predicted, predicted[0])
    length = float(np.linalg.norm(predicted))
    assert found[name] == pytest.approx(SMALL * length, rel=2e-3)
    assert abs(found[PHASE if name == GAIN else GAIN]) < 1e-3 * SMALL * length


def test_direct_path_times_a_factor_shows_as_what_it_is() -> None:
    """A direct path that loses a tenth gives −0.1 |d| √B, whatever the surface does."""
    rng = np.random.default_rng(3)
    direct = _gaussian(rng, SIZE)
    error = np.tile(-0.1 * direct, (FRAMES, 1))
    found = _values(direct + _gaussian(rng, FRAMES, SIZE), error, direct)
    assert found[DIRECT_GAIN] == pytest.approx(-0.1 * float(np.linalg.norm(direct)) * math.sqrt(FRAMES))
    assert abs(found[DIRECT_PHASE]) < 1e-9


def test_delay_shows_with_its_sign() -> None:
    """All tones turned as by a later or an earlier arrival give opposite signs, ten times what a turn of all gives."""
    rng = np.random.default_rng(4)
    # Paths in the middle of the basis, which a small delay does not push out of it.
    turns = np.exp(-2j * np.pi * np.outer(rng.uniform(3, 6, 4), np.arange(TONES)) / 64)
    predicted = (_gaussian(rng, FRAMES, 4) @ turns) @ BASIS.conj()
    middle = np.arange(TONES) - (TONES - 1) / 2
    late, early = (
        _values(predicted, ((predicted @ BASIS.T) * (np.exp(-1j * by * middle) - 1.0)) @ BASIS.conj(), predicted[0])
        for by in (SMALL, -SMALL)
    )
    assert late[DELAY] == pytest.approx(-early[DELAY], rel=1e-2)
    assert abs(late[DELAY]) > 10 * abs(late[PHASE])


def test_snapshot_goes_on_bit_by_bit() -> None:
    """Restored filters say the same of the same frames."""
    rng = np.random.default_rng(5)
    first, second = Matched(BASIS), Matched(BASIS)
    first.take(_gaussian(rng, FRAMES, SIZE), _gaussian(rng, FRAMES, SIZE))
    second.load(first.snapshot())
    more, error, direct = _gaussian(rng, FRAMES, SIZE), _gaussian(rng, FRAMES, SIZE), _gaussian(rng, SIZE)
    for one in (first, second):
        one.take(more, error)
    assert first.readings(error.sum(axis=0), FRAMES, direct) == second.readings(error.sum(axis=0), FRAMES, direct)
