"""When a refreshed pattern is worked out, and whether it is worth publishing."""

import math
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .. import panel
from ..config import Config
from ..events import Cause, Pattern
from ..panel import Limits
from ..search.budget import Budget
from ..search.channel import Channel
from ..search.flips import Climb, Effort, optimize
from ..search.one_carrier import rate_bound
from ..search.rate import promise, rate, response
from .report import Stand
from .switching import Switching

# Published patterns kept, to know what the controller shows when it names an id.
REMEMBERED = 256
# A search from many starts costs more than a climb; after the first, it is made again once in so many refreshes.
THOROUGH_EVERY = 1024
# Between them glances are taken at other starts: the distance doubles after one that found nothing, up to so many
# refreshes, and is one again after one that clearly gained, as they do while the channel moves: by this share of the
# standard deviation of the rate at least.
LEAST_APART, MOST_APART, CLEAR = 2, 16, 1.0
# Bursts after which a controller that still shows another pattern than the latest is sent it again.
PATIENCE_BURSTS = 32
# Share of the least gain that flips must promise for a search to be begun: what they bring is 0.7 to 1.5 times that.
WORTH_A_LOOK = 0.8
# Share of that below which the next refresh is passed over: what flips promise does not double from one to the next.
FAR_FROM_IT = 0.5


class Refresher:
    """The patterns published, and the choice of the next.

    Parameters
    ----------
    config : Config
    first_id : int
        Id of the first pattern that this tracker publishes.
    """

    def __init__(self, config: Config, first_id: int) -> None:
        self._config = config
        self._next_id = first_id
        self._published: dict[int, NDArray[np.int8]] = {}
        self._since_considered = 0
        self._since_thorough = 0
        self._next_thorough = 0
        self._run: int | None = None
        self._not_shown = 0
        self._switching = Switching(config.least_gain, config.switching_s)
        self._resting = False
        self._since_glance = 0
        self._glance_every = LEAST_APART

    @property
    def next_id(self) -> int:
        """Id that the next pattern will have."""
        return self._next_id

    @property
    def latest(self) -> int | None:
        """Id of the pattern published last."""
        return self._next_id - 1 if self._next_id - 1 in self._published else None

    def states(self, pattern_id: int | None) -> NDArray[np.int8] | None:
        """States of a pattern published lately; None when it is not known."""
        return self._published.get(pattern_id) if pattern_id is not None else None

    def due(self, bursts: int) -> bool:
        """Count bursts; say whether a refresh is to be considered now."""
        self._since_considered += bursts
        if self._since_considered < self._config.every_bursts and self._published:
            return False
        self._since_considered = 0
        return True

    def hear(self, run: int, told: int | None, bursts: int) -> None:
        """Take what the controller says of itself: its run, and the pattern that it shows.

        A controller that has restarted, or missed a pattern, waits for one that would otherwise never come.
        """
        if self._run is not None and run != self._run:
            self._not_shown = PATIENCE_BURSTS
        self._run = run
        if told is not None and self.latest is not None:
            self._not_shown = self._not_shown + bursts if told != self.latest else 0

    def begin_afresh(self) -> None:
        """Search thoroughly next, and often again while the estimate forms."""
        self._since_thorough = self._next_thorough = 0

    def choose(
        self,
        channel: Channel,
        cause: Cause,
        budget: Budget,
        stand: Stand,
        limits: Limits,
        variance: Callable[[NDArray[np.int8]], float],
        before: float | None = None,
    ) -> tuple[Pattern | None, int]:
        """Work out a refreshed pattern.

        Parameters
        ----------
        channel : Channel
        cause : Cause
            ``first`` and ``operator`` publish whatever comes out; the others only what gains enough, unless the
            controller has missed the latest pattern.
        budget : Budget
        stand : Stand
            The last burst that it rests on.
        limits : Limits
            What the panel cannot do, as far as is known by now.
        variance : callable
            Gives the variance of each complex delay coefficient of the response under a pattern, in units of the noise.
        before : float or None
            Rate under the pattern published last, bit/s/Hz, where it has been worked out already.

        Returns
        -------
        pattern : Pattern or None
            With `rate_low` still equal to `rate`; None when the pattern in use stays.
        steps : int
            Optimizer steps taken.
        """
        in_use = self.states(self.latest)
        effort = self._effort()
        missed = self._not_shown >= PATIENCE_BURSTS
        routine = cause is Cause.REFRESH and effort is Effort.CLIMB and not missed
        if before is None:
            before = rate(channel, in_use) if in_use is not None else 0.0
        # What a change asks for is not put off to save a switch.
        least_gain = self._switching.worth(before, stand.t_ns) if cause is Cause.REFRESH else self._config.least_gain
        if routine and in_use is not None and not self._worth_a_look(channel, in_use, least_gain):
            return None, 0
        self._resting = False
        found = optimize(channel, in_use, limits, budget, effort)
        forced = cause in (Cause.FIRST, Cause.OPERATOR) or missed
        same = in_use is not None and np.array_equal(found.states, in_use)
        gains = not same and found.rate - before >= least_gain
        if effort is Effort.GLANCE:
            # A gain far within the doubt of the estimate is found in a channel that stands still as well.
            moved = gains and found.rate - before > CLEAR * rate_spread(channel, found.states, variance(found.states))
            self._glance_every = LEAST_APART if moved else min(2 * self._glance_every, MOST_APART)
        if not forced and not gains:
            return None, found.steps
        return self._publish(channel, found, before, cause, stand), found.steps

    def adopt(self, channel: Channel, states: NDArray[np.int8], stand: Stand) -> Pattern:
        """Publish a pattern that the operator chose."""
        in_use = self.states(self.latest)
        before = rate(channel, in_use) if in_use is not None else 0.0
        chosen = Climb(states, rate(channel, states), steps=0)
        return self._publish(channel, chosen, before, Cause.OPERATOR, stand)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "next_id": self._next_id,
            "published": {str(key): panel.pack(states) for key, states in self._published.items()},
            "since_considered": self._since_considered,
            "since_thorough": self._since_thorough,
            "next_thorough": self._next_thorough,
            "run": self._run,
            "not_shown": self._not_shown,
            "resting": self._resting,
            "switching": self._switching.snapshot(),
            "since_glance": self._since_glance,
            "glance_every": self._glance_every,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._next_id = int(snapshot["next_id"])
        elements = self._config.elements
        self._published = {
            int(key): panel.unpack(np.asarray(bits, dtype=np.uint8), elements).astype(np.int8)
            for key, bits in snapshot["published"].items()
        }
        self._since_considered = int(snapshot["since_considered"])
        self._since_thorough = int(snapshot["since_thorough"])
        self._next_thorough = int(snapshot["next_thorough"])
        self._run = snapshot["run"]
        self._not_shown = int(snapshot["not_shown"])
        self._resting = bool(snapshot["resting"])
        self._switching.load(snapshot["switching"])
        self._since_glance = int(snapshot["since_glance"])
        self._glance_every = int(snapshot["glance_every"])

    def _effort(self) -> Effort:
        """Say how far the search that is due goes."""
        if self._thorough():
            return Effort.THOROUGH
        return Effort.GLANCE if self._glance() else Effort.CLIMB

    def _thorough(self) -> bool:
        """Search thoroughly at refreshes 1, 2, 4, 8 … after a fresh start, then at regular distances."""
        self._since_thorough += 1
        if self._since_thorough < self._next_thorough:
            return False
        self._next_thorough = min(max(2 * self._next_thorough, 1), THOROUGH_EVERY)
        self._since_thorough = 0
        return True

    def _worth_a_look(self, channel: Channel, in_use: NDArray[np.int8], least_gain: float) -> bool:
        """Whether flips promise enough for a search to be begun."""
        if self._resting:
            self._resting = False
            return False
        least = WORTH_A_LOOK * least_gain
        promised = promise(channel, in_use)
        self._resting = promised < FAR_FROM_IT * least
        return promised >= least

    def _glance(self) -> bool:
        """Look at other starts once in so many refreshes."""
        self._since_glance += 1
        if self._since_glance < self._glance_every:
            return False
        self._since_glance = 0
        return True

    def _publish(self, channel: Channel, found: Climb, before: float, cause: Cause, stand: Stand) -> Pattern:
        pattern = Pattern(
            id=self._next_id,
            run=stand.run,
            seq=stand.seq,
            t_ns=stand.t_ns,
            states=found.states,
            rate=found.rate,
            rate_low=found.rate,
            rate_before=before,
            rate_bound=max(rate_bound(channel), found.rate),
            cause=cause,
            steps=found.steps,
        )
        self._published[pattern.id] = found.states
        self._published.pop(pattern.id - REMEMBERED, None)
        self._next_id += 1
        self._not_shown = 0
        self._switching.published(stand.t_ns)
        self._resting = True
        return pattern


def rate_spread(channel: Channel, states: NDArray[np.int8], variance: float) -> float:
    """Compute the standard deviation of the rate under a pattern, to first order.

    Parameters
    ----------
    channel : Channel
    states : ndarray, shape (N,)
    variance : float
        Of each complex delay coefficient of the response, in units of the noise.
    """
    tones = response(channel, states)
    weight = tones.conj() / (1.0 + np.abs(tones) ** 2)
    slope = (weight @ channel.basis) * (2.0 / (math.log(2.0) * tones.size))
    # A complex error of variance v moves the rate through one of its two real dimensions: v / 2.
    return math.sqrt(0.5 * variance * float((np.abs(slope) ** 2).sum()))
