"""The exact one-carrier optimum against brute force, a general-purpose solver, and published laws."""

import itertools
from typing import Any, cast

import dimod
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from tracker.engine.estimation.delay import delay_basis
from tracker.engine.search.channel import Channel
from tracker.engine.search.one_carrier import one_carrier_optimum, rate_bound
from tracker.engine.search.rate import rate

Complex = NDArray[np.complex128]


def _every_pattern(elements: int) -> NDArray[np.float64]:
    return np.array(list(itertools.product([-1.0, 1.0], repeat=elements)))


def _gauss(rng: np.random.Generator, *shape: int) -> Complex:
    return np.asarray(rng.standard_normal(shape) + 1j * rng.standard_normal(shape))


def test_golden_case() -> None:
    """h_0 = 0.5 and 16 unit responses at golden-ratio phases: pattern and power as brute force over 2^16 gave them."""
    elements = np.exp(2j * np.pi * (0.6180339887498949 * np.arange(1, 17) % 1.0))
    states, power = one_carrier_optimum(0.5, elements)
    assert "".join("-+"[int(state > 0)] for state in states) == "+-+--+-++-+--+-+"
    assert power == pytest.approx(116.82096159561955, rel=1e-14)
    assert abs(0.5 + states @ elements) ** 2 == pytest.approx(power, rel=1e-14)
    # Rounding the phases of the continuous optimum, (0.5 + 16)² = 272.25, gives a summit that is not the highest.
    rounded = np.where(elements.real >= 0, 1, -1)
    assert abs(0.5 + rounded @ elements) ** 2 == pytest.approx(107.76919962721398, rel=1e-12)
    for element in range(16):
        turned = rounded.copy()
        turned[element] *= -1
        assert abs(0.5 + turned @ elements) ** 2 < 107.76919962721398
    assert power < (0.5 + np.abs(elements).sum()) ** 2 == pytest.approx(272.25)


@pytest.mark.parametrize("kind", ["gauss", "lattice", "real", "imaginary", "some zero"])
def test_equals_brute_force(kind: str) -> None:
    """Of all 2^N patterns, N up to 10, none has more power; with ties, zeros and all elements on one line too."""
    rng = np.random.default_rng(4)
    for elements in range(1, 11):
        response = _gauss(rng, elements)
        if kind == "lattice":
            response = np.round(2 * response)
        elif kind == "real":
            response = np.asarray(response.real + 0j, dtype=np.complex128)
        elif kind == "imaginary":
            response = np.asarray(1j * response.imag, dtype=np.complex128)
        elif kind == "some zero":
            response[rng.random(elements) < 0.5] = 0.0
        for direct in (0j, complex(_gauss(rng, 1)[0])):
            states, power = one_carrier_optimum(direct, response)
            best = (np.abs(direct + _every_pattern(elements) @ response) ** 2).max()
            assert power == pytest.approx(best, rel=1e-12, abs=1e-12)
            assert abs(direct + states @ response) ** 2 == pytest.approx(power, rel=1e-12, abs=1e-12)
            assert set(np.unique(states)) <= {-1, 1}


def test_agrees_with_an_exact_solver_of_quadratic_problems() -> None:
    """dimod's ExactSolver finds the same power for −|d + Σ s_n h_n|² as a quadratic problem in spins."""
    rng = np.random.default_rng(5)
    response, direct = _gauss(rng, 12), complex(_gauss(rng, 1)[0])
    linear = {n: -2 * (direct.conjugate() * response[n]).real for n in range(12)}
    coupling = {(n, m): -2 * (response[n] * response[m].conj()).real for n, m in itertools.combinations(range(12), 2)}
    constant = -(abs(direct) ** 2) - float((np.abs(response) ** 2).sum())
    problem = dimod.BinaryQuadraticModel(linear, coupling, constant, dimod.SPIN)
    found = cast(Any, dimod.ExactSolver)().sample(problem).first
    states, power = one_carrier_optimum(direct, response)
    assert power == pytest.approx(-found.energy, rel=1e-10)
    assert [found.sample[n] for n in range(12)] == states.tolist()


def test_loss_of_one_bit_phases() -> None:
    """Against continuous phases one bit loses (2/π)², 3.92 dB, in the limit of many elements, and less before.

    The form ((2^b/π) sin(π/2^b))² is from memory; the value at 8 elements is brute force over all patterns.
    """
    rng = np.random.default_rng(6)
    losses = []
    for elements, draws in ((8, 500), (64, 200), (1024, 50), (65536, 2)):
        phases = np.exp(2j * np.pi * rng.random((draws, elements)))
        share = np.mean([one_carrier_optimum(0j, one)[1] for one in phases]) / elements**2
        losses.append(10 * np.log10(share))
        if elements == 8:
            best = (np.abs(phases @ _every_pattern(8).T) ** 2).max(axis=1)
            assert losses[-1] == pytest.approx(10 * np.log10(best.mean() / 64), abs=1e-9)
    limit = 10 * np.log10((2 / np.pi * np.sin(np.pi / 2)) ** 2)
    assert limit == pytest.approx(-3.92, abs=0.005)
    assert losses == sorted(losses, reverse=True)
    assert losses[-1] > limit
    assert losses[-1] == pytest.approx(limit, abs=0.03)


def test_power_grows_with_the_square_of_the_elements() -> None:
    """Doubling a large surface gains 6.02 dB (Wu & Zhang, IEEE Trans. Commun. 68(3), 2020: squared power gain)."""
    rng = np.random.default_rng(7)
    mean = [
        np.mean([one_carrier_optimum(0j, np.exp(2j * np.pi * rng.random(size)))[1] for _ in range(40)])
        for size in (1024, 2048, 4096)
    ]
    for one, twice in itertools.pairwise(mean):
        assert 10 * np.log10(twice / one) == pytest.approx(6.02, abs=0.15)


@given(st.integers(0, 10_000), st.integers(1, 40))
@settings(max_examples=60, deadline=None, derandomize=True)
def test_amplitude_is_at_least_two_over_pi_of_the_sum(seed: int, elements: int) -> None:
    """Averaging |Re(h e^{−jφ})| over φ: some pattern reaches (2/π) Σ |h_n|, and none exceeds |d| + Σ |h_n|."""
    rng = np.random.default_rng(seed)
    response, direct = _gauss(rng, elements), complex(_gauss(rng, 1)[0])
    reach = np.abs(response).sum()
    assert np.sqrt(one_carrier_optimum(0j, response)[1]) >= 2 / np.pi * reach * (1 - 1e-12)
    assert np.sqrt(one_carrier_optimum(direct, response)[1]) <= (abs(direct) + reach) * (1 + 1e-12)


@given(st.integers(0, 10_000))
@settings(max_examples=40, deadline=None, derandomize=True)
def test_no_pattern_exceeds_the_bound(seed: int) -> None:
    """The best rate of all 2^N patterns stays below the bound, at any level, with any numbers of tones, receivers."""
    rng = np.random.default_rng(seed)
    elements, receivers, tones = int(rng.integers(1, 9)), int(rng.integers(1, 4)), int(rng.integers(1, 7))
    delays = int(rng.integers(1, tones + 1))
    level = 10.0 ** rng.uniform(-2, 3)
    basis = np.linalg.qr(_gauss(rng, tones, delays))[0]
    channel = Channel(basis, level * _gauss(rng, receivers, delays), level * _gauss(rng, elements, receivers, delays))
    best = max(rate(channel, states) for states in _every_pattern(elements))
    assert best <= rate_bound(channel)


def test_bound_is_the_exact_optimum_tone_by_tone() -> None:
    """The bound equals the mean over tones of what each reaches with the best pattern for itself, single precision."""
    rng = np.random.default_rng(8)
    for elements, receivers, tones, delays in ((1, 1, 1, 1), (60, 2, 11, 4), (400, 1, 40, 6)):
        basis = np.linalg.qr(_gauss(rng, tones, delays))[0]
        channel = Channel(basis, _gauss(rng, receivers, delays), _gauss(rng, elements, receivers, delays))
        direct, surface = channel.direct @ basis.T, channel.surface @ basis.T
        powers = [
            one_carrier_optimum(complex(direct[r, k]), surface[:, r, k])[1]
            for r in range(receivers)
            for k in range(tones)
        ]
        exact = np.log2(1 + np.array(powers)).mean()
        assert exact <= rate_bound(channel) <= exact + np.log2(1 + 1e-5 + 3e-7 * elements)


@pytest.mark.parametrize("taps", [3, 16, 64])
def test_no_pattern_exceeds_the_bound_over_many_tones(taps: int) -> None:
    """Where tones are taken in groups, the best of all 2^10 patterns stays below the bound, weak or strong."""
    rng = np.random.default_rng(taps)
    basis = delay_basis(8192, 300, 7500, taps, 1)
    for level in (0.03, 1.0, 30.0):
        fall = level * np.exp(-np.arange(basis.shape[1]) / 5.0)
        direct, surface = (fall * _gauss(rng, size, 1, basis.shape[1]) for size in (1, 10))
        channel = Channel(basis, direct[0], np.ascontiguousarray(surface))
        heard = (channel.direct + _every_pattern(10) @ surface[:, 0]) @ basis.T
        assert np.log2(1.0 + np.abs(heard) ** 2).mean(axis=1).max() <= rate_bound(channel)


def test_bound_of_large_channels_is_close_to_that_of_every_tone() -> None:
    """With 1024 elements, 256 tones and two receivers it differs from the best of every tone by less than 1 %."""
    rng = np.random.default_rng(9)
    basis = delay_basis(320, 32, 256, 16, 1)
    for decay in (2.0, 8.0):
        fall = 0.1 * np.exp(-np.arange(basis.shape[1]) / decay)
        channel = Channel(basis, fall * _gauss(rng, 2, basis.shape[1]), fall * _gauss(rng, 1024, 2, basis.shape[1]))
        direct, surface = channel.direct @ basis.T, channel.surface @ basis.T
        powers = [one_carrier_optimum(complex(direct[r, k]), surface[:, r, k])[1] for r in range(2) for k in range(256)]
        assert rate_bound(channel) == pytest.approx(np.log2(1 + np.array(powers)).mean(), rel=0.01)


def test_a_surface_without_elements_has_the_direct_path_alone() -> None:
    """Without elements the optimum and the bound are those of the direct path."""
    states, power = one_carrier_optimum(3 + 4j, np.empty(0, dtype=complex))
    assert states.size == 0
    assert power == pytest.approx(25.0)
    channel = Channel(np.ones((1, 1), complex), np.array([[3 + 4j]]), np.empty((0, 1, 1), dtype=complex))
    assert rate_bound(channel) == pytest.approx(np.log2(26.0))
