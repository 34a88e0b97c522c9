"""Where to begin climbing: many patterns worked out at once by matrix products.

A direction is a set of delay coefficients that one would like the surface to answer with; the pattern *aligned* with
it turns each line so that it adds to it: s_g = sign Re(conj(direction) · surface_g). Aligning with the slope of the
rate itself, again and again, improves a pattern a little further each time, hundreds of patterns at a few
microseconds each. That is too coarse to end on a local optimum, but tells good regions from bad ones: climbing from
the best few of many patterns so *polished* is worth far more than climbing from any one.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .allowance import Allowance
from .realform import Real, RealForm, bits


@dataclass(slots=True, eq=False)
class Batch:
    """Patterns and what they are worth.

    Parameters
    ----------
    states : ndarray, shape (n, G)
    sums : ndarray, shape (n, L)
        Direct path and lines added up, in real form.
    values : ndarray, shape (n,)
        Σ_rk log2(1 + |H|²).
    """

    states: Real
    sums: Real
    values: Real

    def pick(self, rows: NDArray[np.intp]) -> "Batch":
        """Give some of the patterns."""
        return Batch(self.states[rows], self.sums[rows], self.values[rows])

    def best(self, most: int, overlap: float = 1.0) -> "Batch":
        """Give the best patterns, at most so many, best first, no two of which agree too much.

        Parameters
        ----------
        most : int
        overlap : float
            A pattern whose correlation with a better one exceeds this is left out; with 1 only equals are.
        """
        order = np.argsort(-self.values, kind="stable")
        if overlap >= 1.0:
            # Different patterns practically never have the same value to six digits.
            values = self.values[order]
            fresh = np.ones(order.size, dtype=bool)
            fresh[1:] = values[:-1] - values[1:] > 1e-6 * values[:-1]
            return self.pick(order[fresh][:most])
        order = order[: 4 * most]
        states = self.states[order]
        alike = states @ states.T > overlap * states.shape[1]
        kept: list[int] = []
        shut = np.zeros(order.size, dtype=bool)
        for row in range(order.size):
            if not shut[row] and len(kept) < most:
                kept.append(row)
                shut |= alike[row]
        return self.pick(order[kept])


def together(batches: list[Batch]) -> Batch:
    """Join batches."""
    return Batch(
        np.concatenate([batch.states for batch in batches]),
        np.concatenate([batch.sums for batch in batches]),
        np.concatenate([batch.values for batch in batches]),
    )


def assess(form: RealForm, states: Real) -> Batch:
    """Work out what patterns, shape (n, G), are worth."""
    sums = states @ form.surface
    sums += form.direct
    return Batch(states, sums, bits(form.power(form.heard(sums))))


def align(form: RealForm, directions: Real, allowance: Allowance | None) -> Real:
    """Give the patterns, shape (n, G), aligned with directions, shape (n, L)."""
    wish = directions @ form.surface.T
    if allowance is not None:
        return allowance.nearest(wish)
    return np.copysign(1.0, wish, out=wish)


def rate_slope(form: RealForm, batch: Batch) -> Real:
    """Give the direction, shape (n, L), in which the rate of each pattern grows fastest."""
    heard = form.heard(batch.sums)
    return form.back(form.weigh(heard, 1.0 / (1.0 + form.power(heard))))


def polish(form: RealForm, batch: Batch, allowance: Allowance | None) -> Batch:
    """Align every pattern with the slope of the rate at it; keep what is better."""
    fresh = assess(form, align(form, rate_slope(form, batch), allowance))
    better = fresh.values > batch.values
    return Batch(
        np.where(better[:, None], fresh.states, batch.states),
        np.where(better[:, None], fresh.sums, batch.sums),
        np.where(better, fresh.values, batch.values),
    )


def either_sign(form: RealForm, states: Real) -> Batch:
    """Work out what patterns, shape (n, G), are worth, and take their negatives where these are better, in place."""
    sums = states @ form.surface
    ahead = bits(form.power(form.heard(form.direct + sums)))
    behind = bits(form.power(form.heard(form.direct - sums)))
    sign = np.copysign(1.0, ahead - behind)[:, None]
    states *= sign
    sums *= sign
    sums += form.direct
    return Batch(states, sums, np.maximum(ahead, behind))


def delay_strength(form: RealForm) -> Real:
    """Give how strong the surface can make each delay at each receiver (root of the summed power), shape (L / 2,)."""
    return np.asarray(np.sqrt((form.surface * form.surface).sum(axis=0).reshape(-1, 2).sum(axis=1)))


def spread_directions(strength: Real, first: int, count: int) -> Real:
    """Give directions spread evenly over all phases of the delays.

    Parameters
    ----------
    strength : ndarray, shape (L / 2,)
        Size of each coefficient.
    first, count : int
        Members `first` to `first + count` of an endless sequence. Its phases, multiples of irrational fractions of a
        turn, fill the torus evenly (Weyl), so no random source is needed.

    Returns
    -------
    ndarray, shape (count, L)
    """
    delay = np.arange(1, strength.size + 1)
    turn = (math.sqrt(2.0) * delay + math.sqrt(3.0) * delay**2) % 1.0
    phase = 2.0 * np.pi * (np.arange(first + 1, first + count + 1)[:, None] * turn % 1.0)
    spread = np.empty((count, 2 * strength.size), dtype=strength.dtype)
    np.multiply(strength, np.cos(phase), out=spread[:, 0::2], casting="same_kind")
    np.multiply(strength, np.sin(phase), out=spread[:, 1::2], casting="same_kind")
    return spread


def tone_directions(form: RealForm, count: int, phases: int) -> Real:
    """Give directions that serve one tone at one receiver, taken in turns across the band, over a grid of phases.

    Parameters
    ----------
    form : RealForm
    count : int
        Tones, shared among the receivers.
    phases : int
        Phases over half a turn; negating a pattern gives the other half.

    Returns
    -------
    ndarray, shape (at most count · phases, L)
    """
    count = min(count, form.tones * form.receivers)
    receiver = np.arange(count) % form.receivers
    tone = (2 * np.arange(count) + 1) * form.tones // (2 * count)
    at = np.zeros((count, form.receivers, 2 * form.tones), dtype=form.surface.dtype)
    directions = []
    for phase in np.pi * np.arange(phases) / phases:
        at[np.arange(count), receiver, tone] = math.cos(phase)
        at[np.arange(count), receiver, tone + form.tones] = math.sin(phase)
        directions.append(form.back(at))
    return np.concatenate(directions)
