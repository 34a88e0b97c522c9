"""Recorded frames as a model of the surface alone takes them: turned back, direct path taken off, in noise units.

The engine follows the log forward, as it would live. Of each stretch of frames it then knows how the phases ran, the
delay, the noise and the direct path; what is left after all these are taken off is the surface and noise.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.engine import panel
from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimator import STRETCH_NS, Estimator, Frames
from tracker.engine.following import Lock

Complex = NDArray[np.complex128]


@dataclass(frozen=True, slots=True, eq=False)
class Stretch:
    """Frames over which phases turn evenly.

    Parameters
    ----------
    burst : int
        Number of the burst that they are of.
    time_s : float
        Of their middle, since the first frame of the log.
    patterns : ndarray of uint8, shape (B, ceil(N/8))
        Packed.
    outputs : ndarray of complex64, shape (B, D)
        What the surface does at each receiver and delay, and noise of unit power.
    error : float
        Mean squared error with which the engine predicted the frames before it took them in.
    """

    burst: int
    time_s: float
    patterns: NDArray[np.uint8]
    outputs: NDArray[np.complex64]
    error: float

    def states(self, elements: int) -> NDArray[np.float64]:
        """Patterns as states ±1, shape (B, N)."""
        return panel.unpack(self.patterns, elements)


@dataclass(frozen=True, slots=True, eq=False)
class Turning:
    """A log as the engine followed it.

    Parameters
    ----------
    stretches : list of Stretch
        Those during which every receiver was locked.
    estimates : ndarray of complex64, shape (N, n)
        Estimated responses along the log, side by side.
    direct_power : float
        Mean power of the direct path on an output.
    frames : int
        Frames followed, those that were left out included.
    """

    stretches: list[Stretch]
    estimates: NDArray[np.complex64]
    direct_power: float
    frames: int


class Turner:
    """Follows bursts one after another.

    Parameters
    ----------
    config : Config
        Phases are followed whatever it says.
    estimates : int
        Estimates to keep along the way.
    bursts : int
        Bursts to come.
    """

    def __init__(self, config: Config, estimates: int, bursts: int) -> None:
        self._config = replace(config, follow_phase=True)
        self._adjoint = config.delay.conj()
        self._estimator = Estimator(self._config)
        # The first sweep is left out: what is not heard yet would pass for noise.
        self._every = max(1, bursts // max(estimates, 1))
        self._stretches: list[Stretch] = []
        self._estimates: list[NDArray[np.complex64]] = []
        self._direct: list[float] = []
        self._start_ns: int | None = None
        self._frames = self._bursts = 0

    def take(self, burst: Burst) -> None:
        """Follow one burst."""
        frames = Frames.of(burst)
        self._start_ns = self._start_ns if self._start_ns is not None else burst.t_ns
        for part in frames.stretches(STRETCH_NS):
            fit = self._estimator.update([part])
            self._frames += part.time_ns.shape[0]
            warm = self._frames > self._estimator.ready_after
            if warm and self._estimator.lock is Lock.LOCKED:
                self._stretches.append(self._turned(part, fit.error))
        self._bursts += 1
        if self._stretches and self._bursts % self._every == 0:
            surface = self._estimator.channel().surface
            self._estimates.append(surface.reshape(surface.shape[0], -1).astype(np.complex64))

    def turning(self) -> Turning:
        """Return what was followed."""
        return Turning(
            self._stretches,
            np.concatenate(self._estimates, axis=1) if self._estimates else np.zeros((self._config.elements, 0), "c8"),
            float(np.mean(self._direct)) if self._direct else 0.0,
            self._frames,
        )

    def _turned(self, part: Frames, error: float) -> Stretch:
        direct = self._estimator.channel().direct
        self._direct.append(float((np.abs(direct) ** 2).mean()))
        middle_ns = int(part.time_ns[0] + (part.time_ns[-1] - part.time_ns[0]) // 2)
        time_s = (part.time_ns - middle_ns) / 1e9
        outputs = []
        for receiver, following in enumerate(self._estimator.following):
            tones = following.take_off_delay(part.response[:, receiver].astype(np.complex128))
            heard = (tones @ self._adjoint) / np.sqrt(self._estimator.noise_power[receiver])
            phase_d, phase_s = following.loops.phases(time_s)
            difference = phase_d - phase_s
            # The estimate of the direct path stands where the path stood at the last frame.
            standing = np.exp(1j * (difference - difference[-1]))[:, None] * direct[receiver]
            outputs.append(heard * np.exp(-1j * phase_s)[:, None] - standing)
        start_ns = self._start_ns if self._start_ns is not None else middle_ns
        return Stretch(
            self._bursts,
            (middle_ns - start_ns) / 1e9,
            part.patterns,
            np.concatenate(outputs, axis=1).astype(np.complex64),
            error,
        )


def follow(bursts: Sequence[Burst], config: Config, estimates: int = 64) -> Turning:
    """Follow bursts that are all at hand; see `Turner`."""
    turner = Turner(config, estimates, len(bursts))
    for burst in bursts:
        turner.take(burst)
    return turner.turning()
