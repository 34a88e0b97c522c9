"""How much of what is measured on the elements stays from one sweep to the next, all of them together.

Deviations from a prediction hold three parts: noise, new in each window; noise of the prediction, which lasts as long
as the filter remembers; and what the elements really differ by, which stays until the channel is another one. Only the
last matters, so windows are compared over many sweeps: from c⁸ and c¹⁶ follows c, and what does not last that long
drops out.
"""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .answers import power_of

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# One window in so many sweeps is kept, about, and deviations are compared over so many of these.
EVERY, LAGS = 3.5, (2, 4)
# Comparisons averaged over, and standard errors that are granted.
MEMORY, DOUBT = 8, 2.0
# The largest stay that counts as shown to be less than 1.
LEAST_SHOWN = 0.97


class Staying:
    """Measures the stay of deviations."""

    def __init__(self) -> None:
        self._last: list[Complex] = []
        self._sums = np.zeros(len(LAGS) + 1)
        self._taken = 0
        self._waited = self._apart = 0.0  # sweeps since the last window kept; and between two, on average
        self._stay = 1.0

    def turn(self, onto: Complex) -> None:
        """Take what is kept to other directions, by a matrix of shape (k now, k before)."""
        self._last = [onto @ off for off in self._last]

    def take(self, off: Complex, trust: Real, sweeps: float) -> float:
        """Take in the deviations of a window; return the stay from sweep to sweep: 1 unless it is shown to be less.

        Claiming too little would count one look at a channel at rest as many.

        Parameters
        ----------
        off : ndarray of complex, shape (k, N)
        trust : ndarray, shape (N,)
            Weights of the elements.
        sweeps : float
            Length of the window.
        """
        self._waited += sweeps
        if self._waited < EVERY:
            return self._stay
        self._taken += 1
        self._apart += (self._waited - self._apart) / min(self._taken, MEMORY)
        self._waited = 0.0
        products = [
            float((off.conj() * self._last[-lag]).real.sum(axis=0) @ trust) for lag in LAGS if lag <= len(self._last)
        ]
        self._last = [*self._last[1 - LAGS[-1] :], off]
        compared = self._taken - LAGS[-1]
        if compared > 0:
            own = float(power_of(off).sum(axis=0) @ trust)
            self._sums += (np.array([*products, own]) - self._sums) / min(compared, MEMORY)
            near, far, whole = self._sums.tolist()
            unsure = DOUBT * whole / math.sqrt(off.size * min(compared, MEMORY))
            ratio = max(far + unsure, 0.0) / max(near, unsure, np.finfo(float).tiny)
            stay = float(ratio ** (1.0 / (self._apart * (LAGS[1] - LAGS[0]))))
            self._stay = stay if stay < LEAST_SHOWN else 1.0
        return self._stay

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "last": [off.copy() for off in self._last],
            "sums": self._sums.copy(),
            "taken": self._taken,
            "waited": self._waited,
            "apart": self._apart,
            "stay": self._stay,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._last = [np.array(off, dtype=np.complex128) for off in snapshot["last"]]
        self._sums = np.array(snapshot["sums"], dtype=np.float64)
        self._taken, self._stay = int(snapshot["taken"]), float(snapshot["stay"])
        self._waited, self._apart = float(snapshot["waited"]), float(snapshot["apart"])
