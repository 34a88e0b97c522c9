"""A link made of numbers, for the alarms: a few paths, changes of known size, frames as fast as they can be made."""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Elements
from tracker.engine.estimation.delay import delay_basis, frequencies
from tracker.engine.panel import pack
from tracker.simulation.sounding import sweep

FRAME_NS = 35_714
FFT, FIRST, TONES, TAPS = 64, 8, 48, 10
PATHS = 6

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Changed:
    """What frames are made of, for frames counted from the change.

    Parameters
    ----------
    response : ndarray of complex, shape (B, R, K)
        Without noise.
    noise : ndarray, shape (K,), or float
        Amplitude of the noise on the tones.
    """

    response: Complex
    noise: Real | float = 1.0


class Link:
    """A still link in units of the noise.

    Parameters
    ----------
    seed : int
    elements, receivers : int
    surface : float
        Power of the surface path on a tone under random patterns; the direct path has a quarter of it.
    """

    def __init__(self, seed: int, elements: int, receivers: int = 1, surface: float = 1.0) -> None:
        self.rng = np.random.default_rng([17, seed])
        self.elements, self.receivers = elements, receivers
        self.direct = self.paths(1, 0.25 * surface)[0]
        self.surface = self.paths(elements, surface / elements)
        self.cycle = sweep(elements, self.rng)
        self.place = 0

    def paths(self, count: int, power: float) -> Complex:
        """Draw responses (count, R, K) of a few delays."""
        delays = self.rng.uniform(0, TAPS - 3, PATHS)
        tones = (np.arange(FIRST, FIRST + TONES) - FFT // 2) / FFT
        shape = np.exp(-2j * np.pi * np.outer(delays, tones))
        return np.asarray(math.sqrt(power / PATHS) * (self.gaussian(count, self.receivers, PATHS) @ shape))

    def gaussian(self, *shape: int) -> Complex:
        """Circular Gaussian of unit power."""
        values = self.rng.standard_normal((*shape[:-1], 2 * shape[-1])).view(np.complex128)
        return np.asarray(values * math.sqrt(0.5))

    def config(self, false_alarm_s: float, time_constant_s: float = 0.5) -> Config:
        """Give settings of an engine for this link; the first pattern stays."""
        return Config(
            receivers=self.receivers,
            delay=delay_basis(FFT, FIRST, TONES, TAPS, 1),
            aperture=Elements(self.elements),
            time_constant_s=time_constant_s,
            false_alarm_s=false_alarm_s,
            frequency_hz=frequencies(FFT, FIRST, TONES, 625.0),
            every_bursts=1 << 40,
        )

    def states(self, frames: int) -> Real:
        """Patterns of the next frames, (B, N): sweep after sweep."""
        places = (self.place + np.arange(frames)) % self.cycle.shape[0]
        self.place += frames
        return np.asarray(self.cycle[places], dtype=np.float64)

    def shown(self, states: Real) -> Complex:
        """Response (B, R, K) without noise."""
        flat = self.surface.reshape(self.elements, -1).view(np.float64)
        return np.asarray((states @ flat).view(np.complex128).reshape(-1, self.receivers, TONES) + self.direct)

    def burst(self, number: int, states: Real, changed: Changed | None = None) -> Burst:
        """Make burst `number`, of as many frames as there are states."""
        changed = changed or Changed(self.shown(states))
        response = changed.response + changed.noise * self.gaussian(*changed.response.shape)
        frames = states.shape[0]
        return Burst(
            run=1,
            seq=number,
            t_ns=number * frames * FRAME_NS,
            dt_ns=FRAME_NS,
            elements=self.elements,
            patterns=pack(states.astype(np.int8)),
            response=response.astype(np.complex64),
            keep=np.ones(frames, dtype=np.bool_),
        )


Change = Callable[[Link, Real, Real, float], Changed]
"""Link, states (B, N), seconds since the change (B,), size → what is measured from then on."""


def _direct_path(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    return Changed(link.shown(states) - min(size, 1.0) * link.direct)


def _channel(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    """Replace a share of both paths by others, the same for a seed."""
    other = Link(1000 + int(link.cycle[0, :8] @ (1 << np.arange(8))), link.elements, link.receivers)
    power = 4.0 * float((np.abs(link.direct) ** 2).mean())
    fresh, kept = math.sqrt(power) * math.sin(size), math.cos(size)
    return Changed(kept * link.shown(states) + fresh * other.shown(states))


def _motion(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    """Turn either path, by rates of `size` and −1.4 times that, Hz."""
    turn_d = np.exp(2j * np.pi * size * time_s)[:, None, None]
    turn_s = np.exp(-2j * np.pi * 1.4 * size * time_s)[:, None, None]
    return Changed(turn_d * link.direct + turn_s * (link.shown(states) - link.direct))


def _phase(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    return Changed(np.exp(1j * size) * link.shown(states))


def _gain(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    """Lower the receiver's gain, signal and noise alike, by `size` nepers."""
    return Changed(math.exp(-size) * link.shown(states), math.exp(-size))


def _noise(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    return Changed(link.shown(states), math.exp(size))


def _interference(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    amplitude = np.ones(TONES)
    amplitude[20:22] = math.exp(size)
    return Changed(link.shown(states), amplitude)


def _timing(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    """Let the delay jump by `size` samples."""
    tones = (np.arange(FIRST, FIRST + TONES) - FFT // 2) / FFT
    return Changed(link.shown(states) * np.exp(-2j * np.pi * size * tones))


def _mismatch(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    """Show patterns one frame late; there is no size."""
    return Changed(link.shown(np.roll(states, 1, axis=0)))


def _elements(link: Link, states: Real, time_s: Real, size: float) -> Changed:
    """Let elements 3, 4 … no longer move and add nothing."""
    shown = states.copy()
    shown[:, 3 : 3 + max(round(size), 1)] = 0.0
    return Changed(link.shown(shown))


CHANGES: dict[str, tuple[Change, float]] = {
    "direct-path": (_direct_path, 1.0),
    "channel": (_channel, math.pi / 2),
    "motion": (_motion, 40.0),
    "phase": (_phase, math.pi / 2),
    "gain": (_gain, 2.0),
    "noise": (_noise, 2.0),
    "interference": (_interference, 4.0),
    "timing": (_timing, 1.5),
    "mismatch": (_mismatch, 1.0),
    "elements": (_elements, 7.0),
}
"""By kind: the change, and the largest size that makes sense."""


def information(link: Link, kind: str, size: float, frames: int) -> Real:
    """Kullback-Leibler distance of the changed frames from the unchanged, nats, a frame (frames,).

    Complex Gaussian: |Δ|² + Σ (v − 1 − ln v) with Δ the change of the mean, v that of the variance.
    """
    place = link.place
    states = link.states(frames)
    link.place = place
    changed = CHANGES[kind][0](link, states, np.arange(frames) * FRAME_NS / 1e9, size)
    moved = (np.abs(changed.response - link.shown(states)) ** 2).sum(axis=(1, 2))
    variance = np.broadcast_to(np.asarray(changed.noise) ** 2, (TONES,))
    return np.asarray(moved + link.receivers * float((variance - 1.0 - np.log(variance)).sum()))


def size_for(link: Link, kind: str, wanted: float, frames: int) -> float:
    """Size at which the frames since the change hold as much information, at most the largest that makes sense."""
    low, high = 0.0, CHANGES[kind][1]
    if information(link, kind, high, frames).sum() < wanted:
        return high
    for _ in range(40):
        middle = 0.5 * (low + high)
        if information(link, kind, middle, frames).sum() < wanted:
            low = middle
        else:
            high = middle
    return high
