"""Several time constants side by side, each judged by how well it predicts the next burst.

How fast a channel changes is seldom known and never constant. The filters of the bank take in the same frames and
differ in their forgetting alone; the one whose one-step predictions have been best of late is in use. Prediction error
needs no model of the change, and the comparison is fair because all predict the same frames before seeing them.

While a sweep of orthogonal patterns is sounded all are filters for sweeps. The moment it is not they turn into filters
for any patterns, exactly; and back, with a covariance that is rounded off to what a sweep leaves of it, once a whole
sweep was sounded again.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..orthogonal.cycle import SweepDetector
from ..orthogonal.lookout import Lookout
from ..orthogonal.sweeps import SweepRls
from ..orthogonal.swept import Swept
from .aperture import ApertureBasis
from .dense import Dense
from .filter import Filter, Surprise
from .rls import BlockRls, forgetting
from .sounded import Sounded

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
    filters : sequence of Dense, or sequence of Swept
        One a time constant.
    kind : str
        Of forgetting.
    constants_s : sequence of float
        Time constants, s.
    cycle : SweepDetector or None
        That of the filters for sweeps.
    lookout : Lookout or None
        Looks for sweeps; None where they are not wanted.
    """

    def __init__(
        self,
        filters: Sequence[Dense] | Sequence[Swept],
        kind: str,
        constants_s: Sequence[float],
        cycle: SweepDetector | None = None,
        lookout: Lookout | None = None,
    ) -> None:
        self._filters: list[Dense | Swept] = [*filters]
        self._cycle = cycle
        self._lookout = lookout
        self._kind = kind
        self._constants_s = tuple(constants_s)
        self._errors = np.zeros(len(self._filters))
        self._frames = 0.0
        self._chosen = (len(self._filters) - 1) // 2

    @classmethod
    def begin(
        cls,
        prior: NDArray[np.float64],
        outputs: int,
        kind: str,
        constants_s: Sequence[float],
        *,
        complex_regressors: bool,
        patterns: NDArray[np.uint8],
        lookout: Lookout | None,
    ) -> "Bank":
        """Make filters that know nothing yet, for sweeps if the first patterns, packed (B, bytes), are of one.

        See `BlockRls` and `SweepRls` for the rest.
        """
        cycle = lookout.first(patterns) if lookout is not None else None
        if cycle is not None:
            swept = [Swept(SweepRls(prior, outputs, cycle)) for _ in constants_s]
            return cls(swept, kind, constants_s, cycle, lookout)
        dense = [Dense(BlockRls(prior, outputs, complex_regressors=complex_regressors)) for _ in constants_s]
        return cls(dense, kind, constants_s, None, lookout)

    @property
    def chosen(self) -> Filter:
        """The filter in use."""
        return self._filters[self._chosen]

    @property
    def time_constant_s(self) -> float:
        """Its time constant, s."""
        return self._constants_s[self._chosen]

    @property
    def swept(self) -> bool:
        """Whether these are filters for sweeps."""
        return self._cycle is not None

    def sound(self, patterns: NDArray[np.uint8], aperture: ApertureBasis) -> Sounded:
        """Look at the patterns of frames to come, packed (B, bytes), and get ready for them."""
        if self._cycle is None and self._lookout is not None:
            self._turn_swept(self._lookout.later(patterns))
        if self._cycle is None:
            return Sounded(patterns, aperture)
        rows = self._cycle.rows(patterns)
        if rows is None:
            self._turn_dense()
        return Sounded(patterns, aperture, rows)

    def forget_for(self, elapsed_s: float) -> None:
        """Let each filter forget over an elapsed time."""
        for one, constant_s in zip(self._filters, self._constants_s, strict=True):
            one.forget(*forgetting(self._kind, elapsed_s, constant_s))

    def forget(self, a: float, b: float) -> None:
        """Let all filters forget alike; see `Filter.forget`."""
        for one in self._filters:
            one.forget(a, b)

    def renew_direct(self) -> None:
        """Forget how well the direct path is known, and that alone."""
        for one in self._filters:
            one.renew_direct()

    def renew(self, rows: NDArray[np.intp]) -> None:
        """Forget how well some coefficients are known, and those alone: more than a filter for sweeps can do."""
        for one in self._turn_dense():
            one.renew(rows)

    def update(self, sounded: Sounded, outputs: Complex) -> Surprise:
        """Take in a block of frames; returns what the filter in use returns, see `Filter.update`."""
        results = [one.update(sounded, outputs) for one in self._filters]
        chosen = results[self._chosen]
        if len(results) > 1:
            self._judge([float((np.abs(one.innovation) ** 2).mean()) for one in results], outputs.shape[0])
        return chosen

    def rescale(self, coefficients: NDArray[np.float64], covariance: float) -> None:
        """Change the unit of the noise in all filters."""
        for one in self._filters:
            one.rescale(coefficients, covariance)

    def scale(self, direct: Complex, surface: Complex) -> None:
        """Multiply the estimates of the direct path and of the surface, factors (D,) an output."""
        for one in self._filters:
            one.scale(direct, surface)

    def put(self, coefficients: Complex) -> None:
        """Set the estimates of all filters."""
        for one in self._filters:
            one.put(coefficients)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "filters": [one.snapshot() for one in self._filters],
            "errors": self._errors.copy(),
            "frames": self._frames,
            "chosen": self._chosen,
            "cycle": self._cycle.snapshot() if self._cycle is not None else None,
            "lookout": self._lookout.snapshot() if self._lookout is not None else None,
        }

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any], kind: str, constants_s: Sequence[float]) -> "Bank":
        """Rebuild from a snapshot made under the same settings."""
        filters = snapshot["filters"]
        lookout = Lookout.restore(snapshot["lookout"]) if snapshot["lookout"] is not None else None
        if snapshot["cycle"] is not None:
            cycle = SweepDetector.restore(snapshot["cycle"])
            bank = cls([Swept.restore(one, cycle) for one in filters], kind, constants_s, cycle, lookout)
        else:
            bank = cls([Dense.restore(one) for one in filters], kind, constants_s, None, lookout)
        bank._errors = np.array(snapshot["errors"], dtype=np.float64)
        bank._frames = float(snapshot["frames"])
        bank._chosen = int(snapshot["chosen"])
        return bank

    def _turn_dense(self) -> list[Dense]:
        """Turn all into filters for any patterns; those that are stay as they are."""
        dense = [one.dense() if isinstance(one, Swept) else one for one in self._filters]
        self._filters, self._cycle = [*dense], None
        return dense

    def _turn_swept(self, cycle: SweepDetector | None) -> None:
        """Turn all into filters for a sweep, if there is one."""
        if cycle is not None:
            swept = [Swept(SweepRls.like(one.prior, one.variances, one.coefficients, cycle)) for one in self._filters]
            self._filters, self._cycle = [*swept], cycle

    def _judge(self, errors: Sequence[float], frames: int) -> None:
        """Average the prediction errors, and take another filter when it is clearly better."""
        self._frames = min(self._frames + frames, MEMORY_FRAMES)
        self._errors += (np.array(errors) - self._errors) * (frames / self._frames)
        best = int(np.argmin(self._errors))
        if self._errors[best] < self._errors[self._chosen] * (1.0 - MARGIN):
            self._chosen = best
