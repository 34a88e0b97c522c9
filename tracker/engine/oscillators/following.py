"""Following a receiver whose oscillator runs free: acquire the offset, keep the phases, judge the lock.

=========  ================================================  ====================================================
lock       what is done with a burst                         left when
=========  ================================================  ====================================================
searching  offset by `acquisition`; frames turned by it      the model explains what is heard: locked
locked     phases and rates by `phases`                      it explains too little several bursts running: lost
lost       offset searched again; frames are left out        it explains again: locked; too long: searching
=========  ================================================  ====================================================

The frames are turned back by the phase of the surface path, so that the patterns stay real regressors and the
covariance real. The direct path then still turns by the difference of the two: the estimate of it is turned along
from burst to burst, and its turning within a burst, known from the estimate, is taken off the frames.
"""

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .acquisition import find_offset
from .phases import DIRECT, SURFACE, Overlap, PhaseLoops
from .timing import TimingLoop

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Largest offset looked for, Hz.
MOST_OFFSET_HZ = 1000.0
# Peak over floor of the spectrum that counts as an offset found.
CLEAR = 3.0
# Share of the model's amplitude that must be found in the frames to gain and to keep the lock.
GAINED, KEPT = 0.6, 0.3
# Power of the model in a burst, in units of the noise, below which nothing can be judged.
LEAST_MODEL = 40.0
# Bursts in a row that explain too little before the lock counts as lost.
LOST_AFTER = 3
# A gain step is one that both paths show alike, this far from 1 and this many standard deviations, after so many bursts
# in which the model's amplitude was right.
LEAST_STEP, STEP_DEVIATIONS, STEADY_BURSTS = 0.1, 5.0, 8
# Share of the power heard beyond the noise that a step must explain: frames of slipped phase show the model as little
# as weak ones do, but they are not weak.
EXPLAINED = 0.8


class Lock(StrEnum):
    """How far the phases can be trusted."""

    SEARCHING = "searching"
    LOCKED = "locked"
    LOST = "lost"


@dataclass(frozen=True, slots=True, eq=False)
class Turned:
    """Frames of one receiver as the estimator takes them.

    Parameters
    ----------
    outputs : ndarray of complex, shape (B, Q)
        Turned back, with the direct path standing still where it stands at the last frame.
    direct : ndarray of complex, shape (Q,)
        Estimate of the direct path there.
    turn : complex
        By which the estimate was turned to get there.
    gain : float
        By which the signal has grown at this burst: a step of gain or transmitted power; 1 as a rule. The outputs and
        `direct` are in the new unit already.
    lost : bool
        True at the burst at which the lock was lost.
    """

    outputs: Complex
    direct: Complex
    turn: complex
    gain: float
    lost: bool


class Following:
    """Follows one receiver.

    Parameters
    ----------
    patience : int
        Frames left out after a loss of lock before the channel itself is taken to have changed.
    timing : TimingLoop or None
        Follows a delay common to all tones; None when none is to be followed.
    """

    def __init__(self, patience: int, timing: TimingLoop | None = None) -> None:
        self._patience = patience
        self._timing = timing
        self.loops = PhaseLoops()
        self.lock = Lock.SEARCHING
        self.quality = 0.0
        self._time_ns: int | None = None  # of the loops' state
        self._stands_at = 0.0  # phase of the direct path against the surface path's that the estimate is turned to
        self._weak = 0
        self._left_out = 0
        self._steady = 0

    def begin(self, time_ns: NDArray[np.int64]) -> None:
        """Go forward to a burst whose frames have these times, shape (B,)."""
        middle_ns = int(time_ns[0] + (time_ns[-1] - time_ns[0]) // 2)
        elapsed_s = (middle_ns - self._time_ns) / 1e9 if self._time_ns is not None else 0.0
        count = time_ns.shape[0]
        spacing_s = float(time_ns[-1] - time_ns[0]) / 1e9 / (count - 1) if count > 1 else elapsed_s
        self.loops.sense_spacing(spacing_s)
        self.loops.predict(elapsed_s)
        if self._timing is not None:
            self._timing.predict(elapsed_s)
        self._time_ns = middle_ns

    def take_off_delay(self, tones: Complex) -> Complex:
        """Turn tones (B, K) back by the delay followed."""
        return self._timing.take_off(tones) if self._timing is not None else tones

    def turn(
        self,
        patterns: NDArray[np.uint8],
        outputs: Complex,
        direct: Complex,
        surface: Complex,
        time_ns: NDArray[np.int64],
        weight: float,
    ) -> Turned:
        """Follow the burst that was begun, and turn it back.

        Parameters
        ----------
        patterns : ndarray of uint8, shape (B, bytes)
        outputs : ndarray of complex, shape (B, Q)
            In units of the noise.
        direct, surface : ndarray of complex, shapes (Q,), (B, Q)
            What the estimate says of either path, turned back as the frames before were.
        time_ns : ndarray of int64, shape (B,)
        weight : float
            Inverse variance of an output about the model.
        """
        time_s = (time_ns - (self._time_ns if self._time_ns is not None else time_ns[0])) / 1e9
        back = np.exp(-1j * self._stands_at)
        direct = direct * back
        overlap = Overlap.of(outputs, direct, surface)
        if self.lock is not Lock.LOCKED:
            self._acquire(patterns, outputs, overlap, time_s)
        self.loops.measure(overlap, time_s, weight)
        lost = self._judge(overlap, time_s)
        phase_d, phase_s = self.loops.phases(time_s)
        gain = self._gain_step(overlap, outputs, phase_d, phase_s, weight)
        direct, surface = gain * direct, gain * surface
        if self._timing is not None and self.lock is Lock.LOCKED:
            model = np.exp(1j * phase_d)[:, None] * direct + np.exp(1j * phase_s)[:, None] * surface
            self._timing.measure(model, outputs - model, weight)
        difference = np.exp(1j * (phase_d - phase_s))
        self._stands_at = float(phase_d[-1] - phase_s[-1])
        turn = complex(back * difference[-1])
        if self.lock is Lock.LOST:
            # What the estimate says in place of what was heard: the frames are left out.
            return Turned(surface + difference[-1] * direct, difference[-1] * direct, turn, gain, lost)
        turned = outputs * np.exp(-1j * phase_s)[:, None] - (difference - difference[-1])[:, None] * direct
        return Turned(turned, difference[-1] * direct, turn, gain, lost)

    def lead(self, time_ns: int) -> float:
        """Phase by which the direct path will have turned against the surface path at a time, rad."""
        if self._time_ns is None:
            return 0.0
        ahead_s = (time_ns - self._time_ns) / 1e9
        phase_d, phase_s = self.loops.phases(np.array([ahead_s]))
        return float(phase_d[0] - phase_s[0]) - self._stands_at

    @property
    def phases(self) -> tuple[float, float]:
        """Phases of the direct and of the surface path, rad, within ±π."""
        direct, surface = self.loops.state[[DIRECT, SURFACE]]
        return _wrapped(float(direct)), _wrapped(float(surface))

    @property
    def offset_hz(self) -> float:
        """Frequency offset of the surface path, Hz."""
        return float(self.loops.state[SURFACE + 1] / (2 * np.pi))

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "loops": self.loops.snapshot(),
            "lock": str(self.lock),
            "quality": self.quality,
            "time_ns": self._time_ns,
            "stands_at": self._stands_at,
            "weak": self._weak,
            "left_out": self._left_out,
            "steady": self._steady,
            "timing": self._timing.snapshot() if self._timing is not None else None,
        }

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        self.loops.load(snapshot["loops"])
        self.lock = Lock(snapshot["lock"])
        self.quality = float(snapshot["quality"])
        self._time_ns = snapshot["time_ns"]
        self._stands_at = float(snapshot["stands_at"])
        self._weak, self._left_out = int(snapshot["weak"]), int(snapshot["left_out"])
        self._steady = int(snapshot["steady"])
        if self._timing is not None:
            self._timing.load(snapshot["timing"])

    def _acquire(self, patterns: NDArray[np.uint8], outputs: Complex, overlap: Overlap, time_s: Real) -> None:
        power = overlap.direct_power * time_s.shape[0] + float(overlap.surface_power.sum())
        model = None
        if power > LEAST_MODEL:
            model = (overlap.direct + overlap.surface) * np.sqrt(time_s.shape[0] / power)
        found = find_offset(patterns, outputs, time_s, MOST_OFFSET_HZ, model)
        if found is not None and found.clarity > CLEAR:
            self.loops.turn_rates(2 * np.pi * found.hz, 2 * np.pi * found.spread_hz)

    def _judge(self, overlap: Overlap, time_s: Real) -> bool:
        """Update lock and quality; True when the lock was lost just now."""
        frames = time_s.shape[0]
        phase_d, phase_s = self.loops.phases(time_s)
        cross = float((np.exp(1j * (phase_s - phase_d)) * overlap.cross).real.sum())
        power = overlap.direct_power * frames + float(overlap.surface_power.sum()) + 2 * cross
        if power < LEAST_MODEL:
            return False
        heard = (np.exp(-1j * phase_d) * overlap.direct + np.exp(-1j * phase_s) * overlap.surface).real.sum()
        self.quality = float(heard) / power
        if self.quality > GAINED:
            self.lock, self._weak, self._left_out = Lock.LOCKED, 0, 0
            return False
        if self.lock is Lock.LOCKED:
            self._weak = self._weak + 1 if self.quality < KEPT else 0
            if self._weak >= LOST_AFTER:
                self.lock, self._left_out = Lock.LOST, 0
                return True
        elif self.lock is Lock.LOST:
            self._left_out += frames
            if self._left_out > self._patience:
                self.lock = Lock.SEARCHING
        return False

    def _gain_step(self, overlap: Overlap, outputs: Complex, phase_d: Real, phase_s: Real, weight: float) -> float:
        """Return the step of gain that the burst shows, 1 for none."""
        if self.lock is not Lock.LOCKED:
            self._steady = 0
            return 1.0
        if abs(self.quality - 1.0) < LEAST_STEP:
            self._steady += 1
            return 1.0
        if self._steady < STEADY_BURSTS:
            return 1.0
        cross = float((np.exp(1j * (phase_s - phase_d)) * overlap.cross).real.sum())
        direct_power = overlap.direct_power * phase_d.shape[0]
        matrix = np.array([[direct_power, cross], [cross, float(overlap.surface_power.sum())]])
        heard = np.array(
            [
                float((np.exp(-1j * phase_d) * overlap.direct).real.sum()),
                float((np.exp(-1j * phase_s) * overlap.surface).real.sum()),
            ]
        )
        covariance = np.linalg.inv(2.0 * weight * matrix + 1e-9 * np.eye(2))
        amplitude = np.linalg.solve(matrix + 1e-9 * np.eye(2), heard)
        apart = (amplitude[0] - amplitude[1]) ** 2 / (covariance[0, 0] + covariance[1, 1] - 2 * covariance[0, 1])
        deviations = abs(self.quality - 1.0) * np.sqrt(2.0 * weight * float(matrix.sum()))
        if deviations < STEP_DEVIATIONS or apart > STEP_DEVIATIONS**2:
            return 1.0
        # The noise has power 1 an output, give or take three standard deviations of their sum.
        beyond = float(np.vdot(outputs, outputs).real) - outputs.size - 3.0 * math.sqrt(outputs.size)
        if self.quality**2 * float(matrix.sum()) < EXPLAINED * beyond:
            return 1.0
        return self.quality


def _wrapped(phase: float) -> float:
    return float((phase + np.pi) % (2 * np.pi) - np.pi)
