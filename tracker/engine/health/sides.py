"""Which way an element is stuck: what the direct path gained when the element fell silent.

An element that stops following its bit and stays in state ±1 leaves its response v out of the surface and ±v in the
direct path. So the direct path before and after tells the side, if it lies still otherwise and the response of the
element was known. Elements that failed together are told apart together: d_after − d_before = Σ_n s_n v_n + noise, over
all sides s. How still the direct path lies is measured, on each delay, in the windows before. Where the sides are not
clear, nothing is said; for elements that never followed nothing can be.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .answers import power_of

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Elements that failed together whose sides are still tried out: 2^n ways.
MOST_TOGETHER = 10
# Windows of the direct path kept: a failure must be understood within them, or its sides stay unknown.
KEPT = 16
# Windows averaged before and after a failure.
AVERAGED = 3
# Windows after the last good one that may hold part of the failure.
MIDST = 2
# Distance in windows over which the stillness of the direct path is measured, over how many, and how many it takes.
APART, MEMORY, LEAST_SEEN = 6, 16, 6
# Share of a response by which it may be misjudged: the last good window may hold part of the failure.
MISJUDGED = 0.3


class Sides:
    """Keeps the direct path of late, and decides.

    Parameters
    ----------
    outputs : int
        D.
    """

    def __init__(self, outputs: int) -> None:
        self._recent: list[Complex] = []
        self._sweeps: list[float] = []  # length of each window
        self._restless = np.zeros(outputs)  # of a mean over one sweep
        self._seen = 0

    def rescale(self, amplitude: Real) -> None:
        """Change the unit: multiply columns by factors, shape (D,)."""
        self._recent = [direct * amplitude for direct in self._recent]
        self._restless = self._restless * amplitude**2

    def take(self, direct: Complex, sweeps: float, *, quiet: bool) -> None:
        """Take in the mean of the direct path's estimates over a window, shape (D,).

        Parameters
        ----------
        direct : ndarray of complex, shape (D,)
        sweeps : float
            Length of the window.
        quiet : bool
            Whether no element failed of late: only then is what moves the path's own.
        """
        self._recent.append(direct.copy())
        self._sweeps.append(sweeps)
        del self._recent[:-KEPT], self._sweeps[:-KEPT]
        if quiet and len(self._recent) >= APART + AVERAGED:
            self._seen += 1
            change, share = self._change(AVERAGED, APART)
            self._restless += (power_of(change) / share - self._restless) / min(self._seen, MEMORY)

    def decide(self, responses: Complex, first: int, last: int, least: float) -> list[tuple[int, float]]:
        """Say on which side elements are stuck that failed together.

        Parameters
        ----------
        responses : ndarray of complex, shape (n, D)
            What they answered while they did.
        first, last : int
            Windows since the last good one of the element that failed first, and of the one that failed last.
        least : float
            Probability from which a side counts as known.

        Returns
        -------
        list of (int, float)
            For each: +1, −1, or 0 for not known; and its probability.
        """
        count = responses.shape[0]
        unknown = [(0, 0.0)] * count
        known = self._seen >= LEAST_SEEN and first + 1 + AVERAGED <= len(self._recent) and last >= MIDST + AVERAGED
        if not 0 < count <= MOST_TOGETHER or not known:
            return unknown
        # The last good window may hold part of the failure already: up to the one before it.
        change, share = self._change(last - MIDST, first + 1)
        size = power_of(responses)
        restless = self._restless * share * max(1.0, (first + 1) / APART)
        variance = restless + MISJUDGED**2 * size.sum(axis=0) + np.finfo(float).tiny
        ways = 1.0 - 2.0 * ((np.arange(2**count)[:, None] >> np.arange(count)) & 1)
        off = change - ways @ responses
        # How still the path lies was measured over few windows, and these overlap: the density of a Gaussian of unknown
        # variance after so many looks at it (Student's) has longer tails.
        looks = min(self._seen, MEMORY) / AVERAGED
        misfit = (looks + 1.0) * np.log1p(power_of(off) / (looks * variance)).sum(axis=1)
        degrees = change.shape[0]
        if misfit.min() > degrees + 5.0 * np.sqrt(degrees):
            return unknown  # something else changed as well
        likely = np.exp(misfit.min() - misfit)
        plus = (likely @ (ways > 0)) / likely.sum()
        sides = []
        for chance in plus.tolist():
            side = 1 if chance > 0.5 else -1
            sure = max(chance, 1.0 - chance)
            sides.append((side, sure) if sure >= least else (0, sure))
        return sides

    def _change(self, newest: int, ago: int) -> tuple[Complex, float]:
        """Direct path over the newest windows less that over a few up to the one so long ago.

        Also how much noisier that is than the mean over one sweep: short windows are noisier than long ones.
        """
        weights = np.array(self._sweeps)
        after, before = np.zeros_like(weights), np.zeros_like(weights)
        after[-newest:] = weights[-newest:]
        stop = weights.size - ago
        before[stop - AVERAGED : stop] = weights[stop - AVERAGED : stop]
        change = (after / after.sum() - before / before.sum()) @ np.array(self._recent)
        return np.asarray(change), float(1.0 / after.sum() + 1.0 / before.sum())

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "recent": [direct.copy() for direct in self._recent],
            "sweeps": list(self._sweeps),
            "restless": self._restless.copy(),
            "seen": self._seen,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._recent = [np.array(direct, dtype=np.complex128) for direct in snapshot["recent"]]
        self._sweeps = [float(sweeps) for sweeps in snapshot["sweeps"]]
        self._restless = np.array(snapshot["restless"], dtype=np.float64)
        self._seen = int(snapshot["seen"])
