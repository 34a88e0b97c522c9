"""A testbed: sounds burst after burst, takes patterns and plans, and knows what the tracker can only estimate.

Frames come in bursts, with pauses between them, or, when it obeys plans, as a stream that never pauses: at the even
distances that the plan says a frame is sounded, all others carry payload under the pattern in force. Only the frames
sounded reach the tracker, one burst for each time that the plan is gone through.

Pure: no socket, no clock; times come from outside.
"""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.events import Plan
from tracker.engine.panel import pack, unpack
from tracker.engine.planning.share import net_rate
from tracker.engine.search.channel import Channel
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
        Spacing of the frames in a burst, or in the stream, ns.
    obeys : bool
        Whether frames are a stream and plans are obeyed; until the first plan every frame is sounded, in bursts of
        `frames`.
    least_service : float
        Part of the rate in force below which payload of a frame in service is lost: it is sent at a rate that it then
        cannot have.
    """

    __test__ = False  # the name is not that of a test

    scene: SceneConfig
    sounding: SoundingConfig = field(default_factory=SoundingConfig)
    frames: int = 64
    frame_ns: int = 35_714
    obeys: bool = False
    least_service: float = 0.8


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
    net : float or None
        Rate of payload over all frames of the stream, bit/s/Hz; None when there is no stream.
    """

    t_ns: int
    pattern_id: int | None
    states: NDArray[np.int8]
    rate: float
    channel: Channel
    happening: str | None
    net: float | None = None


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
        self._plan: Plan | None = None
        self._states = np.ones(config.scene.elements, dtype=np.int8)

    @property
    def burst_ns(self) -> int:
        """Time that the next burst takes, ns."""
        frames = self.config.frames if self._plan is None else len(self._plan.patterns)
        return frames * self._spacing_ns

    @property
    def plan(self) -> Plan | None:
        """The plan in force; None before the first, or when plans are not obeyed."""
        return self._plan

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

    def obey(self, plan: Plan | None) -> None:
        """Put a plan in force, from the next burst on; a testbed that does not obey takes no notice.

        Raises
        ------
        ValueError
            When it is not of N elements.
        """
        if plan is not None and plan.elements != self._states.size:
            raise ValueError(f"a plan for {self._states.size} elements is needed, not for {plan.elements}")
        if self.config.obeys:
            self._plan = plan

    def next_burst(self, t_ns: int) -> Burst:
        """Sound the next burst.

        Parameters
        ----------
        t_ns : int
            Time of its first frame, ns since the Unix epoch.
        """
        config = self.config
        if self._plan is None:
            patterns = self._sounder.take(config.frames, self._states)
        else:
            patterns = unpack(self._plan.patterns, config.scene.elements).astype(np.int8)
        response = self._heard(t_ns, patterns)
        burst = Burst(
            run=self._run,
            seq=self._seq,
            t_ns=t_ns,
            dt_ns=self._spacing_ns,
            elements=config.scene.elements,
            patterns=pack(patterns),
            response=response,
            keep=np.ones(len(patterns), dtype=np.bool_),
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

        def rates(patterns: NDArray[np.generic]) -> NDArray[np.float64]:
            response = direct + np.tensordot(patterns.astype(np.float64), surface, axes=1)
            snr = np.abs(response) ** 2 / noise_power[:, None]
            return np.asarray(np.mean(np.log2(1 + snr), axis=(1, 2)))

        rate = float(rates(self._states[None])[0])
        net = self._net(rate, rates) if self.config.obeys else None
        channel = known_channel(direct, surface, noise_power)
        return Report(t_ns, self._pattern_id, self._states, rate, channel, self.scene.happening(t_s), net)

    @property
    def _spacing_ns(self) -> int:
        """From one frame sounded to the next, ns."""
        return self.config.frame_ns * (1 if self._plan is None else self._plan.every)

    def _heard(self, t_ns: int, patterns: NDArray[np.int8]) -> NDArray[np.complex64]:
        """Measure the frames of a burst, shape (B, R, K)."""
        spacing_ns, picked = self._spacing_ns, 1
        if spacing_ns > self.config.frame_ns and self.config.scene.impairments.late:
            # A late panel shows what the frame before was told, and that was payload.
            spacing_ns, picked = self.config.frame_ns, spacing_ns // self.config.frame_ns
            stream = np.repeat(self._states[None], picked * len(patterns), axis=0)
            stream[::picked] = patterns
            patterns = stream
        since_ns = t_ns - self._start_ns + spacing_ns * np.arange(len(patterns))
        return self.scene.frames(since_ns / 1e9, patterns)[::picked]

    def _net(self, rate: float, rates: Callable[[NDArray[np.generic]], NDArray[np.float64]]) -> float:
        """Rate of payload over all frames: those of the pattern in force, and those sounded in service."""
        plan = self._plan
        if plan is None:
            return 0.0  # every frame is sounded
        served = plan.patterns[np.flatnonzero(plan.in_service)]
        near = rates(unpack(served, plan.elements)) if len(served) else np.zeros(0)
        kept = near[near >= self.config.least_service * rate]
        return net_rate(rate, plan.every, float(kept.sum()) / len(plan.patterns))
