"""How far in delay a channel reaches, told from recorded frames alone."""

import numpy as np
from numpy.typing import NDArray

from tracker.engine.estimation.delay import delay_basis
from tracker.engine.estimation.noise import LEAST_OUTSIDE

from .levels import LEAST_TONES, floor

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]

# A delay holds signal where its power is above the noise by this and by six standard errors.
LEAST_EXCESS = 0.1
# The basis is shortened while the power left outside of it rises by less than this.
MOST_RISE = 0.02
# Beyond these the shortening would take minutes, for little.
MOST_TONES = 2048
MOST_TAPS = 256


def extent(profile: Floats, frames: int, snapshots: Complex, fft: int) -> tuple[int, int] | None:
    """Find the shortest span of delays that leaves nothing but noise outside.

    The window of the profile widens every path, so its span is only where the search starts; then the span is
    shortened from both ends while the power outside its delay basis stays that of the noise.

    Parameters
    ----------
    profile : ndarray, shape (R, K)
        Mean power by delay, as `Levels.profile` gives it.
    frames : int
        Frames it was averaged over.
    snapshots : ndarray of complex128, shape (S, K)
        Single responses.
    fft : int
        Samples in the inverse of the tone spacing.

    Returns
    -------
    (int, int) or None
        First and last delay, samples, negative ahead of time zero; None when there are too few tones, too little
        signal, or signal at all delays.
    """
    tones = profile.shape[1]
    if tones < LEAST_TONES or not frames:
        return None
    noise = floor(profile)
    if not (noise > 0).all():
        return None
    excess = (profile / noise[:, None]).mean(axis=0) - 1.0
    span = _arc(excess > max(LEAST_EXCESS, 6.0 / np.sqrt(frames * len(noise))))
    if span is None:
        return None
    first, last = int(np.floor(span[0] * fft / tones)), int(np.ceil(span[1] * fft / tones))
    if tones > MOST_TONES or last - first >= MOST_TAPS or len(snapshots) == 0:
        return first, last
    return _shorten(snapshots, fft, first, last)


def _arc(signal: NDArray[np.bool_]) -> tuple[int, int] | None:
    """Find the shortest run of bins, round the circle of delays, that holds all signal; bins from −K/2 up to K."""
    bins = np.flatnonzero(signal)
    if not len(bins) or len(bins) == len(signal):
        return None
    gaps = np.diff(np.append(bins, bins[0] + len(signal)))
    widest = int(np.argmax(gaps))
    first = int(bins[(widest + 1) % len(bins)])
    last = first + len(signal) - int(gaps[widest])
    turns = len(signal) if first > len(signal) // 2 else 0
    return first - turns, last - turns


def _shorten(snapshots: Complex, fft: int, first: int, last: int) -> tuple[int, int]:
    tones = snapshots.shape[1]
    total = float(np.sum(snapshots.real**2 + snapshots.imag**2))

    def left_over(a: int, b: int) -> float:
        basis = delay_basis(fft, (fft - tones) // 2, tones, b - a + 1, -a)
        if tones - basis.shape[1] < LEAST_OUTSIDE:
            return 0.0
        inside = snapshots @ basis.conj()
        outside = float(total - np.sum(inside.real**2 + inside.imag**2))
        return outside / int(tones - basis.shape[1])

    noise = left_over(first, last)
    if noise <= 0.0:
        return first, last
    for step in (max(1, (last - first) // 16), 1):
        while last - first > step:
            # Both ends in turn, by what costs less: one end alone would eat up all that may rise.
            shorter = [(first + step, last), (first, last - step)]
            power, span = min((left_over(*span), span) for span in shorter)
            if power > noise * (1.0 + MOST_RISE):
                break
            first, last = span
    return first, last
