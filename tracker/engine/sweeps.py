"""Recursive least squares over sweeps of orthogonal patterns: a covariance that stays diagonal, O(D) a frame.

The model is that of `rls`: y = z C + unit noise, z = [1, s] of n = N + 1 entries. Let a sweep be M patterns whose rows
z make a matrix A (M × n) with orthogonal columns, AᵀA = M I. It is completed by M − n further columns Φ, orthogonal to
those of A and of the same length: W = [A Φ] / √M is orthogonal. Φ belongs to *phantom elements*, which no panel has. It
need not be known: that it exists is enough (`completion`).

In the coordinates θ = W C, a frame that sounds row i hears θ_i alone, y = √M θ_i + noise. Where P is diagonal in these
coordinates it stays so, and least squares falls apart into M scalar filters, each of the response x_i = √M θ_i under
its own pattern, of variance v_i::

    S = 1 + v_i,    x_i += v_i (y − x_i) / S,    v_i = v_i / S,    C = Aᵀ x / M,    P = Aᵀ diag(v) A / M²

**Which prior.** Let P₀ = diag(p_j), coefficient by coefficient, be diagonal after the change of coordinates too:
W P₀ = D W, entry by entry W_ij (p_j − d_i) = 0. No entry of A is zero, so all p_j and d_i are one number: *the prior is
p₀ I, phantoms included*, and no other will do. Then v_i = M p₀ at first. The dense filter that does the same is
`BlockRls` with M unknowns of prior p₀ and the rows of √M W; its first n unknowns are those returned here, phantoms left
out. To that this filter is equal, to rounding. A filter that knows that there are no phantoms can do better only while
a sweep is unfinished, by about the share (M − n) / M; after whole sweeps heard alike AᵀA is diagonal, and both agree.

**Forgetting.** Both ways are P ← a P + b P₀ and C ← decay · C (see `rls`): on the scalars v_i ← a v_i + b M p₀ and
x_i ← decay · x_i, the same for all i. So only what has gathered since the start is kept, v_i = α U_i + β M p₀ and
x_i = σ X_i, and a frame touches one U_i and one X_i however long ago it was touched before: O(D) a frame.

**The direct path** is far stronger than an element, P₀ = p₀ I + γ e₀e₀ᵀ. Column 0 of A is all ones, so this adds to all
responses a common part g of variance γ, y = x_i + g + noise. Given g the rows are independent, as in the two-stage
filter (Friedland, IEEE Trans. Automatic Control 14, 1969). Within a block this is followed exactly, with S = diag(1 +
v_i) + q 1 1ᵀ, q the variance of g. From block to block the correlation between the errors of g and of x_i is dropped
and their variances are kept: no more than that keeps the filter from being the exact one when γ > 0. In trials that
cost 0 to 3 % of the error of the elements against the dense filter, over all speeds of change and blocks of 1 to 256
frames; a prior that leaves the direct path as weak as an element cost up to 40 %, and 4 to 100 times the error of the
direct path.

Patterns outside of the sweep are kept apart, see `references`.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import blas

from .cycle import CHUNK, SweepDetector
from .references import References
from .repeats import Repeats
from .rls import SMALLEST_FACTOR, BlockRls

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# What has gathered of forgetting is carried out on all rows before it gets larger or smaller than this.
FARTHEST = 1e60


class SweepRls:
    """The estimator's state while a sweep is sounded, with the verbs of `BlockRls`.

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
        self.references = References(cycle.elements, outputs)
        self.spread: Real = np.ones(0)
        self._element = element  # p₀
        self._direct = max(float(prior[0]) - element, 0.0)  # γ
        self._v: Real = np.full(cycle.order, self._prior_response)  # U
        self._x: Complex = np.zeros((cycle.order, outputs), dtype=np.complex128)  # X
        self._sum: Complex = np.zeros(outputs, dtype=np.complex128)  # of X over all rows
        self._gathered = (1.0, 0.0)  # α, β
        self._scale: Complex = np.ones(outputs, dtype=np.complex128)  # σ
        self._common: Complex = np.zeros(outputs, dtype=np.complex128)  # g
        self._common_variance = self._direct  # q
        # AᵀX / M over the elements for X as it was when it was last asked for: only rows touched since add to it.
        self._surface: Complex = np.zeros((cycle.elements, outputs), dtype=np.complex128)
        self._shown: Complex = np.zeros_like(self._x)
        self._touched: NDArray[np.bool_] = np.zeros(cycle.order, dtype=np.bool_)

    @property
    def size(self) -> int:
        """n, coefficients an output."""
        return self.cycle.elements + 1

    @property
    def prior(self) -> Real:
        """Variances before any data, shape (n,)."""
        prior = np.full(self.size, self._element)
        prior[0] += self._direct
        return prior

    @property
    def direct(self) -> Complex:
        """Estimate of the direct path, shape (D,)."""
        return self._common + self._scale * self._sum / self.cycle.order

    @direct.setter
    def direct(self, value: Complex) -> None:
        change = value - self.direct
        self._common = self._common + change
        self.references.means += change

    @property
    def coefficients(self) -> Complex:
        """C as the sweep gives it, shape (n, D), a copy: O(N D) for each row touched since it was last asked for."""
        self._gather()
        coefficients = np.empty((self.size, self._x.shape[1]), dtype=np.complex128)
        coefficients[0] = self.direct
        np.multiply(self._surface, self._scale, out=coefficients[1:])
        return coefficients

    @property
    def estimate(self) -> Complex:
        """C with what patterns outside of the sweep say, shape (n, D)."""
        return self.references.correct(self.coefficients, self.variances)

    @property
    def variances(self) -> Real:
        """Variance of each coefficient now, in units of the noise, shape (n,)."""
        variances = np.full(self.size, float(self._variance().mean()) / self.cycle.order)
        variances[0] += self._common_variance
        return variances

    def predict(self, rows: NDArray[np.intp]) -> Complex:
        """Responses under rows of the sweep, shape (k, D)."""
        return np.asarray(self._common + self._scale * self._x[rows])

    def predicted_variance(self, regressor: Real) -> float:
        """Variance of z C for one z = [1, s] of shape (n,), in units of the noise."""
        variance, order = self._variance(), self.cycle.order
        along = self.cycle.products(regressor)
        # All rows not yet known have one variance, and all M rows together make M I.
        rest = float(variance[-1]) if along.shape[0] < order else 0.0
        total = (variance[: along.shape[0]] - rest) @ along**2 + rest * order * regressor.shape[0]
        return float(total / order**2 + self._common_variance)

    def predicted_covariance(self, rows: NDArray[np.intp], *, surface_only: bool = False) -> Real:
        """Covariance of the responses under rows of the sweep, (k, k), or of what the surface adds to them."""
        variance = self._variance()
        covariance = np.where(rows[:, None] == rows, variance[rows], 0.0)
        if not surface_only:
            return np.asarray(covariance + self._common_variance)
        order = self.cycle.order
        return np.asarray(covariance - (variance[rows][:, None] + variance[rows] - variance.mean()) / order)

    def forget(self, a: float, b: float, decay: float = 1.0) -> None:
        """Set P to a P + b P₀ and C to `decay` C; see `rls.forgetting`."""
        self._common_variance = a * self._common_variance + b * self._direct
        self.references.forget(a, b, decay, self.size * self._element + self._direct)
        if min(a, decay) < SMALLEST_FACTOR:
            # Nothing is left that could be scaled back.
            self._carry_out()
            self._v = a * self._v + b * self._prior_response
            self.scale(np.asarray(decay), np.asarray(decay), references=False)
            self._carry_out()
            return
        alpha, beta = self._gathered
        self._gathered = (a * alpha, a * beta + b)
        if decay != 1.0:
            self._scale = self._scale * decay
            self._common = self._common * decay
        self._keep_in_range()

    def update(self, rows: NDArray[np.intp], outputs: Complex) -> tuple[Complex, Complex]:
        """Take in a block of frames.

        Parameters
        ----------
        rows : ndarray of int, shape (B,)
            Row of the sweep that each frame sounds.
        outputs : ndarray of complex, shape (B, D)
            Y, divided by the noise amplitude.

        Returns
        -------
        innovation : ndarray of complex, shape (B, D)
            Y − Z C, with C as it was before.
        white : ndarray of complex, shape (B, D)
            The innovation given the frames before, over its expected size √`spread`, a number a frame: unit variance
            each when the model holds. The same as L⁻¹(Y − Z C) of `BlockRls`.
        """
        innovation = outputs - self.predict(rows)
        if not rows.shape[0]:
            self.spread = np.ones(0)
            return innovation, innovation.copy()
        v = self._variance(rows)
        repeats = Repeats(rows)
        # Given g: k frames of the same row before this one leave 1 / (1 + k v) of all uncertainty about the row.
        left = 1.0 / (1.0 + repeats.place * v)
        before = repeats.before(innovation)
        given = innovation - (v * left)[:, None] * before
        spread = (1.0 + (repeats.place + 1) * v) * left
        # Each frame in turn says something of g, through the part `left` of it that its row does not take for itself.
        q = self._common_variance / (1.0 + self._common_variance * np.cumsum(left * left / spread))
        change = q[:, None] * np.cumsum((left / spread)[:, None] * given, axis=0)
        q_before = np.concatenate(([self._common_variance], q[:-1]))
        change_before = np.concatenate((np.zeros_like(change[:1]), change[:-1]))
        self.spread = spread + left * left * q_before
        white = (given - left[:, None] * change_before) / np.sqrt(self.spread)[:, None]
        self._common_variance, moved = float(q[-1]), change[-1]
        self._common = self._common + moved
        self._put(repeats, v, before + innovation, moved)
        return innovation, white

    def refer(self, patterns: NDArray[np.uint8], outputs: Complex) -> None:
        """Take in frames of patterns outside of the sweep: packed (B, bytes), and Y (B, D); see `estimate`."""
        self.references.update(patterns, outputs)

    def scale(self, direct: NDArray[Any], surface: NDArray[Any], *, references: bool = True) -> None:
        """Multiply the estimates of the direct path and of the surface by factors, one for all outputs or (D,)."""
        before = self.direct
        if references:
            self.references.means = (self.references.means - before) * surface + before * direct
        self._scale = self._scale * surface
        self._common = self._common * surface + before * (direct - surface)
        self._keep_in_range()

    def rescale(self, coefficients: Real, covariance: float) -> None:
        """Change the unit of the noise: multiply columns of C, and P with its prior, by given factors."""
        self.references.rescale(coefficients, covariance)
        self._scale = self._scale * coefficients
        self._common = self._common * coefficients
        self._common_variance *= covariance
        self._element *= covariance
        self._direct *= covariance
        self._gathered = (self._gathered[0] * covariance, self._gathered[1])
        self._keep_in_range()

    def put(self, coefficients: Complex) -> None:
        """Set C, shape (n, D). Rows of the sweep that are not known yet cannot say their part of it."""
        self._carry_out()
        self._common = coefficients[0].copy()
        self._x[...] = 0.0
        for start in range(0, self.cycle.known, CHUNK):
            rows = np.arange(start, min(start + CHUNK, self.cycle.known))
            self._x[rows] = _product(self.cycle.states(rows), coefficients[1:])
        self._touched[: self.cycle.known] = True
        self._sum = self._x.sum(axis=0)

    def renew_direct(self) -> None:
        """Forget how well the direct path is known, and that alone."""
        self._common_variance = self._direct

    def dense(self) -> BlockRls:
        """Turn into the filter for any patterns, exactly: phantoms are left out, which is to integrate over them.

        The responses under other patterns, see `references`, are taken in as frames. That costs what n frames cost the
        dense filter.
        """
        variance, order, known = self._variance(), self.cycle.order, self.cycle.known
        rest = float(variance[-1]) if known < order else float(variance.max())
        covariance = np.asfortranarray(np.diag(np.full(self.size, rest / order)))
        covariance[0, 0] += self._common_variance
        for start in range(0, known, CHUNK):
            rows = np.arange(start, min(start + CHUNK, known))
            regressors = np.ones((rows.shape[0], self.size))
            regressors[:, 1:] = self.cycle.states(rows)
            regressors *= np.sqrt(np.maximum(rest - variance[rows], 0.0))[:, None] / order
            covariance = blas.dsyrk(-1.0, regressors.T, beta=1.0, c=covariance, lower=1, overwrite_c=1)
        dense = BlockRls.restore(
            {
                "prior": self.prior,
                "covariance": covariance,
                "coefficients": self.coefficients,
                "pending": [1.0, 0.0],
            }
        )
        if self.references.count:
            weight = 1.0 / np.sqrt(self.references.variances)[:, None]
            dense.update(weight * self.references.regressors, weight * self.references.means)
        return dense

    def snapshot(self) -> dict[str, Any]:
        """All state but that of the cycle, as copies; `restore` goes on from it bit by bit."""
        return {
            "prior": [self._element, self._direct],
            "v": self._v.copy(),
            "x": self._x.copy(),
            "sum": self._sum.copy(),
            "gathered": list(self._gathered),
            "scale": self._scale.copy(),
            "common": self._common.copy(),
            "common_variance": self._common_variance,
            "surface": self._surface.copy(),
            "shown": self._shown.copy(),
            "touched": self._touched.copy(),
            "references": self.references.snapshot(),
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any], cycle: SweepDetector) -> "SweepRls":
        """Rebuild from a snapshot, with the cycle that was restored from its own."""
        element, direct = (float(value) for value in snapshot["prior"])
        x = np.array(snapshot["x"], dtype=np.complex128)
        rls = cls(np.concatenate(([element + direct], np.full(cycle.elements, element))), x.shape[1], cycle)
        rls._element, rls._direct, rls._x = element, direct, x
        rls._gathered = (float(snapshot["gathered"][0]), float(snapshot["gathered"][1]))
        rls._common_variance = float(snapshot["common_variance"])
        rls._v = np.array(snapshot["v"], dtype=np.float64)
        rls._touched = np.array(snapshot["touched"], dtype=np.bool_)
        rls._sum, rls._scale, rls._common, rls._surface, rls._shown = (
            np.array(snapshot[name], dtype=np.complex128) for name in ("sum", "scale", "common", "surface", "shown")
        )
        rls.references = References.restore(snapshot["references"])
        return rls

    @property
    def _prior_response(self) -> float:
        """M p₀: variance of a response before any data, the common part aside."""
        return self.cycle.order * self._element

    def _variance(self, rows: NDArray[np.intp] | slice = slice(None)) -> Real:
        alpha, beta = self._gathered
        return np.asarray(alpha * self._v[rows] + beta * self._prior_response)

    def _put(self, repeats: Repeats, v: Real, heard: Complex, moved: Complex) -> None:
        """Bring rows up to date, once each: `heard` is the sum of innovations so far, `moved` the change of g."""
        last = repeats.order[repeats.last]
        rows, count = repeats.rows[last], repeats.place[last] + 1
        gain = v[last] / (1.0 + count * v[last])
        change = gain[:, None] * (heard[last] - count[:, None] * moved) / self._scale
        self._x[rows] += change
        self._sum = self._sum + change.sum(axis=0)
        self._touched[rows] = True
        # The row's error has a share −count · gain of that of g.
        variance = gain + self._common_variance * (count * gain) ** 2
        alpha, beta = self._gathered
        self._v[rows] = (variance - beta * self._prior_response) / alpha

    def _gather(self) -> None:
        """Bring AᵀX / M up to date."""
        touched = np.flatnonzero(self._touched)
        if touched.shape[0] == self.cycle.order:
            self._surface[...] = 0.0  # anew, so that rounding errors never add up
            self._shown[...] = 0.0
        for start in range(0, touched.shape[0], CHUNK):
            rows = touched[start : start + CHUNK]
            change = (self._x[rows] - self._shown[rows]) / self.cycle.order
            self._surface += _product(self.cycle.states(rows).T, change)
            self._shown[rows] = self._x[rows]
        self._touched[...] = False

    def _keep_in_range(self) -> None:
        size = np.abs(self._scale)
        alpha = self._gathered[0]
        if not (1.0 / FARTHEST < alpha < FARTHEST and size.min() > 1.0 / FARTHEST and size.max() < FARTHEST):
            self._carry_out()

    def _carry_out(self) -> None:
        """Do to all rows what has gathered."""
        self._v = self._variance()
        self._gathered = (1.0, 0.0)
        self._x *= self._scale
        self._shown *= self._scale
        self._surface *= self._scale
        self._sum = self._x.sum(axis=0)
        self._scale = np.ones_like(self._scale)


def _product(left: Real, right: Complex) -> Complex:
    """Multiply a real matrix with a complex one, at real cost."""
    return np.asarray(left @ np.ascontiguousarray(right).view(np.float64)).view(np.complex128)
