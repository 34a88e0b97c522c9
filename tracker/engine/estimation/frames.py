"""Frames as the estimator takes them in, and how they fitted."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..burst import Burst


@dataclass(frozen=True, slots=True, eq=False)
class Frames:
    """Frames of one burst, without those left out.

    Parameters
    ----------
    patterns : ndarray of uint8, shape (B, ceil(N/8))
    response : ndarray of complex64, shape (B, R, K)
    time_ns : ndarray of int64, shape (B,)
        Time of each frame, rising.
    """

    patterns: NDArray[np.uint8]
    response: NDArray[np.complex64]
    time_ns: NDArray[np.int64]

    @classmethod
    def of(cls, burst: Burst) -> "Frames":
        """Take the frames of a burst that are fit for use."""
        if burst.keep.all():
            return cls(burst.patterns, burst.response, burst.t_ns + np.arange(burst.frames) * burst.dt_ns)
        kept = np.flatnonzero(burst.keep)
        return cls(burst.patterns[kept], burst.response[kept], burst.t_ns + kept * burst.dt_ns)

    def showing(self, pattern: NDArray[np.uint8]) -> "Frames":
        """Take the frames that sounded a packed pattern."""
        # Most frames of a burst differ in the first byte already.
        same = np.flatnonzero(self.patterns[:, 0] == pattern[0])
        same = same[(self.patterns[same] == pattern).all(axis=1)] if same.size else same
        return Frames(self.patterns[same], self.response[same], self.time_ns[same])

    def stretches(self, most_ns: int) -> Iterator["Frames"]:
        """Cut into parts that span no more than a time."""
        start = 0
        while start < self.time_ns.shape[0]:
            stop = int(np.searchsorted(self.time_ns, self.time_ns[start] + most_ns, side="right"))
            yield Frames(self.patterns[start:stop], self.response[start:stop], self.time_ns[start:stop])
            start = stop

    @classmethod
    def together(cls, parts: Sequence["Frames"]) -> "Frames":
        """Put bursts one behind the other."""
        if len(parts) == 1:
            return parts[0]
        return cls(
            np.concatenate([part.patterns for part in parts]),
            np.concatenate([part.response for part in parts]),
            np.concatenate([part.time_ns for part in parts]),
        )


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """How a block of frames fitted the estimate that it met.

    Parameters
    ----------
    ratio : ndarray, shape (R,)
        Measured over expected innovation power.
    degrees : int
        Complex degrees of freedom behind each ratio: frames times delay directions.
    elapsed_s : float
        From the end of the block before to the end of this one, s.
    error : float
        Mean squared error of predicting the frames from the estimate before them, in units of the noise on a delay
        direction; 1 is all that can be had. Unlike `ratio` it can be compared between settings.
    lost : tuple of int
        Receivers whose lock was lost at this block.
    left_out : int
        Frames that a receiver had to leave out, being without lock.
    """

    ratio: NDArray[np.float64]
    degrees: int
    elapsed_s: float
    error: float
    lost: tuple[int, ...] = ()
    left_out: int = 0

    @property
    def mean_ratio(self) -> float:
        """`ratio`, mean over the receivers: few, so that plain numbers are the fastest."""
        ratios: list[float] = self.ratio.tolist()
        return sum(ratios) / len(ratios)

    @classmethod
    def together(cls, fits: Sequence["Fit"]) -> "Fit":
        """Put fits of one part after the other into one."""
        if len(fits) == 1:
            return fits[0]
        degrees = sum(fit.degrees for fit in fits)
        return cls(
            ratio=np.asarray(sum(fit.ratio * fit.degrees for fit in fits) / degrees),
            degrees=degrees,
            elapsed_s=sum(fit.elapsed_s for fit in fits),
            error=sum(fit.error * fit.degrees for fit in fits) / degrees,
            lost=tuple(sorted({receiver for fit in fits for receiver in fit.lost})),
            left_out=sum(fit.left_out for fit in fits),
        )
