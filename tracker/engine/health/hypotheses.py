"""What an element may be doing, and the evidence for each.

==========  =================================  ==============================================
an element  answers to its own bit             response, before anything is heard of it
==========  =================================  ==============================================
follows     as its neighbours do               m (prediction), give or take ρ
unmoved     not at all, or next to nothing     0
weak        with a share of that               α m, give or take α² ρ and the spread of α
foreign     as strongly, but unlike them       0, give or take the mean power of a response λ
==========  =================================  ==============================================

What the element does answer is known as y, give or take s (`answers`), so the likelihood of each is that of y under a
circular Gaussian about the mean of the response, of the variance of the response and s together, on each direction
over the delays. That is one look: while a channel rests, more frames make s smaller, but an element in a deep fade
stays there, and looking again tells nothing new. When the channel moves, so that deviations are other ones (`fresh`),
the evidence so far is kept in an account of the past, and the next look is added to it; the account forgets as well,
so that no small error can grow in it for ever.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .answers import Answers, power_of

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

FOLLOWS, UNMOVED, WEAK, FOREIGN = range(4)
# Before anything is heard: common practice is a few percent of faulty elements on a new panel.
PRIOR = np.array([0.94, 0.03, 0.02, 0.01])
_LOG_PRIOR = np.log(PRIOR)[:, None]
# Share of its neighbours' swing that a weak element has, and the spread of it: four of these lie between it and nil.
WEAK_SHARE, WEAK_SPREAD = 0.4, 0.1
# Healthy elements differ by this share from one to the other, whatever the prediction claims.
HEALTHY_SPREAD = 0.1
# An element that answers with less than this share of a mean response does not answer.
NOTHING = 0.07
# Independent looks that the account of the past holds, about; and the least log-probability in it.
MOST_LOOKS, LEAST = 16.0, -12.0


class Beliefs:
    """Log-evidence for each hypothesis and element.

    Parameters
    ----------
    elements : int
        N.
    """

    def __init__(self, elements: int) -> None:
        self._past = np.tile(_LOG_PRIOR, (1, elements))
        self._look = np.zeros((4, elements))
        self._best = np.zeros(elements)
        self.totals = self._past.copy()
        """Shape (4, N), the best of each element at 0."""

    @property
    def probabilities(self) -> Real:
        """Probability of each hypothesis, shape (4, N)."""
        likely = np.exp(self.totals)
        return np.asarray(likely / likely.sum(axis=0))

    @property
    def foreign_past(self) -> Real:
        """What `totals` says of being foreign less the log-density of the look now, shape (N,)."""
        return np.asarray(self._past[FOREIGN] - self._best)

    def settle(self, fresh: float, changed: NDArray[np.bool_]) -> None:
        """Enter the last look into the account of the past.

        Parameters
        ----------
        fresh : float
            How much of the next look is new: 0 while the channel rests, 1 when it is another one.
        changed : ndarray of bool, shape (N,)
            Elements that changed by themselves: their past is void.
        """
        if fresh > 0.0:
            self._past += fresh * self._look + (_LOG_PRIOR - self._past) * (fresh / MOST_LOOKS)
            self._past -= self._past.max(axis=0)
            np.maximum(self._past, LEAST, out=self._past)
        if changed.any():
            self._past[:, changed] = _LOG_PRIOR

    def look(self, answers: Answers, mean: Complex, residual: Real, power: Real) -> None:
        """Hold what the elements answer against the hypotheses.

        Parameters
        ----------
        answers : Answers
            y and s.
        mean, residual : ndarray, shape (k, N)
            m and ρ.
        power : ndarray, shape (k,)
            λ.
        """
        size = power_of(mean)
        off, variance = np.empty((4, *mean.shape)), np.empty((4, *mean.shape))
        off[FOLLOWS], variance[FOLLOWS] = power_of(answers.mean - mean), residual + HEALTHY_SPREAD**2 * size
        off[UNMOVED], variance[UNMOVED] = power_of(answers.mean), NOTHING**2 * power[:, None]
        off[WEAK] = power_of(answers.mean - WEAK_SHARE * mean)
        variance[WEAK] = WEAK_SHARE**2 * residual + WEAK_SPREAD**2 * size
        off[FOREIGN], variance[FOREIGN] = off[UNMOVED], power[:, None]
        variance += answers.variance
        off /= variance
        look = -(np.log(variance, out=variance) + off).sum(axis=1)
        totals = self._past + look
        self._best = totals.max(axis=0)
        # Only differences count.
        self._look, self.totals = look - self._best, totals - self._best

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "past": self._past.copy(),
            "look": self._look.copy(),
            "best": self._best.copy(),
            "totals": self.totals.copy(),
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._past = np.array(snapshot["past"], dtype=np.float64)
        self._look = np.array(snapshot["look"], dtype=np.float64)
        self._best = np.array(snapshot["best"], dtype=np.float64)
        self.totals = np.array(snapshot["totals"], dtype=np.float64)
