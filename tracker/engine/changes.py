"""Telling changes apart: which explanation makes the frames since a change most likely.

The frames Y are held against the model M = d + Σ_n s_n v_n from before the change. Every explanation has a likelihood
under Gaussian noise; its gain over "nothing changed" is in nats. What an explanation is free to choose is paid for:
half a logarithm of the number of observations for each real number fitted (Schwarz, Ann. Statist. 6, 1978), the
logarithm of the number of places for each choice among places. Where as many numbers are free as the channel has, they
are not fitted but averaged over (a Gaussian of covariance κ G, with κ fitted), which pays for itself::

    gain = −Σ_j D ln(1 + κ λ_j) + Σ_j κ λ_j / (1 + κ λ_j) |u_jᴴ E|²,    G = Σ_j λ_j u_j u_jᴴ over frames

============  =======================================================================================
kind          explanation
============  =======================================================================================
direct-path   d is another one, from the start or growing (G = 1 1ᵀ); or d lost or gained strength
channel       d and all v_n are others, from the start (G = Z P₀ Zᴴ)
motion        the same, growing with time
phase         either path, or both, turned, perhaps go on turning
gain          both paths grew by one factor, the noise with them or not
noise         the noise has another power
interference  a few tones have more noise
timing        all tones are turned as by another delay
mismatch      the panel shows the pattern of an earlier frame, or the inverse
elements      a few elements no longer do as told
basis         the change lies outside the aperture basis
============  =======================================================================================

Nothing explained well enough, or two explanations alike: "unclear".
"""

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# A kind must be this much likelier than the next, in nats, or it is not clear which it is.
CLEAR = 2.0
# Variances κ that are tried, relative to what would make the change as strong as the noise.
KAPPAS = np.geomspace(1e-2, 1e4, 31)
# Delays tried, from −1/4 to 1/4 of a turn from tone to tone.
DELAYS = 1025
# Largest share of the elements that may fail together and still be a few.
FEW = 1 / 8
# Rates at which motion turns a path, Hz: up to 5 m/s at 3.75 GHz.
MOTION_HZ = np.linspace(-64.0, 64.0, 257)
# Factors of a receiver's gain tried.
GAINS = np.geomspace(0.05, 20.0, 241)
# A change of level must be this much likelier than none, nats, for the frames before to be left out.
CLEAR_ONSET = 6.0
# Latest frames that are also looked at by themselves: a weak change shows no onset.
LATEST = 64
# Frames that a verdict needs at least.
LEAST_FRAMES = 8
# Lags of the panel tried, frames.
LAGS = (1, 2, 3)


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """Frames since the change, and the model before it; outputs in units of the noise before.

    Parameters
    ----------
    outputs : ndarray of complex, shape (B, R, Q)
        Y.
    regressors : ndarray, shape (B, n)
        Z.
    states : ndarray, shape (B, N)
    model : ndarray of complex, shape (n, R, Q)
        C, the direct path first.
    elements : ndarray of complex, shape (N, R, Q)
        v.
    prior : ndarray, shape (n,)
        Variances before any data.
    outside : ndarray of complex, shape (B, R, K)
        What the frames hold outside the delay basis, on the tones.
    basis : ndarray of complex, shape (K, Q)
    doubt : ndarray, shape (B, B)
        Covariance over the frames of what the model has wrong of the surface, in units of the noise.
    time_s : ndarray, shape (B,)
        From the start of the change.
    """

    outputs: Complex
    regressors: NDArray[Any]
    states: Real
    model: Complex
    elements: Complex
    prior: Real
    outside: Complex
    basis: Complex
    doubt: NDArray[Any]
    time_s: Real


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


def judge(evidence: Evidence) -> Verdict:
    """Find the likeliest explanation.

    Parameters
    ----------
    evidence : Evidence
    """
    onset = _onset(evidence)
    since = len(evidence.outputs) - onset
    # What grows has no onset, and what came at once may have come before it shows.
    cases = [_Case(evidence, start) for start in sorted({0, onset, max(len(evidence.outputs) - LATEST, 0)})]
    found = [_scores(case) for case in cases]
    scores = {kind: max(one[0][kind] for one in found) for kind in found[0][0]}
    order = sorted(scores, key=lambda kind: scores[kind], reverse=True)
    first, second = order[:2]
    best = max(range(len(found)), key=lambda place: found[place][0][first])
    mends, tones, failed = found[best][1:]
    margin = scores[first] - max(scores[second], 0.0)
    if margin < CLEAR:
        return Verdict("unclear", first, margin, scores=scores, frames=since)
    mend = mends.get(first)
    receiver = int(np.argmax(tones)) if first == "interference" and np.count_nonzero(tones) == 1 else None
    elements = failed if first == "elements" else np.zeros(0, dtype=np.intp)
    return Verdict(first, second, margin, receiver, mend, elements, scores, since)


def _scores(
    case: "_Case",
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
    """Frame from which on the errors are larger, or smaller, than before."""
    error = evidence.outputs - evidence.model[0] - np.tensordot(evidence.regressors[:, 1:], evidence.model[1:], axes=1)
    power = _power_rows(error.reshape(error.shape[0], -1)) / (1.0 + evidence.doubt.diagonal().real)
    size, frames = error[0].size, error.shape[0]
    before = np.cumsum(power)[:-1]
    count = size * np.arange(1, frames)
    whole = size * frames
    # Two levels against one: the likeliest place for the level to have changed.
    gain = (
        whole * math.log(float(power.sum()) / whole + 1e-12)
        - count * np.log(before / count + 1e-12)
        - (whole - count) * np.log((power.sum() - before) / (whole - count) + 1e-12)
    )
    gain[frames - LEAST_FRAMES :] = 0.0
    place = int(np.argmax(gain)) if frames > LEAST_FRAMES else 0
    return place + 1 if gain.size and gain[place] > CLEAR_ONSET else 0


class _Case:
    """What several explanations share; the methods give gain less price."""

    def __init__(self, evidence: Evidence, onset: int) -> None:
        self.evidence = evidence
        self.heard = evidence.outputs[onset:]
        self.frames, self.receivers, self.size = self.heard.shape
        self.regressors, self.states = evidence.regressors[onset:], evidence.states[onset:]
        self.outside, self.time_s = evidence.outside[onset:], evidence.time_s[onset:]
        self.direct_path = evidence.model[0]
        shown = np.tensordot(evidence.regressors[:, 1:], evidence.model[1:], axes=1)
        self.bent, self.earlier = np.asarray(shown[onset:]), np.asarray(shown[:onset])  # surface path
        self.error = self.heard - self.direct_path - self.bent
        # The model is an estimate: what it has wrong hangs together over frames, and is whitened away.
        factor = np.linalg.cholesky(np.eye(self.frames) + evidence.doubt[onset:, onset:])
        self.whitener = np.linalg.inv(factor)
        self.flat = self.white(self.error).reshape(self.frames, -1)
        self.ones = self.whitener @ np.ones(self.frames)
        self.time = self._time()
        self.direct_white = self.ones[:, None, None] * self.direct_path
        self.surface_white = self.white(self.bent)
        self.observations = 2 * self.heard.size

    def white(self, values: Complex) -> Complex:
        """Whiten over frames, the first axis."""
        return np.asarray(np.tensordot(self.whitener, values, axes=1))

    def gained(self, model: Complex) -> float:
        """Gain in likelihood of another model, shape (B, R, Q)."""
        return _power(self.flat) - _power(self.white(self.heard - model))

    def price(self, numbers: float, places: float = 1.0) -> float:
        """Price of so many real numbers fitted, and of a choice among places."""
        return 0.5 * numbers * math.log(self.observations) + math.log(places)

    def direct(self) -> float:
        walk = self.whitened(np.minimum.outer(self.time, self.time))
        ramp = self.whitener @ self.time
        best = max(self._factor(self.ones), self._factor(ramp), self._averaged(walk, None)) - self.price(1, 5)
        shown = np.einsum("brq,brq->r", self.direct_white.conj(), self.flat.reshape(self.error.shape))
        power = np.maximum(_powers(self.direct_white), 1e-12)
        turned = float((np.abs(shown) ** 2 / power).sum()) - self.price(2 * self.receivers, 5)
        straight = float((shown.real**2 / power).sum()) - self.price(self.receivers, 5)
        return max(best, turned, straight)

    def channel(self) -> float:
        return self._averaged(self.whitened(self._spread()), self.ones) - self.price(2)

    def motion(self) -> float:
        spread, time = self._spread(), self.time
        kernels = np.minimum.outer(time, time), np.outer(time, time)
        ramp = self.whitener @ time
        grown = max(self._averaged(self.whitened(spread * kernel), ramp) for kernel in kernels) - self.price(2, 3)
        return max(grown, self._turning())

    def _turning(self) -> float:
        """Gain when either path turns evenly, each by its own rate, from where it stood or from some phase on."""
        turns = np.exp(2j * np.pi * np.outer(MOTION_HZ, self.time_s - self.time_s[0]))  # (rates, B)
        options = []
        for free in (False, True):

            def best(model: Complex, heard: Complex, free: bool = free) -> Complex:
                """Find the turns (B, R) that fit best."""
                spectrum = turns.conj() @ self._product(model, heard)
                along = np.abs(spectrum) if free else spectrum.real
                place = np.argmax(along, axis=0)
                start = np.angle(spectrum[place, np.arange(self.receivers)]) if free else np.zeros(self.receivers)
                return np.asarray((turns[place].T * np.exp(1j * start))[:, :, None])

            turn_d = turn_s = best(self.direct_path + self.bent, self.heard)
            for _ in range(3):
                turn_d = best(self.direct_path + 0.0 * self.bent, self.heard - turn_s * self.bent)
                turn_s = best(self.bent, self.heard - turn_d * self.direct_path)
            model = turn_d * self.direct_path + turn_s * self.bent
            options.append(self.gained(model) - self.price((4 if free else 2) * self.receivers, 4))
        return max(options)

    @staticmethod
    def _product(model: Complex, heard: Complex) -> Complex:
        """Sum of conj(m) y over delays, shape (B, R)."""
        return np.asarray((model.conj() * heard).sum(axis=2))

    def basis(self) -> float:
        states = self.states
        return self._averaged(self.whitened(states @ states.T), self.ones) - self.price(2)

    def noise(self) -> float:
        power, count = self._noise_power()
        level = power / count
        return float((count * (level - 1.0 - np.log(level))).sum()) - self.price(self.receivers)

    def gain(self) -> tuple[float, tuple[Complex, Complex]]:
        power, count = self._noise_power()
        model = self.direct_white + self.surface_white
        model_power = np.maximum(_powers(model), 1e-12)
        shown = np.einsum("brq,brq->r", model.conj(), self.flat.reshape(model.shape)).real
        sent = shown * shown / model_power
        factor = np.maximum(1.0 + shown / model_power, 1e-3)
        # The receiver's own gain takes the noise along: its power then is known from the factor.
        tried = GAINS[:, None]
        left = power - 2.0 * (tried - 1.0) * shown + (tried - 1.0) ** 2 * model_power
        gains = power - left / tried**2 - 2.0 * count * np.log(tried)
        best = np.argmax(gains, axis=0)
        taken = gains[best, np.arange(self.receivers)]
        if taken.sum() > sent.sum():
            factor = GAINS[best]
        mend = factor.astype(np.complex128)
        return float(max(sent.sum(), taken.sum())) - self.price(self.receivers, 2), (mend, mend)

    def phase(self) -> tuple[float, tuple[Complex, Complex]]:
        heard = self.white(self.heard)
        heard_d = np.einsum("brq,brq->r", self.direct_white.conj(), heard)
        heard_s = np.einsum("brq,brq->r", self.surface_white.conj(), heard)
        cross = np.einsum("brq,brq->r", self.direct_white.conj(), self.surface_white)
        turn = np.exp(1j * np.angle(heard_d + heard_s))
        model = self.direct_path + self.bent
        best = self.gained(turn[:, None] * model) - self.price(self.receivers, 3)
        # Going on turning faster than by motion: the peak over rates, of the receivers together.
        both = self._product(model, self.heard)
        index = self.time * self.frames
        rates = np.linspace(-0.5, 0.5, 8 * self.frames, endpoint=False)  # turns a frame
        span_s = float(self.time_s[-1] - self.time_s[0])
        spectrum = np.abs(np.exp(-2j * np.pi * np.outer(rates, index)) @ both).sum(axis=1)
        spectrum[np.abs(rates) * self.frames <= MOTION_HZ[-1] * span_s] = 0.0
        peak = rates[int(np.argmax(spectrum))]
        going = np.exp(2j * np.pi * peak * index)[:, None]
        going = going * np.exp(1j * np.angle((going.conj() * both).sum(axis=0)))
        best = max(best, self.gained(going[:, :, None] * model) - self.price(self.receivers + 1, 3))
        # Each path by itself: a few rounds from the common turn.
        turn_d, turn_s = turn, turn
        for _ in range(8):
            turn_d = np.exp(1j * np.angle(heard_d - cross * turn_s))
            turn_s = np.exp(1j * np.angle(heard_s - cross.conj() * turn_d))
        apart = self.gained(turn_d[:, None] * self.direct_path + turn_s[:, None] * self.bent)
        apart -= self.price(2 * self.receivers, 3)
        return (apart, (turn_d, turn_s)) if apart > best else (best, (turn, turn))

    def timing(self) -> float:
        """Delay: tones have the cross-spectrum of model and frames; a common turn is free."""
        basis = self.evidence.basis
        model = (self.direct_path + self.bent) @ basis.T
        spectrum = (model.conj() * (self.heard @ basis.T)).sum(axis=0)
        tones = np.arange(spectrum.shape[1])
        shifts = np.exp(-2j * np.pi * np.outer(np.linspace(-0.25, 0.25, DELAYS), tones))
        found = spectrum @ shifts.conj().T
        best = np.argmax(np.abs(found), axis=1)
        turn = np.exp(1j * np.angle(found[np.arange(self.receivers), best]))
        shifted = (model * (turn[:, None] * shifts[best])) @ basis.conj()
        return self.gained(shifted) - self.price(2 * self.receivers, DELAYS / 8)

    def mismatch(self) -> float:
        options = [self.gained(self.direct_path - self.bent)]
        shown = np.concatenate([self.earlier, self.bent])
        for lag in LAGS:
            first = np.arange(len(self.earlier), len(shown)) - lag
            options.append(self.gained(self.direct_path + shown[np.maximum(first, 0)]))
        return max(options) - self.price(0, len(options))

    def interference(self) -> tuple[float, Real]:
        """Noise on single tones, within and outside the delay basis together; also the gain of each receiver."""
        inside = self.flat.reshape(self.error.shape) @ self.evidence.basis.T
        level = (np.abs(self.outside + inside) ** 2).mean(axis=0)
        toll = self.price(1, level.shape[1])
        gain = self.frames * (level - 1.0 - np.log(np.maximum(level, 1e-12)))
        gain = np.where(level > 1.0, np.maximum(gain - toll, 0.0), 0.0).sum(axis=1)
        return float(gain.sum()) or -toll, gain

    def failed(self) -> tuple[float, NDArray[np.intp]]:
        """Take the elements that explain most, one after another, each with what it still follows of its bit."""
        length = float(np.vdot(self.ones, self.ones).real)
        states = self.whitener @ self.states
        states = states - np.outer(self.ones, self.ones.conj() @ states) / length
        common = self.ones.conj() @ self.flat / length
        error = self.flat - np.outer(self.ones, common)
        elements = self.evidence.elements.reshape(states.shape[1], -1)
        power = (np.abs(states) ** 2).sum(axis=0) * _power_rows(elements)
        shown = ((states.conj().T @ error) * elements.conj()).real.sum(axis=1)
        toll = self.price(1, states.shape[1])
        total = 0.0
        chosen: list[int] = []
        for _ in range(max(int(FEW * states.shape[1]), 1)):
            gain = shown * shown / np.maximum(power, 1e-12)
            # An element that fails loses some or all of its response, or shows its inverse; it does not grow.
            gain[(shown > 0.0) | (power < 1e-9)] = 0.0
            gain[chosen] = 0.0
            best = int(np.argmax(gain))
            if gain[best] < toll:
                break
            chosen.append(best)
            total += float(gain[best]) - toll
            overlap = ((states.conj().T @ states[:, best]) * (elements.conj() @ elements[best])).real
            shown = shown - (shown[best] / power[best]) * overlap
        for row in elements[chosen]:
            # Stuck elements also add to the direct path, or take away from it.
            row_power = float((np.abs(row) ** 2).sum())
            part = float((row.conj() * common).real.sum()) / max(row_power, 1e-12)
            gained = length * part * part * row_power - self.price(1)
            if gained > 0.0:
                total += gained
                common = common - part * row
        return (total if chosen else -toll), np.array(chosen, dtype=np.intp)

    def whitened(self, covariance: NDArray[Any]) -> NDArray[Any]:
        """Bring a covariance over frames to white errors."""
        return np.asarray(self.whitener @ covariance @ self.whitener.conj().T)

    def _time(self) -> Real:
        """Time since the change began, to 1; the first frame is already one frame in."""
        time = self.time_s
        step = (time[-1] - time[0]) / max(self.frames - 1, 1) or 1.0
        return np.asarray((time - time[0] + step) / (time[-1] - time[0] + step))

    def _spread(self) -> Real:
        """Covariance of the frames when the surface's coefficients change, Z P₀ Zᴴ."""
        z = self.regressors[:, 1:]
        return np.asarray((z * self.evidence.prior[1:]) @ z.conj().T)

    def _factor(self, column: Real) -> float:
        """Gain when any D numbers times one column of frames are added."""
        power = float(np.vdot(column, column).real)
        return float(_free(_power(column.conj() @ self.flat) / power, self.flat.shape[1]))

    def _averaged(self, covariance: NDArray[Any], column: Real | None) -> float:
        """Gain when the errors have an additional covariance over frames, of the best scale, and a column is free."""
        values, vectors = np.linalg.eigh(covariance)
        values, outputs = np.maximum(values, 0.0), self.flat.shape[1]
        projected = vectors.conj().T @ self.flat
        power = (np.abs(projected) ** 2).sum(axis=1)
        top = 1.0 / max(float(values.mean()), 1e-12)  # a κ that makes the change as strong as the noise
        scaled = (top * KAPPAS)[:, None] * values
        gains = (scaled / (1.0 + scaled)) @ power - outputs * np.log1p(scaled).sum(axis=1)
        if column is not None:
            along = vectors.conj().T @ column
            weight = 1.0 / (1.0 + scaled)
            shown = (weight * along.conj()) @ projected
            lengths = weight @ (np.abs(along) ** 2)
            gains = gains + _free((np.abs(shown) ** 2).sum(axis=1) / lengths, outputs)
        return max(float(gains.max()), 0.0)

    def _noise_power(self) -> tuple[Real, Real]:
        """Power of what the model leaves, inside and outside the basis, and its degrees of freedom, a receiver."""
        power = _powers(self.flat.reshape(self.error.shape)) + _powers(self.outside)
        count = self.frames * self.evidence.basis.shape[0]
        return np.maximum(power, 1e-12), np.full(self.receivers, float(count))


def _free(power: Any, outputs: int) -> Any:
    """Gain of outputs that may take any value, when they take this power in units of their noise."""
    over = np.maximum(power / outputs, 1.0)
    return outputs * (over - 1.0 - np.log(over))


def _power(values: Complex) -> float:
    return float((values.real**2 + values.imag**2).sum())


def _powers(values: Complex) -> Real:
    """Power of each receiver, the middle axis."""
    return np.asarray((values.real**2 + values.imag**2).sum(axis=(0, 2)))


def _power_rows(values: Complex) -> Real:
    return np.asarray((values.real**2 + values.imag**2).sum(axis=1))
