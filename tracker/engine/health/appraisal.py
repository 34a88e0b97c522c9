"""Holds what the newest frames say of every element against what its neighbours predict, window after window.

What the newest frames show (`windows`), on the directions that carry the responses (`directions`), is followed
(`answers`) and compared with the prediction (`neighbours`) as evidence (`hypotheses`). What all elements show alike is
no fault of any: a gain, phase or fade common to all is taken off the prediction. How far healthy elements lie from the
prediction, and how much of that stays (`staying`), is measured along.
"""

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .answers import Answers, power_of
from .directions import Directions, directions
from .fresh import Posterior, View, amplitudes
from .hypotheses import FOLLOWS, Beliefs
from .neighbours import Neighbours
from .staying import Staying
from .windows import Shown

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Windows up to which directions and weights are learned anew each time, and after how many they are later.
LEARN_OFTEN, LEARN_EVERY = 4, 8
# One window in so many in which the answers are held against the predictions even when nothing stirs, and doubts about
# an element between which something does.
LOOK_EVERY, OPEN = 4, (0.5, 0.93)
# Share of the power of responses that a window may change: of a channel that moves more while it is sounded once, what
# is heard are mixtures, and those of neighbours in the shade of a wave look like faults.
MOST_MOVED = 0.12
# Doubt about an element that has changed from which it counts as unsettled.
DOUBTED = 0.1
# Share of what the filter expects other elements to leak into one that they do: of much it only fears that it moved.
LEAKED = 0.5
# Weights fitted for each direction.
FITTED = 8
# Residuals below this share of the power are not believed, the less so the fewer elements they were learned from.
LEAST_RESIDUAL, LEARNED = 0.003, 1.6
# Changes of the unit of the noise below this share are let be.
SAME_UNIT = 0.02
# Variance of what is not known at all.
UNHEARD = 1e9


class Appraisal:
    """Gathers evidence of what each element does.

    Parameters
    ----------
    columns, rows : int
        Of the panel; element i is column i // rows, row i % rows.
    judged : ndarray of bool, shape (N,)
        Elements that are to be judged; the others are no neighbours to be asked either.

    Attributes
    ----------
    answers : Answers
    beliefs : Beliefs
    windows : int
        Windows taken in.
    looked : bool
        Whether the last of them changed the beliefs.
    unsettled : bool
        Whether it showed an element that has changed, and whose new answer is in doubt.
    known : ndarray of bool, shape (N,)
        Elements of which it said something.
    predicted, residual : ndarray, shape (k, N)
        What each element should answer, and the variance about it.
    amplitude : ndarray, shape (D,)
        What responses from before the last window are to be multiplied by to be in that unit.
    """

    def __init__(self, columns: int, rows: int, judged: NDArray[np.bool_]) -> None:
        self._judged = judged
        self._noise: Real | None = None
        self._directions: Directions | None = None
        self._neighbours = Neighbours(columns, rows)
        self._staying = Staying()
        self._trust = judged.astype(np.float64)
        self._begun = self._open = self._changed = False
        self._outdated = False  # the weights, by directions that have changed since
        self.answers = Answers(judged.size)
        self.beliefs = Beliefs(judged.size)
        self.windows = 0
        self.looked = self.unsettled = False
        self.known = judged.copy()
        self.predicted: Complex = np.zeros((1, judged.size), dtype=np.complex128)
        self.residual: Real = np.ones((1, judged.size))
        self.amplitude: Real = np.ones(0)

    def take(self, now: Posterior, shown: Shown, trusted: NDArray[np.bool_]) -> None:
        """Take in what a window showed.

        Parameters
        ----------
        now : Posterior
            At its end.
        shown : Shown
        trusted : ndarray of bool, shape (N,)
            Elements that may be asked as neighbours, as far as the evidence lets them.
        """
        responses, view, sweeps = now.coefficients[1:], shown.view, shown.sweeps
        learn = self._change_unit(now) or self.windows <= LEARN_OFTEN or self.windows % LEARN_EVERY == 0
        before = found = self._directions
        if found is None or learn:
            found = self._directions = directions(responses, now.noise.size, view.left)
        heard, estimate = _on(view.responses, found), _on(responses, found)
        noise, spent = self._noise_on(view, heard, responses, estimate, found)
        power = np.maximum(power_of(estimate).mean(axis=1) - spent, 0.0)
        if before is not None and before is not found:
            self._turn(before, found, power)
        changed = self.answers.take(heard, noise, power, sweeps)
        stay = self._staying.take(heard - self.predicted, self._trust, sweeps) if self._begun else 1.0
        # While nothing stirs the evidence stays what it is, and need not be worked out anew each time.
        stirs = stay < 1.0 or bool(changed.any()) or self._open or self._changed
        self._changed, self.unsettled = bool(changed.any()), False
        due = learn or stirs or shown.closely or self.windows % LOOK_EVERY == 0
        # Whether the channel rests is seen from the second window on.
        self.looked = due and self.windows > 0 and self.answers.moved < MOST_MOVED
        if self.looked:
            self.beliefs.settle(1.0 - stay ** (2.0 * sweeps), changed)
            doubt = self._look(estimate, spent, trusted, learn=learn or self._outdated)
            self._open = bool(np.any((doubt > OPEN[0]) & (doubt < OPEN[1])))
            self.unsettled = bool(np.any(doubt[changed] > DOUBTED))
            self._begun = True
        self._outdated = not self.looked and (learn or self._outdated)
        self.windows += 1

    def _noise_on(
        self, view: View, heard: Complex, responses: Complex, estimate: Complex, found: Directions
    ) -> tuple[Real, float]:
        """Work out the noise of the view, shape (k, N), and of the estimate."""
        sounded = np.isfinite(view.noise)
        self.known = self._judged & sounded
        noise = np.broadcast_to(np.where(self.known, view.noise, UNHEARD), heard.shape).copy()
        if not found.shows_noise:
            return noise, view.left
        # The directions left out hold noise alone; what the filter expects beyond it are other elements that the
        # patterns do not keep apart, and those are as strong as elements are on each direction.
        left = responses.shape[1] - heard.shape[0]
        rest = float((_rest(view.responses, heard) / view.noise)[sounded].mean()) / left
        spent = float(_rest(responses, estimate).mean()) / left
        strength = np.maximum(power_of(estimate).mean(axis=1) - spent, 0.0) / view.prior
        noise *= np.where(rest < 1.0, rest + LEAKED * (1.0 - rest) * strength[:, None], rest)
        return noise, spent

    def _look(self, estimate: Complex, spent: float, trusted: NDArray[np.bool_], *, learn: bool) -> Real:
        """Hold the answers against what neighbours predict; return the doubt about each element, 0 where unheard."""
        asked = self.known & trusted
        trust = np.where(asked, self.beliefs.probabilities[FOLLOWS] if self._begun else 1.0, 0.0)
        # Whom to ask follows from what is believed, and the other way round: twice, when nothing is known yet.
        for _ in range(1 if self._begun else 2):
            self._trust = trust
            power = self._compare(estimate, spent, trust, learn=learn)
            self.beliefs.look(self.answers, self.predicted, self.residual, power)
            trust = np.where(asked, self.beliefs.probabilities[FOLLOWS], 0.0)
        return np.where(asked, 1.0 - trust, 0.0)

    def _compare(self, estimate: Complex, spent: float, trust: Real, *, learn: bool) -> Real:
        """Predict every element from neighbours that follow; return the mean power of a response, shape (k,)."""
        if self.predicted.shape == estimate.shape:
            estimate = trust * estimate + (1.0 - trust) * self.predicted
        if learn:
            self._neighbours.fit(estimate, spent)
        answers, power = self.answers, self._neighbours.power
        mean = self._neighbours.predict(estimate)
        self.predicted = mean = mean * _common(mean, answers.mean, trust)
        elements, total = trust.size, max(float(trust.sum()), 1.0)
        measured = (power_of(answers.mean - mean) - answers.variance) @ trust / total
        # Weights learned from the same elements leave too little: so many each, of all there are.
        measured *= elements / max(elements - FITTED, FITTED)
        measured = np.maximum(measured, (LEAST_RESIDUAL + LEARNED / elements) * power)
        # How residuals differ from corner to edge to inside is kept, their mean is measured.
        residual = self._neighbours.residual
        self.residual = residual * (measured * total / (residual @ trust + np.finfo(float).tiny))[:, None]
        return power

    def _change_unit(self, now: Posterior) -> bool:
        """Bring what is kept from the window before into the unit of the noise now; True when it was another one."""
        self.amplitude = np.ones(now.coefficients.shape[1])
        if self._noise is not None:
            amplitude = amplitudes(self._noise, now.noise, self.amplitude.size)
            if np.abs(amplitude - 1.0).max() < SAME_UNIT:
                return False
            self.amplitude = amplitude
            if self._directions is not None:
                scaled = replace(self._directions, kept=self._directions.kept * amplitude[:, None])
                self._turn(scaled, self._directions, np.zeros(scaled.kept.shape[1]))
        self._noise = now.noise.copy()
        return True

    def _turn(self, before: Directions, onto: Directions, power: Real) -> None:
        """Turn what is kept on directions onto others."""
        turn = onto.kept.T @ before.kept.conj()
        self.answers.turn(turn, np.maximum(1.0 - power_of(turn).sum(axis=1), 0.0) * power)
        self._staying.turn(turn)
        if self._begun:
            self.predicted = turn @ self.predicted

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        found = self._directions
        return {
            "noise": self._noise.copy() if self._noise is not None else None,
            "directions": [found.kept.copy(), found.shows_noise] if found is not None else None,
            "neighbours": self._neighbours.snapshot(),
            "staying": self._staying.snapshot(),
            "trust": self._trust.copy(),
            "begun": self._begun,
            "open": self._open,
            "changed": self._changed,
            "outdated": self._outdated,
            "answers": self.answers.snapshot(),
            "beliefs": self.beliefs.snapshot(),
            "windows": self.windows,
            "looked": self.looked,
            "unsettled": self.unsettled,
            "known": self.known.copy(),
            "predicted": self.predicted.copy(),
            "residual": self.residual.copy(),
            "amplitude": self.amplitude.copy(),
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        found, noise = snapshot["directions"], snapshot["noise"]
        self._noise = np.array(noise, dtype=np.float64) if noise is not None else None
        self._directions = None
        if found is not None:
            self._directions = Directions(np.array(found[0], dtype=np.complex128), bool(found[1]))
        self._neighbours.load(snapshot["neighbours"])
        self._staying.load(snapshot["staying"])
        self._trust = np.array(snapshot["trust"], dtype=np.float64)
        self._begun, self._open = bool(snapshot["begun"]), bool(snapshot["open"])
        self._changed = bool(snapshot["changed"])
        self._outdated = bool(snapshot["outdated"])
        self.looked, self.unsettled = bool(snapshot["looked"]), bool(snapshot["unsettled"])
        self.answers.load(snapshot["answers"])
        self.beliefs.load(snapshot["beliefs"])
        self.windows = int(snapshot["windows"])
        self.known = np.array(snapshot["known"], dtype=np.bool_)
        self.predicted = np.array(snapshot["predicted"], dtype=np.complex128)
        self.residual = np.array(snapshot["residual"], dtype=np.float64)
        self.amplitude = np.array(snapshot["amplitude"], dtype=np.float64)


def _on(responses: Complex, found: Directions) -> Complex:
    """Responses, shape (N, D), on directions, shape (k, N)."""
    return np.ascontiguousarray((responses @ found.kept).T)


def _rest(responses: Complex, on: Complex) -> Real:
    """Power of responses on the directions left out, shape (N,)."""
    whole = power_of(responses).sum(axis=1)
    return np.asarray(np.maximum(whole - power_of(on).sum(axis=0), 1e-6 * whole))


def _common(mean: Complex, heard: Complex, trust: Real) -> complex:
    """Gain and phase that all elements show alike: the phase of all together, the gain of the middle one."""
    product = (mean.conj() * heard).sum(axis=0)
    size = trust * power_of(mean).sum(axis=0)
    total = complex(product @ trust)
    if abs(total) == 0.0:
        return 1.0
    phase = total / abs(total)
    gains = (product / phase).real * trust / np.maximum(size, np.finfo(float).tiny)
    ranked = np.argsort(gains, kind="stable")
    weight = np.cumsum(size[ranked])
    middle = int(np.searchsorted(weight, 0.5 * weight[-1]))
    return phase * max(float(gains[ranked[middle]]), 0.0)
