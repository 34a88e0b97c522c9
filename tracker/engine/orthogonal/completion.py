"""Rows that become mutually orthogonal once phantom elements are added to them.

Over a cycle of M patterns the rows [1, s] of length n make a matrix A (M × n). Its columns are orthogonal, AᵀA = M I,
exactly if f = M − n columns Φ can be added with A Aᵀ + Φ Φᵀ = M I. Of m rows seen so far this asks that M I − A Aᵀ,
m × m, be positive semidefinite of rank f at most: m − f eigenvalues of A Aᵀ are M and none is larger. So a few rows
more than f show M and prove that they belong together, long before the cycle is through.

A row that comes later has its phantom entries from the rows known before (it must be orthogonal to each), and their
energy must come out as f. Being orthogonal to *all* rows is checked against weighted sums of them: a sum with weights
in general position is orthogonal to a row only if all its terms are (Freivalds' check of a matrix product, 1979).
"""

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

Real = NDArray[np.float64]

# Rows beyond f that must fit together: each would do so by chance about as seldom as a number is hit exactly.
SPARE = 4
# Rows looked at together at the start.
MOST_ROWS = 128
# Products of rows are whole numbers; phantom entries are exact to rounding.
TOLERANCE = 1e-6
# Two sums with weights in general position: fractions of multiples of 1.3247… (the root of x³ = x + 1; Roberts, 2018).
STEPS = 1.324717957244746 ** -np.arange(1.0, 3.0)


class Completion:
    """Rows known to be orthogonal, with their phantom entries.

    Parameters
    ----------
    rows : ndarray, shape (m, n)
        Entries ±1.
    order : int
        M.

    Raises
    ------
    ValueError
        When no phantom entries make the rows orthogonal, or too few rows tell.
    """

    def __init__(self, rows: Real, order: int) -> None:
        self.order = order
        self._phantom_size = order - rows.shape[1]
        values, vectors = np.linalg.eigh(order * np.eye(rows.shape[0]) - rows @ rows.T)
        rank = int(np.count_nonzero(values > TOLERANCE))
        if self._phantom_size < 0 or rows.shape[0] < self._phantom_size + SPARE:
            raise ValueError(f"{rows.shape[0]} rows of length {rows.shape[1]} cannot tell of a cycle of {order}")
        if values[0] < -TOLERANCE or rank > self._phantom_size:
            raise ValueError(f"the rows do not belong to a cycle of {order} orthogonal rows")
        self._rank = rank
        phantoms = np.zeros((rows.shape[0], self._phantom_size))
        phantoms[:, :rank] = vectors[:, values > TOLERANCE] * np.sqrt(values[values > TOLERANCE])
        # Later rows are held against a few that span the phantom directions, and against sums of all.
        spanning = np.sort(scipy.linalg.qr(phantoms.T, mode="r", pivoting=True)[1][: rank + SPARE])
        self._anchors, self._phantoms = rows[spanning], phantoms[spanning]
        self._count = 0
        self._row_sums = np.zeros((STEPS.shape[0], rows.shape[1]))
        self._phantom_sums = np.zeros((STEPS.shape[0], self._phantom_size))
        self._add(rows, phantoms, np.ones(rows.shape[0], dtype=np.bool_))

    def take(self, rows: Real) -> NDArray[np.bool_]:
        """Take in those of further rows that are orthogonal to all known and to each other; say which, shape (k,)."""
        taken = np.zeros(rows.shape[0], dtype=np.bool_)
        while not taken.all():
            phantoms, lacking, fits = self._complete(rows)
            fits &= ~taken
            beyond = fits & (lacking > TOLERANCE)
            if not beyond.any():
                if not fits.all():
                    rows, phantoms = rows[fits], phantoms[fits]
                accepted = _orthogonal(rows, phantoms)
                self._add(rows, phantoms, accepted)
                taken[np.flatnonzero(fits)[accepted]] = True
                break
            # What this row has beyond the phantom directions known so far is a direction of its own.
            first = int(np.argmax(beyond))
            phantoms[first, self._rank] = np.sqrt(lacking[first])
            self._rank += 1
            self._anchors = np.concatenate([self._anchors, rows[first : first + 1]])
            self._phantoms = np.concatenate([self._phantoms, phantoms[first : first + 1]])
            self._add(rows[first : first + 1], phantoms[first : first + 1], np.ones(1, dtype=np.bool_))
            taken[first] = True
        return taken

    def _complete(self, rows: Real) -> tuple[Real, Real, NDArray[np.bool_]]:
        """Phantom entries (k, f) of rows, energy that they lack (k,), and whether the row can belong to the cycle."""
        known = self._phantoms[:, : self._rank]
        wanted = -(rows @ self._anchors.T)
        phantoms = np.zeros((rows.shape[0], self._phantom_size))
        if self._rank:
            phantoms[:, : self._rank] = wanted @ np.linalg.pinv(known).T
        lacking = self._phantom_size - (phantoms**2).sum(axis=1)
        fits = np.abs(phantoms[:, : self._rank] @ known.T - wanted).max(axis=1) < TOLERANCE
        fits &= np.abs(rows @ self._row_sums.T + phantoms @ self._phantom_sums.T).max(axis=1) < TOLERANCE
        fits &= lacking > -TOLERANCE
        if self._rank == self._phantom_size:
            fits &= lacking < TOLERANCE
        return phantoms, lacking, fits

    def _add(self, rows: Real, phantoms: Real, accepted: NDArray[np.bool_]) -> None:
        """Add those rows that were accepted to the weighted sums."""
        weights = np.zeros((STEPS.shape[0], rows.shape[0]))
        weights[:, accepted] = 2.0 * (STEPS[:, None] * (self._count + np.arange(1, accepted.sum() + 1)) % 1.0) - 1.0
        self._row_sums += weights @ rows
        self._phantom_sums += weights @ phantoms
        self._count += int(accepted.sum())


def begin(rows: Real) -> tuple[Completion, NDArray[np.intp]] | None:
    """Find a cycle in the first rows of a stream, some of which may not belong to it.

    Parameters
    ----------
    rows : ndarray, shape (k, n)
        Distinct, entries ±1.

    Returns
    -------
    completion : Completion
        Of the smallest order that serves.
    members : ndarray of int
        Rows that belong to it: at least half of those looked at. None when there is no such order.
    """
    rows = rows[:MOST_ROWS]
    count, size = rows.shape
    products = np.abs(rows @ rows.T)
    np.fill_diagonal(products, 0.0)
    # Three or more orthogonal columns of ±1 have a multiple of four entries (Hadamard, 1893).
    for order in range(-(-size // 4) * 4, size + count - SPARE + 1, 4):
        # Phantom parts of energy f have products of f at most, and so have the rows themselves, without sign.
        members = _friends(products > order - size, max(order - size + SPARE, -(-count // 2)))
        if members.size:
            try:
                return Completion(rows[members], order), members
            except ValueError:
                continue
    return None


def _friends(conflict: NDArray[np.bool_], least: int) -> NDArray[np.intp]:
    """Leave out rows of the most conflicts until none conflict; none at all when fewer than `least` are left."""
    members = np.arange(conflict.shape[0])
    while members.size >= least:
        conflicts = conflict[np.ix_(members, members)].sum(axis=1)
        worst = int(np.argmax(conflicts))
        if not conflicts[worst]:
            return members
        members = np.delete(members, worst)
    return np.zeros(0, dtype=np.intp)


def _orthogonal(rows: Real, phantoms: Real) -> NDArray[np.bool_]:
    """Which rows are orthogonal to all before them that are."""
    conflict = np.tril(np.abs(rows @ rows.T + phantoms @ phantoms.T) > TOLERANCE, -1)
    accepted = np.ones(rows.shape[0], dtype=np.bool_)
    for index in np.flatnonzero(conflict.any(axis=1)):
        accepted[index] = not (conflict[index] & accepted).any()
    return accepted
