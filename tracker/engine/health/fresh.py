"""What the newest frames alone say of each element: the filter's memory taken out of its estimate again.

Over a window of blocks the filter takes each coefficient from C₀ to C in steps of known gain K = 1 − p / p⁻ (p⁻ and p:
its variance before and after a block, see `rls`), with decay δ in between::

    C = κ C₀ + g x̄,    κ ← (1 − K) δ κ,    g ← K + (1 − K) δ g

x̄ = (C − κ C₀) / g is a mean of what the frames of the window showed, free of the prior and of all frames before. Its
noise follows the same recursion, n ← K p + ((1 − K) δ)² n, and is n / g². What is found in one window is independent
of what was found in the others: evidence may be added up and counts no frame twice.

Taking each coefficient by itself is exact where the patterns are orthogonal over the memory of the filter, and gives
too high a noise where they are not.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..estimation.rls import forgetting

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Of an element into which the filter took less than this share of anything, the window says nothing.
LEAST_GAIN = 0.02


@dataclass(frozen=True, slots=True, eq=False)
class Posterior:
    """What the estimator believes after a block, element by element.

    Parameters
    ----------
    coefficients : ndarray of complex, shape (N + 1, D)
        The direct path, then the elements, in units of the noise.
    variances : ndarray, shape (N + 1,)
        Of each, the same for all D.
    prior : ndarray, shape (N + 1,)
        The same before any data.
    noise : ndarray, shape (R,)
        Noise power of each receiver, the unit; D holds D / R columns of each receiver in turn.
    time_constant_s : float
        Of forgetting, s.
    """

    coefficients: Complex
    variances: Real
    prior: Real
    noise: Real
    time_constant_s: float

    @property
    def unlearned(self) -> "Posterior":
        """The same before any data."""
        return replace(self, coefficients=np.zeros_like(self.coefficients), variances=self.prior)


@dataclass(frozen=True, slots=True, eq=False)
class View:
    """What a window of frames showed.

    Parameters
    ----------
    responses : ndarray of complex, shape (N, D)
        x̄, in units of the noise.
    noise : ndarray, shape (N,)
        Variance of each entry of an element; infinite for those of which the window says nothing.
    left, prior : float
        Variance that the filter itself gives to what it believes now, and gave before any data, on average.
    """

    responses: Complex
    noise: Real
    left: float
    prior: float


class Window:
    """Follows the filter from a reference on.

    Parameters
    ----------
    forgetting_kind : str
        See `rls.forgetting`.
    start : Posterior
        The reference.
    """

    def __init__(self, forgetting_kind: str, start: Posterior) -> None:
        self._kind = forgetting_kind
        self._reference = start.coefficients[1:].copy()
        self._reference_noise = start.noise.copy()
        self._unit = start.noise.copy()
        self._variance = start.variances[1:].copy()
        self._time_constant_s = start.time_constant_s
        elements = self._variance.shape[0]
        self._kept, self._gain, self._noise = np.ones(elements), np.zeros(elements), np.zeros(elements)
        self.frames = 0

    def follows(self, now: Posterior) -> bool:
        """Whether this is still the same filter; a bank changes filters."""
        return now.time_constant_s == self._time_constant_s and now.coefficients.shape[1] == self._reference.shape[1]

    def add(self, now: Posterior, frames: int, elapsed_s: float) -> None:
        """Take note of a block that the filter took in.

        Parameters
        ----------
        now : Posterior
            After it.
        frames : int
        elapsed_s : float
            Time forgotten with it, s.
        """
        a, b, decay = forgetting(self._kind, elapsed_s, self._time_constant_s)
        before = (a * scale_of(self._unit, now.noise)) * self._variance + b * now.prior[1:]
        self._unit = now.noise.copy()
        self._variance = now.variances[1:].copy()
        gain = np.maximum(1.0 - self._variance / before, 0.0)
        left = (1.0 - gain) * decay
        self._kept *= left
        self._gain *= left
        self._gain += gain
        self._noise *= left * left
        self._noise += gain * self._variance
        self.frames += frames

    def view(self, now: Posterior) -> View | None:
        """Say what the window showed; None when it was next to nothing.

        Parameters
        ----------
        now : Posterior
            As last added.
        """
        known = self._gain > LEAST_GAIN
        if not known.any():
            return None
        amplitude = amplitudes(self._reference_noise, now.noise, self._reference.shape[1])
        inverse = 1.0 / np.where(known, self._gain, 1.0)
        responses = now.coefficients[1:] * inverse[:, None]
        responses -= ((self._kept * inverse)[:, None] * amplitude) * self._reference
        noise = np.where(known, self._noise * inverse * inverse, np.inf)
        return View(responses, noise, float(self._variance.mean()), float(now.prior[1:].mean()))

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "reference": self._reference.copy(),
            "reference_noise": self._reference_noise.copy(),
            "unit": self._unit.copy(),
            "variance": self._variance.copy(),
            "time_constant_s": self._time_constant_s,
            "kept": self._kept.copy(),
            "gain": self._gain.copy(),
            "noise": self._noise.copy(),
            "frames": self.frames,
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any], forgetting_kind: str) -> "Window":
        """Rebuild from a snapshot."""
        window = cls.__new__(cls)
        window._kind = forgetting_kind
        window._reference = np.array(snapshot["reference"], dtype=np.complex128)
        window._reference_noise = np.array(snapshot["reference_noise"], dtype=np.float64)
        window._unit = np.array(snapshot["unit"], dtype=np.float64)
        window._variance = np.array(snapshot["variance"], dtype=np.float64)
        window._time_constant_s = float(snapshot["time_constant_s"])
        window._kept = np.array(snapshot["kept"], dtype=np.float64)
        window._gain = np.array(snapshot["gain"], dtype=np.float64)
        window._noise = np.array(snapshot["noise"], dtype=np.float64)
        window.frames = int(snapshot["frames"])
        return window


def scale_of(before: Real, now: Real) -> float:
    """Factor on variances when the unit goes from one noise power to another, each shape (R,)."""
    return float((before / now).prod() ** (1.0 / before.size))


def amplitudes(before: Real, now: Real, columns: int) -> Real:
    """Factors on the columns of coefficients for the same change of unit, shape (D,)."""
    return np.repeat(np.sqrt(before / now), columns // before.shape[0])
