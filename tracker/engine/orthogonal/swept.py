"""The filter for sweeps, with patterns outside of them sounded now and then.

Frames of the sweep go into a covariance that needs few numbers (`sweeps`), those of other patterns, as a rule the one
in use, are followed for themselves (`references`). Both together tell what is to be expected under a pattern outside of
the sweep, heard before or near to one that was.
"""

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..estimation.dense import Dense
from ..estimation.filter import Surprise
from ..estimation.rls import BlockRls
from ..estimation.sounded import Sounded
from .cycle import SweepDetector
from .references import References
from .responses import product
from .sweeps import SweepRls

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


class Swept:
    """A `Filter` over the elements for streams in which a sweep is sounded.

    Parameters
    ----------
    sweep : SweepRls
    references : References or None
        None for none heard yet.
    """

    def __init__(self, sweep: SweepRls, references: References | None = None) -> None:
        self._sweep = sweep
        self._references = references or References(sweep.cycle.elements, sweep.direct.shape[0])
        self._coefficients: Complex | None = None  # of the sweep, while they stay as they are

    @property
    def prior(self) -> Real:
        """See `Filter`."""
        return self._sweep.prior

    @property
    def variances(self) -> Real:
        """See `Filter`."""
        return self._sweep.variances

    @property
    def surface_variance(self) -> float:
        """See `Filter`."""
        return self._sweep.element_variance

    @property
    def coefficients(self) -> Complex:
        """See `Filter`: C as the sweep gives it."""
        if self._coefficients is None:
            self._coefficients = self._sweep.coefficients
        return self._coefficients

    @property
    def estimate(self) -> Complex:
        """See `Filter`: C with what patterns outside of the sweep say."""
        if not self._references.count:
            return self.coefficients
        return self._references.correct(self.coefficients, self._sweep.direct_variance, self._sweep.element_variance)

    @property
    def direct(self) -> Complex:
        """See `Filter`."""
        return self._sweep.direct

    def predict(self, sounded: Sounded) -> Complex:
        """See `Filter`."""
        rows, inside, outside = _parted(sounded)
        if not outside.size:
            return self._sweep.predict(rows)
        responses = np.empty((rows.shape[0], self._sweep.direct.shape[0]), dtype=np.complex128)
        responses[inside] = self._sweep.predict(rows[inside])
        for pattern, frames in _patterns(sounded, outside):
            responses[frames] = self._expected(pattern)[0]
        return responses

    def predicted_variance(self, regressor: NDArray[Any]) -> float:
        """See `Filter`."""
        variance = self._sweep.predicted_variance(regressor)
        if not self._references.count:
            return variance
        gain = self._references.gain(regressor[None, :], self._sweep.direct_variance, self._sweep.element_variance)
        return max(variance - float(gain[1][0]), 0.0)

    def predicted_covariance(self, regressors: NDArray[Any]) -> NDArray[Any]:
        """See `Filter`."""
        return self._sweep.predicted_covariance(regressors)

    def forget(self, a: float, b: float, decay: float = 1.0) -> None:
        """See `Filter`."""
        self._coefficients = None
        self._sweep.forget(a, b, decay)
        self._references.forget(a, b, decay, self._sweep.mean_prior)

    def update(self, sounded: Sounded, outputs: Complex) -> Surprise:
        """See `Filter`."""
        self._coefficients = None
        rows, inside, outside = _parted(sounded)
        if not outside.size:
            return self._sweep.update(rows, outputs)
        innovation, white, spread = np.empty_like(outputs), np.empty_like(outputs), np.empty(rows.shape[0])
        for pattern, frames in _patterns(sounded, outside):
            innovation[frames], white[frames], spread[frames] = self._take_aside(pattern, outputs[frames])
        swept = self._sweep.update(rows[inside], outputs[inside])
        innovation[inside], white[inside], spread[inside] = swept.innovation, swept.white, swept.spread
        return Surprise(innovation, white, spread)

    def renew_direct(self) -> None:
        """See `Filter`."""
        self._sweep.renew_direct()
        self._references.doubt(float(self._sweep.prior[0]))

    def scale(self, direct: Complex, surface: Complex) -> None:
        """See `Filter`."""
        self._coefficients = None
        self._references.scale(self._sweep.direct, direct, surface)
        self._sweep.scale(direct, surface)

    def rescale(self, coefficients: Real, covariance: float) -> None:
        """See `Filter`."""
        self._coefficients = None
        self._sweep.rescale(coefficients, covariance)
        self._references.rescale(coefficients, covariance)

    def put(self, coefficients: Complex) -> None:
        """See `Filter`: what was heard outside of the sweep is not of this estimate."""
        self._coefficients = None
        self._sweep.put(coefficients)
        self._references.clear()

    def dense(self) -> Dense:
        """Turn into the filter for any patterns; responses outside of the sweep are taken in as frames."""
        rls: BlockRls = self._sweep.dense()
        if self._references.count:
            weight = 1.0 / np.sqrt(self._references.variances)[:, None]
            rls.update(weight * self._references.regressors, weight * self._references.means)
        return Dense(rls)

    def snapshot(self) -> dict[str, Any]:
        """See `Filter`; the cycle is not in it."""
        return {"sweep": self._sweep.snapshot(), "references": self._references.snapshot()}

    @classmethod
    def restore(cls, snapshot: Mapping[str, Any], cycle: SweepDetector) -> "Swept":
        """Rebuild from a snapshot, with the cycle that was restored from its own."""
        return cls(SweepRls.restore(snapshot["sweep"], cycle), References.restore(snapshot["references"]))

    def _take_aside(self, pattern: bytes, outputs: Complex) -> tuple[Complex, Complex, Real]:
        """Take in k frames of a pattern outside of the sweep; return what a `Surprise` holds."""
        mean, variance = self._expected(pattern)
        innovation = outputs - mean
        # What the frames before left unknown of the response, and what they said of it.
        left = variance / (1.0 + variance * np.arange(outputs.shape[0]))
        before = np.cumsum(innovation, axis=0) - innovation
        white = (innovation - left[:, None] * before) / np.sqrt(1.0 + left)[:, None]
        self._references.take(pattern, outputs)
        return innovation, np.asarray(white), np.asarray(1.0 + left)

    def _expected(self, pattern: bytes) -> tuple[Complex, float]:
        """Response (D,) to be expected under a pattern outside of the sweep, and its variance."""
        references, sweep = self._references, self._sweep
        z = references.regressor(pattern)[None, :]
        if not references.count:
            return sweep.respond(z)[0], sweep.mean_variance
        responses = sweep.respond(np.concatenate([z, references.regressors]))
        gain, known = references.gain(z, sweep.direct_variance, sweep.element_variance)
        mean = responses[0] + product(gain, references.means - responses[1:])[0]
        # Rounding may leave less than nothing of what is known as well as can be.
        return np.asarray(mean), max(sweep.mean_variance - float(known[0]), 0.0)


def _patterns(sounded: Sounded, frames: NDArray[np.intp]) -> Iterator[tuple[bytes, list[int]]]:
    """Patterns of some frames in the order in which they were sounded last, and the frames of each."""
    of: dict[bytes, list[int]] = {}
    for frame in frames.tolist():
        key = sounded.patterns[frame].tobytes()
        of[key] = [*of.pop(key, []), frame]
    yield from of.items()


def _parted(sounded: Sounded) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.intp]]:
    """Rows of the sweep, and which frames sound one and which do not."""
    if sounded.rows is None:
        raise ValueError("no sweep is sounded: the filter for any patterns is needed, see `dense`")
    return sounded.rows, np.flatnonzero(sounded.rows >= 0), np.flatnonzero(sounded.rows < 0)
