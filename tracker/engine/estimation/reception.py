"""Reception: from responses on the tones to outputs on the delay basis, in units of the noise, each delay in place."""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..config import Config
from ..detection.drift import Reading, Sample
from ..detection.rises import Groups
from ..detection.tones import TONE, Tones
from ..oscillators.following import Following, Lock
from ..oscillators.timing import TimingLoop
from . import noise
from .frames import Frames


class Reception:
    """What is known of the receivers apart from the channel: noise, and where followed, phases and clocks.

    Parameters
    ----------
    config : Config
    """

    def __init__(self, config: Config) -> None:
        self._delay, self._adjoint = config.delay, np.ascontiguousarray(config.delay.conj())
        self._noise_kept = (np.abs(config.delay) ** 2).sum(axis=1)  # share of a tone's noise that the basis keeps
        self._frequency_hz = config.frequency_hz
        self._noise = noise.NoiseEstimate(config.receivers)
        self._heard = np.zeros(config.receivers)  # noise power of the block, times its degrees of freedom
        self._heard_degrees = 0
        left_over = config.delay.shape[0] - config.delay.shape[1]
        self._tones: Tones | None = None
        if left_over >= noise.LEAST_OUTSIDE:
            self._tones = Tones(config.receivers, config.delay, predicted=not config.follow_phase)
        self.following: list[Following] = []
        if config.follow_phase:
            patience = config.aperture.size + 1
            self.following = [Following(patience, self._timing()) for _ in range(config.receivers)]

    @property
    def watched(self) -> tuple[str, ...]:
        """Names of the statistics under watch."""
        noises = tuple(noise_of(receiver) for receiver in range(self._heard.shape[0]))
        return (*noises, TONE) if self._tones is not None else noises

    @property
    def groups(self) -> dict[str, Groups]:
        """Statistics that are the powers of many places, with what is watched of them."""
        return {TONE: self._tones.groups} if self._tones is not None else {}

    @property
    def directions(self) -> int:
        """Q, directions of the delay basis."""
        return int(self._adjoint.shape[1])

    @property
    def noise_power(self) -> NDArray[np.float64]:
        """Noise power on a tone, shape (R,), in the units of |response|²."""
        return self._noise.power

    @property
    def lock(self) -> Lock:
        """The worst lock of all receivers; locked when nothing is followed."""
        locks = [following.lock for following in self.following]
        return next((lock for lock in (Lock.LOST, Lock.SEARCHING) if lock in locks), Lock.LOCKED)

    @property
    def phase(self) -> tuple[float, tuple[float, float]]:
        """Frequency offset, Hz, and phases of direct and surface path, rad, of the first receiver followed."""
        return (self.following[0].offset_hz, self.following[0].phases) if self.following else (0.0, (0.0, 0.0))

    def begin(self, time_ns: NDArray[np.int64]) -> None:
        """Go forward to frames of these times, shape (B,)."""
        for following in self.following:
            following.begin(time_ns)

    def take(self, frames: Frames) -> tuple[NDArray[np.complex128], NDArray[np.float64] | None]:
        """Measure the noise of frames, and bring them to the delay basis in its unit.

        Parameters
        ----------
        frames : Frames

        Returns
        -------
        outputs : ndarray of complex, shape (B, R Q)
        changed : ndarray, shape (R,), or None
            Noise power before over noise power now: by this an estimate in the old unit is out; None at first.
        """
        tones, coefficients = self._project(frames)
        known, before = self._noise.known, self._noise.power
        self._measure(frames.patterns, tones, coefficients)
        self._taken = tones, coefficients
        return self._in_noise_units(coefficients), before / self._noise.power if known else None

    def listen(self, innovation: NDArray[np.complex128] | None) -> None:
        """Watch the single tones of the frames taken last.

        Parameters
        ----------
        innovation : ndarray of complex, shape (B, R Q), or None
            What is left of them beyond their prediction, in units of the noise, where that is known and little.
        """
        if self._tones is None:
            return
        tones, coefficients = self._taken
        if innovation is None or self.following:
            self._tones.take(tones, coefficients)
            return
        left = innovation.reshape(coefficients.shape) * np.sqrt(self._noise.power)[:, None]
        self._tones.take(tones, coefficients - left, predicted=True)

    def first(self, frames: Frames) -> NDArray[np.complex128]:
        """Bring the first frames of all to outputs as `take` does, without yet counting their noise."""
        tones, coefficients = self._project(frames)
        kept = self._noise.snapshot()
        if not self._noise.known:
            self._measure(frames.patterns, tones, coefficients)
        outputs = self._in_noise_units(coefficients)
        self._noise.load(kept)
        self._heard, self._heard_degrees = np.zeros_like(self._heard), 0
        return outputs

    def rate(self, frames: Frames) -> float:
        """Rate heard on frames of one pattern, bit/s/Hz: the mean over receivers and tones of log2(1 + |H|²).

        Noise adds its power b to |H|², which is taken off, and leaves a variance u = b (b + 2 |H|²) / B in the mean of
        B frames. The logarithm bends down, so that this would lower the rate by u / (2 (1 + |H|²)²); it is put back.
        """
        tones = self._project(frames)[1] @ self._delay.T
        noise = self._noise_kept
        power = (tones.real**2 + tones.imag**2).mean(axis=0) / self._noise.power[:, None] - noise
        power = np.maximum(power, 0.0)
        lowered = noise * (noise + 2.0 * power) / (2.0 * tones.shape[0] * (1.0 + power) ** 2)
        return float((np.log(1.0 + power) + lowered).mean()) / math.log(2.0)

    def readings(self) -> list[Sample]:
        """Give samples of the noise heard since the last call: one a receiver, and one of single tones."""
        if not self._heard_degrees:
            return []
        heard = np.maximum(self._heard / self._heard_degrees, noise.FLOOR)
        degrees = self._heard_degrees
        self._heard, self._heard_degrees = np.zeros_like(self._heard), 0
        powers: list[Sample] = [
            Reading(noise_of(receiver), float(power), degrees) for receiver, power in enumerate(heard)
        ]
        return [*powers, *self._tones.readings()] if self._tones is not None else powers

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "noise": self._noise.snapshot(),
            "tones": self._tones.snapshot() if self._tones is not None else None,
            "following": [following.snapshot() for following in self.following],
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._noise.load(snapshot["noise"])
        if self._tones is not None:
            self._tones.load(snapshot["tones"])
        for following, state in zip(self.following, snapshot["following"], strict=True):
            following.load(state)

    def _timing(self) -> TimingLoop | None:
        return TimingLoop(self._delay, self._frequency_hz) if self._frequency_hz is not None else None

    def _project(self, frames: Frames) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        """Bring frames to double precision: on the tones, and on the delay basis."""
        tones = frames.response.astype(np.complex128)
        for receiver, following in enumerate(self.following):
            tones[:, receiver] = following.take_off_delay(tones[:, receiver])
        # One product of all rows: matmul takes a stack of matrices one by one.
        rows = tones.reshape(-1, tones.shape[2])
        return tones, (rows @ self._adjoint).reshape(*tones.shape[:2], -1)

    def _in_noise_units(self, coefficients: NDArray[np.complex128]) -> NDArray[np.complex128]:
        scale = 1.0 / np.sqrt(self._noise.power)
        return np.asarray((coefficients * scale[:, None]).reshape(coefficients.shape[0], -1))

    def _measure(
        self, patterns: NDArray[np.uint8], tones: NDArray[np.complex128], coefficients: NDArray[np.complex128]
    ) -> None:
        frames, left_over = tones.shape[0], tones.shape[2] - coefficients.shape[2]
        if left_over >= noise.LEAST_OUTSIDE:
            power, degrees = noise.outside(tones, coefficients), frames * left_over
        else:
            power, frames = noise.repeats(patterns, coefficients)
            degrees = frames * coefficients.shape[2]
        if frames:
            self._noise.update(power, frames, degrees)
            self._heard += power * degrees
            self._heard_degrees += degrees
        elif not self._noise.known:
            # Nothing repeats yet: take all that is heard for noise, which is cautious, until something does.
            self._noise.update((np.abs(tones) ** 2).mean(axis=(0, 2)), 1, 1)


def noise_of(receiver: int) -> str:
    """Name of the statistic that watches a receiver's noise."""
    return f"noise {receiver}"
