"""Recursive least squares over sweeps of orthogonal patterns: a covariance that stays almost diagonal, O(D) a frame.

The model is that of `rls`: y = z C + unit noise, z = [1, s] of n = N + 1 entries. Let a sweep be M patterns whose rows
z make a matrix A (M × n) with orthogonal columns, AᵀA = M I. It is completed by M − n further columns Φ, orthogonal to
those of A and of the same length: W = [A Φ] / √M is orthogonal. Φ belongs to *phantom elements*, which no panel has. It
need not be known: that it exists is enough (`completion`).

In the coordinates θ = W C, a frame that sounds row i hears θ_i alone, y = √M θ_i + noise. Where P is diagonal in these
coordinates it stays so, and least squares falls apart into M scalar filters, each of the response r_i = √M θ_i under
its own pattern, of variance v_i::

    S = 1 + v_i,    r_i += v_i (y − r_i) / S,    v_i = v_i / S,    C = Aᵀ r / M,    P = Aᵀ diag(v) A / M²

**Which prior.** Let P₀ = diag(p_j), coefficient by coefficient, be diagonal after the change of coordinates too:
W P₀ = D W, entry by entry W_ij (p_j − d_i) = 0. No entry of A is zero, so all p_j and d_i are one number: the prior is
p₀ I, phantoms included, and no other will do. But the direct path is far stronger than an element, P₀ = p₀ I + γ e₀e₀ᵀ.
Column 0 of A is all ones, so this adds the same to the covariance of any two responses, V = M p₀ I + γ 1 1ᵀ, and what
becomes of such a V stays known exactly by a few numbers for all rows of one history, see `classes`. A prior that leaves
the direct path as weak as an element cost up to 40 % of the error of the elements in trials, and 4 to 100 times that of
the direct path.

**Exactness.** The dense filter that does the same is `BlockRls` with M unknowns, the phantoms of prior p₀, and the rows
of √M W; its first n unknowns are those returned here. To that this filter is equal, to rounding. One that knows that
there are no phantoms can do better only while a sweep is unfinished, by about the share (M − n) / M.

Patterns outside of the sweep are kept apart, see `swept`.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import blas

from ..estimation.filter import Surprise
from ..estimation.rls import BlockRls
from .classes import Classes, add_diagonal, whitened
from .cycle import CHUNK, SweepDetector
from .responses import Responses, product

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


class SweepRls:
    """What a sweep tells, with the verbs of `BlockRls`.

    Parameters
    ----------
    prior : ndarray of float, shape (N + 1,)
        Variance of each coefficient before any data, in units of the noise: one for all elements, and as much or more
        for the direct path.
    outputs : int
        D.
    cycle : SweepDetector
        That gives the numbers of rows; several filters may share it.

    Raises
    ------
    ValueError
        When the prior is not of this kind, or the stream is no sweep.
    """

    def __init__(self, prior: Real, outputs: int, cycle: SweepDetector) -> None:
        if prior.shape != (cycle.elements + 1,) or not cycle.order:
            raise ValueError(f"a sweep over {cycle.elements} elements and as many variances, and one more, are needed")
        element = float(prior[1])
        if not np.allclose(prior[1:], element, rtol=1e-9) or not prior[0] >= element * (1.0 - 1e-9) > 0.0:
            raise ValueError("a sweep needs one prior variance for all elements, and no less for the direct path")
        self.cycle = cycle
        self._responses = Responses(cycle, outputs)
        direct = max(float(prior[0]) - element, 0.0)
        self._classes = Classes(cycle.order, cycle.elements, outputs, cycle.order * element, direct)

    @classmethod
    def like(cls, prior: Real, variances: Real, coefficients: Complex, cycle: SweepDetector) -> "SweepRls":
        """Go on from another filter's C and variances (n,): all rows are taken to be known equally well."""
        rls = cls(prior, coefficients.shape[1], cycle)
        element = float(variances[1:].mean())
        rls._classes.own[:] = cycle.order * element
        rls._classes.shared[:] = max(float(variances[0]) - element, 0.0)
        rls.put(coefficients)
        return rls

    @property
    def size(self) -> int:
        """n, coefficients an output."""
        return self.cycle.elements + 1

    @property
    def prior(self) -> Real:
        """Variances before any data, shape (n,)."""
        own, shared = self._classes.prior
        prior = np.full(self.size, own / self.cycle.order)
        prior[0] += shared
        return prior

    @property
    def direct(self) -> Complex:
        """Estimate of the direct path, shape (D,)."""
        return np.asarray(self._classes.mean + self._responses.mean)

    @property
    def coefficients(self) -> Complex:
        """C, shape (n, D), a copy: O(N D) for each row heard since it was last asked for."""
        classes = self._classes
        coefficients = np.empty((self.size, classes.means.shape[1]), dtype=np.complex128)
        coefficients[0] = self.direct
        self._responses.surface(out=coefficients[1:])
        coefficients[1:] += product(classes.sums, classes.means / self.cycle.order)
        return coefficients

    @property
    def variances(self) -> Real:
        """Variance of each coefficient now, in units of the noise, shape (n,)."""
        return np.concatenate([[self._classes.direct_variance], self._classes.element_variances])

    @property
    def mean_variance(self) -> float:
        """Variance of a response under patterns of any kind, on average over them: the sum of `variances`."""
        return self.direct_variance + self.cycle.elements * self.element_variance

    @property
    def mean_prior(self) -> float:
        """The same before any data."""
        own, shared = self._classes.prior
        return self.size * own / self.cycle.order + shared

    @property
    def direct_variance(self) -> float:
        """Variance of the direct path, in units of the noise."""
        return self._classes.direct_variance

    @property
    def element_variance(self) -> float:
        """Mean variance of the elements, in units of the noise."""
        return self._classes.element_variance

    def predict(self, rows: NDArray[np.intp]) -> Complex:
        """Responses under rows of the sweep, shape (k, D)."""
        classes = self._classes
        return np.asarray(classes.means[classes.of[rows]] + self._responses.of(rows))

    def respond(self, regressors: Real) -> Complex:
        """Responses under patterns of any kind, regressors [1, s] of shape (k, n)."""
        classes, states = self._classes, regressors[:, 1:]
        shared = product(states @ classes.sums, classes.means / self.cycle.order)
        return np.asarray(self.direct + self._responses.reflected(states) + shared)

    def predicted_variance(self, regressor: Real) -> float:
        """Variance of z C for one z = [1, s] of shape (n,), in units of the noise."""
        order, own = self.cycle.order, self._own()
        along = self.cycle.products(regressor)
        # All rows not yet known have one variance, and all M rows together make M I.
        rest = float(own[-1]) if along.shape[0] < order else 0.0
        total = (own[: along.shape[0]] - rest) @ along**2 + rest * order * regressor.shape[0]
        return float(total / order**2 + self._classes.between(regressor[None, :])[0, 0])

    def predicted_covariance(self, regressors: Real) -> Real:
        """Covariance over frames of Z C, shape (B, B), for regressors (B, n) of any kind, in units of the noise.

        Costs as much as with the dense filter.
        """
        known, order, own = self.cycle.known, self.cycle.order, self._own()
        rest = float(own[-1]) if known < order else 0.0
        covariance = (rest / order) * (regressors @ regressors.T) + self._classes.between(regressors)
        for start in range(0, known, CHUNK):
            rows = np.arange(start, min(start + CHUNK, known))
            along = (regressors[:, :1] + regressors[:, 1:] @ self.cycle.states(rows).T) / order
            covariance += (along * (own[rows] - rest)) @ along.T
        return np.asarray(covariance)

    def forget(self, a: float, b: float, decay: float = 1.0) -> None:
        """Set P to a P + b P₀ and C to `decay` C; see `rls.forgetting`."""
        self._classes.forget(a, b, decay)
        if decay != 1.0:
            self._responses.scale(np.asarray(decay))

    def update(self, rows: NDArray[np.intp], outputs: Complex) -> Surprise:
        """Take in a block of frames.

        Parameters
        ----------
        rows : ndarray of int, shape (B,)
            Row of the sweep that each frame sounds.
        outputs : ndarray of complex, shape (B, D)
            Y, divided by the noise amplitude.

        Returns
        -------
        Surprise
            The same as that of `BlockRls`, whose `white` is L⁻¹(Y − Z C) and `spread` the diagonal of L, squared.
        """
        innovation = outputs - self.predict(rows)
        if not rows.shape[0]:
            return Surprise(innovation, innovation, np.ones(0))
        distinct = len(set(rows.tolist())) == rows.shape[0]  # as a rule
        covariance = self._classes.covariance(rows, distinct=distinct)
        add_diagonal(covariance, 1.0)
        diagonal, white = whitened(covariance, innovation.view(np.float64))
        if distinct:
            self._take(rows, None, innovation)
        else:
            times = np.bincount(rows, minlength=self.cycle.order)
            heard = np.flatnonzero(times)
            counts, place = times[heard], (np.cumsum(times > 0) - 1)[rows]
            members = (place == np.arange(heard.shape[0])[:, None]) / counts[:, None]
            self._take(heard, counts, product(members, innovation))
        return Surprise(innovation, np.ascontiguousarray(white).view(np.complex128), diagonal * diagonal)

    def scale(self, direct: NDArray[Any], surface: NDArray[Any]) -> None:
        """Multiply the estimates of the direct path and of the surface by factors, one for all outputs or (D,)."""
        self._classes.means = self._classes.means * surface + self.direct * (direct - surface)
        self._responses.scale(surface)

    def rescale(self, coefficients: Real, covariance: float) -> None:
        """Change the unit of the noise: multiply columns of C, and P with its prior, by given factors."""
        self._classes.means = self._classes.means * coefficients
        self._classes.rescale(covariance)
        self._responses.scale(coefficients)

    def put(self, coefficients: Complex) -> None:
        """Set C, shape (n, D). Rows of the sweep that are not known yet cannot say their part of it."""
        self._responses.put(coefficients[1:])
        self._classes.means[...] = coefficients[0] - self._responses.mean

    def renew_direct(self) -> None:
        """Forget how well the direct path is known, and that alone."""
        self._classes.renew_common()

    def dense(self) -> BlockRls:
        """Turn into the filter for any patterns, exactly: phantoms are left out, which is to integrate over them.

        Costs what n frames cost the dense filter.
        """
        order, known, own = self.cycle.order, self.cycle.known, self._own()
        rest = float(own[-1]) if known < order else float(own.max())
        loadings = self._classes.loadings() / order
        covariance = np.asfortranarray((loadings @ self._classes.shared) @ loadings.T)
        add_diagonal(covariance, rest / order)
        for start in range(0, known, CHUNK):
            rows = np.arange(start, min(start + CHUNK, known))
            regressors = np.ones((rows.shape[0], self.size))
            regressors[:, 1:] = self.cycle.states(rows)
            regressors *= np.sqrt(np.maximum(rest - own[rows], 0.0))[:, None] / order
            covariance = blas.dsyrk(-1.0, regressors.T, beta=1.0, c=covariance, lower=1, overwrite_c=1)
        return BlockRls.restore(
            {
                "prior": self.prior,
                "covariance": covariance,
                "coefficients": self.coefficients,
                "factors": [1.0, 0.0],
            }
        )

    def snapshot(self) -> dict[str, Any]:
        """All state but that of the cycle, as copies; `restore` goes on from it bit by bit."""
        return {"responses": self._responses.snapshot(), "classes": self._classes.snapshot()}

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any], cycle: SweepDetector) -> "SweepRls":
        """Rebuild from a snapshot, with the cycle that was restored from its own."""
        classes = Classes.restore(snapshot["classes"])
        rls = cls(np.ones(cycle.elements + 1), classes.means.shape[1], cycle)
        rls._classes, rls._responses = classes, Responses.restore(snapshot["responses"], cycle)
        return rls

    def _own(self) -> Real:
        """D of each row, shape (M,)."""
        return np.asarray(self._classes.own[self._classes.of])

    def _take(self, rows: NDArray[np.intp], counts: NDArray[np.intp] | None, innovations: Complex) -> None:
        """Bring rows up to date, each named once: how often they were heard, and their mean innovations."""
        gain, moved = self._classes.hear(rows, counts, innovations, self.cycle.states)
        self._responses.move(rows, gain[:, None] * (innovations - moved))
        united = self._classes.unite(rows, counts)
        if united is not None:
            self._responses.move(rows, -united)
