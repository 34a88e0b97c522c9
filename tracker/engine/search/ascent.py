"""Climbing by flips: local search over the patterns that differ in a few lines.

At a pattern with response H, let w = 1 / (1 + |H|²). Turning line g changes H by Δ = −2 s_g h_g and the rate (in
nats, summed over receivers and tones) by Σ ln(1 + w (2 Re(conj(H) Δ) + |Δ|²)). From ln(1 + x) ≤ x follows

    gain ≤ 4 (slope_g + Σ w |h_g|²) ≤ 4 (slope_g + max(w) energy_g),   slope_g = −s_g Re Σ w conj(H) h_g.

All slopes cost O(RKQ + GRQ), as they are worked out in the delay domain; they rank the lines. The best few are then
tried exactly, singly and as groups, at O(RK) each. Where none gains, the bound says which of the others still
could; when those are tried too, the pattern is proved best among all that differ from it in one line.
"""

import numpy as np
from numpy.typing import NDArray

from .allowance import Allowance
from .budget import Meter
from .realform import Real, RealForm, aligned, bits

SINGLES = 16
"""Lines tried singly in a step."""
PAIRED = 16
"""Lines whose pairs are looked at when no single line gains."""
ROUNDING = 1e-13
"""Relative gain below which a difference may be rounding."""

Indices = NDArray[np.intp]

_PAIRS: tuple[Indices, Indices] = np.triu_indices(PAIRED, 1)


class Ascent:
    """A pattern that is being improved, with all that is known about its surroundings.

    Parameters
    ----------
    form : RealForm
    states : ndarray of float64, shape (G,)
        Where to begin; copied.
    allowance : Allowance or None
        Patterns out of its reach are not entered.

    Attributes
    ----------
    states : ndarray of float64, shape (G,)
        The pattern now.
    value : float
        Σ_rk log2(1 + |H|²) of it.
    """

    def __init__(self, form: RealForm, states: Real, allowance: Allowance | None = None) -> None:
        self._form = form
        self._allowance = allowance
        self.states, self._slope, self._sums = aligned((form.lines,), (form.lines,), (form.width,))
        self.states[:] = states
        np.matmul(self.states, form.surface, out=self._sums)
        self._sums += form.direct
        # Moves are tried so many at a time that a step takes about as long whatever the size of the channel.
        self._block = min(64, max(SINGLES, (1 << 14) // (form.receivers * form.tones)))
        self._look()

    def climb(self, meter: Meter, *, pairs: bool) -> None:
        """Improve the pattern until no move gains, or the budget is spent.

        Parameters
        ----------
        meter : Meter
        pairs : bool
            Whether to look at pairs of lines too before giving up.
        """
        while meter.step():
            if self._flip() or self._flip_rest(meter):
                continue
            if not pairs or not meter.step() or not self._flip_pair():
                return

    def _look(self) -> None:
        """Work out response and value of the pattern, the slope of each line and the bound on what it gains."""
        form = self._form
        self._heard = form.heard(self._sums)
        power = form.power(self._heard)
        self._weight = 1.0 / (1.0 + power)
        self.value = float(bits(power[None])[0])
        np.matmul(form.surface, form.back(form.weigh(self._heard, self._weight)), out=self._slope)
        self._slope *= self.states
        np.negative(self._slope, out=self._slope)
        self._bound = self._weight.max() * form.energy
        self._bound += self._slope

    def _flip(self) -> bool:
        """Try the most promising lines, singly and as groups; take the best if it gains."""
        order = self._most_promising()
        self._tried = order[:SINGLES]
        if order.size == 0:
            return False
        turns = self._turns(order)
        # Groups of the first 1, 2, 4, 8 … and of all.
        sizes = [1 << n for n in range((order.size - 1).bit_length())]
        groups = np.cumsum(np.add.reduceat(turns, [0, *sizes], axis=0), axis=0)
        moves = np.concatenate([turns[:SINGLES], groups[1:]])
        values = self._values(moves)
        if self._allowance is not None:
            values[: self._tried.size][~self._fits(self._tried)] = -np.inf
        best = int(values.argmax())
        if best < self._tried.size:
            return self._take(order[best : best + 1], moves[best], float(values[best]))
        size = [*sizes[1:], order.size][best - self._tried.size]
        return self._take(order[:size], moves[best], float(values[best]))

    def _most_promising(self) -> Indices:
        """Give the lines in falling order of slope: all that promise a gain, and enough to be tried singly."""
        slope, lines = self._slope, self._form.lines
        promising = int(np.count_nonzero(slope > 0.0))
        if promising == 0:
            return np.empty(0, dtype=np.intp)
        if self._allowance is not None:
            return self._allowance.queue(self.states, slope, 2 * SINGLES)
        count = min(lines, max(SINGLES, promising))
        some = np.argpartition(slope, lines - count)[lines - count :] if count < lines else np.arange(lines)
        return np.asarray(some[np.argsort(-slope[some])])

    def _flip_rest(self, meter: Meter) -> bool:
        """Try every other line that may gain singly, its slope notwithstanding."""
        bound = self._bound
        bound[self._tried] = -np.inf
        rest = np.flatnonzero(bound > 0.0)
        if self._allowance is not None:
            rest = rest[self._fits(rest)]
        rest = rest[np.argsort(-bound[rest])]
        for first in range(0, rest.size, self._block):
            if not meter.step():
                return False
            some = rest[first : first + self._block]
            moves = self._turns(some)
            values = self._values(moves)
            best = int(values.argmax())
            if self._take(some[best : best + 1], moves[best], float(values[best])):
                return True
        return False

    def _flip_pair(self) -> bool:
        """Try pairs of the lines that lose least singly."""
        form = self._form
        some = self._least_losing()
        count = some.size
        if count < 2:
            return False
        turns = self._turns(some)
        heard = form.heard(turns)
        # gain ≤ Σ w (2 Re(conj(H) Δ) + |Δ|²) with Δ the sum of both turns
        cross = form.weigh(heard, self._weight).reshape(count, -1) @ heard.reshape(count, -1).T
        alone = 4.0 * self._slope[some] + cross.diagonal()
        left, right = _PAIRS
        if count < PAIRED:
            left, right = np.triu_indices(count, 1)
        bounds = 2.0 * cross[left, right]
        bounds += alone[left]
        bounds += alone[right]
        hopeful = np.flatnonzero(bounds > 0.0)
        if self._allowance is not None:
            hopeful = hopeful[self._fits(some[left[hopeful]], some[right[hopeful]])]
        if hopeful.size == 0:
            return False
        hopeful = hopeful[np.argsort(-bounds[hopeful])[: self._block]]
        left, right = left[hopeful], right[hopeful]
        moves = turns[left] + turns[right]
        values = self._values(moves)
        best = int(values.argmax())
        return self._take(some[[left[best], right[best]]], moves[best], float(values[best]))

    def _least_losing(self) -> Indices:
        """Give the lines whose pairs are looked at: those with the largest bound."""
        bound = self._slope + self._weight.max() * self._form.energy
        count = min(PAIRED, bound.size)
        if self._allowance is None:
            return np.argpartition(bound, bound.size - count)[bound.size - count :]
        # Where nothing is left to change, a pair has to turn one line away and another back: take some of both.
        order = np.argsort(-bound)
        away = self._allowance.cost(self.states)[order] > 0
        some = np.zeros(bound.size, dtype=bool)
        for kind in (away, ~away):
            some[np.flatnonzero(kind)[: PAIRED // 2]] = True
        return order[some]

    def _fits(self, *together: Indices) -> NDArray[np.bool_]:
        """Tell which lines, or lines of several arrays together, may be turned within the allowance."""
        assert self._allowance is not None
        cost = self._allowance.cost(self.states)
        return np.asarray(sum(cost[lines] for lines in together) <= self._allowance.left(self.states))

    def _turns(self, lines: Indices) -> Real:
        """Give what turning each line adds to the sums, shape (n, L)."""
        turns = self._form.surface[lines]
        turns *= (-2.0 * self.states[lines])[:, None]
        return turns

    def _values(self, moves: Real) -> Real:
        """Give the value after each move, shape (n,), for changes of the sums, shape (n, L)."""
        heard = self._form.heard(moves)
        heard += self._heard
        return bits(self._form.power(heard))

    def _take(self, lines: Indices, move: Real, value: float) -> bool:
        """Turn lines if the value found for that is a gain."""
        form = self._form
        gains = value - self.value > ROUNDING * (form.receivers * form.tones + value)
        if gains:
            self.states[lines] *= -1.0
            self._sums += move
            self._look()
        return gains
