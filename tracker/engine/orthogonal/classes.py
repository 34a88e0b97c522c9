"""The covariance of the responses under the rows of a sweep: what each is uncertain of by itself, and with others.

At first the responses have a common part, the direct path, and each something of its own: V = D I + γ 1 1ᵀ. Rows that
have been heard in the same blocks, and as often, stay alike; call them a class. With c(i) the class of row i::

    V_ij = δ_ij D_c(i) + Γ_c(i)c(j)

This form is kept by all that is done to V. Forgetting, V ← a V + b V₀, does the same to D and Γ. A block in which each
of the n rows of a class is heard m times shows of the class its mean innovation ē, of variance Γ_cc + (D + 1/m) / n,
and of each row the rest: with κ = m D / (1 + m D)::

    S = Γ_hh + diag((D_h + 1/m_h) / n_h),  g += Γ_h S⁻¹ ē,  Γ −= Γ_h S⁻¹ Γ_hᵀ      (h: the classes heard)
    x_i += κ (ē_i − change of g),  D ← (1 − κ) D,  row and column of Γ ← (1 − κ) ·

where response i is x_i + g_c(i): the error that x_i takes over from g is −κ that of g. A class of which a block hears
only a part falls into two. Blocks of B frames that go through M rows over and over make M / gcd(B, M) classes, blocks
of any sizes more and more; beyond `MOST` those that are heard together are made one, which keeps their variances and
drops what distinguished them.
"""

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack

from .responses import product

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]
Rows = NDArray[np.intp]

# Classes up to which nothing is dropped: 129 come of 1024 elements in blocks of 64 frames.
MOST = 256


class Classes:
    """Covariance V of M responses, and the part g of their means that classes have in common.

    Parameters
    ----------
    order, elements, outputs : int
        M, N and D.
    own, shared : float
        D and γ before any data.
    """

    def __init__(self, order: int, elements: int, outputs: int, own: float, shared: float) -> None:
        self.prior = (own, shared)
        self.of: Rows = np.zeros(order, dtype=np.intp)
        self.count: Real = np.array([float(order)])  # rows of each class
        self.own: Real = np.array([own])  # D
        self.shared: Real = np.array([[shared]])  # Γ
        self.means: Complex = np.zeros((1, outputs), dtype=np.complex128)  # g
        # Sum of the states of each class; that over all rows is zero, known or not.
        self.sums: Real = np.zeros((elements, 1))
        self._overlap: Real | None = None  # products of the sums, while they stay as they are

    @property
    def mean(self) -> Complex:
        """Mean of g over all rows, shape (D,)."""
        return np.asarray(product(self.count[None, :], self.means)[0] / self.of.shape[0])

    @property
    def direct_variance(self) -> float:
        """Variance of the mean of all responses: the direct path's."""
        order = self.of.shape[0]
        return float(self.own @ self.count + self.count @ self.shared @ self.count) / float(order**2)

    @property
    def element_variances(self) -> Real:
        """Variance of each element's coefficient, shape (N,)."""
        order = self.of.shape[0]
        shared = np.einsum("nk,nk->n", self.sums @ self.shared, self.sums)
        return np.asarray((self.own @ self.count + shared) / order**2)

    @property
    def element_variance(self) -> float:
        """Mean of `element_variances`."""
        elements, order = self.sums.shape[0], self.of.shape[0]
        if self._overlap is None:
            self._overlap = self.sums.T @ self.sums
        shared = float(np.vdot(self._overlap, self.shared)) / elements
        return float(self.own @ self.count + shared) / float(order**2)

    def covariance(self, rows: Rows, *, distinct: bool) -> Real:
        """V over rows, shape (B, B); `distinct` says that none comes twice."""
        of = self.of[rows]
        covariance: Real = self.shared.take(of, axis=0).take(of, axis=1)
        if distinct:
            add_diagonal(covariance, self.own[of])
            return covariance
        return np.asarray(covariance + np.where(rows[:, None] == rows, self.own[of], 0.0))

    def between(self, regressors: Real) -> Real:
        """Covariance of Z C over frames as far as Γ goes, shape (B, B), for regressors (B, N + 1)."""
        along = (regressors[:, :1] * self.count + regressors[:, 1:] @ self.sums) / self.of.shape[0]
        return np.asarray(along @ self.shared @ along.T)

    def loadings(self) -> Real:
        """Give the sums over the rows of each class of [1, s], shape (N + 1, k)."""
        return np.concatenate([self.count[None, :], self.sums])

    def forget(self, a: float, b: float, decay: float) -> None:
        """Set V to a V + b V₀ and g to `decay` g."""
        self.own *= a
        self.own += b * self.prior[0]
        self.shared *= a
        self.shared += b * self.prior[1]
        self.means *= decay

    def hear(
        self, rows: Rows, counts: Rows | None, innovations: Complex, states: Callable[[Rows], Real]
    ) -> tuple[Real, Complex]:
        """Take in a block.

        Parameters
        ----------
        rows : ndarray of int, shape (r,)
            Rows heard, each named once.
        counts : ndarray of int, shape (r,), or None
            How often; None for once.
        innovations : ndarray of complex, shape (r, D)
            Mean innovation of each row.
        states : callable
            Gives the states of rows, (r, N).

        Returns
        -------
        gain : ndarray, shape (r,)
            κ of each row.
        moved : ndarray of complex, shape (r, D)
            Change of g of each row.
        """
        of = self.of[rows]
        members = np.bincount(of, minlength=self.count.shape[0])
        heard = np.flatnonzero(members)
        if (members[heard] != self.count[heard]).any() or not _alike(of, counts, members[heard], heard):
            self._part(rows, counts, states)
            of = self.of[rows]
            members = np.bincount(of, minlength=self.count.shape[0])
            heard = np.flatnonzero(members)
        place = np.cumsum(members > 0)[of] - 1
        size, own = members[heard], self.own[heard]
        often = np.bincount(place, weights=counts) / size if counts is not None else 1.0
        mean = product((place == np.arange(heard.shape[0])[:, None]) / size[:, None], innovations)
        expected = self.shared.take(heard, axis=0).take(heard, axis=1)
        add_diagonal(expected, (own + 1.0 / often) / size)
        white = whitened(expected, np.concatenate([self.shared[heard], mean.view(np.float64)], axis=1))[1]
        across = white[:, : members.shape[0]]
        moved = np.ascontiguousarray(across.T @ white[:, members.shape[0] :]).view(np.complex128)
        left = 1.0 / (1.0 + often * own)
        scale = np.ones_like(self.count)
        scale[heard] = left
        self.shared -= across.T @ across
        self.shared *= scale[:, None] * scale
        self.own[heard] = own * left
        self.means += moved
        return 1.0 - left[place], moved[of]

    def unite(self, rows: Rows, counts: Rows | None) -> Complex | None:
        """Make one class of those heard as often in a block, if there are too many.

        Returns
        -------
        ndarray of complex, shape (r, D), or None
            By how much g of each row has changed: their responses are to stay what they were.
        """
        if self.count.shape[0] <= MOST:
            return None
        before = self.means[self.of[rows]]
        for part in _by_count(rows, counts):
            self._unite(np.unique(self.of[part]))
        return np.asarray(self.means[self.of[rows]] - before)

    def renew_common(self) -> None:
        """Forget how well the mean of all responses is known, and that alone."""
        order = self.of.shape[0]
        # Covariance of each response with the mean of all.
        along = (self.own + self.shared @ self.count) / order
        rest = self.direct_variance + self.prior[0] / order + self.prior[1]
        self.shared = self.shared - along[:, None] - along + rest

    def rescale(self, covariance: float) -> None:
        """Multiply V and V₀."""
        self.prior = (self.prior[0] * covariance, self.prior[1] * covariance)
        self.own *= covariance
        self.shared *= covariance

    def snapshot(self) -> dict[str, Any]:
        """All state, as copies; `restore` goes on from it bit by bit."""
        names = ("of", "count", "own", "shared", "means", "sums")
        return {"prior": list(self.prior)} | {name: getattr(self, name).copy() for name in names}

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any]) -> "Classes":
        """Rebuild from a snapshot."""
        own, shared = (float(value) for value in snapshot["prior"])
        of, sums = np.array(snapshot["of"], dtype=np.intp), np.array(snapshot["sums"], dtype=np.float64)
        means = np.array(snapshot["means"], dtype=np.complex128)
        classes = cls(of.shape[0], sums.shape[0], means.shape[1], own, shared)
        classes.of, classes.sums, classes.means = of, sums, means
        classes.count, classes.own, classes.shared = (
            np.array(snapshot[name], dtype=np.float64) for name in ("count", "own", "shared")
        )
        return classes

    def _part(self, rows: Rows, counts: Rows | None, states: Callable[[Rows], Real]) -> None:
        """Let classes fall apart until each is heard as a whole, all rows as often, or not at all."""
        for part in _by_count(rows, counts):
            of = self.of[part]
            for number in np.unique(of).tolist():
                if np.count_nonzero(of == number) < self.count[number]:
                    self._split(number, part[of == number], states)

    def _split(self, number: int, rows: Rows, states: Callable[[Rows], Real]) -> None:
        """Make a class of its own of some rows."""
        last = self.count.shape[0]
        index = np.append(np.arange(last), number)
        self.own, self.means, self.sums = self.own[index], self.means[index], self.sums.take(index, axis=1)
        self.shared = self.shared[np.ix_(index, index)]
        self.of[rows] = last
        self._overlap = None
        sums = states(rows).sum(axis=0)
        self.sums[:, last] = sums
        self.sums[:, number] -= sums
        self.count = np.append(self.count, float(rows.shape[0]))
        self.count[number] -= rows.shape[0]

    def _unite(self, numbers: Rows) -> None:
        """Make one class of several."""
        self._overlap = None
        into, size = numbers[0], self.count[numbers]
        share = np.eye(self.count.shape[0])
        share[into] = 0.0
        share[into, numbers] = size / size.sum()
        before = np.diagonal(self.shared)[numbers]
        self.shared, self.means = share @ self.shared @ share.T, product(share, self.means)
        # Variances stay what they were on average.
        own = float(size @ (self.own[numbers] + before)) / float(size.sum()) - float(self.shared[into, into])
        self.own[into], self.count[into] = own, size.sum()
        self.sums[:, into] = self.sums[:, numbers].sum(axis=1)
        kept = np.delete(np.arange(self.count.shape[0]), numbers[1:])
        renumbered = np.zeros_like(self.of, shape=self.count.shape)
        renumbered[kept] = np.arange(kept.shape[0])
        renumbered[numbers] = renumbered[into]
        self.of = renumbered[self.of]
        self.count, self.own, self.means, self.sums = (
            self.count[kept],
            self.own[kept],
            self.means[kept],
            self.sums.take(kept, axis=1),
        )
        self.shared = self.shared[np.ix_(kept, kept)]


def _alike(of: Rows, counts: Rows | None, size: Rows, heard: Rows) -> bool:
    """Whether all rows of a class were heard as often: where they were, the mean square is the square of the mean."""
    if counts is None:
        return True
    total, square = (np.bincount(of, weights=weights)[heard] for weights in (counts, counts * counts))
    return bool((square * size == total * total).all())


def _by_count(rows: Rows, counts: Rows | None) -> list[Rows]:
    """Rows heard once, twice, and so on."""
    return [rows] if counts is None else [rows[counts == times] for times in np.unique(counts)]


def whitened(covariance: Real, values: Real) -> tuple[Real, Real]:
    """Diagonal of the lower Cholesky factor L of a covariance (B, B), which is spoilt, and L⁻¹ times values (B, …).

    Raises
    ------
    FloatingPointError
        When the covariance is not positive definite.
    """
    factor, info = lapack.dpotrf(covariance.T, lower=1, clean=0, overwrite_a=1)
    if info:
        raise FloatingPointError(f"covariance of responses is not positive definite (pivot {info})")
    return factor.diagonal().copy(), np.asarray(lapack.dtrtrs(factor, values, lower=1)[0])


def add_diagonal(matrix: Real, values: Real | float) -> None:
    """Add to the diagonal of a matrix, in place."""
    np.einsum("ii->i", matrix)[...] += values
