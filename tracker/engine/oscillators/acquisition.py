"""Finding a frequency offset from nothing, or again after lock was lost.

Frames of a burst that repeat a pattern differ by the turning of the oscillators alone, so their spectrum shows the
offset without a model; with every L-th frame the same, offsets up to half the rate of every L-th frame are told apart.
Where a channel estimate exists, what the frames have in common with its prediction shows the offset as well.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.floating[Any]]

# Points of the search over frequency a resolution cell (1 / span of the burst).
FINENESS = 4


@dataclass(frozen=True, slots=True)
class Offset:
    """A frequency offset.

    Parameters
    ----------
    hz : float
    spread_hz : float
        Standard deviation that its peak promises.
    clarity : float
        Height of the peak over the mean of the spectrum; noise alone gives about ln(points).
    """

    hz: float
    spread_hz: float
    clarity: float


def find_offset(
    patterns: NDArray[np.uint8], outputs: Complex, time_s: Real, most_hz: float, overlap: Complex | None = None
) -> Offset | None:
    """Look for the frequency offset that a burst shows.

    Parameters
    ----------
    patterns : ndarray of uint8, shape (B, bytes)
        Packed.
    outputs : ndarray of complex, shape (B, D)
        In units of the noise.
    time_s : ndarray, shape (B,)
    most_hz : float
        Offsets between −most and +most are looked at.
    overlap : ndarray of complex, shape (B,), or None
        Σ conj(m) y over outputs, for what a channel estimate predicts, divided by √Σ|m|².

    Returns
    -------
    Offset or None
        None when the burst shows nothing: no pattern repeats, and there is no model.
    """
    span = float(time_s[-1] - time_s[0])
    if span <= 0:
        return None
    groups = _repeated(patterns)
    if not groups and overlap is None:
        return None
    # Beyond half the frame rate an offset cannot be told from one within.
    most_hz = min(most_hz, 0.5 * (time_s.shape[0] - 1) / span)
    step = 1.0 / (FINENESS * span)
    reach = int(np.ceil(most_hz / step)) + 1  # one beyond, so that a peak at the end has two neighbours
    grid = step * np.arange(-reach, reach + 1)
    turns = np.exp(-2j * np.pi * np.outer(grid, time_s))
    power = np.zeros(grid.shape[0])
    for group in groups:
        power += (np.abs(turns[:, group] @ outputs[group]) ** 2).sum(axis=1) / len(group)
    if overlap is not None:
        power += np.abs(turns @ overlap) ** 2 / overlap.shape[0]
    peak = int(np.argmax(power))
    floor = float(np.median(power))
    excess = max(float(power[peak]) - floor, 1e-9)
    # Variance of a frequency from n frames over a span T at a total signal-to-noise ratio: 6 / (snr (2π T)²).
    frames = max((len(group) for group in groups), default=outputs.shape[0])
    spread = np.sqrt(6.0 / (excess * frames)) / (2 * np.pi * span)
    return Offset(_refined(grid, power, peak), float(max(spread, 0.02 / span)), float(power[peak] / max(floor, 1e-12)))


def _refined(grid: Real, power: Real, peak: int) -> float:
    """Top of the parabola through the peak and its neighbours."""
    if not 0 < peak < grid.shape[0] - 1:
        return float(grid[peak])
    before, at, after = power[peak - 1 : peak + 2]
    bend = before - 2 * at + after
    shift = 0.5 * (before - after) / bend if bend < 0 else 0.0
    return float(grid[peak] + shift * (grid[1] - grid[0]))


def _repeated(patterns: NDArray[np.uint8]) -> list[NDArray[np.intp]]:
    """Return the indices of the frames of each pattern that occurs more than once."""
    _, group, count = np.unique(patterns, axis=0, return_inverse=True, return_counts=True)
    group = group.reshape(-1)
    return [np.flatnonzero(group == index) for index in np.flatnonzero(count > 1)]
