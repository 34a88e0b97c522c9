"""Patterns worth sounding: sweeps over groups of elements, and patterns near the one in use."""

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.stats import bernoulli

from tracker.engine.estimation.aperture import ApertureBasis, Columns, Elements, Tiles
from tracker.engine.orthogonal.hadamard import hadamard_order
from tracker.engine.panel import Limits
from tracker.engine.planning.share import told_by
from tracker.engine.planning.sounding import Near, Sweep, groups_of
from tracker.engine.search.lines import Lines

LIMITS = Limits(stuck={3: 1, 8: -1}, tied=[[0, 1], [5, 9, 3]])


def members(groups: Lines) -> list[set[int]]:
    return [set(part.tolist()) for part in np.split(groups.members, groups.first[1:])]


def unitary(elements: int, size: int) -> NDArray[np.complex128]:
    rng = np.random.default_rng(5)
    drawn = rng.standard_normal((elements, size)) + 1j * rng.standard_normal((elements, size))
    return np.linalg.qr(drawn)[0]


def test_elements_are_groups_of_their_own() -> None:
    """Without limits there are as many groups as elements."""
    assert members(groups_of(Elements(12), Limits())) == [{element} for element in range(12)]


def test_tied_elements_make_one_group_and_stuck_ones_none() -> None:
    """A group that is tied to a stuck element is stuck with it."""
    groups = groups_of(Elements(12), LIMITS)
    assert sorted(map(min, members(groups))) == [0, 2, 4, 6, 7, 10, 11]
    assert {0, 1} in members(groups)
    assert [groups.held[element] for element in (3, 5, 9, 8)] == [1, 1, 1, -1]


def test_a_tile_makes_one_group() -> None:
    """Elements that share a response are sounded alike: 5 × 4 elements in tiles of 2 × 2, at the edge of 1 × 2."""
    tiles = [{0, 1, 4, 5}, {2, 3, 6, 7}, {8, 9, 12, 13}, {10, 11, 14, 15}, {16, 17}, {18, 19}]
    assert sorted(members(groups_of(Tiles(5, 4, 2, 2), Limits())), key=min) == tiles


def test_tiles_joined_by_a_tie_make_one_group() -> None:
    """Elements 0 and 19 on one line: their tiles move together or the line would have to show two states."""
    joined = members(groups_of(Tiles(5, 4, 2, 2), Limits(tied=[[0, 19]])))
    assert {0, 1, 4, 5, 18, 19} in joined
    assert len(joined) == 5


def test_columns_of_any_basis_leave_elements_apart() -> None:
    """A learned basis has elements that differ."""
    basis = Columns(unitary(20, 4), np.ones(4))
    assert len(members(groups_of(basis, Limits()))) == 20


@pytest.mark.parametrize(
    ("aperture", "limits"),
    [(Elements(63), Limits()), (Elements(20), LIMITS), (Tiles(5, 4, 2, 2), Limits()), (Elements(1), Limits())],
    ids=["63", "limits", "tiles", "one"],
)
def test_a_sweep_is_orthogonal_over_groups(aperture: ApertureBasis, limits: Limits) -> None:
    """Over one sweep ZᵀZ = M · I for z = [1, group states], M the next order (definition of a Hadamard matrix)."""
    groups = groups_of(aperture, limits)
    sweep = Sweep(groups)
    assert sweep.length == hadamard_order(groups.first.size + 1)
    patterns = sweep.take(sweep.length - 3, sweep.length)
    z = np.column_stack([np.ones(len(patterns)), patterns[:, groups.members[groups.first]]]).astype(int)
    np.testing.assert_array_equal(z.T @ z, sweep.length * np.eye(z.shape[1], dtype=int))
    for group in members(groups):
        assert (patterns[:, sorted(group)] == patterns[:, [min(group)]]).all()
    for element in np.flatnonzero(groups.held):
        assert (patterns[:, element] == groups.held[element]).all()


@pytest.mark.parametrize(("elements", "size"), [(256, 16), (64, 8), (100, 7), (20, 1)])
def test_a_round_of_blocks_turns_each_element_once(elements: int, size: int) -> None:
    """Blocks of a round are disjoint, so that their masks are orthogonal, and hold all elements."""
    near = Near(groups_of(Elements(elements), Limits()))
    blocks = near.blocks(size)
    for deal in range(3):
        turned = near.take(size, deal * blocks, blocks).astype(int)
        gram = turned @ turned.T
        np.testing.assert_array_equal(gram, np.diag(turned.sum(axis=1)))
        np.testing.assert_array_equal(turned.sum(axis=0), 1)
        assert np.abs(turned.sum(axis=1) - elements / blocks).max() < 1


@pytest.mark.parametrize(("elements", "size"), [(256, 16), (256, 4), (64, 8)])
def test_near_patterns_tell_of_every_direction_but_one(elements: int, size: int) -> None:
    """Information 4 φ (1 − φ), the variance of ±1 with one state φ of the time (Bernoulli, from SciPy), in the median.

    No direction has less than half of it but the one in which direct path and surface grow against each other, which
    frames with equally many elements turned cannot show at all.
    """
    near = Near(groups_of(Elements(elements), Limits()))
    blocks = near.blocks(size)
    turned = near.take(size, 0, blocks * elements)
    z = np.column_stack([np.ones(len(turned)), np.where(turned, -1.0, 1.0)])
    information = np.linalg.eigvalsh(z.T @ z / len(z))
    expected = 4 * bernoulli(1 / blocks).var()
    assert information[0] == pytest.approx(0, abs=1e-9)
    assert information[1] > 0.5 * expected
    assert np.median(information) == pytest.approx(expected, rel=0.1)
    assert told_by(elements, size) == pytest.approx(expected, rel=1e-9)


def test_any_two_elements_meet_in_a_block_about_as_often() -> None:
    """As in a balanced design, where pairs meet λ = r (k − 1) / (v − 1) times (Bose 1939, from memory)."""
    elements, size = 256, 16
    near = Near(groups_of(Elements(elements), Limits()))
    turned = near.take(size, 0, near.blocks(size) * elements).astype(float)
    meet = (turned.T @ turned)[np.triu_indices(elements, 1)]
    balanced = elements * (size - 1) / (elements - 1)
    assert meet.mean() == pytest.approx(balanced, rel=1e-9)
    assert meet.min() > 0
    assert meet.max() <= 2 * balanced


def test_stuck_elements_are_never_turned() -> None:
    """And tied ones only together."""
    near = Near(groups_of(Elements(20), LIMITS))
    turned = near.take(2, 5, 50)
    assert not turned[:, [3, 5, 9, 8]].any()
    np.testing.assert_array_equal(turned[:, 0], turned[:, 1])
