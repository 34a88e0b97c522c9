"""What estimator and bank ask of a filter, whatever it is that it keeps."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from .sounded import Sounded

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Surprise:
    """What frames showed that was not expected.

    Parameters
    ----------
    innovation : ndarray of complex, shape (B, D)
        What was heard less what was predicted from before the block.
    white : ndarray of complex, shape (B, D)
        The innovation given the frames before, over its expected size: unit variance each when the model holds.
    spread : ndarray, shape (B,)
        Square of that size: 1, the noise, and what the estimate does not know.
    """

    innovation: Complex
    white: Complex
    spread: Real


class Filter(Protocol):
    """Estimate of n coefficients, the direct path first, for D outputs, all in units of the noise."""

    @property
    def prior(self) -> Real:
        """Variance of each coefficient before any data, shape (n,)."""

    @property
    def variances(self) -> Real:
        """Variance of each coefficient now, shape (n,)."""

    @property
    def surface_variance(self) -> float:
        """Mean of the variances but that of the direct path."""

    @property
    def coefficients(self) -> Complex:
        """C, shape (n, D), not to be written to."""

    @property
    def estimate(self) -> Complex:
        """C with all that is known, shape (n, D), not to be written to: for whoever chooses patterns."""

    @property
    def direct(self) -> Complex:
        """Row 0 of C, shape (D,), not to be written to."""

    def predict(self, sounded: Sounded) -> Complex:
        """Responses to be expected, shape (B, D)."""

    def predicted_variance(self, regressor: NDArray[Any]) -> float:
        """Variance of z C for one regressor z of shape (n,)."""

    def predicted_covariance(self, regressors: NDArray[Any]) -> NDArray[Any]:
        """Covariance over frames of Z C, shape (B, B), for regressors (B, n)."""

    def forget(self, a: float, b: float, decay: float = 1.0) -> None:
        """Set P to a P + b P₀ and C to `decay` C; see `rls.forgetting`."""

    def update(self, sounded: Sounded, outputs: Complex) -> Surprise:
        """Take in frames, outputs (B, D) divided by the noise amplitude."""

    def renew_direct(self) -> None:
        """Forget how well the direct path is known, and that alone."""

    def scale(self, direct: Complex, surface: Complex) -> None:
        """Multiply the estimates of the direct path and of the surface by factors (D,)."""

    def rescale(self, coefficients: Real, covariance: float) -> None:
        """Change the unit of the noise: multiply columns of C, and P with its prior, by given factors."""

    def put(self, coefficients: Complex) -> None:
        """Set C."""

    def snapshot(self) -> Mapping[str, Any]:
        """All state, as copies."""
