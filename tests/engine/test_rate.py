"""Response, rate and gradient against the formulas written out, and against SciPy's finite differences."""

import numpy as np
import pytest
import scipy.optimize
from numpy.typing import NDArray

from tracker.engine.search.channel import Channel
from tracker.engine.search.rate import gradient, promise, rate, response


def _channel(rng: np.random.Generator, elements: int, receivers: int, tones: int, delays: int) -> Channel:
    def gauss(*shape: int) -> NDArray[np.complex128]:
        return np.asarray(rng.standard_normal(shape) + 1j * rng.standard_normal(shape))

    basis = np.linalg.qr(gauss(tones, delays))[0]
    return Channel(basis, gauss(receivers, delays), gauss(elements, receivers, delays))


def test_response_is_the_sum_over_elements_and_delays() -> None:
    """The response equals H = Σ_q B (d + Σ_n s_n v) added up term by term."""
    rng = np.random.default_rng(1)
    channel = _channel(rng, 5, 2, 4, 3)
    states = rng.choice([-1, 1], 5).astype(np.int8)
    for receiver in range(2):
        for tone in range(4):
            total = 0.0j
            for delay in range(3):
                inside = channel.direct[receiver, delay]
                for element in range(5):
                    inside += int(states[element]) * channel.surface[element, receiver, delay]
                total += channel.basis[tone, delay] * inside
            assert response(channel, states)[receiver, tone] == pytest.approx(total, rel=1e-12)


def test_rate_is_the_capacity_of_the_tones() -> None:
    """Signal-to-noise ratios of 1, 3 and 7 give 1, 2 and 3 bit/s/Hz (Shannon, Bell System Technical Journal 1948)."""
    for ratio, bits in ((1.0, 1.0), (3.0, 2.0), (7.0, 3.0)):
        direct, surface = np.array([[0.75j * np.sqrt(ratio)]]), np.array([[[0.25j * np.sqrt(ratio)]]])
        channel = Channel(np.ones((1, 1), complex), direct, surface)
        assert rate(channel, np.array([1])) == pytest.approx(bits, rel=1e-12)
        assert rate(channel, np.array([-1])) == pytest.approx(np.log2(1 + ratio / 4), rel=1e-12)


@pytest.mark.parametrize("receivers", [1, 3])
def test_gradient_agrees_with_finite_differences(receivers: int) -> None:
    """The gradient equals finite differences of the rate (scipy.optimize.approx_fprime and check_grad)."""
    rng = np.random.default_rng(2)
    channel = _channel(rng, 12, receivers, 9, 4)
    for _ in range(3):
        states = rng.choice([-1.0, 1.0], 12)
        numeric = scipy.optimize.approx_fprime(states, lambda s: rate(channel, s), 1e-7)
        assert gradient(channel, states) == pytest.approx(numeric, rel=1e-4, abs=1e-6)
        error = scipy.optimize.check_grad(lambda s: rate(channel, s), lambda s: gradient(channel, s), states)
        assert error < 1e-6


@pytest.mark.parametrize("offset", range(8, 65, 8))
def test_bits_do_not_depend_on_where_memory_lies(offset: int) -> None:
    """Rate and gradient of the same channel are the same to the last bit at every alignment of its arrays."""
    rng = np.random.default_rng(3)
    channel = _channel(rng, 96, 1, 40, 7)
    states = rng.choice([-1, 1], 96).astype(np.int8)
    moved = Channel(*(shifted(part, offset) for part in (channel.basis, channel.direct, channel.surface)))
    assert rate(moved, states) == rate(channel, states)
    assert np.array_equal(gradient(moved, states), gradient(channel, states))


def shifted(array: NDArray[np.complex128], offset: int) -> NDArray[np.complex128]:
    """Copy an array to memory that starts `offset` bytes after a multiple of 128."""
    memory = np.empty(array.nbytes + 256, dtype=np.uint8)
    first = -memory.ctypes.data % 128 + offset
    copy = memory[first : first + array.nbytes].view(array.dtype).reshape(array.shape)
    copy[...] = array
    return copy


def test_shapes_that_do_not_fit_are_refused() -> None:
    """A channel whose parts do not fit together is refused with the shapes in the message."""
    with pytest.raises(ValueError, match=r"\(4, 3\).*\(2, 3\).*\(5, 1, 3\)"):
        Channel(np.ones((4, 3), complex), np.ones((2, 3), complex), np.ones((5, 1, 3), complex))
    with pytest.raises(ValueError, match=r"\(K, Q\)"):
        Channel(np.ones(3, complex), np.ones((2, 3), complex), np.ones((5, 2, 3), complex))


@pytest.mark.parametrize("seed", range(5))
def test_promise_bounds_every_single_flip(seed: int) -> None:
    """No single flip gains more than is promised, and a pattern that promises nothing is best among its neighbours."""
    rng = np.random.default_rng(seed)
    channel = _channel(rng, 24, 2, 8, 3)
    states = rng.choice([-1, 1], 24).astype(np.int8)
    while True:
        gains = []
        for element in range(24):
            states[element] *= -1
            gains.append(rate(channel, states))
            states[element] *= -1
        gains = [gain - rate(channel, states) for gain in gains]
        assert max(gains) <= promise(channel, states) + 1e-12
        best = int(np.argmax(gains))
        if gains[best] <= 0:
            break
        states[best] *= -1
    assert promise(channel, states) < 0.1 * rate(channel, states)
