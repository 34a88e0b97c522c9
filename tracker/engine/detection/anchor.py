"""What frames show against a slow average of the estimate, which does not take a change in as the filter does.

Innovations show a change only until the filter has taken it in: a filter that grants the channel much motion follows a
weak change within a burst or two, before anybody can be sure of it. So frames are held against an average C̄ of the
estimates of some thousand frames. With E = Y − Z C the innovations of a block, C the estimate that they were held
against::

    L = Zᴴ E + B (C − C̄)  ≈  Zᴴ (Y − Z C̄),    as Zᴴ Z is B I on average over patterns

The direct path's row of L needs no such average: it is Σ_b e_b + (Σ_b z_b)(C − C̄). L holds all there is to be known of
a change that stays. A change of unknown shape shows as power of L, where it drowns in the noise of all directions; what
often happens has a shape, and shows in that direction alone (matched filters, for M = C̄ᴴ L over the delays)::

    Re tr M / √(B |C̄|²)        gain           Re d̄ᴴ l / √(B |d̄|²)       direct gain
    Im tr M / √(B |C̄|²)        phase          Im d̄ᴴ l / √(B |d̄|²)       direct phase
    Im tr Aᴴ M / √(B |C̄|²)     delay, A = Vᵀ diag(k) V* of the delay basis V over tones k about their middle
    −Re c̄ₙᴴ lₙ / |c̄ₙ|          element n: the largest of N normal variables, of a scale that is measured

Powers of unknown scale become normal by their cube root (Wilson & Hilferty, Proc. Nat. Acad. Sci. 17, 1931). A new
channel is new in both paths: "channel" is the sum of the surface's and the direct path's deviates (Stouffer's method).

Columns that were learned or worked out hear patterns with very different strength: Zᴴ Z is far from B I, a few frames
make up most of L, and its power has no known distribution. There a new channel is left to the innovations.

What drowns in the noise of one sample adds up: a weak new channel shows in the sum of L over several, and in how far
the estimate of the surface has moved from its average.

All is kept in single precision, which is far below the noise and takes half the time.
"""

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from .drift import Reading, largest

Single = NDArray[np.complex64]
Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Frames that the average goes back.
MEMORY_FRAMES = 2048
# Samples after which the filters are made anew from the average: it is as good as the same until then.
EVERY = 8
# Samples that are added up for changes too weak for one.
LONG = 8
# Frames that a sample rests on at least.
LEAST_FRAMES = 16
FLOOR = 1e-30
# Fewer elements than these are not told apart.
FEWEST = 8
# Samples over which the scale of what single elements show is averaged, and what one sample may count at most.
SCALE_MEMORY, SCALE_BOUND = 256, 2.0

ANCHORED = DIRECT, CHANNEL, GAIN, PHASE, DELAY, DIRECT_GAIN, DIRECT_PHASE, ELEMENT, SURFACE_MOVED, CHANNEL_LONG = (
    *("direct path", "channel", "gain", "phase", "delay", "direct gain", "direct phase", "element", "surface moved"),
    "channel over longer",
)


class Scale:
    """Mean square of normal variables, N a sample, and the largest loss among them as a standard normal deviate."""

    def __init__(self) -> None:
        self._square, self._samples = 0.0, 0

    def most(self, along: NDArray[np.float32]) -> float:
        """Turn the largest loss of a sample, shape (N,), to a deviate; few that lost much hardly widen the scale."""
        count = along.size
        square = float(along @ along) / count
        if self._samples:
            square = min(square, SCALE_BOUND * self._square)
        self._samples = min(self._samples + 1, SCALE_MEMORY)
        deviate = -float(along.min()) / math.sqrt((self._square or square) + FLOOR)
        self._square += (square - self._square) / self._samples
        return largest(float(ndtr(-deviate)), count)

    def snapshot(self) -> list[float]:
        """All state."""
        return [self._square, float(self._samples)]

    def load(self, snapshot: Sequence[float]) -> None:
        """Take over a snapshot."""
        self._square, self._samples = float(snapshot[0]), int(snapshot[1])


class Anchor:
    """The average, and what frames show against it.

    Parameters
    ----------
    basis : ndarray of complex, shape (K, Q)
        Delay basis.
    """

    def __init__(self, basis: Complex) -> None:
        tones, self._size = basis.shape
        slope = np.linspace(-1.0, 1.0, tones) if tones > 1 else np.zeros(1)
        self._slope: Single = np.asarray((basis.T * slope) @ basis.conj()).astype(np.complex64)
        self.forget()

    def forget(self) -> None:
        """Begin anew: the estimate was changed by hand."""
        self._average: Single | None = None
        self._apart: Single = np.zeros((0, 0), dtype=np.complex64)  # C − C̄ as the sample begins
        self._set_filters(self._apart)
        self._noise: Real = np.zeros(0)
        self._averaged, self._samples = 0, 0  # frames in the average, samples given
        self._lost = Scale()
        self._begin()
        self._begin_long()

    def _begin_long(self) -> None:
        self._added: Single | None = None  # L, its first row exact
        self._added_frames = 0

    def _begin(self) -> None:
        self._even = True  # whether all patterns are heard with the same strength
        self._shown: Single | None = None  # Zᴴ E
        self._sounded: NDArray[Any] = np.zeros(0, dtype=np.float32)  # Σ z
        self._frames = 0

    def _set_filters(self, average: Single) -> None:
        """Make the matched filters: of the whole, of a delay, and of each row."""
        self._whole = average.copy()
        self._delayed = (average.reshape(-1, self._size) @ self._slope).reshape(average.shape)
        self._measure_filters()

    def _measure_filters(self) -> None:
        self._lengths = _length(self._whole), _length(self._delayed), _length(self._whole[:1])
        self._set_rows()

    def _set_rows(self) -> None:
        parts = self._whole.view(np.float32)[1:]
        self._rows = parts / np.sqrt(np.einsum("nd,nd->n", parts, parts)[:, None] + np.float32(FLOOR))

    def take(self, regressors: NDArray[Any], innovation: Complex) -> None:
        """Take in frames: regressors (B, n) in single precision, and innovations (B, R Q)."""
        if self._average is None:
            return
        self._even = not np.iscomplexobj(regressors)
        left = innovation.astype(np.complex64)
        shown = _product(regressors.T if self._even else regressors.conj().T, left)
        sounded = np.ones(regressors.shape[0], dtype=np.float32) @ regressors
        if self._shown is None:
            self._shown, self._sounded = shown, sounded
        else:
            self._shown += shown
            self._sounded = self._sounded + sounded
        self._frames += regressors.shape[0]

    def readings(self, coefficients: Complex, noise: Real) -> list[Reading]:
        """Give a sample, when enough frames are in, and let the average follow.

        Parameters
        ----------
        coefficients : ndarray of complex, shape (n, R Q)
            The estimate now, the direct path first, in units of the noise.
        noise : ndarray, shape (R,)
            Its power.
        """
        average, apart, shown = self._average, self._apart, self._shown
        if average is None or average.shape != coefficients.shape:
            self.forget()
            self._average, self._noise = coefficients.astype(np.complex64), noise
            self._apart = np.zeros_like(self._average)
            return []
        if self._frames < LEAST_FRAMES or shown is None:
            return []
        self._change_unit(noise)
        if self._samples % EVERY == 0:
            self._set_filters(average)
        self._samples += 1
        direct = shown[0] + _product(self._sounded, apart)
        shown += np.float32(self._frames) * apart
        readings = self._against(shown, direct, 1.0 / math.sqrt(self._frames))
        if self._even:
            readings += self._over_longer(shown, direct)
        now = coefficients.astype(np.complex64)
        np.subtract(now, average, out=apart)
        readings.append(Reading(SURFACE_MOVED, math.log(_length(apart[1:]))))
        self._averaged = min(self._averaged + self._frames, MEMORY_FRAMES)
        apart *= np.float32(self._averaged / (self._averaged + self._frames))
        np.subtract(now, apart, out=average)
        self._begin()
        return readings

    def _over_longer(self, left: Single, direct: Single) -> list[Reading]:
        """Add a sample up; say what several show once they are enough."""
        left[0] = direct
        if self._added is None:
            self._added = left
        else:
            self._added += left
        self._added_frames += self._frames
        if self._samples % LONG:
            return []
        power, surface, freedom = _powers(self._added, self._added[0], self._added_frames)
        self._begin_long()
        return [Reading(CHANNEL_LONG, _normal(surface, freedom) + _normal(power, left.shape[1]))]

    def _change_unit(self, noise: Real) -> None:
        """Bring average and all to units of the noise now."""
        if self._average is None:
            return
        unit = np.sqrt(self._noise / noise).astype(np.float32)
        factor = unit[0] if unit.size == 1 else np.repeat(unit, self._size)
        self._average *= factor
        self._apart *= factor
        self._noise = noise

    def _against(self, left: Single, direct: Single, unit: float) -> list[Reading]:
        """Say what frames show: L (n, R Q), its direct path's row, and one over the square root of the frames."""
        outputs, (whole, delayed, alone) = left.shape[1], self._lengths
        along = complex(np.vdot(self._whole, left)) * (unit / whole)
        delay = complex(np.vdot(self._delayed, left)).imag * (unit / delayed)
        along_direct = complex(np.vdot(self._whole[0], direct)) * (unit / alone)
        power, surface, freedom = _powers(left, direct, self._frames)
        readings = [
            Reading(DIRECT, power, outputs),
            Reading(GAIN, along.real),
            Reading(PHASE, along.imag),
            Reading(DELAY, delay),
            Reading(DIRECT_GAIN, along_direct.real),
            Reading(DIRECT_PHASE, along_direct.imag),
        ]
        if self._even:
            readings.append(Reading(CHANNEL, _normal(surface, freedom) + _normal(power, outputs)))
        if self._even and left.shape[0] > FEWEST:
            along_rows = np.einsum("nd,nd->n", self._rows, left.view(np.float32)[1:])
            along_rows *= np.float32(unit)
            readings.append(Reading(ELEMENT, self._lost.most(along_rows)))
        return readings

    def _turning(self) -> list[Single]:
        """All that turns and grows with the estimate."""
        turning = (self._average, self._apart, self._whole, self._delayed, self._added)
        return [one for one in turning if one is not None]

    def turn_direct(self, columns: slice, turn: complex) -> None:
        """Turn the direct path along."""
        if self._average is not None:
            for one in self._turning():
                one[:1, columns] *= turn

    def amplify(self, columns: slice, gain: float) -> None:
        """Make the average stronger."""
        if self._average is not None:
            for one in self._turning():
                one[:, columns] *= gain
            self._measure_filters()

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "average": _copied(self._average),
            "apart": self._apart.copy(),
            "whole": self._whole.copy(),
            "delayed": self._delayed.copy(),
            "noise": self._noise.copy(),
            "shown": _copied(self._shown),
            "sounded": self._sounded.copy(),
            "counts": [self._averaged, self._samples, self._frames],
            "lengths": list(self._lengths),
            "lost": self._lost.snapshot(),
            "added": _copied(self._added),
            "added_frames": self._added_frames,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._average, self._shown = _copied(snapshot["average"]), _copied(snapshot["shown"])
        self._apart, self._whole = _single(snapshot["apart"]), _single(snapshot["whole"])
        self._delayed, self._sounded = _single(snapshot["delayed"]), np.array(snapshot["sounded"])
        self._noise = np.array(snapshot["noise"], dtype=np.float64)
        self._averaged, self._samples, self._frames = (int(count) for count in snapshot["counts"])
        self._lost.load(snapshot["lost"])
        self._added, self._added_frames = _copied(snapshot["added"]), int(snapshot["added_frames"])
        whole, delayed, direct = (float(length) for length in snapshot["lengths"])
        self._lengths = whole, delayed, direct
        self._set_rows()


def _powers(left: Single, direct: Single, frames: int) -> tuple[float, float, int]:
    """Mean powers of what so many frames show of the direct path and of the surface, and freedom of the latter."""
    rows, outputs = left.shape
    surface = _length(left[1:]) ** 2 / (frames * max(rows - 1, 1) * outputs)
    return max(_length(direct) ** 2 / (frames * outputs), FLOOR), surface, outputs * min(rows - 1, frames)


def _normal(power: float, degrees: int) -> float:
    """Turn a power of about this many degrees of freedom to a normal variable of about unit variance."""
    return 3.0 * math.sqrt(degrees) * math.cbrt(power)


def _length(values: Single) -> float:
    return math.sqrt(float(np.vdot(values, values).real)) + FLOOR


def _product(left: NDArray[Any], right: Single) -> Single:
    """Multiply a matrix that may be real with a complex one, at real cost when it is."""
    if np.iscomplexobj(left):
        return np.asarray(left @ right)
    return np.asarray((left @ np.ascontiguousarray(right).view(np.float32)).view(np.complex64))


def _single(values: Any) -> Single:
    return np.array(values, dtype=np.complex64)


def _copied(values: Any) -> Single | None:
    return None if values is None else _single(values)
