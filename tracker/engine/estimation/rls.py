"""Block recursive least squares with forgetting, on one triangle of the covariance, in place.

Model: y = z C + unit noise, one row a frame; z (1 × n) is shared by all D outputs, so one covariance P serves all.
For a block of B frames, with P⁻ the covariance after forgetting::

    S  = I + Z P⁻ Zᴴ = L Lᴴ
    X  = L⁻¹ Z P⁻
    C += Xᴴ L⁻¹ (Y − Z C)
    P  = P⁻ − Xᴴ X

Both ways to forget are P⁻ = a P + b P₀ with P₀ diagonal. P is kept as a number times a stored matrix, so forgetting
changes the number and the stored diagonal: no pass over the matrix, and the downdate adds to it without scaling it.

============  =====  =====  =====  ====================================================================
forgetting    a      b      C ×    equals
============  =====  =====  =====  ====================================================================
exponential   1 / λ  0      1      exponentially weighted least squares (Sayed & Kailath 1994)
resetting     λ      1 − λ  √λ     a Kalman filter whose coefficients are first-order Gauss-Markov: in
                                   time they return to the prior, and P never exceeds it (the aim of
                                   Salgado, Goodwin & Middleton 1988)
============  =====  =====  =====  ====================================================================

Letting C decay with its covariance keeps the estimate a posterior mean; without it the estimate holds more energy than
is known to be there, and the optimizer promises rates that are not met.

Only the lower triangle is read and written (symm/hemm, syrk/herk). That is not only half the work: P is symmetric by
construction, and updating both triangles drifts apart and blows up after a few thousand steps (Verhaegen 1989).
"""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import blas, lapack

Complex = NDArray[np.complex128]

# Below this factor nothing of P is left beside the prior, and dividing by it would lose digits.
SMALLEST_FACTOR = 1e-12
# The factor of the stored matrix is multiplied into it when it leaves 1 / LARGEST_FACTOR to LARGEST_FACTOR.
LARGEST_FACTOR = 256.0
# Frames in a strip of S: narrower ones would save little more, and slow the products down.
STRIP = 32


class BlockRls:
    """The estimator's state: coefficients C and covariance P.

    Parameters
    ----------
    prior : ndarray of float, shape (n,)
        Variance of each coefficient before any data, in units of the noise.
    outputs : int
        D, columns of C.
    complex_regressors : bool
        True when z is complex, which makes P complex Hermitian; real z keeps it real, at a quarter of the cost.
    """

    def __init__(self, prior: NDArray[np.float64], outputs: int, *, complex_regressors: bool = False) -> None:
        self._prior = np.array(prior, dtype=np.float64)
        self._complex = complex_regressors
        self._dtype = np.complex128 if complex_regressors else np.float64
        self._covariance = np.asfortranarray(np.diag(self._prior).astype(self._dtype))
        self.coefficients: Complex = np.zeros((self.size, outputs), dtype=np.complex128)
        self.whitener: NDArray[Any] = np.ones((0, 0))  # L⁻¹ of the last update; the next one overwrites it
        # Room for P⁻Zᴴ and S, kept: memory fresh from the system costs a tenth of the update.
        self._gain = np.zeros((self.size, 0), dtype=self._dtype, order="F")
        self._spread = np.zeros((0, 0), dtype=self._dtype, order="F")
        self._factors = (1.0, 0.0)  # (a, b): P is a · stored + b · prior; b gathers between updates

    @property
    def size(self) -> int:
        """n, coefficients an output."""
        return int(self._prior.shape[0])

    @property
    def prior(self) -> NDArray[np.float64]:
        """Variances before any data, shape (n,)."""
        return self._prior.copy()

    @property
    def variances(self) -> NDArray[np.float64]:
        """Variance of each coefficient now, in units of the noise, shape (n,)."""
        a, b = self._factors
        return np.asarray(a * self._covariance.diagonal().real + b * self._prior)

    @property
    def covariance(self) -> NDArray[Any]:
        """P as a full (n, n) matrix, a copy; for checks, not for the hot path."""
        a, b = self._factors
        lower = np.tril(self._covariance)
        return np.asarray(a * (lower + np.tril(lower, -1).conj().T) + np.diag(b * self._prior))

    def predicted_variance(self, regressor: NDArray[Any]) -> float:
        """Variance of z C for one regressor z of shape (n,): z P zᴴ, in units of the noise."""
        a, b = self._factors
        column = self._times_covariance(a, np.ascontiguousarray(regressor, dtype=self._dtype)[None, :])[:, 0]
        return float((regressor @ column).real + b * (self._prior * np.abs(regressor) ** 2).sum())

    def predicted_covariance(self, regressors: NDArray[Any]) -> NDArray[Any]:
        """Covariance over frames of Z C, shape (B, B), for regressors (B, n): Z P Zᴴ, in units of the noise."""
        a, b = self._factors
        z = np.ascontiguousarray(regressors, dtype=self._dtype)
        return np.asarray(z @ self._times_covariance(a, z) + (z * (b * self._prior)) @ z.conj().T)

    def forget(self, a: float, b: float, decay: float = 1.0) -> None:
        """Set P to a P + b P₀, to be carried out with the next update, and C to `decay` C; see `forgetting`."""
        before_a, before_b = self._factors
        self._factors = (a * before_a, a * before_b + b)
        if decay != 1.0:
            self.coefficients *= decay

    def update(self, regressors: NDArray[Any], outputs: Complex) -> tuple[Complex, Complex]:
        """Take in a block of frames.

        Parameters
        ----------
        regressors : ndarray, shape (B, n)
            Z.
        outputs : ndarray of complex, shape (B, D)
            Y, divided by the noise amplitude.

        Returns
        -------
        innovation : ndarray of complex, shape (B, D)
            Y − Z C, with C as it was before.
        white : ndarray of complex, shape (B, D)
            L⁻¹(Y − Z C): unit variance each when the model holds.
        """
        z = np.ascontiguousarray(regressors, dtype=self._dtype)
        a = self._add_prior()
        if self._gain.shape[1] != z.shape[0]:
            self._gain = np.zeros((self.size, z.shape[0]), dtype=self._dtype, order="F")
            self._spread = np.zeros((z.shape[0], z.shape[0]), dtype=self._dtype, order="F")
        gain = self._times_covariance(a, z, self._gain)  # P⁻Zᴴ, (n, B)
        whitener = self.whitener = self._whitener(z, gain)
        gain = self._times_adjoint(gain, whitener)  # Xᴴ = P⁻Zᴴ L⁻ᴴ
        innovation = outputs - self._product(z, self.coefficients)
        white = self._product(whitener, innovation)
        self.coefficients += self._product(gain, white)
        subtract = blas.zherk if self._complex else blas.dsyrk
        # P⁻ − Xᴴ X = a (stored − Xᴴ X / a): with the stored matrix not scaled, a tenth of the update is saved.
        scale = 1.0 if 1.0 / LARGEST_FACTOR < a < LARGEST_FACTOR else a
        self._factors = (a / scale, 0.0)
        self._covariance = subtract(-scale / a, gain, beta=scale, c=self._covariance, lower=1, overwrite_c=1)
        return innovation, white

    def reset(self, rows: NDArray[np.intp]) -> None:
        """Forget how well some coefficients are known: their covariance is that before any data, with none to others.

        The coefficients stay where they are; what is heard next moves them at once.
        """
        a, b = self._factors
        self._covariance[rows, :] = 0.0
        self._covariance[:, rows] = 0.0
        # The factors make a · stored + b · prior of it, which is to be the prior.
        self._covariance[rows, rows] = (1.0 - b) / a * self._prior[rows]

    def rescale(self, coefficients: NDArray[np.float64], covariance: float) -> None:
        """Change the unit of the noise: multiply columns of C, and P with its prior, by given factors."""
        self.coefficients *= coefficients
        self._prior *= covariance
        a, b = self._factors
        self._factors = (a * covariance, b)

    def snapshot(self) -> dict[str, Any]:
        """All state, as copies; `restore` goes on from it bit by bit."""
        return {
            "prior": self._prior.copy(),
            "covariance": self._covariance.copy(order="F"),
            "coefficients": self.coefficients.copy(),
            "factors": list(self._factors),
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any]) -> "BlockRls":
        """Rebuild from a snapshot."""
        covariance = np.asarray(snapshot["covariance"])
        coefficients = np.asarray(snapshot["coefficients"])
        rls = cls(snapshot["prior"], coefficients.shape[1], complex_regressors=np.iscomplexobj(covariance))
        rls._covariance[...] = covariance
        rls.coefficients[...] = coefficients
        rls._factors = (float(snapshot["factors"][0]), float(snapshot["factors"][1]))
        return rls

    def _add_prior(self) -> float:
        """Put the diagonal part of P⁻ = a · stored + b P₀ into the stored matrix, and return a."""
        a, b = self._factors
        if a < SMALLEST_FACTOR:
            self._covariance[...] = 0.0
            a = 1.0
        if b:
            self._covariance.ravel(order="K")[:: self.size + 1] += (b / a) * self._prior
        self._factors = (a, 0.0)
        return a

    def _times_covariance(self, a: float, z: NDArray[Any], out: NDArray[Any] | None = None) -> NDArray[Any]:
        """Compute a P Zᴴ, (n, B) in Fortran order."""
        multiply = blas.zhemm if self._complex else blas.dsymm
        right = z.conj().T if self._complex else z.T
        if out is None:
            return np.asarray(multiply(a, self._covariance, right, lower=1))
        return np.asarray(multiply(a, self._covariance, right, c=out, lower=1, overwrite_c=1))

    def _whitener(self, z: NDArray[Any], gain: NDArray[Any]) -> NDArray[Any]:
        """Compute L⁻¹ of S = I + Z P⁻ Zᴴ = L Lᴴ; multiplying by the inverse is faster than solving n times."""
        frames, spread = z.shape[0], self._spread
        # S is symmetric and only its lower triangle is read: strips of it leave out most of the upper one. Transposed
        # they are written where they belong, without a copy.
        for start in range(0, frames, STRIP):
            strip = slice(start, start + STRIP)
            np.matmul(gain[:, strip].T, z[start:].T, out=spread.T[strip, start:])
        spread.ravel(order="K")[:: frames + 1] += 1.0
        factor, invert = (lapack.zpotrf, lapack.ztrtri) if self._complex else (lapack.dpotrf, lapack.dtrtri)
        lower, info = factor(spread, lower=1, clean=1, overwrite_a=1)
        if info:
            raise FloatingPointError(f"innovation covariance is not positive definite (pivot {info})")
        return np.asarray(invert(lower, lower=1, overwrite_c=1)[0])

    def _times_adjoint(self, gain: NDArray[Any], whitener: NDArray[Any]) -> NDArray[Any]:
        multiply, adjoint = (blas.ztrmm, 2) if self._complex else (blas.dtrmm, 1)
        return np.asarray(multiply(1.0, whitener, gain, side=1, lower=1, trans_a=adjoint, overwrite_b=1))

    def _product(self, left: NDArray[Any], right: Complex) -> Complex:
        """Multiply a matrix that may be real with a complex one, at real cost when it is."""
        if self._complex:
            return np.asarray(left @ right)
        return np.asarray(left @ right.view(np.float64)).view(np.complex128)


def forgetting(kind: str, elapsed_s: float, time_constant_s: float) -> tuple[float, float, float]:
    """Forgetting over an elapsed time, as the arguments of `BlockRls.forget`: a, b and decay.

    Parameters
    ----------
    kind : str
        ``exponential`` or ``resetting``.
    elapsed_s, time_constant_s : float
        Δt and τ; λ = exp(−2 Δt / τ): an amplitude loses its memory over τ, a power over τ / 2.

    Raises
    ------
    ValueError
        For an unknown kind.
    """
    decay = math.exp(-2.0 * elapsed_s / time_constant_s)
    if kind == "exponential":
        # A silence may be of any length; beyond this bound the old data count for nothing and P would overflow.
        return 1.0 / max(decay, 1e-6), 0.0, 1.0
    if kind == "resetting":
        return decay, 1.0 - decay, math.sqrt(decay)
    raise ValueError(f"unknown forgetting {kind!r}")
