"""What may have changed: explanations of the frames since a change, each with its gain in likelihood less its price.

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

"""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .evidence import Evidence
from .likelihood import along, averaged, power_of, power_rows, powers, times, turns, walked, whitener_of

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Delays tried, from −1/4 to 1/4 of a turn from tone to tone.
DELAYS = 1025
# Largest share of the elements that may fail together and still be a few.
FEW = 1 / 8
# Rates at which motion turns a path, Hz: up to 5 m/s at 3.75 GHz.
MOTION_HZ = np.linspace(-64.0, 64.0, 257)
# Turns of the fastest path within which motion grows evenly; over longer it may also go to and fro.
EVEN_TURNS = 0.5
# Factors of a receiver's gain tried.
GAINS = np.geomspace(0.05, 20.0, 241)
# Lags of the panel tried, frames.
LAGS = (1, 2, 3)


class Explanations:
    """What may explain frames from an onset on; the methods named after kinds give gain less price.

    Parameters
    ----------
    evidence : Evidence
    onset : int
        First frame that is looked at.
    """

    def __init__(self, evidence: Evidence, onset: int) -> None:
        self.evidence = evidence
        self.heard = evidence.outputs[onset:]
        self.frames, self.receivers, self.size = self.heard.shape
        self.regressors, self.states = evidence.regressors[onset:], evidence.states[onset:]
        self.outside, self.time_s = evidence.outside[onset:], evidence.time_s[onset:]
        self.direct_path = evidence.model[0]
        shown = evidence.bent
        self.bent, self.earlier = shown[onset:], shown[:onset]  # surface path
        self.error = self.heard - self.direct_path - self.bent
        # The model is an estimate: what it has wrong hangs together over frames, and is whitened away.
        self.whitener = whitener_of(np.eye(self.frames) + evidence.doubt[onset:, onset:])
        self.flat = self.white(self.error).reshape(self.frames, -1)
        self.ones = self.whitener @ np.ones(self.frames)
        self.time = self._time()
        self.direct_white = self.ones[:, None, None] * self.direct_path
        self.surface_white = self.white(self.bent)
        self.observations = 2 * self.heard.size

    def white(self, values: Complex) -> Complex:
        """Whiten over frames, the first axis."""
        return times(self.whitener, values)

    def gained(self, model: Complex) -> float:
        """Gain in likelihood of another model, shape (B, R, Q)."""
        return power_of(self.flat) - power_of(self.white(self.heard - model))

    def price(self, numbers: float, places: float = 1.0) -> float:
        """Price of so many real numbers fitted, and of a choice among places."""
        return 0.5 * numbers * math.log(self.observations) + math.log(places)

    def direct(self) -> float:
        """Say that the direct path is another one, walks off, or has another strength."""
        ramp = self.whitener @ self.time
        walk = walked(self.time, self.whitener, self.flat)
        best = max(along(self.ones, self.flat), along(ramp, self.flat), walk) - self.price(1, 5)
        shown = np.einsum("brq,brq->r", self.direct_white.conj(), self.flat.reshape(self.error.shape))
        power = np.maximum(powers(self.direct_white), 1e-12)
        turned = float((np.abs(shown) ** 2 / power).sum()) - self.price(2 * self.receivers, 5)
        straight = float((shown.real**2 / power).sum()) - self.price(self.receivers, 5)
        return max(best, turned, straight)

    def channel(self) -> float:
        """Say that all coefficients are others."""
        # Five times as rare as another direct path, which is priced for the five forms it comes in.
        return averaged(self.whitened(self._spread()), self.flat, self.ones) - self.price(2, 5)

    def motion(self) -> float:
        """Let the channel depart more and more, or either path turn."""
        spread, time = self._spread(), self.time
        kernels = [np.outer(time, time)]
        if MOTION_HZ[-1] * (self.time_s[-1] - self.time_s[0]) > EVEN_TURNS:
            kernels.append(np.minimum.outer(time, time))
        ramp = self.whitener @ time
        grown = max(averaged(self.whitened(spread * kernel), self.flat, ramp) for kernel in kernels)
        return max(grown - self.price(2, 3), self._turning())

    def _turning(self) -> float:
        """Gain when either path turns evenly, each by its own rate, from where it stood or from some phase on."""
        turned = turns(MOTION_HZ, self.time_s - self.time_s[0])  # (rates, B)
        options = []
        for free in (False, True):

            def best(model: Complex, heard: Complex, free: bool = free) -> Complex:
                """Find the turns (B, R) that fit best."""
                spectrum = turned.conj() @ self._product(model, heard)
                along = np.abs(spectrum) if free else spectrum.real
                place = np.argmax(along, axis=0)
                start = np.angle(spectrum[place, np.arange(self.receivers)]) if free else np.zeros(self.receivers)
                return np.asarray((turned[place].T * np.exp(1j * start))[:, :, None])

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
        """Let elements part that the basis has as one."""
        states = self.states
        return averaged(self.whitened(states @ states.T), self.flat, self.ones) - self.price(2)

    def noise(self) -> float:
        """Give the noise of each receiver another power."""
        power, count = self._noise_power()
        level = power / count
        return float((count * (level - 1.0 - np.log(level))).sum()) - self.price(self.receivers)

    def gain(self) -> tuple[float, tuple[Complex, Complex]]:
        """Let both paths grow by one factor, the noise with them or not; also return the factors that mend."""
        power, count = self._noise_power()
        model = self.direct_white + self.surface_white
        model_power = np.maximum(powers(model), 1e-12)
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
        """Turn the paths, together or apart, once or on and on; also return the factors that mend."""
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
        spectrum = np.abs(turns(-rates, index) @ both).sum(axis=1)
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
        # Every 1/2048 of a turn a tone: of the finer Fourier transform, half, from the negative ones on.
        size = 2 * (DELAYS - 1)
        shifts = np.arange(-size // 4, size // 4 + 1)
        found = np.fft.ifft(spectrum, size, axis=1)[:, shifts]
        best = np.argmax(np.abs(found), axis=1)
        turn = np.exp(1j * np.angle(found[np.arange(self.receivers), best]))
        delayed = np.exp(-2j * np.pi * np.outer(shifts[best] / size, tones))
        shifted = (model * (turn[:, None] * delayed)) @ basis.conj()
        return self.gained(shifted) - self.price(2 * self.receivers, DELAYS / 8)

    def mismatch(self) -> float:
        """Let the panel show inverse patterns, or those of earlier frames."""
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
        power = (np.abs(states) ** 2).sum(axis=0) * power_rows(elements)
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

    def _noise_power(self) -> tuple[Real, Real]:
        """Power of what the model leaves, inside and outside the basis, and its degrees of freedom, a receiver."""
        power = powers(self.flat.reshape(self.error.shape)) + powers(self.outside)
        count = self.frames * self.evidence.basis.shape[0]
        return np.maximum(power, 1e-12), np.full(self.receivers, float(count))
