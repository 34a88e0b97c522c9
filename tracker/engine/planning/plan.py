"""The sounding plan: which patterns the controller sounds next, and how many of its frames.

============================  ===========================================  ==========================================
when                          what is sounded                              one frame in
============================  ===========================================  ==========================================
no lock, or not tracking      rows of a sweep, and references often        as few as allowed
tracking or held              rows of a sweep, or patterns near that in    what `share` says is best
                              use where frames may be in service
============================  ===========================================  ==========================================

*References*, frames that sound the pattern in use itself, come often enough for what needs them: at least one a plan,
so that the rate is measured; two where noise is measured between repeats; and while an offset is searched so many that
it is told apart from those a turn away. A plan lasts one burst. It is made anew when it has been sounded, when
the pattern in use has changed and when another way to sound has become better.

How fast the channel changes, over what the time constant in use says, comes from the innovations: κ, the errors of
prediction over those expected. The part 1 − h of an expected error is noise of past frames, the rest is change (see
`share`). It is expected alike on all delays, but change is there only where the channel is: the part c of what is
expected, by how its energy lies on the delays. So κ = 1 − h + h c ρ tells the pace ρ.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..config import Config, PlanConfig
from ..estimation.frames import Fit
from ..estimation.noise import LEAST_OUTSIDE
from ..events import Mode, Plan
from ..oscillators.following import MOST_OFFSET_HZ, Lock
from ..oscillators.phases import FULL_MOTION_S
from ..panel import pack
from ..publishing.report import Stand
from ..search.channel import Channel
from ..search.rate import response
from .share import (
    Bounds,
    Choice,
    Standing,
    amplitude_left,
    choose,
    known,
    lag,
    near_blocks,
    net_rate,
    rate_curve,
)
from .sounding import Near, Sweep, groups_of

# Distance of references while an offset is searched or a first noise estimate made, frames.
SEARCH_EVERY = 8
# Frames over which prediction errors are averaged.
MEMORY_FRAMES = 2048
# Pace of the change within which it is believed: a factor of 4 as between the filters of a bank, for what is slow; what
# makes the channel seem faster still is something else.
LEAST_PACE, MOST_PACE = 0.25, 16.0
# In place of one near pattern in so many, that in use is turned as a whole, if the link bears it: a link by the surface
# does. The sum with the pattern itself gives the direct path (common practice), which patterns that are all much alike
# hardly tell from the surface.
WHOLE_EVERY = 32
# Rows of a sweep that the mean square of the regressors is taken over.
SAMPLE = 64


@dataclass(frozen=True, slots=True, eq=False)
class Situation:
    """What a plan rests on.

    Parameters
    ----------
    mode : Mode
    lock : Lock
    in_use : ndarray of int8, shape (N,), or None
        The pattern published last; None before the first.
    channel : Channel
    prior, variance : float
        Variance of a surface coefficient before any data and now, in units of the noise.
    time_constant_s : float
        Of forgetting.
    fit : Fit
        How the last block fitted.
    frames : int
        Frames of the last block.
    """

    mode: Mode
    lock: Lock
    in_use: NDArray[np.int8] | None
    channel: Channel
    prior: float
    variance: float
    time_constant_s: float
    fit: Fit
    frames: int

    @property
    def settled(self) -> bool:
        """Whether the estimate can be built on."""
        return self.lock is not Lock.LOST and self.mode in (Mode.TRACKING, Mode.HELD)


class Planner:
    """Plans the sounding of one link.

    Parameters
    ----------
    config : Config
    plan : PlanConfig
    """

    def __init__(self, config: Config, plan: PlanConfig) -> None:
        self._config, self._plan = config, plan
        groups = groups_of(config.aperture, config.limits)
        self._sweep, self._near = Sweep(groups), Near(groups)
        self._driven = groups.held == 0
        sample = self._sweep.take(0, min(self._sweep.length, SAMPLE)).astype(np.float64)
        self._information = float((np.abs(config.aperture.regressors(sample)[:, 1:]) ** 2).mean())
        self._bounds = _bounds(config, plan, groups.first.size)
        self._blocks = [0, *near_blocks(groups.first.size)] if plan.in_service else [0]
        self._choice: Choice | None = None
        self._in_use = b""  # packed
        self._frames = 0  # of the latest plan
        self._left = 0  # of them, frames that were not sounded yet
        self._swept = self._neared = 0
        self._found = self._expected = 0.0  # errors beyond the noise
        self._time_constant_s = 0.0

    @property
    def choice(self) -> Choice | None:
        """How is sounded; None before the first plan."""
        return self._choice

    def advance(self, situation: Situation, stand: Stand) -> Plan | None:
        """Take in a block; return a plan when one is due."""
        self._left -= situation.frames
        self._judge(situation)
        choice, references = self._choose(situation)
        in_use = situation.in_use
        packed = pack(in_use).tobytes() if in_use is not None else b""
        if self._left > 0 and choice == self._choice and packed == self._in_use:
            return None
        self._choice, self._in_use = choice, packed
        self._frames = self._left = self._bounds.frames(choice.every)
        reference = np.arange(self._frames) % -(-self._frames // references) == 0
        patterns = self._patterns(situation, choice, reference)
        rates = _rates(situation.channel, patterns)
        served = np.zeros_like(reference)
        if choice.block:
            served = ~reference & (rates >= self._plan.least_service * rates[0])
        net = net_rate(float(rates[0]), choice.every, float(rates[served].sum()) / self._frames)
        return Plan(
            run=stand.run,
            seq=stand.seq,
            t_ns=stand.t_ns,
            elements=self._config.elements,
            patterns=pack(patterns),
            reference=0,
            every=choice.every,
            in_service=served,
            net_rate=net if situation.settled and in_use is not None else None,
        )

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        choice = self._choice
        return {
            "choice": [choice.every, choice.block] if choice is not None else None,
            "in_use": self._in_use,
            "frames": self._frames,
            "left": self._left,
            "swept": self._swept,
            "neared": self._neared,
            "found": self._found,
            "expected": self._expected,
            "time_constant_s": self._time_constant_s,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        choice = snapshot["choice"]
        self._choice = Choice(int(choice[0]), int(choice[1])) if choice is not None else None
        self._in_use = bytes(snapshot["in_use"])
        self._frames, self._left = int(snapshot["frames"]), int(snapshot["left"])
        self._swept, self._neared = int(snapshot["swept"]), int(snapshot["neared"])
        self._found, self._expected = float(snapshot["found"]), float(snapshot["expected"])
        self._time_constant_s = float(snapshot["time_constant_s"])

    def _judge(self, situation: Situation) -> None:
        """Average how large prediction errors are, and how large they were expected to be."""
        fit, settled = situation.fit, situation.mode is Mode.TRACKING
        if not settled or situation.time_constant_s != self._time_constant_s:
            self._found = self._expected = 0.0
            self._time_constant_s = situation.time_constant_s
        ratio = fit.mean_ratio
        if not settled or ratio <= 0:
            return
        keep = math.exp(-situation.frames / MEMORY_FRAMES)
        # An error has variance 1 by noise and the rest by the estimate; `ratio` is the error over what was expected.
        self._found = keep * self._found + (1.0 - keep) * (fit.error - 1.0)
        self._expected = keep * self._expected + (1.0 - keep) * (fit.error / ratio - 1.0)

    def _pace(self, situation: Situation) -> float:
        """How fast the channel changes over what the filter expects, ρ."""
        if self._expected <= 0:
            return 1.0
        energy = (np.abs(situation.channel.surface) ** 2).sum(axis=0)
        lagging = lag(situation.variance / situation.prior)
        # Mean energy over the mean that the prior is, each delay weighted by its energy.
        spread = float(energy.sum() ** 2 / (energy.size * max(float((energy**2).sum()), 1e-300)))
        pace = (self._found / self._expected - (1.0 - lagging)) / (lagging * max(spread, 1e-3))
        return min(max(pace, LEAST_PACE), MOST_PACE)

    def _choose(self, situation: Situation) -> tuple[Choice, int]:
        """Choose how to sound; also say how many references a plan has."""
        in_use = situation.in_use
        if in_use is None or not situation.settled:
            choice = Choice(self._bounds.least_every, 0)
            return choice, self._search(choice)
        searching = situation.lock is Lock.SEARCHING
        pace, unknown = self._pace(situation), situation.variance / situation.prior
        whole = response(situation.channel, in_use)
        direct = situation.channel.direct @ situation.channel.basis.T
        standing = Standing(
            rates=rate_curve(direct, whole - direct),
            amplitude=amplitude_left(known(unknown, pace)),
            least_surface=self._least_surface(situation.prior, direct),
            prior=situation.prior,
            information=self._information,
            time_constant_s=situation.time_constant_s,
            pace=pace,
        )
        blocks = self._blocks if not searching else [0]
        references = 1 if self._config.tones - self._config.delay.shape[1] >= LEAST_OUTSIDE else 2
        choice = choose(standing, self._bounds, references, blocks, self._choice)
        return choice, max(references, self._search(choice)) if searching else references

    def _least_surface(self, prior: float, direct: NDArray[np.complex128]) -> float:
        """Power that a pattern could bring by the surface, at least, over that of direct path and noise."""
        # Mean over the tones when all energy lies on one delay, each element adding E|cos| = 2/π of its amplitude.
        amplitude = 2.0 / math.pi * self._bounds.groups * math.sqrt(self._information * prior / self._config.tones)
        return amplitude**2 / (1.0 + float((np.abs(direct) ** 2).mean()))

    def _search(self, choice: Choice) -> int:
        """Count the references of a plan while an offset or the noise is still to be found."""
        every = SEARCH_EVERY
        if self._config.follow_phase:
            # Offsets are told apart up to half a turn from one reference to the next.
            apart = int(self._plan.frames_per_s / (2.0 * MOST_OFFSET_HZ) / choice.every)
            every = min(max(apart, 2), SEARCH_EVERY)
        return -(-self._bounds.frames(choice.every) // every)

    def _patterns(self, situation: Situation, choice: Choice, reference: NDArray[np.bool_]) -> NDArray[np.int8]:
        """Make the patterns of a plan, shape (P, N)."""
        others = np.flatnonzero(~reference)
        in_use = situation.in_use if situation.in_use is not None else self._sweep.take(0, 1)[0]
        patterns = np.repeat(in_use[None, :], reference.size, axis=0)
        if not choice.block:
            patterns[others] = self._sweep.take(self._swept, others.size)
            self._swept = (self._swept + others.size) % self._sweep.length
            return patterns
        turned = self._near.take(choice.block, self._neared, others.size)
        self._neared += others.size
        whole = np.where(self._driven, -in_use, in_use)
        rates = _rates(situation.channel, np.stack([in_use, whole]))
        if rates[1] >= self._plan.least_service * rates[0]:
            turned[::WHOLE_EVERY] = self._driven
        patterns[others] = np.where(turned, -in_use, in_use)
        return patterns


def _bounds(config: Config, plan: PlanConfig, groups: int) -> Bounds:
    most_every = int(1.0 / plan.least_share)
    if config.follow_phase:
        # Motion is followed in full only when frames are close.
        most_every = min(most_every, int(FULL_MOTION_S * plan.frames_per_s))
    least_every = math.ceil(1.0 / plan.most_share)
    return Bounds(
        frames_per_s=plan.frames_per_s,
        least_every=least_every,
        most_every=max(most_every, least_every),
        most_frames=plan.most_frames,
        burst_s=plan.burst_s,
        groups=groups,
        least_service=plan.least_service,
    )


def _rates(channel: Channel, patterns: NDArray[np.int8]) -> NDArray[np.float64]:
    """Rates of patterns (B, N), shape (B,)."""
    flat = channel.surface.reshape(channel.elements, -1)
    reflected = (patterns.astype(np.float64) @ flat.view(np.float64)).view(np.complex128)
    heard = (channel.direct + reflected.reshape(-1, *channel.direct.shape)) @ channel.basis.T
    return np.asarray(np.log2(1.0 + heard.real**2 + heard.imag**2).mean(axis=(1, 2)))
