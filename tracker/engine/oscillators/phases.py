"""Following the phases of the direct and of the surface path, each with its rate.

Motion and free-running oscillators turn both paths, each by its own phase. Within a burst a path turns by
φ + ω t; from burst to burst the four numbers (φ, ω of either path) are the state of a Kalman filter, which is two
second-order loops with gains that follow from how well each path is seen. A burst measures them by a few
Gauss-Newton steps, the current channel estimate being the model::

    y_b = exp(iφ_d(t_b)) m_d + exp(iφ_s(t_b)) m_s(b) + noise

All that a burst says about phases lies in five numbers a frame (`Overlap`), so the steps cost next to nothing.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Gauss-Newton steps a burst; from a good prediction two are enough.
STEPS = 4
# Random walk of the phases, rad²/s: what both share (oscillators), and what each has (waves that come and go).
COMMON_PHASE_WALK = 2.0
OWN_PHASE_WALK = 0.5
# Random walk of the rates, (rad/s)²/s: as above; a terminal at 3.75 GHz that brakes with 1 m/s² gives 80 rad/s in 1 s.
COMMON_RATE_WALK = 2000.0
OWN_RATE_WALK = 1000.0
# Variance of the predicted phase, rad², from which the steps do not start at the prediction: they might not find home.
FAR = 0.1
# Uncertainty of the rates before anything is known, rad/s: what is common, and what motion makes different.
FIRST_COMMON_RATE = 200.0
FIRST_OWN_RATE = 200.0
# Common turn from frame to frame, rad, that is granted at first: beyond half a turn rates are not told apart anyway.
GRANTED_COMMON = 2.0
# Spacing of the frames, s, up to which motion is followed in full. Slower sounding cannot follow motion, and must not
# let the surface's phase stray from the direct path's while the surface is not known yet.
FULL_MOTION_S = 1e-3

DIRECT, SURFACE = 0, 2  # where the phase of either path stands in the state; its rate follows


@dataclass(frozen=True, slots=True, eq=False)
class Overlap:
    """What the frames of a burst have in common with what the model says, summed over receivers and delays.

    Parameters
    ----------
    direct, surface : ndarray of complex, shape (B,)
        Σ conj(m) y of either path.
    direct_power : float
        Σ |m_d|².
    surface_power : ndarray, shape (B,)
        Σ |m_s|².
    cross : ndarray of complex, shape (B,)
        Σ conj(m_d) m_s.
    """

    direct: Complex
    surface: Complex
    direct_power: float
    surface_power: Real
    cross: Complex

    @classmethod
    def of(cls, outputs: Complex, direct: Complex, surface: Complex) -> "Overlap":
        """Compute the sums.

        Parameters
        ----------
        outputs : ndarray of complex, shape (B, D)
            y, in units of the noise.
        direct : ndarray of complex, shape (D,)
            m_d.
        surface : ndarray of complex, shape (B, D)
            m_s.
        """
        conjugate = surface.conj()
        return cls(
            direct=outputs @ direct.conj(),
            surface=(conjugate * outputs).sum(axis=1),
            direct_power=float((np.abs(direct) ** 2).sum()),
            surface_power=np.asarray((np.abs(surface) ** 2).sum(axis=1)),
            cross=surface @ direct.conj(),
        )


class PhaseLoops:
    """State of the phases.

    Attributes
    ----------
    state : ndarray, shape (4,)
        φ_d, ω_d, φ_s, ω_s at `time_s`; rad and rad/s.
    covariance : ndarray, shape (4, 4)
    """

    def __init__(self) -> None:
        self.state: Real = np.zeros(4)
        self.covariance: Real = np.eye(4)
        self._motion = 0.0  # share of motion that is followed; 0 until the spacing of the frames is known

    def sense_spacing(self, spacing_s: float) -> None:
        """Learn how far apart frames are, once: it bounds what can be followed."""
        if self._motion or spacing_s <= 0:
            return
        self._motion = min(1.0, FULL_MOTION_S / spacing_s)
        self._forget_rates(min(FIRST_COMMON_RATE, GRANTED_COMMON / spacing_s))

    def predict(self, elapsed_s: float) -> None:
        """Go forward in time."""
        step = np.eye(4)
        step[DIRECT, DIRECT + 1] = step[SURFACE, SURFACE + 1] = elapsed_s
        self.state = step @ self.state
        self.covariance = step @ self.covariance @ step.T + self._walk(elapsed_s)

    def turn_rates(self, rate: float, spread: float) -> None:
        """Take a common rate found by acquisition, rad/s, known to ± `spread`."""
        self.state[[1, 3]] = rate
        self._forget_rates(spread)
        self.covariance[[0, 2], [0, 2]] = np.pi**2

    def measure(self, overlap: Overlap, time_s: Real, weight: float) -> None:
        """Correct the state by what a burst shows.

        Parameters
        ----------
        overlap : Overlap
        time_s : ndarray, shape (B,)
            Of the frames, about the time of the state.
        weight : float
            Inverse variance of an output about the model: 1 when the model is exact.
        """
        prior_state, information = self.state, np.linalg.inv(self.covariance)
        state = prior_state.copy()
        if self.covariance[SURFACE, SURFACE] > FAR:
            state[[DIRECT, SURFACE]] += self._common_turn(overlap, time_s, state)
        measured = np.zeros((4, 4))
        for _ in range(STEPS):
            slope, measured = self._slope(overlap, time_s, state)
            # An output has unit complex variance, so each of its two real parts has information 2.
            slope, measured = 2.0 * weight * slope, 2.0 * weight * measured
            step = np.linalg.solve(information + measured, slope - information @ (state - prior_state))
            state = state + step
        self.state = state
        covariance = np.linalg.inv(information + measured)
        self.covariance = 0.5 * (covariance + covariance.T)

    def _forget_rates(self, common: float) -> None:
        """Set the uncertainty of the rates: what is common to both, and what each has of its own."""
        self.covariance[[1, 3], :] = self.covariance[:, [1, 3]] = 0.0
        own = FIRST_OWN_RATE * self._motion**1.5
        self.covariance[np.ix_([1, 3], [1, 3])] = common**2 + own**2 * np.eye(2)

    def phases(self, time_s: Real) -> tuple[Real, Real]:
        """Phases of the direct and of the surface path at times about that of the state, rad."""
        return (
            self.state[DIRECT] + self.state[DIRECT + 1] * time_s,
            self.state[SURFACE] + self.state[SURFACE + 1] * time_s,
        )

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "state": self.state.copy(),
            "covariance": self.covariance.copy(),
            "motion": self._motion,
        }

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        self.state = np.array(snapshot["state"], dtype=np.float64)
        self.covariance = np.array(snapshot["covariance"], dtype=np.float64)
        self._motion = float(snapshot["motion"])

    def _walk(self, elapsed_s: float) -> Real:
        """Covariance that random walks of phase and rate gather: the usual integrated-walk form, common and own."""
        dt = elapsed_s

        def block(phase: float, rate: float) -> Real:
            return np.array([[phase * dt + rate * dt**3 / 3, rate * dt**2 / 2], [rate * dt**2 / 2, rate * dt]])

        own = block(OWN_PHASE_WALK * self._motion**2, OWN_RATE_WALK * self._motion**3)
        common = block(COMMON_PHASE_WALK, COMMON_RATE_WALK)
        return np.block([[own + common, common], [common, own + common]])

    @staticmethod
    def _common_turn(overlap: Overlap, time_s: Real, state: Real) -> float:
        """Turn of both paths together that the burst shows at a glance, rad."""
        turn_d = np.exp(-1j * (state[DIRECT] + state[DIRECT + 1] * time_s))
        turn_s = np.exp(-1j * (state[SURFACE] + state[SURFACE + 1] * time_s))
        return float(np.angle((turn_d * overlap.direct + turn_s * overlap.surface).sum()))

    @staticmethod
    def _slope(overlap: Overlap, time_s: Real, state: Real) -> tuple[Real, Real]:
        """Slope of −‖residual‖²/2 in the four unknowns, and the Gauss-Newton matrix."""
        turn_d = np.exp(-1j * (state[DIRECT] + state[DIRECT + 1] * time_s))
        turn_s = np.exp(-1j * (state[SURFACE] + state[SURFACE + 1] * time_s))
        cross = turn_d * turn_s.conj() * overlap.cross  # conj(m_d) m_s as turned
        direct = (turn_d * overlap.direct - cross).imag
        surface = (turn_s * overlap.surface - cross.conj()).imag
        slope = np.array([direct.sum(), direct @ time_s, surface.sum(), surface @ time_s])
        matrix = np.zeros((4, 4))
        powers = (np.full(time_s.shape, overlap.direct_power), cross.real, overlap.surface_power)
        for row, column, power in ((0, 0, powers[0]), (0, 2, powers[1]), (2, 2, powers[2])):
            first, second = power @ time_s, power @ (time_s * time_s)
            moments = np.array([[power.sum(), first], [first, second]])
            matrix[row : row + 2, column : column + 2] = moments
            matrix[column : column + 2, row : row + 2] = moments
        return slope, matrix
