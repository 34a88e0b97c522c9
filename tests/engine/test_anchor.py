"""Changes of known shape stand out in their own direction and in no other, until the average has followed them."""

import math

import numpy as np
import pytest
import scipy.linalg
import scipy.stats
from numpy.typing import NDArray

from tracker.engine.detection.anchor import (
    ANCHORED,
    CHANNEL,
    DELAY,
    DIRECT,
    DIRECT_GAIN,
    DIRECT_PHASE,
    ELEMENT,
    GAIN,
    PHASE,
    SURFACE_MOVED,
    Anchor,
)
from tracker.engine.estimation.delay import delay_basis

FRAMES, TONES, ELEMENTS = 64, 48, 63
BASIS = delay_basis(64, 8, TONES, 10, 1)
SIZE = BASIS.shape[1]
# A sweep: columns of a Hadamard matrix (scipy), the first of ones for the direct path.
SWEEP = scipy.linalg.hadamard(FRAMES).astype(np.float32)
NOISE = np.ones(1)
Complex = NDArray[np.complex128]


def _gaussian(rng: np.random.Generator, *shape: int) -> Complex:
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / math.sqrt(2))


def _anchored(estimate: Complex) -> Anchor:
    """Anchor at an estimate that stands still."""
    anchor = Anchor(BASIS)
    assert anchor.readings(estimate, NOISE) == []
    return anchor


def _values(anchor: Anchor, estimate: Complex, error: Complex) -> dict[str, float]:
    anchor.take(SWEEP, error)
    return {one.name: one.value for one in anchor.readings(estimate, NOISE)}


def test_noise_alone_gives_normal_deviates() -> None:
    """Of 2000 blocks of complex noise every filter passes Kolmogorov and Smirnov at 1e-4: variance 1/2, as it should.

    A matched filter of unit length keeps the variance of the noise, 1/2 in the real and in the imaginary part. The
    largest of 63 elements, and the channel's powers after Wilson and Hilferty's cube root, are normal as well.
    """
    rng = np.random.default_rng(1)
    estimate = _gaussian(rng, 1 + ELEMENTS, SIZE)
    anchor = _anchored(estimate)
    found: dict[str, list[float]] = {name: [] for name in ANCHORED}
    for _ in range(2000):
        for name, value in _values(anchor, estimate, _gaussian(rng, FRAMES, SIZE)).items():
            found[name].append(value)
    for name in (GAIN, PHASE, DELAY, DIRECT_GAIN, DIRECT_PHASE):
        assert scipy.stats.kstest(found[name], scipy.stats.norm(0, math.sqrt(0.5)).cdf).pvalue > 1e-4
    assert scipy.stats.kstest(found[ELEMENT][100:], scipy.stats.norm.cdf).pvalue > 1e-4
    channel = np.array(found[CHANNEL])
    assert channel.std() == pytest.approx(math.sqrt(2.0), rel=0.1)
    assert abs(scipy.stats.skew(channel)) < 0.15
    gamma = scipy.stats.gamma(SIZE, scale=1.0 / SIZE)
    assert scipy.stats.kstest(found[DIRECT], gamma.cdf).pvalue > 1e-4


SMALL = 1e-3
CASES = [(GAIN, 1.0 + SMALL), (PHASE, np.exp(1j * SMALL))]


@pytest.mark.parametrize(("name", "factor"), CASES)
def test_model_times_a_factor_shows_as_what_it_is(name: str, factor: complex) -> None:
    """Without noise a factor 1 + ε or exp(iε) gives ε |Z C| in its own filter, and no hundredth of it in the other."""
    rng = np.random.default_rng(2)
    estimate = _gaussian(rng, 1 + ELEMENTS, SIZE)
    shown = SWEEP @ estimate
    found = _values(_anchored(estimate), estimate, (factor - 1.0) * shown)
    length = float(np.linalg.norm(shown))
    assert found[name] == pytest.approx(SMALL * length, rel=2e-3)
    assert abs(found[PHASE if name == GAIN else GAIN]) < 1e-2 * SMALL * length


def test_a_change_that_the_estimate_has_taken_in_still_shows() -> None:
    """Whether frames surprise the estimate or it has followed them already, the gain shows the same to 10 %.

    The average goes back 2048 frames, of which the block's 64 are a thirtieth.
    """
    rng = np.random.default_rng(3)
    estimate = _gaussian(rng, 1 + ELEMENTS, SIZE)
    surprised, followed = _anchored(estimate), _anchored(estimate)
    nothing = np.zeros((FRAMES, SIZE), dtype=np.complex128)
    for _ in range(40):
        _values(surprised, estimate, nothing)
        _values(followed, estimate, nothing)
    grown = 1.01 * estimate
    first = _values(surprised, estimate, SWEEP @ (grown - estimate))[GAIN]
    _values(followed, grown, nothing)  # the estimate jumps
    assert _values(followed, grown, nothing)[GAIN] == pytest.approx(first, rel=0.1)


def test_direct_path_times_a_factor_shows_as_what_it_is() -> None:
    """A direct path that loses a tenth gives −0.1 |d| √B, whatever the surface does."""
    rng = np.random.default_rng(4)
    estimate = _gaussian(rng, 1 + ELEMENTS, SIZE)
    found = _values(_anchored(estimate), estimate, np.tile(-0.1 * estimate[0], (FRAMES, 1)))
    assert found[DIRECT_GAIN] == pytest.approx(-0.1 * float(np.linalg.norm(estimate[0])) * math.sqrt(FRAMES))
    assert abs(found[DIRECT_PHASE]) < 1e-4


def test_delay_shows_with_its_sign() -> None:
    """All tones turned as by a later or an earlier arrival give opposite signs, ten times what a turn of all gives."""
    rng = np.random.default_rng(5)
    # Paths in the middle of the basis, which a small delay does not push out of it.
    turns = np.exp(-2j * np.pi * np.outer(rng.uniform(3, 6, 4), np.arange(TONES)) / 64)
    estimate = (_gaussian(rng, 1 + ELEMENTS, 4) @ turns) @ BASIS.conj()
    middle = np.arange(TONES) - (TONES - 1) / 2
    shown = SWEEP @ estimate
    late, early = (
        _values(
            _anchored(estimate),
            estimate,
            ((shown @ BASIS.T) * (np.exp(-1j * by * middle) - 1.0)) @ BASIS.conj(),
        )
        for by in (SMALL, -SMALL)
    )
    assert late[DELAY] == pytest.approx(-early[DELAY], rel=1e-2)
    assert abs(late[DELAY]) > 10 * abs(late[PHASE])


def test_elements_that_fail_together_do_not_hide_each_other() -> None:
    """One silent element of 63 is beyond 8 deviations in one block; of three together the largest is still beyond 7."""
    rng = np.random.default_rng(6)
    estimate = 0.3 * _gaussian(rng, 1 + ELEMENTS, SIZE)
    for failed, least in ((1, 8.0), (3, 7.0)):
        anchor = _anchored(estimate)
        for _ in range(100):
            _values(anchor, estimate, _gaussian(rng, FRAMES, SIZE))
        lost = np.zeros_like(estimate)
        lost[10 : 10 + failed] = -estimate[10 : 10 + failed]
        found = _values(anchor, estimate, SWEEP @ lost + _gaussian(rng, FRAMES, SIZE))
        assert found[ELEMENT] > least


def test_turned_direct_path_and_gain_are_taken_along() -> None:
    """A direct path whose phase is followed, or a gain made up for, is no change: nothing shows of it."""
    rng = np.random.default_rng(7)
    estimate = _gaussian(rng, 1 + ELEMENTS, SIZE)
    anchor, turn = _anchored(estimate), np.exp(0.5j)
    nothing = np.zeros((FRAMES, SIZE), dtype=np.complex128)
    _values(anchor, estimate, nothing)
    anchor.turn_direct(slice(0, SIZE), turn)
    anchor.amplify(slice(0, SIZE), 1.5)
    moved = 1.5 * estimate
    moved[0] *= turn
    _values(anchor, moved, nothing)
    found = _values(anchor, moved, nothing)
    assert all(abs(found[name]) < 1e-4 for name in (GAIN, PHASE, DELAY, DIRECT_GAIN, DIRECT_PHASE))
    assert found[SURFACE_MOVED] < -10


def test_few_frames_are_gathered_and_a_snapshot_goes_on_bit_by_bit() -> None:
    """Blocks of 6 frames give a sample every third; a restored anchor gives it at the same block, and the same."""
    rng = np.random.default_rng(8)
    estimate = _gaussian(rng, 1 + ELEMENTS, SIZE)
    first, second = _anchored(estimate), Anchor(BASIS)
    given = []
    for number in range(12):
        if number == 4:
            second.load(first.snapshot())
        error = _gaussian(rng, 6, SIZE)
        estimate = estimate + 0.01 * _gaussian(rng, *estimate.shape)
        first.take(SWEEP[:6], error)
        readings = first.readings(estimate, NOISE)
        given.append(bool(readings))
        if number >= 4:
            second.take(SWEEP[:6], error)
            assert second.readings(estimate, NOISE) == readings
    assert given == [number % 3 == 2 for number in range(12)]
