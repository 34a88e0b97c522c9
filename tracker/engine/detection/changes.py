"""Telling changes apart: which explanation makes the frames since a change most likely.

The frames Y are held against the model M = d + Σ_n s_n v_n from before the change. Every explanation has a likelihood
under Gaussian noise; its gain over "nothing changed" is in nats. What an explanation is free to choose is paid for:
half a logarithm of the number of observations for each real number fitted (Schwarz, Ann. Statist. 6, 1978), the
logarithm of the number of places for each choice among places. Where as many numbers are free as the channel has, they
are not fitted but averaged over, which pays for itself. What explanations there are: see `explanations`.

Nothing explained well enough, or two explanations alike: "unclear".
"""

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .evidence import Evidence
from .explanations import Explanations
from .likelihood import free, power_rows

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# A kind must be this much likelier than the next, in nats, or it is not clear which it is.
CLEAR = 2.0
# By so much (nats) from so many frames, no other choice of frames would change the verdict.
FAR, FAR_FRAMES = 15.0, 24
# Kinds with those that they are a special case of: however many frames are heard, these fit as well, and the kind is
# likelier by no more than what their freedom costs.
GENERAL = {"direct-path": ("channel",), "phase": ("timing",)}
# A change of level must be this much likelier than none, nats, for the frames before to be left out.
CLEAR_ONSET = 6.0
# Latest frames that are also looked at by themselves: a weak change shows no onset.
LATEST = 64
# Frames that a verdict needs at least.
LEAST_FRAMES = 8


@dataclass(frozen=True, slots=True, eq=False)
class Verdict:
    """What changed.

    Parameters
    ----------
    kind, next_kind : str
        The likeliest, and the runner-up.
    margin : float
        By how much likelier, nats.
    receiver : int or None
        Where it is one receiver's.
    mend : tuple of ndarray of complex, shapes (R,), or None
        Factors on the direct and on the surface path that mend the model.
    elements : ndarray of int
        Those that fail, for kind "elements".
    scores : dict
        Gain less price of each kind, nats.
    frames : int
        Since the change shows.
    """

    kind: str
    next_kind: str
    margin: float
    receiver: int | None = None
    mend: tuple[Complex, Complex] | None = None
    elements: NDArray[np.intp] = field(default_factory=lambda: np.zeros(0, dtype=np.intp))
    scores: dict[str, float] = field(default_factory=dict)
    frames: int = 0

    @property
    def limited(self) -> bool:
        """Whether more frames would not make it likelier: the runner-up holds it as a special case."""
        return self.next_kind in GENERAL.get(self.kind, ())


def judge(evidence: Evidence) -> Verdict:
    """Find the likeliest explanation.

    Parameters
    ----------
    evidence : Evidence
    """
    onset = _onset(evidence)
    since = len(evidence.outputs) - onset
    # What grows has no onset, and what came at once may have come before it shows.
    found = []
    for start in dict.fromkeys((onset, 0, max(len(evidence.outputs) - LATEST, 0))):
        found.append(_scores(Explanations(evidence, start)))
        best, other = sorted(found[-1][0].values(), reverse=True)[:2]
        if best - max(other, 0.0) > FAR and len(evidence.outputs) - start >= FAR_FRAMES:
            break
    scores = {kind: max(one[0][kind] for one in found) for kind in found[0][0]}
    order = sorted(scores, key=lambda kind: scores[kind], reverse=True)
    first, second = order[:2]
    mends, tones, failed = max(found, key=lambda one: one[0][first])[1:]
    margin = scores[first] - max(scores[second], 0.0)
    if margin < CLEAR:
        return Verdict("unclear", first, margin, scores=scores, frames=since)
    mend = mends.get(first)
    receiver = int(np.argmax(tones)) if first == "interference" and np.count_nonzero(tones) == 1 else None
    elements = failed if first == "elements" else np.zeros(0, dtype=np.intp)
    return Verdict(first, second, margin, receiver, mend, elements, scores, since)


def _scores(
    case: Explanations,
) -> tuple[dict[str, float], dict[str, tuple[Complex, Complex]], Real, NDArray[np.intp]]:
    """Gain less price of every kind; also what mends, where interference is, which elements fail."""
    scores = {
        "direct-path": case.direct(),
        "channel": case.channel(),
        "motion": case.motion(),
        "noise": case.noise(),
        "mismatch": case.mismatch(),
        "timing": case.timing(),
    }
    mends = {}
    scores["phase"], mends["phase"] = case.phase()
    scores["gain"], mends["gain"] = case.gain()
    scores["interference"], tones = case.interference()
    scores["elements"], failed = case.failed()
    if case.regressors.shape[1] - 1 < case.states.shape[1]:
        scores["basis"] = case.basis()
    return scores, mends, tones, failed


def _onset(evidence: Evidence) -> int:
    """First frame from which on something is clearly different; 0 when nothing is clearly later than the first.

    Looked for are a step of the errors' level, of the direct path, and of what the model is multiplied with.
    """
    frames, receivers, _ = evidence.outputs.shape
    if frames <= LEAST_FRAMES:
        return 0
    model = evidence.model[0] + evidence.bent
    error = evidence.outputs - model
    spread = 1.0 + evidence.doubt.diagonal().real
    flat = error.reshape(frames, -1)
    common = _from_each_on(flat / spread[:, None])
    shown = _from_each_on((model.conj() * error).sum(axis=2) / spread[:, None])
    model_power = _from_each_on((np.abs(model) ** 2).sum(axis=2) / spread[:, None]) + 1e-12
    steps = (
        _level_step(power_rows(flat) / spread, flat.shape[1]),
        free(power_rows(common) / _from_each_on(1.0 / spread), flat.shape[1]),
        power_rows(shown / np.sqrt(model_power)) - receivers,
    )
    onset, clear = 0, CLEAR_ONSET
    for gain in steps:
        place = int(np.argmax(gain[: frames - LEAST_FRAMES + 1]))
        if gain[place] - gain[0] > clear:
            onset, clear = place, float(gain[place] - gain[0])
    return onset


def _from_each_on(values: NDArray[Any]) -> NDArray[Any]:
    """Sum of the values from each frame to the last."""
    return np.asarray(np.cumsum(values[::-1], axis=0)[::-1])


def _level_step(power: Real, size: int) -> Real:
    """Gain of two levels of a power, of so many degrees a frame, against one, the second from each frame on."""
    whole, count = float(power.sum()), np.arange(1, power.size)
    before = np.cumsum(power)[:-1]
    gain = np.zeros(power.size)
    gain[1:] = size * (
        power.size * math.log(whole / (size * power.size) + 1e-12)
        - count * np.log(before / (size * count) + 1e-12)
        - (power.size - count) * np.log((whole - before) / (size * (power.size - count)) + 1e-12)
    )
    return gain
