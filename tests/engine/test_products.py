"""Products with basis columns: exact sums, and the same bits whatever was kept or asked for together."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from tracker.engine import panel
from tracker.engine.estimation.products import ProductCache, exact

Complex = NDArray[np.complex128]


def _columns(rng: np.random.Generator, elements: int, size: int) -> Complex:
    """Orthonormal columns, some of very different sizes within."""
    taper = np.exp(-np.linspace(0, 12, elements))[rng.permutation(elements)]
    waves = taper[:, None] * np.exp(2j * np.pi * rng.uniform(size=(elements, size)))
    return np.asarray(np.linalg.qr(waves)[0])


def _patterns(rng: np.random.Generator, count: int, elements: int) -> tuple[NDArray[np.float64], NDArray[np.uint8]]:
    states = rng.choice([-1.0, 1.0], (count, elements))
    return states, panel.pack(states)


@pytest.mark.parametrize(("elements", "size"), [(1, 1), (37, 5), (256, 16), (1000, 7), (4096, 12)])
def test_products_are_exactly_rounded_sums(elements: int, size: int) -> None:
    """Each part of each product is the correctly rounded sum (math.fsum, Shewchuk 1997) of the columns' entries."""
    rng = np.random.default_rng(elements)
    states, packed = _patterns(rng, 6, elements)
    cache = ProductCache(_columns(rng, elements, size), 1.0)
    products = cache.products(packed)
    for pattern, product in zip(states, products, strict=True):
        for column in range(size):
            terms = pattern * cache.columns[:, column]
            assert product[column].real == math.fsum(terms.real)
            assert product[column].imag == math.fsum(terms.imag)


def test_sums_do_not_depend_on_their_order() -> None:
    """Forwards, backwards and scrambled, rounded columns sum to the same bits; as they were they do not."""
    rng = np.random.default_rng(1)
    columns = _columns(rng, 4096, 8)
    states = rng.choice([-1.0, 1.0], 4096)

    def sums(of: Complex) -> list[Complex]:
        terms = states[:, None] * of
        orders = (slice(None), slice(None, None, -1), rng.permutation(4096))
        return [np.add.accumulate(terms[order], axis=0)[-1] for order in orders]

    first, *others = sums(exact(columns))
    assert all(np.array_equal(first, other) for other in others)
    first, *others = sums(columns)
    assert not any(np.array_equal(first, other) for other in others)


@pytest.mark.parametrize(("elements", "most"), [(37, 2.0**-45), (256, 2.0**-44), (4096, 2.0**-40)])
def test_rounding_is_far_below_what_matters(elements: int, most: float) -> None:
    """Columns move by N / 2⁵² of the largest part at most, and rounding again changes nothing."""
    columns = _columns(np.random.default_rng(2), elements, 9)
    rounded = exact(columns)
    largest = np.abs(columns.view(np.float64)).max()
    assert np.abs((rounded - columns).view(np.float64)).max() <= elements / 2.0**52 * largest <= most * largest
    assert np.array_equal(exact(rounded), rounded)
    assert np.array_equal(exact(np.zeros((elements, 2), dtype=np.complex128)), np.zeros((elements, 2)))
    assert np.allclose(exact(1e-200 * columns), 1e-200 * columns, rtol=0, atol=1e-210)


def test_entries_that_are_not_finite_are_refused() -> None:
    """A column with NaN is refused rather than carried into every product."""
    with pytest.raises(ValueError, match="not finite"):
        exact(np.array([[1.0], [np.nan]], dtype=np.complex128))


@settings(max_examples=40, deadline=None)
@given(
    order=st.lists(st.integers(0, 29), min_size=1, max_size=120),
    cuts=st.lists(st.integers(1, 40), min_size=1, max_size=40),
    kilobytes=st.sampled_from([0.0, 2.0, 6.0, 100.0]),
)
def test_a_replay_gives_the_same_bits(order: list[int], cuts: list[int], kilobytes: float) -> None:
    """Grouped in any way, with any memory, found kept or not, products are the bits that int64 arithmetic gives."""
    rng = np.random.default_rng(3)
    states, packed = _patterns(rng, 30, 203)
    columns = _columns(rng, 203, 11)
    cache = ProductCache(columns, kilobytes / 1e3)
    # One quantum for all: the smallest power of two of which all entries are multiples.
    quantum = 2.0 ** (math.frexp(np.abs(cache.columns.view(np.float64)).max())[1] + 8 - 53)
    whole = (cache.columns.view(np.float64) / quantum).astype(np.int64)
    assert np.array_equal(whole * quantum, cache.columns.view(np.float64))
    expected = ((states.astype(np.int64) @ whole) * quantum).view(np.complex128)
    start = 0
    for cut in cuts:
        part = order[start : start + cut]
        start += cut
        assert cache.products(packed[part]).tobytes() == expected[part].tobytes()


def test_alone_and_in_blocks_of_any_size() -> None:
    """One pattern at a time, in blocks of 3, 64 and 700, in reverse and from the cache: the same bits."""
    rng = np.random.default_rng(4)
    _, packed = _patterns(rng, 700, 520)
    columns = _columns(rng, 520, 33)
    whole = ProductCache(columns, 10.0).products(packed)
    for block in (1, 3, 64):
        cache = ProductCache(columns, 10.0)
        for _ in range(2):
            parts = [cache.products(packed[start : start + block]) for start in range(0, 700, block)]
            assert np.concatenate(parts).tobytes() == whole.tobytes()
        assert cache.computed == 700
    assert ProductCache(columns, 0.0).products(packed[::-1])[::-1].tobytes() == whole.tobytes()


def test_sweeps_are_worked_out_once() -> None:
    """A sweep that fits into half of the cache is worked out once for all time, with new patterns in between."""
    rng = np.random.default_rng(5)
    _, sweep = _patterns(rng, 100, 64)
    _, others = _patterns(rng, 600, 64)
    cache = ProductCache(_columns(rng, 64, 4), 0.07)
    assert 110 < cache.capacity < 200
    for turn in range(60):
        cache.products(sweep[:50])
        cache.products(sweep[50:])
        cache.products(others[turn * 10 : turn * 10 + 10])
    assert cache.computed == 100 + 600


def test_memory_is_bounded() -> None:
    """However many patterns come, no more than twice the capacity is kept, and the arrays keep within the bound."""
    rng = np.random.default_rng(6)
    cache = ProductCache(_columns(rng, 200, 16), 0.05)
    _, packed = _patterns(rng, 3 * cache.capacity, 200)
    for _ in range(3):
        cache.products(packed)
        assert cache.kept <= 2 * cache.capacity
    assert 2 * cache.capacity * (16 * 16 + 25) <= 0.05e6
    nothing = ProductCache(_columns(rng, 200, 16), 0.0)
    nothing.products(packed[:5])
    assert nothing.kept == 0
    assert nothing.products(packed[:0]).shape == (0, 16)
