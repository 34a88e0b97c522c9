"""A testbed: sounds burst after burst, takes patterns, and knows what the tracker can only estimate.

Pure: no socket, no clock; times come from outside.
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.channel import Channel
from tracker.engine.panel import pack
from tracker.simulation.config import SceneConfig
from tracker.simulation.known import known_channel
from tracker.simulation.scene import Scene
from tracker.simulation.sounding import Sounder, SoundingConfig


@dataclass(frozen=True, slots=True)
class TestbedConfig:
    """A scene and how it is sounded.

    Parameters
    ----------
    scene : SceneConfig
    sounding : SoundingConfig
    frames : int
        Frames a burst.
    frame_ns : int
        Spacing of the frames in a burst, ns.
    """

    __test__ = False  # the name is not that of a test

    scene: SceneConfig
    sounding: SoundingConfig = field(default_factory=SoundingConfig)
    frames: int = 64
    frame_ns: int = 35_714


@dataclass(frozen=True, slots=True, eq=False)
class Report:
    """What is true at a time.

    Parameters
    ----------
    t_ns : int
    pattern_id : int or None
        Id of the pattern in force; None before the first.
    states : ndarray of int8, shape (N,)
        The pattern in force.
    rate : float
        Its rate with the channel known exactly, bit/s/Hz.
    channel : Channel
        The channel itself, for `best.best_pattern`.
    happening : str or None
        What the scene does, in words.
    """

    t_ns: int
    pattern_id: int | None
    states: NDArray[np.int8]
    rate: float
    channel: Channel
    happening: str | None


class Testbed:
    """Makes bursts of a scene.

    Parameters
    ----------
    config : TestbedConfig
    seed : int
        All chance comes from it; the same calls give the same bursts bit by bit.
    run : int
        Run that the bursts carry.
    start_ns : int
        Time that is zero of the scene, ns since the Unix epoch.
    """

    __test__ = False

    def __init__(self, config: TestbedConfig, seed: int, run: int = 1, start_ns: int = 0) -> None:
        self.config = config
        self.scene = Scene(config.scene, seed)
        self._sounder = Sounder(config.sounding, config.scene.elements, seed)
        self._run, self._start_ns = run, start_ns
        self._seq = 0
        self._pattern_id: int | None = None
        self._states = np.ones(config.scene.elements, dtype=np.int8)

    @property
    def burst_ns(self) -> int:
        """Time that a burst takes, ns."""
        return self.config.frames * self.config.frame_ns

    @property
    def pattern_id(self) -> int | None:
        """Id of the pattern in force; None before the first."""
        return self._pattern_id

    @property
    def states(self) -> NDArray[np.int8]:
        """The pattern in force, shape (N,)."""
        return self._states

    def apply(self, pattern_id: int | None, states: NDArray[np.int8]) -> None:
        """Put a pattern in force, from the next burst on.

        Raises
        ------
        ValueError
            When it is not of N elements.
        """
        if states.shape != self._states.shape:
            raise ValueError(f"a pattern of {self._states.size} elements is needed, not of shape {states.shape}")
        self._pattern_id = pattern_id
        self._states = np.where(states > 0, 1, -1).astype(np.int8)

    def next_burst(self, t_ns: int) -> Burst:
        """Sound the next burst.

        Parameters
        ----------
        t_ns : int
            Time of its first frame, ns since the Unix epoch.
        """
        config = self.config
        patterns = self._sounder.take(config.frames, self._states)
        since_ns = t_ns - self._start_ns + config.frame_ns * np.arange(config.frames)
        response = self.scene.frames(since_ns / 1e9, patterns)
        burst = Burst(
            run=self._run,
            seq=self._seq,
            t_ns=t_ns,
            dt_ns=config.frame_ns,
            elements=config.scene.elements,
            patterns=pack(patterns),
            response=response,
            keep=np.ones(config.frames, dtype=np.bool_),
            pattern_id=self._pattern_id,
        )
        self._seq += 1
        return burst

    def skip(self, bursts: int = 1) -> None:
        """Lose bursts: their numbers are never used."""
        self._seq += bursts

    def report(self, t_ns: int) -> Report:
        """Say what is true at a time."""
        t_s = (t_ns - self._start_ns) / 1e9
        direct, surface = self.scene.truth(t_s)
        noise_power = self.scene.noise_at(t_s)
        response = direct + np.tensordot(self._states.astype(np.float64), surface, axes=1)
        rate = float(np.mean(np.log2(1 + np.abs(response) ** 2 / noise_power[:, None])))
        channel = known_channel(direct, surface, noise_power)
        return Report(t_ns, self._pattern_id, self._states, rate, channel, self.scene.happening(t_s))
