"""Hadamard matrices, whole and row by row."""

import numpy as np
import pytest
import scipy.linalg

from tracker.engine.orthogonal.hadamard import hadamard, hadamard_order, hadamard_rows


@pytest.mark.parametrize("order", [1, 2, 4, 8, 12, 20, 24, 40, 48, 44, 64, 104, 132])
def test_hadamard_matrices_are_orthogonal(order: int) -> None:
    """HᵀH = order · I, entries ±1 (definition; Sylvester, Paley 1933 and their doubling), column 0 all ones."""
    matrix = hadamard(order).astype(int)
    assert set(np.unique(matrix)) <= {-1, 1}
    np.testing.assert_array_equal(matrix.T @ matrix, order * np.eye(order, dtype=int))
    np.testing.assert_array_equal(matrix[:, 0], 1)


def test_orders_lie_close_above_the_unknowns() -> None:
    """For 1 025 unknowns 1 032 patterns do, 1 031 being a prime of 3 mod 4; a power of two would take 2 048."""
    assert hadamard_order(1025) == 1032
    assert hadamard_order(257) == 264
    assert hadamard_order(65) == 68
    assert hadamard_order(64) == 64


def test_order_that_cannot_be_made_is_refused() -> None:
    """92 needs a construction that is not here (Baumert, Golomb & Hall 1962)."""
    with pytest.raises(ValueError, match="92"):
        hadamard(92)


@pytest.mark.parametrize("order", [64, 104, 132])
def test_rows_made_alone_are_those_of_the_whole(order: int) -> None:
    """Any rows, in any order, without the matrix around them."""
    index = np.random.default_rng(1).permutation(order)[:10]
    np.testing.assert_array_equal(hadamard_rows(order, index), hadamard(order)[index])


def test_powers_of_two_are_sylvester_s() -> None:
    """The same as SciPy makes."""
    np.testing.assert_array_equal(hadamard(32), scipy.linalg.hadamard(32))


def test_a_few_rows_of_a_large_order_do_not_take_the_whole_matrix() -> None:
    """Orthogonal to one another, each of norm √order (definition); the whole would be 268 million entries."""
    order = hadamard_order(16385)
    rows = hadamard_rows(order, np.array([0, 1, 7777, order - 1])).astype(np.int64)
    np.testing.assert_array_equal(rows @ rows.T, order * np.eye(4, dtype=np.int64))
