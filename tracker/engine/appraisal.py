"""Holds what the newest frames say of every element against what its neighbours predict, window after window.

About once a sweep, and later more seldom: the view of the newest frames (`fresh`), on the directions that carry the
responses (`directions`), is followed (`answers`) and compared with the prediction (`neighbours`) as evidence
(`hypotheses`). What all elements show alike is no fault of any: a gain, phase or fade common to all is taken off the
prediction. How far healthy elements lie from the prediction, and how much of that stays (`staying`), is measured along.
"""

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .answers import Answers
from .directions import Directions, directions
from .fresh import Posterior, View, Window, amplitudes
from .hypotheses import FOLLOWS, Beliefs
from .neighbours import Neighbours
from .staying import Staying

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Share of the frames of a sweep after which what they say is looked at; more when nothing at all is known yet, because
# elements can then only be told apart once there are more patterns than elements.
WINDOW_SHARE, FIRST_SHARE = 0.75, 1.2
# The same once nothing was found for so many windows: judging costs time, and there is little left to find.
LATER_SHARE, LATER = 5.0, 6
# Times that the estimate is read within a window.
READS = 4
# Windows up to which directions and weights are learned anew each time, and after how many they are later.
LEARN_OFTEN, LEARN_EVERY = 4, 8
# One window in so many in which the answers are held against the predictions even when nothing stirs, and doubts about
# an element between which something does.
LOOK_EVERY, OPEN = 4, (0.5, 0.93)
# Doubt about an element that has changed from which the next windows are looked at closely.
DOUBTED = 0.1
# Noise of a window, over that of as many frames of orthogonal patterns, above which elements are not told apart.
MOST_NOISE = 16.0
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
    forgetting_kind : str
        Of the filter whose estimates are judged, see `rls.forgetting`.
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
    known : ndarray of bool, shape (N,)
        Elements of which it said something.
    predicted, residual : ndarray, shape (k, N)
        What each element should answer, and the variance about it.
    sweeps : float
        Length of the last window.
    direct : ndarray of complex, shape (D,)
        Mean of the direct path's estimates over the last window, in units of the noise.
    amplitude : ndarray, shape (D,)
        What responses from before the last window are to be multiplied by to be in that unit.
    """

    def __init__(self, columns: int, rows: int, forgetting_kind: str, judged: NDArray[np.bool_]) -> None:
        self._kind = forgetting_kind
        self._judged = judged
        self._sweep = judged.size + 1
        self._unread = (0, 0.0)  # frames and seconds since the estimate was last read
        self._since = 0  # windows since the last beginning or finding
        self._started = False
        self._window: Window | None = None
        self._direct: Complex | None = None  # sum over the reads of the window
        self._reads = 0
        self._noise: Real | None = None
        self._directions: Directions | None = None
        self._neighbours = Neighbours(columns, rows)
        self._staying = Staying()
        self._trust = judged.astype(np.float64)
        self._open = self._changed = False
        self.answers = Answers(judged.size)
        self.beliefs = Beliefs(judged.size)
        self.windows = 0
        self.sweeps = 0.0
        self.looked = False
        self.known = judged.copy()
        self.predicted: Complex = np.zeros((1, judged.size), dtype=np.complex128)
        self.residual: Real = np.ones((1, judged.size))
        self.direct: Complex = np.zeros(0, dtype=np.complex128)
        self.amplitude: Real = np.ones(0)

    def begin(self, now: Posterior | None) -> None:
        """Begin a window; None to wait for the next block."""
        self._since = 0
        self._begin_window(now)

    def attend(self) -> None:
        """Look closely at the next windows: something was found."""
        self._since = 0

    def due(self, frames: int, elapsed_s: float) -> bool:
        """Count a block; say whether the estimate is to be read now, with `update`.

        Parameters
        ----------
        frames : int
        elapsed_s : float
            Time forgotten with it, s.
        """
        self._unread = (self._unread[0] + frames, self._unread[1] + elapsed_s)
        return self._window is None or READS * self._unread[0] >= self._least_frames

    def update(self, now: Posterior, trusted: NDArray[np.bool_]) -> bool:
        """Read the estimate; True when that completed a window.

        Parameters
        ----------
        now : Posterior
            After the blocks counted since the last time.
        trusted : ndarray of bool, shape (N,)
            Elements that may be asked as neighbours, as far as the evidence lets them.
        """
        if not self._started:
            unread = self._unread
            self._begin_window(now.unlearned)
            self._unread = unread
        if self._window is None or not self._window.follows(now):
            self._begin_window(now)
            return False
        self._window.add(now, *self._unread)
        self._unread = (0, 0.0)
        self._direct = now.coefficients[0].copy() if self._direct is None else self._direct + now.coefficients[0]
        self._reads += 1
        if self._window.frames < self._least_frames:
            return False
        view, frames = self._window.view(now), self._window.frames
        self.direct = self._direct / self._reads
        self._begin_window(now)
        if view is None or np.median(view.noise) * frames > MOST_NOISE:
            return False
        self.sweeps = frames / self._sweep
        self._appraise(now, view, self.sweeps, trusted)
        return True

    @property
    def _least_frames(self) -> int:
        """Frames that make a window."""
        if not self.windows:
            return max(int(FIRST_SHARE * self._sweep), 2)
        return max(int((LATER_SHARE if self._since >= LATER else WINDOW_SHARE) * self._sweep), 1)

    def _begin_window(self, now: Posterior | None) -> None:
        self._started = True
        self._unread = (0, 0.0)
        self._window = Window(self._kind, now) if now is not None else None
        self._direct, self._reads = None, 0

    def _appraise(self, now: Posterior, view: View, sweeps: float, trusted: NDArray[np.bool_]) -> None:
        """Take in what a window of so many sweeps showed."""
        responses = now.coefficients[1:]
        learn = self._change_unit(now) or self.windows <= LEARN_OFTEN or self.windows % LEARN_EVERY == 0
        before = found = self._directions
        if found is None or learn:
            found = self._directions = directions(responses, now.noise.size, view.left)
        heard, estimate = _on(view.responses, found), _on(responses, found)
        noise, spent = self._noise_on(view, heard, responses, estimate, found)
        power = np.maximum(_power(estimate).mean(axis=1) - spent, 0.0)
        if before is not None and before is not found:
            self._turn(before, found, power)
        changed = self.answers.take(heard, noise, power, sweeps)
        stay = self._staying.take(heard - self.predicted, self._trust, sweeps) if self.windows else 1.0
        # While nothing stirs the evidence stays what it is, and need not be worked out anew each time.
        stirs = stay < 1.0 or bool(changed.any()) or self._open or self._changed
        self._changed = bool(changed.any())
        self.looked = learn or stirs or self._since <= LATER or self.windows % LOOK_EVERY == 0
        if self.looked:
            self.beliefs.settle(1.0 - stay ** (2.0 * sweeps), changed)
            doubt = self._look(estimate, spent, trusted, learn=learn)
            self._open = bool(np.any((doubt > OPEN[0]) & (doubt < OPEN[1])))
            if np.any(doubt[changed] > DOUBTED):
                self._since = 0
        self.windows += 1
        self._since += 1

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
        strength = np.maximum(_power(estimate).mean(axis=1) - spent, 0.0) / view.prior
        noise *= np.where(rest < 1.0, rest + LEAKED * (1.0 - rest) * strength[:, None], rest)
        return noise, spent

    def _look(self, estimate: Complex, spent: float, trusted: NDArray[np.bool_], *, learn: bool) -> Real:
        """Hold the answers against what neighbours predict; return the doubt about each element, 0 where unheard."""
        asked = self.known & trusted
        trust = np.where(asked, self.beliefs.probabilities[FOLLOWS] if self.windows else 1.0, 0.0)
        # Whom to ask follows from what is believed, and the other way round: twice, when nothing is known yet.
        for _ in range(1 if self.windows else 2):
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
        measured = (_power(answers.mean - mean) - answers.variance) @ trust / total
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
                self._turn(scaled, self._directions, np.zeros(self.predicted.shape[0]))
        self._noise = now.noise.copy()
        return True

    def _turn(self, before: Directions, onto: Directions, power: Real) -> None:
        """Turn what is kept on directions onto others."""
        turn = onto.kept.T @ before.kept.conj()
        self.answers.turn(turn, np.maximum(1.0 - _power(turn).sum(axis=1), 0.0) * power)
        self._staying.turn(turn)
        self.predicted = turn @ self.predicted

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        found = self._directions
        return {
            "started": self._started,
            "window": self._window.snapshot() if self._window is not None else None,
            "sum": self._direct.copy() if self._direct is not None else None,
            "reads": self._reads,
            "unread": list(self._unread),
            "since": self._since,
            "noise": self._noise.copy() if self._noise is not None else None,
            "directions": [found.kept.copy(), found.shows_noise] if found is not None else None,
            "neighbours": self._neighbours.snapshot(),
            "staying": self._staying.snapshot(),
            "trust": self._trust.copy(),
            "open": self._open,
            "changed": self._changed,
            "answers": self.answers.snapshot(),
            "beliefs": self.beliefs.snapshot(),
            "windows": self.windows,
            "sweeps": self.sweeps,
            "looked": self.looked,
            "known": self.known.copy(),
            "predicted": self.predicted.copy(),
            "residual": self.residual.copy(),
            "direct": self.direct.copy(),
            "amplitude": self.amplitude.copy(),
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        window, total, found, noise = (snapshot[name] for name in ("window", "sum", "directions", "noise"))
        self._started = bool(snapshot["started"])
        self._window = Window.restore(window, self._kind) if window is not None else None
        self._direct = np.array(total, dtype=np.complex128) if total is not None else None
        self._reads, self._since = int(snapshot["reads"]), int(snapshot["since"])
        self._unread = (int(snapshot["unread"][0]), float(snapshot["unread"][1]))
        self._noise = np.array(noise, dtype=np.float64) if noise is not None else None
        self._directions = None
        if found is not None:
            self._directions = Directions(np.array(found[0], dtype=np.complex128), bool(found[1]))
        self._neighbours.load(snapshot["neighbours"])
        self._staying.load(snapshot["staying"])
        self._trust = np.array(snapshot["trust"], dtype=np.float64)
        self._open, self._changed = bool(snapshot["open"]), bool(snapshot["changed"])
        self.looked = bool(snapshot["looked"])
        self.answers.load(snapshot["answers"])
        self.beliefs.load(snapshot["beliefs"])
        self.windows, self.sweeps = int(snapshot["windows"]), float(snapshot["sweeps"])
        self.known = np.array(snapshot["known"], dtype=np.bool_)
        self.predicted = np.array(snapshot["predicted"], dtype=np.complex128)
        self.residual = np.array(snapshot["residual"], dtype=np.float64)
        self.direct = np.array(snapshot["direct"], dtype=np.complex128)
        self.amplitude = np.array(snapshot["amplitude"], dtype=np.float64)


def _on(responses: Complex, found: Directions) -> Complex:
    """Responses, shape (N, D), on directions, shape (k, N)."""
    return np.ascontiguousarray((responses @ found.kept).T)


def _rest(responses: Complex, on: Complex) -> Real:
    """Power of responses on the directions left out, shape (N,)."""
    whole = _power(responses).sum(axis=1)
    return np.asarray(np.maximum(whole - _power(on).sum(axis=0), 1e-6 * whole))


def _power(values: Complex) -> Real:
    return np.asarray(values.real**2 + values.imag**2)


def _common(mean: Complex, heard: Complex, trust: Real) -> complex:
    """Gain and phase that all elements show alike: the phase of all together, the gain of the middle one."""
    product = (mean.conj() * heard).sum(axis=0)
    size = trust * _power(mean).sum(axis=0)
    total = complex(product @ trust)
    if abs(total) == 0.0:
        return 1.0
    phase = total / abs(total)
    gains = (product / phase).real * trust / np.maximum(size, np.finfo(float).tiny)
    ranked = np.argsort(gains, kind="stable")
    weight = np.cumsum(size[ranked])
    middle = int(np.searchsorted(weight, 0.5 * weight[-1]))
    return phase * max(float(gains[ranked[middle]]), 0.0)
