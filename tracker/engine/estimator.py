"""From frames to channel estimate: delay basis, noise, prior, least squares, shrinkage, in this order."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from . import noise, panel
from .channel import Channel
from .config import Config
from .prior import prior_variances
from .rls import BlockRls, forgetting
from .shrinkage import shrink

# Frames worked off in one step of the block filter; more would only make the B × B part dear.
MOST_FRAMES = 256


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """How a block of frames fitted the estimate that it met.

    Parameters
    ----------
    ratio : ndarray, shape (R,)
        Measured over expected innovation power.
    degrees : int
        Complex degrees of freedom behind each ratio: frames times delay directions.
    elapsed_s : float
        From the end of the block before to the end of this one, s.
    error : float
        Mean squared error of predicting the frames from the estimate before them, in units of the noise on a delay
        direction; 1 is all that can be had. Unlike `ratio` it can be compared between settings.
    """

    ratio: NDArray[np.float64]
    degrees: int
    elapsed_s: float
    error: float


class Estimator:
    """Channel estimate of one link.

    Parameters
    ----------
    config : Config
    """

    def __init__(self, config: Config) -> None:
        self._config = config
        self._adjoint = np.ascontiguousarray(config.delay.conj())
        self._noise = noise.NoiseEstimate(config.receivers)
        self._rls: BlockRls | None = None
        self._end_ns = 0

    @property
    def ready_after(self) -> int:
        """Frames that make one sweep: as many as there are unknowns."""
        return self._config.aperture.size + 1

    @property
    def noise_power(self) -> NDArray[np.float64]:
        """Noise power on a tone, shape (R,), in the units of |response|²."""
        return self._noise.power

    def update(self, patterns: NDArray[np.uint8], response: NDArray[np.complex64], span_ns: int, end_ns: int) -> Fit:
        """Take in frames.

        Parameters
        ----------
        patterns : ndarray of uint8, shape (B, ceil(N/8))
        response : ndarray of complex64, shape (B, R, K)
        span_ns, end_ns : int
            Time that the frames span, and time of the last one.
        """
        tones = response.astype(np.complex128)
        coefficients = tones @ self._adjoint
        self._measure_noise(patterns, tones, coefficients)
        frames = coefficients.shape[0]
        scale = 1.0 / np.sqrt(self._noise.power)
        outputs = (coefficients * scale[:, None]).reshape(frames, -1)
        regressors = self._config.aperture.regressors(panel.unpack(patterns, self._config.elements))
        first = self._rls is None
        if self._rls is None:
            self._rls = BlockRls(prior_variances(regressors, outputs), outputs.shape[1])
        elapsed_s = max(span_ns if first else end_ns - self._end_ns, 0) / 1e9
        self._end_ns = end_ns
        if not first:
            self._rls.forget(*forgetting(self._config.forgetting, elapsed_s, self._config.time_constant_s))
        power = np.zeros(self._config.receivers)
        error = 0.0
        for start in range(0, frames, MOST_FRAMES):
            part = slice(start, start + MOST_FRAMES)
            innovation, white = self._rls.update(regressors[part], outputs[part])
            power += _power(white).reshape(self._config.receivers, -1).sum(axis=1)
            error += float(_power(innovation).sum())
        degrees = frames * self._adjoint.shape[1]
        return Fit(power / degrees, degrees, elapsed_s, error / (degrees * self._config.receivers))

    def channel(self) -> Channel:
        """Estimate as the optimizer takes it, in units of each receiver's noise.

        Raises
        ------
        ValueError
            Before the first frame.
        """
        rls = self._learned()
        receivers, size = self._config.receivers, self._adjoint.shape[1]
        prior = float(rls.prior[1:].mean())
        surface = shrink(rls.coefficients[1:], float(rls.variances[1:].mean()), prior)
        return Channel(
            basis=self._config.delay,
            direct=rls.coefficients[0].reshape(receivers, size).copy(),
            surface=np.ascontiguousarray(self._config.aperture.surface(surface).reshape(-1, receivers, size)),
        )

    def variance(self, states: NDArray[np.int8]) -> float:
        """Variance of each delay coefficient of the response under a pattern, in units of the noise."""
        regressor = self._config.aperture.regressors(states.astype(np.float64)[None, :])
        return self._learned().predicted_variance(regressor[0])

    def loosen(self, share: float) -> None:
        """Let what was known count for less: P goes the given share of the way back to the prior."""
        if self._rls is not None:
            self._rls.forget(1.0 - share, share)

    def relearn(self) -> None:
        """Throw the estimate away; the noise stays known."""
        self._rls = None

    def powers(self, response: NDArray[np.complex64]) -> NDArray[np.float64]:
        """|H|² of frames in units of the noise, unbiased, shape (R, K): the mean over the frames (B, R, K)."""
        tones = (response.astype(np.complex128) @ self._adjoint) @ self._config.delay.T
        bias = (np.abs(self._config.delay) ** 2).sum(axis=1)
        power = (np.abs(tones) ** 2).mean(axis=0) / self._noise.power[:, None] - bias
        return np.asarray(np.maximum(power, 0.0))

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "noise": self._noise.snapshot(),
            "rls": self._rls.snapshot() if self._rls is not None else None,
            "end_ns": self._end_ns,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._noise.load(snapshot["noise"])
        self._rls = BlockRls.restore(snapshot["rls"]) if snapshot["rls"] is not None else None
        self._end_ns = int(snapshot["end_ns"])

    def _learned(self) -> BlockRls:
        if self._rls is None:
            raise ValueError("there is no estimate before the first frame")
        return self._rls

    def _measure_noise(
        self, patterns: NDArray[np.uint8], tones: NDArray[np.complex128], coefficients: NDArray[np.complex128]
    ) -> None:
        """Update the noise power, and carry the estimate over into the new unit."""
        known, before = self._noise.known, self._noise.power
        if tones.shape[2] - coefficients.shape[2] >= noise.LEAST_OUTSIDE:
            self._noise.update(noise.outside(tones, coefficients), tones.shape[0])
        else:
            power, degrees = noise.repeats(patterns, coefficients)
            if degrees:
                self._noise.update(power, degrees)
            elif not known:
                # Nothing repeats yet: take all that is heard for noise, which is cautious, until something does.
                self._noise.update((np.abs(tones) ** 2).mean(axis=(0, 2)), 1)
        if known and self._rls is not None:
            ratio = before / self._noise.power
            amplitude = np.repeat(np.sqrt(ratio), self._adjoint.shape[1])
            self._rls.rescale(amplitude, float(np.exp(np.log(ratio).mean())))


def _power(values: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Sum of |values|² over the frames, shape (D,)."""
    return np.asarray((values.real**2 + values.imag**2).sum(axis=0))
