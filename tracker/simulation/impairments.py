"""What real hardware adds: oscillators, clocks, gain, interference, and a panel that does not obey.

Receiver noise is white and Gaussian, `Scene` adds it. Everything here is a plain function of time once the seed is
given; only noise and interference depend on what was drawn before.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tracker.simulation.schedule import NEVER, Step, stepped


@dataclass(frozen=True, slots=True)
class Oscillator:
    """A terminal's free-running oscillator against the mast's.

    Parameters
    ----------
    offset_hz : float
        Offset at time zero.
    linewidth_hz : float
        Phase noise: the phase walks at random, its variance growing by 2π · linewidth a second (Lorentzian line).
    wander_hz : float
        Standard deviation of the random walk of the offset after one second.
    """

    offset_hz: float = 0.0
    linewidth_hz: float = 0.0
    wander_hz: float = 0.0


@dataclass(frozen=True, slots=True)
class Clock:
    """A terminal's sampling clock: delay common to all tones.

    Parameters
    ----------
    drift_ppm : float
        Delay gathered, microseconds a second.
    steps : tuple of Step
        Jumps of the delay, samples.
    """

    drift_ppm: float = 0.0
    steps: tuple[Step, ...] = ()

    def delay_s(self, t_s: NDArray[np.float64], sample_s: float) -> NDArray[np.float64]:
        """Delay at times (B,), s."""
        return self.drift_ppm * 1e-6 * t_s + stepped(self.steps, t_s) * sample_s


@dataclass(frozen=True, slots=True)
class Interference:
    """Narrow-band interference: Gaussian, independent from frame to frame, at every receiver.

    Parameters
    ----------
    first, count : int
        Pilot tones hit, counted within the pilot tones.
    over_noise_db : float
        Power on a tone over the noise power on it.
    from_s, until_s : float
        s.
    """

    first: int
    count: int
    over_noise_db: float = 10.0
    from_s: float = 0.0
    until_s: float = NEVER


@dataclass(frozen=True, slots=True)
class Fault:
    """An element that does not do as told.

    Parameters
    ----------
    element : int
    kind : {"stuck+", "stuck-", "weak", "swapped"}
        Shows +1 or −1 whatever it is told; follows with `strength` only; follows `other`'s bit, as `other` does its.
    from_s : float
        s.
    strength : float
        For "weak": how much of the full swing is left.
    other : int
        For "swapped".
    """

    element: int
    kind: Literal["stuck+", "stuck-", "weak", "swapped"]
    from_s: float = 0.0
    strength: float = 0.3
    other: int = -1


@dataclass(frozen=True, slots=True)
class Late:
    """The panel shows the pattern that it was told some frames ago.

    Parameters
    ----------
    frames : int
        How many.
    from_s, until_s : float
        s.
    """

    frames: int = 1
    from_s: float = 0.0
    until_s: float = NEVER


@dataclass(frozen=True, slots=True)
class Impairments:
    """Impairments of a scene that belong to no single terminal.

    Parameters
    ----------
    receiver_gain_db : tuple of Step
        Steps of the receivers' gain, dB: signal and noise alike.
    transmit_power_db : tuple of Step
        Steps of the transmitted power, dB: signal only.
    noise_db : tuple of Step
        Steps of the noise power, dB.
    interference : tuple of Interference
    faults : tuple of Fault
    late : tuple of Late
    """

    receiver_gain_db: tuple[Step, ...] = ()
    transmit_power_db: tuple[Step, ...] = ()
    noise_db: tuple[Step, ...] = ()
    interference: tuple[Interference, ...] = ()
    faults: tuple[Fault, ...] = ()
    late: tuple[Late, ...] = ()


class Wander:
    """Phase of a free-running oscillator, the same at a time whatever was asked before.

    The walk is drawn on a grid of `STEP_S` in chunks, each from its own seed, and is linear between grid points.

    Parameters
    ----------
    config : Oscillator
    seed : sequence of int
    """

    STEP_S = 2e-5
    CHUNK = 8192
    KEPT = 4

    def __init__(self, config: Oscillator, seed: Sequence[int]) -> None:
        self._config, self._seed = config, tuple(seed)
        self._starts = [(0.0, config.offset_hz)]
        self._chunks: dict[int, NDArray[np.float64]] = {}

    def _chunk(self, index: int) -> NDArray[np.float64]:
        """Phases at the grid points of a chunk, its end included, in turns."""
        while len(self._starts) <= index:
            self._draw(len(self._starts) - 1)
        if index not in self._chunks:
            self._draw(index)
        return self._chunks[index]

    def _draw(self, index: int) -> None:
        phase, offset_hz = self._starts[index]
        normal = np.random.default_rng([*self._seed, index]).standard_normal((2, self.CHUNK))
        offsets_hz = offset_hz + np.cumsum(self._config.wander_hz * np.sqrt(self.STEP_S) * normal[0])
        # variance 2π·linewidth·Δt in rad² is linewidth·Δt / 2π in turns²
        jitter = np.sqrt(self._config.linewidth_hz * self.STEP_S / (2 * np.pi)) * normal[1]
        phases = phase + np.concatenate(([0.0], np.cumsum(offsets_hz * self.STEP_S + jitter)))
        if len(self._starts) == index + 1:
            self._starts.append((float(phases[-1]), float(offsets_hz[-1])))
        self._chunks[index] = phases
        while len(self._chunks) > self.KEPT:
            del self._chunks[next(iter(self._chunks))]

    def turns(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Phase at times (B,) ≥ 0 s, in turns."""
        if self._config.linewidth_hz == 0 and self._config.wander_hz == 0:
            return self._config.offset_hz * t_s
        steps = t_s / self.STEP_S
        whole = np.floor(steps).astype(np.int64)
        chunks, places = np.divmod(whole, self.CHUNK)
        result = np.empty(t_s.size)
        for index in np.unique(chunks):
            here = chunks == index
            phases = self._chunk(int(index))
            part = steps[here] - whole[here]
            result[here] = phases[places[here]] * (1 - part) + phases[places[here] + 1] * part
        return result


class Obedience:
    """What the panel shows for what it is told; remembers what it was told before.

    Parameters
    ----------
    faults : sequence of Fault
    late : sequence of Late
    elements : int
        N.

    Raises
    ------
    ValueError
        When a fault names an element that does not exist, or two faults the same one.
    """

    def __init__(self, faults: Sequence[Fault], late: Sequence[Late], elements: int) -> None:
        named = [one.element for one in faults] + [one.other for one in faults if one.kind == "swapped"]
        for element in named:
            if not 0 <= element < elements:
                raise ValueError(f"faults: element {element} does not exist, the panel has 0 to {elements - 1}")
        if len(set(named)) != len(named):
            raise ValueError("faults: an element may have one fault only")
        self._faults, self._late = faults, late
        self._depth = max((one.frames for one in late), default=0)
        self._told: NDArray[np.float32] | None = None

    def show(self, t_s: NDArray[np.float64], told: NDArray[np.float32]) -> NDArray[np.float32]:
        """States shown at times (B,) for states told (B, N), frame after frame; a weak element shows less than 1."""
        shown = self._delay(t_s, told) if self._depth else told
        active = [fault for fault in self._faults if fault.from_s <= t_s[-1]]
        if not active:
            return shown
        obeyed, shown = shown, shown.copy()
        for fault in active:
            rows, element = t_s >= fault.from_s, fault.element
            if fault.kind == "swapped":
                shown[rows, element], shown[rows, fault.other] = obeyed[rows, fault.other], obeyed[rows, element]
            elif fault.kind == "weak":
                shown[rows, element] = fault.strength * obeyed[rows, element]
            else:
                shown[rows, element] = 1.0 if fault.kind == "stuck+" else -1.0
        return shown

    def _delay(self, t_s: NDArray[np.float64], told: NDArray[np.float32]) -> NDArray[np.float32]:
        before = np.repeat(told[:1], self._depth, axis=0) if self._told is None else self._told
        history = np.concatenate([before, told])
        self._told = history[-self._depth :]
        shown = told
        for one in self._late:
            rows = (t_s >= one.from_s) & (t_s < one.until_s)
            delayed = history[self._depth - one.frames : self._depth - one.frames + told.shape[0]]
            shown = np.where(rows[:, None], delayed, shown)
        return shown

    def seen_as_told(
        self, t_s: float, direct: NDArray[np.complex128], surface: NDArray[np.complex128]
    ) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        """Channel as a function of the states told, faults included (being late is left out).

        Parameters
        ----------
        t_s : float
        direct : ndarray, shape (R, K)
        surface : ndarray, shape (N, R, K)

        Returns
        -------
        direct, surface : as given
        """
        active = [fault for fault in self._faults if fault.from_s <= t_s]
        if not active:
            return direct, surface
        direct, shown, surface = direct.copy(), surface, surface.copy()
        for fault in active:
            element = fault.element
            if fault.kind == "swapped":
                surface[element], surface[fault.other] = shown[fault.other], shown[element]
            elif fault.kind == "weak":
                surface[element] = fault.strength * shown[element]
            else:
                direct += shown[element] if fault.kind == "stuck+" else -shown[element]
                surface[element] = 0.0
        return direct, surface
