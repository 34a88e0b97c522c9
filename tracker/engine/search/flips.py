"""The optimizer: the pattern with the best rate that can be found within a budget.

1. *Survey*: patterns aligned with many directions are worked out in batches, and polished (`starts`).
2. *Climb* from the best few that differ (`ascent`).
3. *Waves*: align with directions scattered about the slope at the best pattern, polish, climb from the best; go on
   until several waves in a row bring nothing.
4. *Finish*: climb once more from the best, pairs of lines included.

With less `Effort` all but the last is left out: the climb begins at the pattern in use. Every batch and every step of
a climb is one step of the budget, which is asked before each and nowhere else (`budget`).
"""

import enum
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from ..panel import Limits
from .allowance import Allowance
from .ascent import ROUNDING, Ascent
from .budget import Budget, Meter
from .channel import Channel
from .lines import lines_of
from .one_carrier import one_carrier_optimum
from .rate import rate
from .realform import Real, RealForm
from .starts import (
    Batch,
    align,
    assess,
    delay_strength,
    either_sign,
    polish,
    rate_slope,
    spread_directions,
    together,
    tone_directions,
)

SPREAD = 64
"""Directions of the survey that are spread over all phases."""
TONES = 16
"""Directions of the survey that serve single tones."""
PHASES = 2
"""Phases of each of these over half a turn."""
KEPT = 32
"""Patterns of the survey that are polished on."""
ROUNDS = 3
"""Rounds of polishing."""
GLANCED, GLANCES = 16, 2
"""Patterns of a glance, and rounds of polishing."""
CLIMBED = 8
"""Patterns of the survey that are climbed from."""
WAVE = 16
"""Patterns of a wave."""
SCATTER = 1.5
"""How far the directions of a wave lie about the slope, in lengths of the slope."""
PATIENCE = 6
"""Waves in a row without gain after which the search ends."""
ALIKE = 0.98
"""Correlation above which two patterns lead to the same summit, as a rule."""
WORK = 1 << 23
"""Multiplications that a batch takes, about; it bounds how long a step lasts."""


class Effort(enum.Enum):
    """How far a search goes."""

    CLIMB = enum.auto()
    """Climb from the pattern in use alone (if there is none, from the best of one batch of starts)."""
    GLANCE = enum.auto()
    """Climb from the best of one batch of starts besides, polished: while the channel moves, the summit that the
    pattern in use sits on sinks below others."""
    THOROUGH = enum.auto()
    """All of it."""


@dataclass(frozen=True, slots=True, eq=False)
class Climb:
    """What the optimizer found.

    Parameters
    ----------
    states : ndarray of int8, shape (N,)
        States +1 and −1, within the limits of the panel.
    rate : float
        Rate of this pattern, bit/s/Hz.
    steps : int
        Steps taken. The same call with a budget of so many steps gives the same result, bit by bit.
    """

    states: NDArray[np.int8]
    rate: float
    steps: int


def optimize(
    channel: Channel,
    in_use: NDArray[np.generic] | None,
    limits: Limits,
    budget: Budget,
    effort: Effort,
) -> Climb:
    """Look for the pattern with the best rate.

    Parameters
    ----------
    channel : Channel
    in_use : ndarray, shape (N,), or None
        Pattern in use. If it breaks a limit, it is repaired first: stuck elements take the state that they are
        stuck in, tied ones the state that most of them show.
    limits : Limits
        `most_changes` counts elements that change against `in_use`, those that are repaired because they are tied
        included, those that are stuck not; it does not apply when `in_use` is None.
    budget : Budget
        Asked before each step; when it is spent, the best pattern so far is returned.
    effort : Effort

    Returns
    -------
    Climb
        Never below the pattern in use, repaired. A function of the arguments and of the step at which the budget
        was spent, alone.

    Raises
    ------
    ValueError
        The channel is not finite; the limits name an element that does not exist, or contradict themselves.
    """
    lines = lines_of(limits, channel.elements)
    form = RealForm(channel.basis, *lines.join(channel))
    allowance = None if in_use is None else Allowance(lines, in_use, limits.most_changes)
    if not np.isfinite(form.energy.sum() + form.direct @ form.direct):
        raise ValueError("the channel holds NaN, infinity or numbers too large to square")
    search = _Search(form, allowance, Meter(budget))
    if form.lines:
        search.run(effort)
    pattern = lines.spread(search.states)
    return Climb(pattern, rate(channel, pattern), search.meter.steps)


class _Search:
    """The best pattern so far, and the ways to a better one."""

    def __init__(self, form: RealForm, allowance: Allowance | None, meter: Meter) -> None:
        self._form = form
        self._reach = allowance if allowance is not None and allowance.limited else None
        self.meter = meter
        self.states: Real = np.empty(0) if allowance is None else allowance.base
        self._value = -np.inf
        self._drawn = 0
        batch = min(64, WORK // (form.width * (form.lines + form.tones)))
        # Staying within an allowance costs several times the products.
        self._batch = max(8, batch if self._reach is None else batch // 4)

    @cached_property
    def _rough(self) -> RealForm:
        """The channel in single precision, to choose where to climb from."""
        return self._form.single()

    @cached_property
    def _strength(self) -> Real:
        return delay_strength(self._rough)

    def run(self, effort: Effort) -> None:
        """Search until nothing more is found or the budget is spent."""
        form = self._form
        in_use = self.states
        if in_use.size and effort is not Effort.CLIMB:
            self._offer(in_use)
        if form.width == 2 and form.tones == 1 and self._reach is None:
            self._one_carrier()
            return
        if effort is Effort.THOROUGH:
            self._survey()
            self._waves()
        elif not in_use.size:
            self._begin(self._draw(self._batch))
        elif effort is Effort.GLANCE:
            self._glance()
        self._climb(self.states, pairs=True)

    def _one_carrier(self) -> None:
        """Take the exact optimum."""
        if self._may_go_on():
            direct, elements = self._form.direct.view(np.complex128), self._form.surface.view(np.complex128)
            states, _ = one_carrier_optimum(complex(direct[0]), elements[:, 0])
            self._offer(states.astype(np.float64))

    def _glance(self) -> None:
        """Climb from the best of one batch of patterns."""
        batch = self._begin(self._draw(min(GLANCED, self._batch)))
        if batch is not None:
            best = self._polished(batch, GLANCES)
            self._climb(best.states[best.values.argmax()], pairs=False)

    def _survey(self) -> None:
        """Climb from the best of many patterns."""
        directions = np.concatenate([tone_directions(self._rough, TONES, PHASES), self._draw(SPREAD)])
        found = [self._best()] if self.states.size else []
        for first in range(0, len(directions), self._batch):
            batch = self._begin(directions[first : first + self._batch])
            if batch is None:
                return
            found.append(self._polished(batch, rounds=1))
        best = self._polished(together(found).best(KEPT), ROUNDS)
        for states in best.best(CLIMBED, ALIKE).states:
            self._climb(states, pairs=False)

    def _waves(self) -> None:
        """Climb from patterns scattered about the best, as long as that helps."""
        form = self._rough
        idle = 0
        while idle < PATIENCE and self.meter.step():
            before = self._value
            slope = rate_slope(form, self._best())
            scattered = _unit(slope) + SCATTER * _unit(self._draw(WAVE))
            wave = self._polished(assess(form, align(form, scattered, self._reach)), ROUNDS)
            self._climb(wave.states[wave.values.argmax()], pairs=False)
            idle = 0 if self._value > before else idle + 1

    def _begin(self, directions: Real) -> Batch | None:
        """Work out the patterns aligned with directions; None when the budget is spent."""
        if not self._may_go_on():
            return None
        form = self._rough
        if self._reach is None:
            batch = either_sign(form, align(form, directions, None))
        else:
            batch = assess(form, align(form, np.concatenate([directions, -directions]), self._reach))
        self._offer(batch.states[batch.values.argmax()])
        return batch

    def _polished(self, batch: Batch, rounds: int) -> Batch:
        for _ in range(rounds):
            if not self.meter.step():
                break
            batch = polish(self._rough, batch, self._reach)
            self._offer(batch.states[batch.values.argmax()])
        return batch

    def _climb(self, states: Real, *, pairs: bool) -> None:
        if not self.meter.over:
            ascent = Ascent(self._form, states, self._reach)
            ascent.climb(self.meter, pairs=pairs)
            self._keep(ascent.states, ascent.value)

    def _may_go_on(self) -> bool:
        """Ask for a step; without any pattern yet, take it whatever the budget says."""
        return self.meter.step() or not self.states.size

    def _draw(self, count: int) -> Real:
        """Give directions not used before."""
        self._drawn += count
        return spread_directions(self._strength, self._drawn - count, count)

    def _best(self) -> Batch:
        return assess(self._rough, self.states[None].astype(np.float32))

    def _offer(self, states: Real) -> None:
        exact = assess(self._form, states[None].astype(np.float64))
        self._keep(exact.states[0], float(exact.values[0]))

    def _keep(self, states: Real, value: float) -> None:
        if value > self._value + ROUNDING * abs(value):
            self.states, self._value = states, value


def _unit(rows: Real) -> Real:
    """Scale rows to length one; rows of zeros stay."""
    length = np.sqrt((rows * rows).sum(axis=1, keepdims=True))
    return np.asarray(rows / np.maximum(length, np.finfo(np.float64).tiny))
