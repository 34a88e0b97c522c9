"""The filter for patterns of any kind: block least squares over regressors, see `rls`."""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .filter import Surprise
from .rls import BlockRls
from .sounded import Sounded

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


class Dense:
    """A `Filter` with a whole covariance.

    Parameters
    ----------
    rls : BlockRls
    """

    def __init__(self, rls: BlockRls) -> None:
        self._rls = rls

    @property
    def prior(self) -> Real:
        """See `Filter`."""
        return self._rls.prior

    @property
    def variances(self) -> Real:
        """See `Filter`."""
        return self._rls.variances

    @property
    def surface_variance(self) -> float:
        """See `Filter`."""
        return float(self._rls.variances[1:].mean())

    @property
    def coefficients(self) -> Complex:
        """See `Filter`."""
        return self._rls.coefficients

    @property
    def estimate(self) -> Complex:
        """See `Filter`: the covariance holds all that is known."""
        return self._rls.coefficients

    @property
    def direct(self) -> Complex:
        """See `Filter`."""
        return np.asarray(self._rls.coefficients[0])

    def predict(self, sounded: Sounded) -> Complex:
        """See `Filter`."""
        return np.asarray(sounded.regressors @ self._rls.coefficients)

    def predicted_variance(self, regressor: NDArray[Any]) -> float:
        """See `Filter`."""
        return self._rls.predicted_variance(regressor)

    def predicted_covariance(self, regressors: NDArray[Any]) -> NDArray[Any]:
        """See `Filter`."""
        return self._rls.predicted_covariance(regressors)

    def forget(self, a: float, b: float, decay: float = 1.0) -> None:
        """See `Filter`."""
        self._rls.forget(a, b, decay)

    def update(self, sounded: Sounded, outputs: Complex) -> Surprise:
        """See `Filter`."""
        innovation, white = self._rls.update(sounded.regressors, outputs)
        diagonal = self._rls.whitener.diagonal().real
        return Surprise(innovation, white, 1.0 / (diagonal * diagonal))

    def renew_direct(self) -> None:
        """See `Filter`."""
        self._rls.reset(np.array([0]))

    def renew(self, rows: NDArray[np.intp]) -> None:
        """Forget how well some coefficients are known, and those alone."""
        self._rls.reset(rows)

    def scale(self, direct: Complex, surface: Complex) -> None:
        """See `Filter`."""
        self._rls.coefficients[0] *= direct
        if (surface != 1.0).any():
            self._rls.coefficients[1:] *= surface

    def rescale(self, coefficients: Real, covariance: float) -> None:
        """See `Filter`."""
        self._rls.rescale(coefficients, covariance)

    def put(self, coefficients: Complex) -> None:
        """See `Filter`."""
        self._rls.coefficients[...] = coefficients

    def snapshot(self) -> Mapping[str, Any]:
        """See `Filter`."""
        return self._rls.snapshot()

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any]) -> "Dense":
        """Rebuild from a snapshot."""
        return cls(BlockRls.restore(snapshot))
