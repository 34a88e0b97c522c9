"""What the neighbours of an element say its response should be.

A few waves fall on the panel and leave it, so the responses of neighbouring elements differ by a few phase steps. On
each direction over the delays the responses are taken for a random field over the panel whose covariance depends on
the distance of two elements alone. It is measured at all distances of up to two elements, and gives the best linear
prediction of an element from the eight around it (ordinary least squares; kriging to a geostatistician). Noise in the
neighbours is part of the measured covariance and makes the weights as cautious as they must be; on a panel whose
elements have nothing to do with each other they are nil, and what is predicted is zero, give or take the mean power.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

AROUND = tuple((column, row) for column in (-1, 0, 1) for row in (-1, 0, 1))
# Share of the power that a covariance measured over N elements may be off by, for weights to be the smaller: RIDGE / N.
RIDGE = 4.0
# On fewer elements nothing is learned of how they hang together.
LEAST_ELEMENTS = 48
# Residual variances below this share of their mean, and of the power, are not believed.
LEAST_RESIDUAL, LEAST_SHARE = 0.5, 1e-3


class Neighbours:
    """Predicts elements from those around them.

    Parameters
    ----------
    columns, rows : int
        Of the panel; element i is column i // rows, row i % rows.
    """

    def __init__(self, columns: int, rows: int) -> None:
        self._shape = (columns, rows)
        column, row = np.divmod(np.arange(columns * rows), rows)
        there = np.stack(
            [
                (column + c >= 0) & (column + c < columns) & (row + r >= 0) & (row + r < rows) & ((c, r) != (0, 0))
                for c, r in AROUND
            ],
            axis=1,
        )
        # Corners, edges and the inside have different neighbours, and so weights of their own.
        kinds, kind = np.unique(there, axis=0, return_inverse=True)
        self._kind = kind.reshape(-1)
        # Where the neighbours stand; what is not there is read from one place beyond the last, which holds nothing.
        beside = np.arange(columns * rows)[:, None] + np.array([c * rows + r for c, r in AROUND])
        self._beside = np.where(there, beside, columns * rows)
        self._both = (kinds[:, :, None] & kinds[:, None, :]).astype(np.float64)
        self._none = np.where(kinds, 0.0, 1.0)[:, :, None] * np.eye(len(AROUND))
        self._there = kinds.astype(np.float64)
        lags = [(c, r) for c in range(3) for r in range(-2, 3) if (c > 0 or r > 0) and c < columns and abs(r) < rows]
        self._lags = [(c, r, (columns - c) * (rows - abs(r))) for c, r in lags]
        self._between = np.array([[_place(b[0] - a[0], b[1] - a[1]) for b in AROUND] for a in AROUND])
        self._towards = np.array([_place(-c, -r) for c, r in AROUND])
        self._weights: Complex = np.zeros((1, len(self._kind), len(AROUND)), dtype=np.complex128)
        self.residual: Real = np.ones((1, len(self._kind)))
        self.power: Real = np.ones(1)

    def fit(self, responses: Complex, noise: float) -> None:
        """Learn how elements hang together: the weights, and what they leave.

        After it, `residual`, shape (k, N), is the variance of a response about its prediction and `power`, shape (k,),
        that of a response, both without the noise in the response itself.

        Parameters
        ----------
        responses : ndarray of complex, shape (k, N)
            On k directions over the delays that do not correlate.
        noise : float
            Variance of the noise in each entry.
        """
        covariance, heard = self._covariance(responses)
        power = np.maximum(heard - noise, LEAST_SHARE * heard)
        ridge = RIDGE / self._kind.size * heard + np.finfo(float).tiny
        among = covariance[:, self._between] + ridge[:, None, None] * np.eye(len(AROUND))
        towards = covariance[:, None, self._towards] * self._there
        weights = np.linalg.solve(among[:, None] * self._both + self._none, towards[..., None])[..., 0]
        residual = power[:, None] - (weights * towards.conj()).real.sum(axis=2)
        least = LEAST_RESIDUAL * np.maximum(residual.mean(axis=1), LEAST_SHARE * power)
        if self._kind.size < LEAST_ELEMENTS:
            weights[:], residual[:] = 0.0, power[:, None]
        # `take` lays out in one way, indexing in another that a snapshot would not keep.
        self._weights = np.take(weights.astype(np.complex128), self._kind, axis=1)
        self.residual = np.take(np.maximum(residual, least[:, None]), self._kind, axis=1)
        self.power = power

    def predict(self, responses: Complex) -> Complex:
        """Predict every element from the others, both of shape (k, N)."""
        there = np.zeros((responses.shape[0], responses.shape[1] + 1), dtype=np.complex128)
        there[:, :-1] = responses
        return np.asarray(np.einsum("knj,knj->kn", there[:, self._beside], self._weights))

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {"weights": self._weights.copy(), "residual": self.residual.copy(), "power": self.power.copy()}

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._weights = np.array(snapshot["weights"], dtype=np.complex128)
        self.residual = np.array(snapshot["residual"], dtype=np.float64)
        self.power = np.array(snapshot["power"], dtype=np.float64)

    def _covariance(self, responses: Complex) -> tuple[Complex, Real]:
        """Covariance at all distances of up to two elements, shape (k, 25), and mean power, shape (k,)."""
        columns, rows = self._shape
        field = responses.reshape(-1, columns, rows)
        heard = (field.real**2 + field.imag**2).mean(axis=(1, 2))
        covariance = np.zeros((field.shape[0], 25), dtype=np.complex128)
        covariance[:, _place(0, 0)] = heard
        beyond = np.zeros((field.shape[0], columns + 2, rows + 4), dtype=np.complex128)
        beyond[:, :columns, 2:-2] = field
        turned = field.conj()
        for column, row, pairs in self._lags:
            apart = beyond[:, column : column + columns, 2 + row : 2 + row + rows]
            value = np.einsum("kcr,kcr->k", apart, turned) / pairs
            covariance[:, _place(column, row)] = value
            covariance[:, _place(-column, -row)] = value.conj()
        return covariance, heard


def _place(column: int, row: int) -> int:
    """Where a distance of so many columns and rows stands in the table of covariances."""
    return (column + 2) * 5 + row + 2
