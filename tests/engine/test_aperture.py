"""Aperture bases: regressors and responses belong together."""

import numpy as np
import pytest

from tracker.engine.estimation.aperture import ApertureBasis, Columns, Elements, Tiles
from tracker.engine.panel import pack

_PHASES = np.exp(2j * np.pi * np.random.default_rng(0).uniform(size=(12, 4)))
_COLUMNS = Columns(np.linalg.qr(_PHASES)[0], np.array([4.0, 2.0, 1.0, 1.0]))


@pytest.mark.parametrize("basis", [Elements(12), Tiles(5, 4, 2, 3), Tiles(4, 4, 4, 4), Tiles(3, 7, 1, 1), _COLUMNS])
def test_response_through_the_basis(basis: ApertureBasis) -> None:
    """zᵀ[direct, c] equals direct + Σ s_n v_n with v the expanded coefficients, and power of z is even."""
    rng = np.random.default_rng(1)
    states = rng.choice([-1.0, 1.0], (9, basis.elements))
    direct = rng.normal(size=(1, 3)) + 1j * rng.normal(size=(1, 3))
    c = rng.normal(size=(basis.size, 3)) + 1j * rng.normal(size=(basis.size, 3))
    through = basis.regressors(states) @ np.concatenate([direct, c])
    np.testing.assert_allclose(through, direct + states @ basis.surface(c), atol=1e-12)
    np.testing.assert_array_equal(basis.regressors_of_bits(pack(states)), basis.regressors(states))


def test_tiles_are_orthonormal_and_constant() -> None:
    """Each element belongs to one tile, tiles at the edges are smaller, columns have unit length."""
    basis = Tiles(columns=5, rows=4, tile_columns=2, tile_rows=3)
    columns = basis.surface(np.eye(basis.size, dtype=complex)).real
    assert basis.size == 3 * 2
    np.testing.assert_allclose(columns.T @ columns, np.eye(basis.size), atol=1e-12)
    assert (np.count_nonzero(columns, axis=1) == 1).all()
    # Element i is column i // rows, row i % rows: 0, 1, 2 and 4, 5, 6 make the first tile of 2 × 3.
    assert set(np.flatnonzero(columns[:, np.argmax(columns[0])])) == {0, 1, 2, 4, 5, 6}


def test_tiles_of_one_element_are_elements() -> None:
    """1 × 1 tiles give the same regressors as the elements themselves."""
    states = np.random.default_rng(2).choice([-1.0, 1.0], (4, 21))
    np.testing.assert_allclose(Tiles(3, 7, 1, 1).regressors(states), Elements(21).regressors(states))


def test_columns_are_checked() -> None:
    """Columns that are not orthonormal, and variances that cannot be, are refused."""
    with pytest.raises(ValueError, match="orthonormal"):
        Columns(2 * np.eye(4, 2, dtype=np.complex128), np.ones(2))
    with pytest.raises(ValueError, match="above zero"):
        Columns(np.eye(4, 2, dtype=np.complex128), np.array([1.0, 0.0]))
