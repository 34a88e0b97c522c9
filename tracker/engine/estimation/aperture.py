"""Aperture basis: in which r directions over the N elements the responses are estimated.

A pattern s enters the model as z(s) = [1, Uᵀs]: the direct path, then the surface through U (N × r, orthonormal
columns). Fewer columns are fewer unknowns, as long as the true responses lie in their span.
"""

from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from .. import panel
from .products import ProductCache

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Memory for products of patterns with given columns, 10⁶ bytes: a sweep of 4096 patterns with 128 columns takes 10.
PRODUCTS_MB = 64.0


class ApertureBasis(Protocol):
    """What the estimator needs of a basis."""

    @property
    def elements(self) -> int:
        """N."""

    @property
    def size(self) -> int:
        """r, columns of U."""

    @property
    def weights(self) -> Array:
        """Variance of each coefficient before any data, shape (r,), relative to their mean."""

    @property
    def is_complex(self) -> bool:
        """Whether U, and with it z, is complex."""

    def regressors(self, states: Array) -> NDArray[Any]:
        """Turn states (B, N) into z (B, r + 1), the direct path first."""

    def regressors_of_bits(self, patterns: NDArray[np.uint8]) -> NDArray[Any]:
        """Do as `regressors` does for packed patterns (B, ceil(N/8)), see `panel.pack`."""

    def single_regressors_of_bits(self, patterns: NDArray[np.uint8]) -> NDArray[Any]:
        """Do as `regressors_of_bits` does, in single precision."""

    def surface(self, coefficients: Complex) -> Complex:
        """Turn coefficients (r, D) into element responses (N, D)."""


class Elements:
    """Every element for itself: U is the identity. Any surface, nothing known beforehand."""

    def __init__(self, elements: int) -> None:
        self.elements = elements
        self.size = elements
        self.weights = np.ones(elements)
        self.is_complex = False

    def regressors(self, states: Array) -> Array:
        """See `ApertureBasis`."""
        z = np.empty((states.shape[0], self.size + 1))
        z[:, 0] = 1.0
        z[:, 1:] = states
        return z

    def regressors_of_bits(self, patterns: NDArray[np.uint8]) -> Array:
        """See `ApertureBasis`."""
        return self.regressors(panel.unpack(patterns, self.elements))

    def single_regressors_of_bits(self, patterns: NDArray[np.uint8]) -> NDArray[np.float32]:
        """See `ApertureBasis`."""
        z = np.empty((patterns.shape[0], self.size + 1), dtype=np.float32)
        z[:, 0] = 1.0
        z[:, 1:] = panel.unpack_single(patterns, self.elements)
        return z

    def surface(self, coefficients: Complex) -> Complex:
        """See `ApertureBasis`."""
        return coefficients


class Tiles:
    """Neighbouring elements share one response: U has one column a tile, constant on it.

    Parameters
    ----------
    columns, rows : int
        Of the panel; element i is column i // rows, row i % rows.
    tile_columns, tile_rows : int
        Of a tile; tiles at the far edges may be smaller.
    """

    def __init__(self, columns: int, rows: int, tile_columns: int, tile_rows: int) -> None:
        self.elements = columns * rows
        element = np.arange(self.elements)
        down = -(-rows // tile_rows)
        self._tile = (element // rows) // tile_columns * down + (element % rows) // tile_rows
        self.size = int(self._tile.max()) + 1
        self.weights = np.ones(self.size)
        self.is_complex = False
        # Each column has unit length, so that unit patterns excite all columns alike.
        self._weight = 1.0 / np.sqrt(np.bincount(self._tile))
        self._columns = np.zeros((self.elements, self.size))
        self._columns[element, self._tile] = self._weight[self._tile]

    def regressors(self, states: Array) -> Array:
        """See `ApertureBasis`."""
        z = np.empty((states.shape[0], self.size + 1))
        z[:, 0] = 1.0
        z[:, 1:] = states @ self._columns
        return z

    def regressors_of_bits(self, patterns: NDArray[np.uint8]) -> Array:
        """See `ApertureBasis`."""
        return self.regressors(panel.unpack(patterns, self.elements))

    def single_regressors_of_bits(self, patterns: NDArray[np.uint8]) -> NDArray[np.float32]:
        """See `ApertureBasis`."""
        return self.regressors_of_bits(patterns).astype(np.float32)

    def surface(self, coefficients: Complex) -> Complex:
        """See `ApertureBasis`."""
        return np.asarray((coefficients * self._weight[:, None])[self._tile])


class Columns:
    """Any orthonormal columns, learned from logs or worked out from geometry.

    Parameters
    ----------
    columns : ndarray of complex, shape (N, r)
        U.
    variances : ndarray, shape (r,)
        Variance of each coefficient before any data; only their ratios matter.
    held : float or None
        Share of the energy to be expected that the columns hold, if that is known.

    Raises
    ------
    ValueError
        When the columns are not orthonormal or a variance is not above zero.
    """

    def __init__(self, columns: Complex, variances: Array, held: float | None = None) -> None:
        self.elements, self.size = columns.shape
        gram = columns.conj().T @ columns
        if not np.allclose(gram, np.eye(self.size), atol=1e-6):
            raise ValueError("the columns of an aperture basis must be orthonormal")
        if variances.shape != (self.size,) or not (variances > 0).all():
            raise ValueError(f"an aperture basis of {self.size} columns needs as many variances, all above zero")
        self.weights = variances / variances.mean()
        self.is_complex = True
        self.held = held
        self._products = ProductCache(columns, PRODUCTS_MB)

    def regressors(self, states: Array) -> Complex:
        """See `ApertureBasis`."""
        return self.regressors_of_bits(panel.pack(states))

    def regressors_of_bits(self, patterns: NDArray[np.uint8]) -> Complex:
        """See `ApertureBasis`."""
        z = np.empty((patterns.shape[0], self.size + 1), dtype=np.complex128)
        z[:, 0] = 1.0
        z[:, 1:] = self._products.products(patterns)
        return z

    def single_regressors_of_bits(self, patterns: NDArray[np.uint8]) -> NDArray[np.complex64]:
        """See `ApertureBasis`."""
        return self.regressors_of_bits(patterns).astype(np.complex64)

    def surface(self, coefficients: Complex) -> Complex:
        """See `ApertureBasis`."""
        return np.asarray(self._products.columns @ coefficients)
