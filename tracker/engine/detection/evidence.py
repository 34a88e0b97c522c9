"""What is kept to tell changes apart: the model from before anything was suspected, and the frames heard since.

While all is calm the model kept is the one of a few blocks ago, with the blocks since: a change may have gone unseen
for as long. Once a sum rises the model stays as it is and frames gather; when an alarm follows, both are at hand.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .likelihood import times

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Frames kept at most: more would hardly tell more, and take long to judge.
MOST_FRAMES = 128


@dataclass(frozen=True, slots=True, eq=False)
class Heard:
    """Frames of a block as the estimator took them.

    Parameters
    ----------
    patterns : ndarray of uint8, shape (B, bytes)
    response : ndarray of complex64, shape (B, R, K)
        As received.
    outputs : ndarray of complex, shape (B, R, Q)
        On the delay basis, in units of the noise, phases taken off.
    time_ns : ndarray of int64, shape (B,)
    noise : ndarray, shape (R,)
        Power of a unit of the outputs.
    """

    patterns: NDArray[np.uint8]
    response: NDArray[np.complex64]
    outputs: Complex
    time_ns: NDArray[np.int64]
    noise: Real


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """Frames since the change, and the model before it; outputs in units of the noise before.

    Parameters
    ----------
    outputs : ndarray of complex, shape (B, R, Q)
        Y.
    regressors : ndarray, shape (B, n)
        Z.
    states : ndarray, shape (B, N)
    model : ndarray of complex, shape (n, R, Q)
        C, the direct path first.
    elements : ndarray of complex, shape (N, R, Q)
        v.
    prior : ndarray, shape (n,)
        Variances before any data.
    outside : ndarray of complex, shape (B, R, K)
        What the frames hold outside the delay basis, on the tones.
    basis : ndarray of complex, shape (K, Q)
    doubt : ndarray, shape (B, B)
        Covariance over the frames of what the model has wrong of the surface, in units of the noise.
    time_s : ndarray, shape (B,)
        From the start of the change.
    """

    outputs: Complex
    regressors: NDArray[Any]
    states: Real
    model: Complex
    elements: Complex
    prior: Real
    outside: Complex
    basis: Complex
    doubt: NDArray[Any]
    time_s: Real
    bent: Complex = field(init=False)

    def __post_init__(self) -> None:
        """Work out the surface path of every frame under the model, shape (B, R, Q)."""
        object.__setattr__(self, "bent", times(self.regressors[:, 1:], self.model[1:]))


class Memory:
    """Model before, frames since.

    Parameters
    ----------
    blocks : int or None
        Blocks kept at most; None for as many as hold `MOST_FRAMES`.

    Attributes
    ----------
    before : ndarray of complex, shape (n, R Q), or None
        Coefficients while all was calm, in units of `noise`.
    noise : ndarray, shape (R,)
    variance : float
        Of an output about that model.
    heard : list of Heard
    """

    def __init__(self, blocks: int | None = None) -> None:
        self._blocks = blocks
        self.before: Complex | None = None
        self.noise: Real = np.zeros(0)
        self.variance = 1.0
        self.heard: list[Heard] = []

    def calm(self, coefficients: Complex, noise: Real, variance: float, blocks: int) -> None:
        """Take a model from so many blocks ago: nothing is suspected."""
        if self.before is None:
            self.before = coefficients.copy()
        else:
            np.copyto(self.before, coefficients)
        self.noise, self.variance = noise, variance
        del self.heard[: len(self.heard) - blocks]

    def keep(self, heard: Heard) -> None:
        """Keep a block: something may be going on."""
        self.heard.append(heard)
        frames = sum(one.outputs.shape[0] for one in self.heard)
        while len(self.heard) > 1 and (frames > MOST_FRAMES or len(self.heard) > (self._blocks or MOST_FRAMES)):
            frames -= self.heard.pop(0).outputs.shape[0]

    def forget(self) -> None:
        """Drop everything: the model is not what it was."""
        self.before = None
        self.heard.clear()

    def turn_direct(self, columns: slice, turn: complex) -> None:
        """Turn the direct path of the model along."""
        if self.before is not None:
            self.before[0, columns] *= turn

    def amplify(self, columns: slice, gain: float) -> None:
        """Make the model stronger."""
        if self.before is not None:
            self.before[:, columns] *= gain

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "before": self.before.copy() if self.before is not None else None,
            "noise": self.noise.copy(),
            "variance": self.variance,
            "heard": [[one.patterns, one.response, one.outputs, one.time_ns, one.noise] for one in self.heard],
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        before = snapshot["before"]
        self.before = np.array(before, dtype=np.complex128) if before is not None else None
        self.noise = np.array(snapshot["noise"], dtype=np.float64)
        self.variance = float(snapshot["variance"])
        self.heard = [Heard(*(np.array(part) for part in parts)) for parts in snapshot["heard"]]
