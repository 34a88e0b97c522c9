"""Following a timing drift: a delay common to all tones, as clocks that run apart make it.

A common delay τ turns tone k by exp(−2πi f_k τ). It costs no rate by itself, but the estimate would have to chase it.
The drift is taken off the tones as it is predicted; what is left shows as the slope of the residual along the
model's own derivative, and corrects a second-order loop (delay and drift, a Kalman filter of two states).
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]

# Drift that is granted at first, and its random walk, s/s and (s/s)²/s: free-running quartz, slowly warming.
FIRST_DRIFT = 1e-6
DRIFT_WALK = 1e-16
# Random walk of the delay itself, s²/s: jitter that is no drift.
DELAY_WALK = 1e-20


class TimingLoop:
    """Delay of one receiver's clock against the estimate.

    Parameters
    ----------
    basis : ndarray of complex, shape (K, Q)
        Delay basis.
    frequency_hz : ndarray, shape (K,)
        Of the tones, about the carrier.
    """

    def __init__(self, basis: Complex, frequency_hz: NDArray[np.float64]) -> None:
        self._frequency_hz = frequency_hz
        turning = (-2j * np.pi * frequency_hz)[:, None] * basis
        self._derivative = np.ascontiguousarray((basis.conj().T @ turning).T)  # of rows of coefficients, per second
        self._state = np.zeros(2)
        self._covariance = np.diag([0.0, FIRST_DRIFT**2])

    @property
    def delay_s(self) -> float:
        """Delay that is taken off."""
        return float(self._state[0])

    def predict(self, elapsed_s: float) -> None:
        """Go forward in time."""
        step = np.array([[1.0, elapsed_s], [0.0, 1.0]])
        walk = DRIFT_WALK * np.array([[elapsed_s**3 / 3, elapsed_s**2 / 2], [elapsed_s**2 / 2, elapsed_s]])
        walk[0, 0] += DELAY_WALK * elapsed_s
        self._state = step @ self._state
        self._covariance = step @ self._covariance @ step.T + walk

    def take_off(self, tones: Complex) -> Complex:
        """Turn tones (B, K) back by the delay as predicted."""
        if self._state[0] == 0.0:
            return tones
        return np.asarray(tones * np.exp(2j * np.pi * self._frequency_hz * self._state[0]))

    def measure(self, model: Complex, residual: Complex, weight: float) -> None:
        """Correct the loop by what a burst shows.

        Parameters
        ----------
        model : ndarray of complex, shape (B, Q)
            What the frames should be, phases included.
        residual : ndarray of complex, shape (B, Q)
            What they were, less that.
        weight : float
            Inverse variance of an output about the model.
        """
        slope = model @ self._derivative
        power = float((np.abs(model) ** 2).sum())
        if power == 0.0:
            return
        # The part of the derivative that a common phase could also explain says nothing about delay.
        common = float((np.conj(1j * model) * slope).real.sum()) / power
        slope = slope - common * 1j * model
        information = 2.0 * weight * float((np.abs(slope) ** 2).sum())
        shown = 2.0 * weight * float((slope.conj() * residual).real.sum())
        gain = self._covariance[:, 0] / (1.0 + self._covariance[0, 0] * information)
        self._state = self._state + gain * shown
        self._covariance = self._covariance - np.outer(gain * information, self._covariance[0])

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {"state": self._state.copy(), "covariance": self._covariance.copy()}

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        self._state = np.array(snapshot["state"], dtype=np.float64)
        self._covariance = np.array(snapshot["covariance"], dtype=np.float64)
