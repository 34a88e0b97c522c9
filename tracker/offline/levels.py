"""Power in recorded frames: how much of it is noise, how much signal, and at which delays the signal lies."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.estimation.noise import LEAST_OUTSIDE, outside

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]

# Side lobes of the window are 65 dB down: a strong path does not pass for noise at far delays.
WINDOW_SHAPE = 8.6
# Fewer tones than this leave no delays free of signal and window.
LEAST_TONES = 32


@dataclass(frozen=True, slots=True)
class Level:
    """Powers on a tone at one receiver, in the units of |response|².

    Parameters
    ----------
    noise, signal : float or None
        None when they cannot be told.
    method : str
        What the noise was told from: ``outside`` (the delay basis), ``repeats`` (of a pattern within a burst),
        ``delays`` (the least power at any delay), or ``none``.
    """

    noise: float | None
    signal: float | None
    method: str

    @property
    def ratio_db(self) -> float | None:
        """Signal to noise on a tone, dB."""
        if not self.noise or not self.signal:
            return None
        return float(10.0 * np.log10(self.signal / self.noise))


def repeats(patterns: NDArray[np.uint8]) -> NDArray[np.intp]:
    """Find frames that repeat the pattern of an earlier frame of the burst.

    Parameters
    ----------
    patterns : ndarray of uint8, shape (B, bytes)

    Returns
    -------
    ndarray of int, shape (P, 2)
        Each repeat with the last frame before it that shows the same pattern.
    """
    _, group = np.unique(patterns, axis=0, return_inverse=True)
    group = group.reshape(-1)
    order = np.argsort(group, kind="stable")
    again = group[order[1:]] == group[order[:-1]]
    return np.stack([order[:-1][again], order[1:][again]], axis=1)


class Levels:
    """Running powers of bursts of one size.

    Parameters
    ----------
    receivers, tones : int
    basis : ndarray of complex128, shape (K, Q), or None
        Delay basis of the settings, when these are known.
    """

    def __init__(self, receivers: int, tones: int, basis: Complex | None) -> None:
        fits = basis is not None and basis.shape[0] == tones and tones - basis.shape[1] >= LEAST_OUTSIDE
        self._basis = basis if fits else None
        self._window = np.kaiser(tones, WINDOW_SHAPE)
        self._window /= np.sqrt(np.mean(self._window**2) * tones)
        self.frames = 0
        self.repeated = 0
        self._total = np.zeros(receivers)
        self._outside = np.zeros(receivers)
        self._repeats = np.zeros(receivers)
        self._delays = np.zeros((receivers, tones))

    def update(self, burst: Burst) -> None:
        """Take in the frames of a burst that can be used."""
        response = burst.response[burst.keep].astype(np.complex128)
        frames = response.shape[0]
        self.frames += frames
        self._total += _power(response).mean(axis=2).sum(axis=0)
        if self._basis is not None:
            self._outside += frames * outside(response, response @ self._basis.conj())
        pairs = repeats(burst.patterns[burst.keep])
        if len(pairs):
            difference = response[pairs[:, 1]] - response[pairs[:, 0]]
            self._repeats += _power(difference).mean(axis=2).sum(axis=0) / 2.0
            self.repeated += len(pairs)
        if self._basis is None and response.shape[2] >= LEAST_TONES:
            self._delays += _power(np.fft.ifft(response * self._window, norm="forward", axis=2)).sum(axis=0)

    @property
    def profile(self) -> Floats:
        """Mean power by delay, shape (R, K): bin i is the delay i/K of the inverse of the tone spacing.

        Scaled so that noise alone gives its power on a tone in every bin. Zeros where a basis was given.
        """
        return self._delays / max(self.frames, 1)

    def levels(self) -> list[Level]:
        """Tell noise and signal at each receiver by the best means that the data allow."""
        if not self.frames:
            return [Level(None, None, "none")] * len(self._total)
        if self._basis is not None:
            noise, method = self._outside / self.frames, "outside"
        elif self.repeated:
            noise, method = self._repeats / self.repeated, "repeats"
        elif self._delays.shape[1] >= LEAST_TONES:
            noise, method = floor(self.profile), "delays"
        else:
            return [Level(None, float(total / self.frames), "none") for total in self._total]
        return [
            Level(float(n), max(float(total / self.frames - n), 0.0), method)
            for n, total in zip(noise, self._total, strict=True)
        ]


def floor(profile: Floats) -> Floats:
    """Noise power from the delays with the least power, shape (R,): the median of their lower half."""
    lower = np.sort(profile, axis=1)[:, : max(profile.shape[1] // 2, 1)]
    return np.asarray(np.median(lower, axis=1))


def _power(values: Complex) -> Floats:
    return np.asarray(values.real**2 + values.imag**2)
