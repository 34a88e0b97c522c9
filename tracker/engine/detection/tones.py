"""What single tones hear: a narrow interferer drowns in the noise of all tones together.

What a frame holds beyond its prediction is noise, as long as the prediction is good; what it holds outside the delay
basis is noise in any case, but a fifth or more of the power of a tone is missing there. Given is its power on each tone
over that on all; whether that of any of them, or of any group of neighbours, has risen is for `rises`. The projection
out of the basis ties neighbouring tones together a little, so w of them have fewer than w degrees of freedom a frame:
(tr G)² / tr G² with G their block of I − V Vᴴ (Satterthwaite, Biometrics Bull. 2, 1946).
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .rises import WIDTHS, Groups, Powers

Complex = NDArray[np.complex128]

# Frames that a sample rests on.
FRAMES = 32
FLOOR = 1e-30

TONE = "tone"


class Tones:
    """Watches the noise of the tones.

    Parameters
    ----------
    receivers : int
    delay : ndarray of complex, shape (K, Q)
        Delay basis.
    predicted : bool
        Whether frames come with their prediction as a rule.
    """

    def __init__(self, receivers: int, delay: Complex, *, predicted: bool) -> None:
        # Vᵀ as real and imaginary parts in turn: a product of real matrices is the faster.
        self._to_tones = np.ascontiguousarray(
            np.stack([delay.T, 1j * delay.T], axis=1).reshape(-1, delay.shape[0]), dtype=np.complex64
        ).view(np.float32)
        tones = delay.shape[0]
        outside: Complex = np.eye(tones) - delay @ delay.conj().T
        self._left = np.repeat(1.0 / np.sqrt(np.maximum(outside.diagonal().real, FLOOR)), 2).astype(np.float32)
        degrees = WIDTHS if predicted else [_degrees(outside, width) for width in WIDTHS]
        self.groups = Groups(receivers, tones, tuple(float(FRAMES * each) for each in degrees))
        self._power: NDArray[np.float32] = np.zeros((receivers, tones), dtype=np.float32)
        self._frames = 0
        self._ready: list[NDArray[np.float32]] = []

    def take(self, tones: Complex, coefficients: Complex, *, predicted: bool = False) -> None:
        """Take in frames; single precision will do.

        Parameters
        ----------
        tones : ndarray of complex, shape (B, R, K)
        coefficients : ndarray of complex, shape (B, R, Q)
            The same on the delay basis, or its prediction.
        predicted : bool
            Which.
        """
        frames, receivers, _ = tones.shape
        rows = coefficients.astype(np.complex64).reshape(frames * receivers, -1).view(np.float32)
        outside = (rows @ self._to_tones).reshape(frames, receivers, -1)
        outside -= tones.astype(np.complex64).view(np.float32)
        if not predicted:
            outside *= self._left  # as strong as if nothing were missing
        squares = np.square(outside, out=outside)
        first = (FRAMES - self._frames) % FRAMES
        whole = (frames - first) // FRAMES if frames >= first else 0
        if first or frames < FRAMES:
            self._add(squares[:first] if first else squares)
        if whole:
            middle = squares[first : first + whole * FRAMES]
            self._ready.append(_paired(middle.reshape(whole, FRAMES, receivers, -1).sum(axis=1)))
            if first + whole * FRAMES < frames:
                self._add(squares[first + whole * FRAMES :])

    def _add(self, squares: NDArray[np.float32]) -> None:
        """Add frames to a sample that is not yet full."""
        self._power += _paired(squares.sum(axis=0))
        self._frames += squares.shape[0]
        if self._frames == FRAMES:
            self._ready.append(self._power[None].copy())
            self._power.fill(0.0)
            self._frames = 0

    def readings(self) -> list[Powers]:
        """Give the samples that are full."""
        if not self._ready:
            return []
        power = np.concatenate(self._ready) if len(self._ready) > 1 else self._ready[0]
        self._ready = []
        return [Powers(TONE, power * (power.shape[2] / (power.sum(axis=2, keepdims=True) + np.float32(FLOOR))))]

    def snapshot(self) -> dict[str, Any]:
        """All state, between blocks."""
        return {"power": self._power.copy(), "frames": self._frames}

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._power = np.array(snapshot["power"], dtype=np.float32)
        self._frames = int(snapshot["frames"])
        self._ready = []


def _paired(squares: NDArray[np.float32]) -> NDArray[np.float32]:
    """Add squares of real and imaginary parts, the last axis in turn."""
    return np.asarray(squares[..., ::2] + squares[..., 1::2])


def _degrees(outside: Complex, width: int) -> float:
    """Complex degrees of freedom of so many neighbouring tones, in the middle of all groups."""
    found = []
    for start in range(outside.shape[0] - width + 1):
        group = outside[start : start + width, start : start + width]
        found.append(float(group.trace().real) ** 2 / max(float((np.abs(group) ** 2).sum()), FLOOR))
    return float(np.median(found)) if found else float(width)
