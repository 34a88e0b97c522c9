"""Several time constants side by side, each judged by how well it predicts the next burst.

How fast a channel changes is seldom known and never constant. The filters of the bank take in the same frames and
differ in their forgetting alone; the one whose one-step predictions have been best of late is in use. Prediction error
needs no model of the change, and the comparison is fair because all predict the same frames before seeing them.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .rls import BlockRls, forgetting

Complex = NDArray[np.complex128]

# Ratio of neighbouring time constants: the error is so flat about its minimum that a finer grid gains nothing.
RATIO = 4.0
# Frames over which prediction errors are averaged.
MEMORY_FRAMES = 2048
# Another filter must be better by this share of its error to be taken: a tie does not toggle.
MARGIN = 0.01


def time_constants(middle_s: float, count: int) -> tuple[float, ...]:
    """Time constants of a bank about a middle one, s; the fastest first."""
    return tuple(middle_s * RATIO ** (index - (count - 1) // 2) for index in range(count))


class Bank:
    """Filters side by side.

    Parameters
    ----------
    filters : sequence of BlockRls
        One a time constant.
    kind : str
        Of forgetting.
    constants_s : sequence of float
        Time constants, s.
    """

    def __init__(self, filters: Sequence[BlockRls], kind: str, constants_s: Sequence[float]) -> None:
        self._filters = list(filters)
        self._kind = kind
        self._constants_s = tuple(constants_s)
        self._errors = np.zeros(len(self._filters))
        self._frames = 0.0
        self._chosen = (len(self._filters) - 1) // 2

    @property
    def chosen(self) -> BlockRls:
        """The filter in use."""
        return self._filters[self._chosen]

    @property
    def time_constant_s(self) -> float:
        """Its time constant, s."""
        return self._constants_s[self._chosen]

    def forget_for(self, elapsed_s: float) -> None:
        """Let each filter forget over an elapsed time."""
        for one, constant_s in zip(self._filters, self._constants_s, strict=True):
            one.forget(*forgetting(self._kind, elapsed_s, constant_s))

    def forget(self, a: float, b: float) -> None:
        """Let all filters forget alike; see `BlockRls.forget`."""
        for one in self._filters:
            one.forget(a, b)

    def reset(self, rows: NDArray[np.intp]) -> None:
        """Forget how well some coefficients are known; see `BlockRls.reset`."""
        for one in self._filters:
            one.reset(rows)

    def update(self, regressors: NDArray[Any], outputs: Complex) -> tuple[Complex, Complex]:
        """Take in a block of frames; returns what the filter in use returns, see `BlockRls.update`."""
        results = [one.update(regressors, outputs) for one in self._filters]
        chosen = results[self._chosen]
        if len(results) > 1:
            self._judge([float((np.abs(innovation) ** 2).mean()) for innovation, _ in results], outputs.shape[0])
        return chosen

    def rescale(self, coefficients: NDArray[np.float64], covariance: float) -> None:
        """Change the unit of the noise in all filters."""
        for one in self._filters:
            one.rescale(coefficients, covariance)

    def turn_direct(self, columns: slice, turn: complex) -> None:
        """Turn the estimates of the direct path, for the outputs named."""
        for one in self._filters:
            one.coefficients[0, columns] *= turn

    def amplify(self, columns: slice, gain: float) -> None:
        """Make the estimates stronger, for the outputs named: the signal has grown by this amplitude."""
        for one in self._filters:
            one.coefficients[:, columns] *= gain

    def scale(self, direct: Complex, surface: Complex) -> None:
        """Multiply the estimates of the direct path and of the surface, factors (D,) an output."""
        for one in self._filters:
            one.coefficients[0] *= direct
            one.coefficients[1:] *= surface

    def put(self, coefficients: Complex) -> None:
        """Set the estimates of all filters."""
        for one in self._filters:
            one.coefficients[...] = coefficients

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "filters": [one.snapshot() for one in self._filters],
            "errors": self._errors.copy(),
            "frames": self._frames,
            "chosen": self._chosen,
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any], kind: str, constants_s: Sequence[float]) -> "Bank":
        """Rebuild from a snapshot made under the same settings."""
        bank = cls([BlockRls.restore(one) for one in snapshot["filters"]], kind, constants_s)
        bank._errors = np.array(snapshot["errors"], dtype=np.float64)
        bank._frames = float(snapshot["frames"])
        bank._chosen = int(snapshot["chosen"])
        return bank

    def _judge(self, errors: Sequence[float], frames: int) -> None:
        """Average the prediction errors, and take another filter when it is clearly better."""
        self._frames = min(self._frames + frames, MEMORY_FRAMES)
        self._errors += (np.array(errors) - self._errors) * (frames / self._frames)
        best = int(np.argmin(self._errors))
        if self._errors[best] < self._errors[self._chosen] * (1.0 - MARGIN):
            self._chosen = best
