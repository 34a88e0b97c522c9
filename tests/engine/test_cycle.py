"""Which streams of patterns are sweeps: published constructions, what controllers mix in, and what only looks alike."""

from collections.abc import Callable

import numpy as np
import pytest
import scipy.linalg
from numpy.typing import NDArray

from tests.engine.hadamard import completed, cycle, packed
from tracker.engine.orthogonal.completion import Completion
from tracker.engine.orthogonal.cycle import SweepDetector, Verdict

Real = NDArray[np.float64]

SHAPES = [
    (8, 7),
    (12, 11),
    (20, 16),
    (24, 20),
    (28, 27),
    (32, 31),
    (44, 37),
    (64, 63),
    (68, 64),
    (104, 100),
    (252, 240),
    (256, 255),
    (512, 500),
]


def _stream(
    states: Real, frames: int, blocks: int, rng: np.random.Generator, *, in_use: bool = False
) -> list[tuple[NDArray[np.uint8], NDArray[np.bool_]]]:
    """Blocks of a sweep, and which frames are of it: every eighth may show the pattern in use, which changes once."""
    made, place, elements = [], 0, states.shape[1]
    for _ in range(blocks):
        inside = np.ones(frames, dtype=np.bool_)
        inside[::8] = not in_use
        shown = np.repeat(rng.choice([-1.0, 1.0], (2, elements)), [frames // 2, frames - frames // 2], axis=0)
        count = int(inside.sum())
        shown[inside] = states[(place + np.arange(count)) % states.shape[0]]
        place += count
        made.append((packed(shown), inside))
    return made


@pytest.mark.parametrize("in_use", [False, True])
@pytest.mark.parametrize(("order", "elements"), SHAPES)
def test_sweeps_are_found(order: int, elements: int, in_use: bool) -> None:
    """A scrambled Hadamard cycle is found in its first block, with its order, whatever is sounded in between."""
    rng = np.random.default_rng([order, elements])
    states = cycle(order, elements, rng)
    detector = SweepDetector(elements)
    numbers: dict[bytes, int] = {}
    for patterns, inside in _stream(states, 48, order // 40 + 3, rng, in_use=in_use):
        rows = detector.rows(patterns)
        assert rows is not None
        assert detector.order == order
        # Some pattern that is not of the sweep may be orthogonal by chance where elements are few.
        if elements > 50:
            assert np.array_equal(rows >= 0, inside)
        for pattern, row in zip(patterns[rows >= 0], rows[rows >= 0], strict=True):
            assert numbers.setdefault(pattern.tobytes(), int(row)) == row
    assert detector.verdict is Verdict.SWEEP
    assert detector.known == order
    known = np.concatenate([np.ones((order, 1)), detector.states(np.arange(order))], axis=1)
    assert np.array_equal(known.T @ known, order * np.eye(elements + 1))


def _random(rng: np.random.Generator) -> Real:
    return rng.choice([-1.0, 1.0], (400, 100))


def _one_by_one(rng: np.random.Generator) -> Real:
    del rng
    return np.where(np.eye(101, 100, -1) > 0, 1.0, -1.0)


def _without_direct(rng: np.random.Generator) -> Real:
    """Orthogonal patterns that leave no column to the direct path: an element cannot be told from it."""
    del rng
    return np.asarray(scipy.linalg.hadamard(128), dtype=np.float64)


def _almost(rng: np.random.Generator) -> Real:
    """A sweep with one element stuck: two columns agree."""
    states = cycle(104, 100, rng)
    states[:, 3] = 1.0
    return states


def _quarter(rng: np.random.Generator) -> Real:
    """A sweep in which every fourth pattern has an element turned."""
    states = cycle(104, 100, rng)
    states[::4, 7] *= -1.0
    return states[np.argsort(np.arange(104) % 4 != 0, kind="stable")]


@pytest.mark.parametrize("make", [_random, _one_by_one, _without_direct, _almost, _quarter])
def test_what_only_looks_like_a_sweep(make: Callable[[np.random.Generator], Real]) -> None:
    """Random patterns, single elements, columns that agree: never taken for a sweep whose rows are orthogonal."""
    rng = np.random.default_rng(1)
    states = make(rng)
    detector = SweepDetector(states.shape[1])
    for patterns, _ in _stream(states, 52, 6, rng):
        rows = detector.rows(patterns)
    assert rows is None
    assert detector.verdict is Verdict.OTHER
    assert detector.rows(packed(cycle(104, 100, rng)) if states.shape[1] == 100 else patterns) is None


@pytest.mark.parametrize("early", [False, True])
def test_one_wrong_pattern_stays_outside(early: bool) -> None:
    """A pattern orthogonal to all rows but four of 128 is not taken in, be it met in the first block or late.

    In Sylvester's matrix the product of three rows is a fourth, and half of the three less the fourth is ±1 again.
    """
    rng = np.random.default_rng(2)
    matrix = np.asarray(scipy.linalg.hadamard(128), dtype=np.float64)
    wrong = (matrix[3] + matrix[17] + matrix[40] - matrix[3 ^ 17 ^ 40]) / 2
    assert np.count_nonzero(matrix @ wrong) == 4
    four = np.array([3, 17, 40, 3 ^ 17 ^ 40])
    others = rng.permutation(np.setdiff1d(np.arange(128), four))
    order = np.concatenate([others[:20], four, others[20:]] if early else [others[:40], four, others[40:]])
    states = matrix[order][:, 1:]
    detector = SweepDetector(127)
    at = 30 if early else 100
    sounded = np.insert(states, at, wrong[1:], axis=0)
    found = [detector.rows(packed(sounded[start : start + 32])) for start in range(0, sounded.shape[0], 32)]
    rows = np.concatenate([part for part in found if part is not None])
    assert np.flatnonzero(rows < 0).tolist() == [at]
    assert detector.known == 128


def test_phantoms_found_late() -> None:
    """Where the first patterns say nothing of some phantom elements, later ones do."""
    matrix = np.asarray(scipy.linalg.hadamard(256), dtype=np.float64)
    first = np.arange(0, 256, 8)  # the last columns agree on these rows
    states = matrix[np.concatenate([first, np.setdiff1d(np.arange(256), first)])][:, 1:241]
    detector = SweepDetector(240)
    for start in range(0, 256, 32):
        rows = detector.rows(packed(states[start : start + 32]))
        assert rows is not None
        assert np.array_equal(rows, np.arange(start, start + 32))
    assert detector.order == 256


def test_a_new_cycle_ends_the_old_one() -> None:
    """When another cycle is sounded the stream is no sweep from the first block of it on, and stays none."""
    rng = np.random.default_rng(3)
    detector = SweepDetector(100)
    for patterns, _ in _stream(cycle(104, 100, rng), 32, 8, rng, in_use=True):
        assert detector.rows(patterns) is not None
    verdicts = [detector.rows(patterns) is None for patterns, _ in _stream(cycle(104, 100, rng), 32, 8, rng)]
    assert all(verdicts)


def test_patterns_near_the_one_in_use_end_a_sweep() -> None:
    """Three of them in a block of 48 frames are enough: they are sounded for what the sweep does not tell."""
    rng = np.random.default_rng(8)
    states, base = cycle(104, 100, rng), rng.choice([-1.0, 1.0], 100)
    for near in (2, 3):
        detector = SweepDetector(100)
        assert detector.rows(packed(states[:48])) is not None
        shown = states[48:96].copy()
        shown[10 : 10 + near] = np.where(rng.random((near, 100)) < 0.1, -base, base)
        assert (detector.rows(packed(shown)) is None) == (near == 3)


def test_the_pattern_in_use_alone_ends_nothing() -> None:
    """Sounding only the pattern in use, for any time, leaves the sweep in force."""
    rng = np.random.default_rng(4)
    states = cycle(104, 100, rng)
    detector = SweepDetector(100)
    assert detector.rows(packed(states[:50])) is not None
    for _ in range(50):
        rows = detector.rows(np.repeat(packed(rng.choice([-1.0, 1.0], (1, 100))), 40, axis=0))
        assert rows is not None
        assert (rows == -1).all()
    assert detector.rows(packed(states)) is not None
    assert detector.known == 104


def test_products_with_any_pattern() -> None:
    """Products of rows and a pattern, counted in bits, are those of the numbers (numpy)."""
    rng = np.random.default_rng(5)
    states = cycle(44, 37, rng)
    detector = SweepDetector(37)
    detector.rows(packed(states))
    z = np.concatenate([[1.0], rng.choice([-1.0, 1.0], 37)])
    assert np.array_equal(detector.products(z), completed(states)[:, :38] @ z)


def test_too_few_patterns_decide_nothing_in_favour() -> None:
    """A first block shorter than phantoms and some more shows no sweep; an empty one does not count as the first."""
    rng = np.random.default_rng(6)
    states = cycle(44, 37, rng)
    detector = SweepDetector(37)
    rows = detector.rows(packed(states[:0]))
    assert rows is not None
    assert rows.shape == (0,)
    assert detector.verdict is Verdict.UNDECIDED
    assert detector.rows(packed(states[:9])) is None
    with pytest.raises(ValueError, match="cannot tell"):
        Completion(completed(states)[:9, :38], 44)
    with pytest.raises(ValueError, match="do not belong"):
        Completion(completed(states)[:20, :38], 40)


def test_snapshot_knows_the_same_patterns() -> None:
    """Restored in mid-sweep, before anything was seen, or after the end, a detector says what the other says."""
    rng = np.random.default_rng(7)
    states = cycle(104, 100, rng)
    blocks = [*_stream(states, 24, 12, rng, in_use=True), *_stream(_random(rng), 24, 6, rng)]
    for at in (0, 2, 7, 17):
        one = SweepDetector(100)
        for patterns, _ in blocks[:at]:
            one.rows(patterns)
        other = SweepDetector.restore(one.snapshot())
        for patterns, _ in blocks[at:]:
            expected, rows = one.rows(patterns), other.rows(patterns)
            assert (rows is None) == (expected is None)
            assert rows is None or rows.tolist() == (expected if expected is None else expected.tolist())
        assert (one.verdict, one.order, one.known) == (other.verdict, other.order, other.known)
