"""Recorded frames as a model of the surface alone takes them: turned back, direct path taken off, in noise units.

The engine follows the log forward, as it would live. Of each stretch of frames it then knows how the phases ran, the
delay, the noise and the direct path; what is left after all these are taken off is the surface and noise.
"""

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tracker.engine import panel
from tracker.engine.config import Config
from tracker.engine.estimation.estimator import Estimator
from tracker.engine.estimation.frames import Frames
from tracker.engine.oscillators.following import Lock

from .recorded import Piece

Complex = NDArray[np.complex128]


@dataclass(frozen=True, slots=True, eq=False)
class Stretch:
    """Frames over which phases turn evenly.

    Parameters
    ----------
    number : int
        That of the piece of the log.
    time_s : float
        Of their middle, s since the Unix epoch.
    patterns : ndarray of uint8, shape (B, ceil(N/8))
        Packed.
    outputs : ndarray of complex64, shape (B, D)
        What the surface does at each receiver and delay, and noise of unit power.
    error : float
        Mean squared error with which the engine predicted the frames before it took them in.
    """

    number: int
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
        Those during which every receiver was locked, the first sweep over the unknowns left out.
    estimates : ndarray of complex64, shape (N, n)
        Estimated responses along the log, side by side.
    direct_power : float
        Mean power of the direct path on an output.
    frames : int
        Frames followed, those that were left out included.
    span_ns : (int, int)
        Times of the first and of the last, ns since the Unix epoch.
    """

    stretches: list[Stretch]
    estimates: NDArray[np.complex64]
    direct_power: float
    frames: int
    span_ns: tuple[int, int]


def turn(pieces: Iterable[Piece], config: Config, estimate_every: int) -> Turning:
    """Follow pieces of logs.

    Parameters
    ----------
    pieces : iterable of Piece
    config : Config
        Phases are followed whatever it says.
    estimate_every : int
        Stretches from one estimate that is kept to the next.
    """
    config = replace(config, follow_phase=True)
    part: int | None = None
    estimator = Estimator(config)
    stretches: list[Stretch] = []
    estimates, direct_powers = [np.zeros((config.elements, 0), dtype=np.complex64)], [0.0]
    frames = warm = 0
    first_ns = last_ns = 0
    for piece in pieces:
        if piece.part != part:
            part, estimator, warm = piece.part, Estimator(config), 0
        fit = estimator.update([piece.frames])
        count = piece.frames.time_ns.shape[0]
        frames, warm = frames + count, warm + count
        first_ns, last_ns = first_ns or int(piece.frames.time_ns[0]), int(piece.frames.time_ns[-1])
        if warm <= estimator.ready_after or estimator.reception.lock is not Lock.LOCKED:
            continue
        channel = estimator.channel()
        stretches.append(_turned(piece, fit.error, estimator, config, channel.direct))
        direct_powers.append(float((np.abs(channel.direct) ** 2).mean()))
        if len(stretches) % estimate_every == 0:
            estimates.append(channel.surface.reshape(config.elements, -1).astype(np.complex64))
    return Turning(
        stretches,
        np.concatenate(estimates, axis=1),
        sum(direct_powers) / max(len(direct_powers) - 1, 1),
        frames,
        (first_ns, last_ns),
    )


def _turned(piece: Piece, error: float, estimator: Estimator, config: Config, direct: Complex) -> Stretch:
    frames: Frames = piece.frames
    middle_ns = int(frames.time_ns[0] + (frames.time_ns[-1] - frames.time_ns[0]) // 2)
    time_s = (frames.time_ns - middle_ns) / 1e9
    outputs = []
    for receiver, following in enumerate(estimator.reception.following):
        tones = following.take_off_delay(frames.response[:, receiver].astype(np.complex128))
        heard = (tones @ config.delay.conj()) / np.sqrt(estimator.reception.noise_power[receiver])
        phase_d, phase_s = following.loops.phases(time_s)
        difference = phase_d - phase_s
        # The estimate of the direct path stands where the path stood at the last frame.
        standing = np.exp(1j * (difference - difference[-1]))[:, None] * direct[receiver]
        outputs.append(heard * np.exp(-1j * phase_s)[:, None] - standing)
    turned = np.concatenate(outputs, axis=1).astype(np.complex64)
    return Stretch(piece.number, middle_ns / 1e9, frames.patterns, turned, error)
