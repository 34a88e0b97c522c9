"""Hadamard matrices: patterns of ±1 that are orthogonal to one another.

Orders come from Sylvester (powers of two), from Paley's first construction (q + 1, q a prime of 3 mod 4) and from
doubling either, so that one lies close above any number. Column 0 is all ones. Rows are made one by one: of a large
panel the whole matrix would fill the memory.
"""

import numpy as np
from numpy.typing import NDArray


def hadamard_order(least: int) -> int:
    """Smallest order of at least `least` that can be made."""
    order = max(least, 1)
    while not _makeable(order):
        order += 1
    return order


def hadamard(order: int) -> NDArray[np.int8]:
    """Make a whole matrix; see `hadamard_rows`."""
    return hadamard_rows(order, np.arange(order))


def hadamard_rows(order: int, index: NDArray[np.integer]) -> NDArray[np.int8]:
    """Make rows of a Hadamard matrix.

    Parameters
    ----------
    order : int
        As given by `hadamard_order`.
    index : ndarray of int, shape (B,)
        Which rows, 0 to order − 1.

    Returns
    -------
    ndarray of int8, shape (B, order)
        Entries ±1; over all rows the columns are orthogonal.

    Raises
    ------
    ValueError
        When no construction here has this order.
    """
    if not _makeable(order):
        raise ValueError(f"no Hadamard matrix of order {order} can be made here")
    if order == 1:
        return np.ones((len(index), 1), dtype=np.int8)
    if order & (order - 1) and _paley(order):
        return _paley_rows(order, index)
    half = hadamard_rows(order // 2, index % (order // 2))
    lower = np.where(index < order // 2, 1, -1).astype(np.int8)
    return np.hstack([half, lower[:, None] * half])


def _prime(number: int) -> bool:
    return number > 1 and all(number % divisor for divisor in range(2, int(number**0.5) + 1))


def _paley(order: int) -> bool:
    return order % 4 == 0 and _prime(order - 1)


def _makeable(order: int) -> bool:
    if order < 1:
        return False
    if order & (order - 1) == 0 or _paley(order):
        return True
    return order % 4 == 0 and _makeable(order // 2)


def _paley_rows(order: int, index: NDArray[np.integer]) -> NDArray[np.int8]:
    q = order - 1
    character = np.full(q, -1, dtype=np.int8)
    character[np.arange(1, q, dtype=np.int64) ** 2 % q] = 1
    character[0] = 0
    rows = np.ones((len(index), order), dtype=np.int8)
    below = np.flatnonzero(index > 0)
    place = np.asarray(index)[below] - 1
    # −(Q + I) below a row of ones: the rows are negated to make column 0 all ones.
    rows[below, 1:] = -character[(place[:, None] - np.arange(q)) % q]
    rows[below, 1 + place] -= 1
    return rows
