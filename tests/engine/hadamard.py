"""Hadamard matrices from published constructions, for tests."""

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from tracker.engine import panel

# Order: Sylvester's construction doubles; Paley's first has q + 1 with q of 3 mod 4, his second 2 (q + 1) with 1 mod 4.
PALEY_I = {12: 11, 20: 19, 24: 23, 44: 43, 60: 59, 68: 67, 104: 103, 252: 251}
PALEY_II = {28: 13, 36: 17, 76: 37}


def hadamard(order: int) -> NDArray[np.float64]:
    """Make a Hadamard matrix whose column 0 is all ones (scipy.linalg.hadamard; Paley, J. Math. and Phys. 12, 1933)."""
    if order in PALEY_I:
        q = PALEY_I[order]
        skew = np.block([[np.zeros((1, 1)), np.ones((1, q))], [-np.ones((q, 1)), _jacobsthal(q)]])
        matrix = np.eye(order) + skew
    elif order in PALEY_II:
        q = PALEY_II[order]
        conference = np.block([[np.zeros((1, 1)), np.ones((1, q))], [np.ones((q, 1)), _jacobsthal(q)]])
        matrix = np.kron(conference, [[1, 1], [1, -1]]) + np.kron(np.eye(q + 1), [[1, -1], [-1, -1]])
    elif order & (order - 1) == 0:
        matrix = scipy.linalg.hadamard(order).astype(float)
    else:
        matrix = np.kron(scipy.linalg.hadamard(2), hadamard(order // 2))
    return np.asarray(matrix * matrix[:, :1])


def cycle(order: int, elements: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """States (M, N) of a sweep with columns and patterns in a scrambled order."""
    matrix = hadamard(order)
    columns = 1 + rng.permutation(order - 1)[:elements]
    return np.asarray(matrix[rng.permutation(order)][:, columns])


def completed(states: NDArray[np.float64]) -> NDArray[np.float64]:
    """Rows (M, M) of √M W: the direct path, the elements, and phantoms from the null space (scipy.linalg)."""
    rows = np.concatenate([np.ones((states.shape[0], 1)), states], axis=1)
    order, size = rows.shape
    if order == size:
        return rows
    return np.concatenate([rows, np.sqrt(order) * scipy.linalg.null_space(rows.T)], axis=1)


def packed(states: NDArray[np.float64]) -> NDArray[np.uint8]:
    """Pack as the wire has it."""
    return panel.pack(states)


def _jacobsthal(q: int) -> NDArray[np.float64]:
    """Quadratic character of i − j modulo a prime q."""
    character = np.full(q, -1.0)
    character[np.arange(1, q) ** 2 % q] = 1.0
    character[0] = 0.0
    index = np.arange(q)
    return np.asarray(character[(index[:, None] - index) % q])
