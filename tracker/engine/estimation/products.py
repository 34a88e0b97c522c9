"""Products Uᵀs of patterns with the columns of an aperture basis, kept for patterns that are sounded again.

With N elements and r columns a product costs 2 N r real multiplications, at N = 4096 as much as the rest of the
estimator, while sweeps repeat the same patterns. So products are kept under the bits of their pattern.

A replay must give the same bits, whichever products it finds kept and whichever frames it works out together, but a
matrix product rounds as its blocking has it. So rounding is taken out: the columns are rounded once to whole multiples
of a quantum so coarse that every sum of N of them, with signs, is a whole number of quanta of no more than 2⁵³. Such
sums are exact in double precision, in any order, with or without fused operations (error-free sums, as in Rump, Ogita &
Oishi, SIAM J. Scientific Computing 31, 2008). Rounding moves an entry by at most N / 2⁵² of the largest: 9e-13 at 4096.
"""

import math

import numpy as np
from numpy.typing import NDArray

from .. import panel

Complex = NDArray[np.complex128]

# States unpacked at a time.
CHUNK = 256
# Bytes of a kept product beside its values and its pattern: the dictionary's share and the objects in it.
OVERHEAD = 160


def exact(columns: Complex) -> Complex:
    """Round columns so that their products with states ±1 are exact.

    Parameters
    ----------
    columns : ndarray of complex, shape (N, r)

    Returns
    -------
    ndarray of complex, shape (N, r)
        Real and imaginary parts are whole multiples of one power of two.

    Raises
    ------
    ValueError
        When an entry is not finite.
    """
    parts = np.ascontiguousarray(columns, dtype=np.complex128).view(np.float64)
    if not np.isfinite(parts).all():
        raise ValueError("columns with entries that are not finite have no products")
    largest = float(np.abs(parts).max(initial=0.0))
    if largest == 0.0:
        return np.zeros(columns.shape, dtype=np.complex128)
    # N entries of at most 2^a each sum up to at most 2^(a + b) = 2⁵³ quanta.
    above = math.frexp(largest)[1] + max(columns.shape[0] - 1, 0).bit_length()
    quantum = math.ldexp(1.0, above - 53)
    return np.asarray(np.rint(parts / quantum) * quantum).view(np.complex128)


class ProductCache:
    """Works out products and keeps them.

    What is kept lies in two halves, a young one and an old one. Products found in the old half move to the young one;
    when that is full it becomes the old one, and what is left in the old one is dropped. So what was not asked for
    over half a capacity of other patterns goes, and a sweep that fits into a half stays whole.

    Parameters
    ----------
    columns : ndarray of complex, shape (N, r)
        U; it is rounded by `exact`.
    most_mb : float
        Memory that may be taken, 10⁶ bytes; 0 to keep nothing.
    """

    def __init__(self, columns: Complex, most_mb: float) -> None:
        self.columns = exact(columns)
        self._parts = self.columns.view(np.float64)
        elements, size = columns.shape
        each = 16 * size + -(-elements // 8) + OVERHEAD
        self.capacity = int(most_mb * 1e6 / each) // 2
        """Products in a half."""
        self._young: dict[bytes, int] = {}
        self._old: dict[bytes, int] = {}
        # Memory of the halves is claimed by the system only as they fill.
        self._values = np.empty((self.capacity, size), dtype=np.complex128)
        self._old_values = np.empty_like(self._values)
        self.computed = 0
        """Products worked out so far, for telling how well the cache serves."""

    @property
    def kept(self) -> int:
        """Products in both halves."""
        return len(self._young) + len(self._old)

    def products(self, patterns: NDArray[np.uint8]) -> Complex:
        """Uᵀs of each pattern; the same bits whatever was asked for before or along with it.

        Parameters
        ----------
        patterns : ndarray of uint8, shape (B, ceil(N/8))
            Packed, see `panel.pack`.

        Returns
        -------
        ndarray of complex, shape (B, r)
        """
        width = patterns.shape[1]
        blob = patterns.tobytes()
        keys = [blob[at : at + width] for at in range(0, len(blob), width)]
        places = np.fromiter((self._young.get(key, -1) for key in keys), dtype=np.intp, count=len(keys))
        missing = np.flatnonzero(places < 0)
        if not missing.size:
            return np.asarray(self._values[places])
        products = np.empty((len(keys), self.columns.shape[1]), dtype=np.complex128)
        found = np.flatnonzero(places >= 0)
        products[found] = self._values[places[found]]
        asked = [keys[index] for index in missing.tolist()]
        distinct = list(dict.fromkeys(asked))
        values = self._recall(distinct)
        where = {key: index for index, key in enumerate(distinct)}
        products[missing] = values[[where[key] for key in asked]]
        self._keep(distinct, values)
        return products

    def _recall(self, keys: list[bytes]) -> Complex:
        """Products of distinct patterns that the young half does not hold: from the old one, or worked out."""
        places = np.fromiter((self._old.get(key, -1) for key in keys), dtype=np.intp, count=len(keys))
        values = np.empty((len(keys), self.columns.shape[1]), dtype=np.complex128)
        found, unknown = np.flatnonzero(places >= 0), np.flatnonzero(places < 0)
        values[found] = self._old_values[places[found]]
        self.computed += unknown.shape[0]
        for start in range(0, unknown.shape[0], CHUNK):
            part = unknown[start : start + CHUNK]
            packed = np.frombuffer(b"".join(keys[index] for index in part.tolist()), dtype=np.uint8)
            states = panel.unpack(packed.reshape(part.shape[0], -1), self.columns.shape[0])
            values[part] = (states @ self._parts).view(np.complex128)
        return values

    def _keep(self, keys: list[bytes], values: Complex) -> None:
        """Put products into the young half; begin a new one when it is full."""
        start = 0
        while start < len(keys) and self.capacity:
            if len(self._young) == self.capacity:
                self._old, self._young = self._young, {}
                self._old_values, self._values = self._values, self._old_values
            place = len(self._young)
            stop = min(start + self.capacity - place, len(keys))
            self._values[place : place + stop - start] = values[start:stop]
            self._young.update(zip(keys[start:stop], range(place, place + stop - start), strict=True))
            start = stop
