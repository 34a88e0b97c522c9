"""What each element answers to its bit, followed over windows of frames, with an eye on sudden changes.

A window of w sweeps shows x = v + noise of variance r (see `fresh`). The answer v is followed by a random walk of
variance q a sweep, per direction over the delays::

    s ← s + q w,    K = s / (s + r),    y ← y + K (x − y),    s ← (1 − K) s

q is measured on all elements together, by the median, so that a channel that moves or changes moves q, and single
elements do not. What is left are elements that change by themselves. Beside each goes a second account of it, begun
afresh; when that explains the windows since better, by `CHANGED` in log-likelihood, the element has changed and the
second account takes over. This is the cumulative-sum test (Page, Biometrika 41, 1954, from memory) with the answer
after the change unknown.
"""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Log-likelihood that a change must gain.
CHANGED = 10.0
# That from which one is suspected.
SUSPECTED = 3.0
# Windows averaged over at most: nothing stays for ever.
MOST_AVERAGED = 16.0
# Windows over which q is averaged.
MEMORY = 8
# Deviations of all elements over what is expected from which a window is taken to be noisier than it says (elements
# that change leak into all others), and from which the answers themselves are taken to be other ones.
NOISY, CHANGED_ALL = 1.25, 3.0
# The median of |complex Gaussian|² over its mean.
MEDIAN = math.log(2.0)


class Answers:
    """Follows the answers of N elements.

    Parameters
    ----------
    elements : int
        N.
    """

    def __init__(self, elements: int) -> None:
        self._taken = 0
        self._walk = np.zeros(1)  # q
        self._gained = np.zeros(elements)  # log-likelihood that the second account gained
        self._second: Complex = np.zeros((1, elements), dtype=np.complex128)
        self._second_variance = np.ones((1, elements))
        self._changed = np.zeros(elements, dtype=np.bool_)  # in the last window
        self.mean: Complex = np.zeros((1, elements), dtype=np.complex128)
        """y, shape (k, N)."""
        self.variance: Real = np.ones((1, elements))
        """s, shape (k, N)."""
        self.moved = 0.0
        """Share of a response's power that a window changes now, on the strongest direction, of all elements."""

    def turn(self, onto: Complex, unseen: Real) -> None:
        """Go over to other directions over the delays.

        Parameters
        ----------
        onto : ndarray of complex, shape (k now, k before)
            Takes a response to the new directions.
        unseen : ndarray, shape (k now,)
            Power of a response on each that the directions before did not show.
        """
        if not self._taken:
            return
        share = power_of(onto)
        self._walk = share @ self._walk
        self.mean, self._second = onto @ self.mean, onto @ self._second
        self.variance = share @ self.variance + unseen[:, None]
        self._second_variance = share @ self._second_variance + unseen[:, None]

    def take(self, heard: Complex, noise: Real, power: Real, sweeps: float) -> NDArray[np.bool_]:
        """Take in a window; tell which elements changed by themselves, shape (N,).

        Parameters
        ----------
        heard : ndarray of complex, shape (k, N)
            x.
        noise : ndarray, shape (k, N)
            r; very large for elements of which the window says nothing.
        power : ndarray, shape (k,)
            Mean power of a response.
        sweeps : float
            w.
        """
        if not self._taken:
            self._taken = 1
            self._walk = np.zeros(heard.shape[0])
            self.mean, self.variance = heard.copy(), noise.copy()
            self._second, self._second_variance = self.mean.copy(), self.variance.copy()
            return np.zeros(heard.shape[1], dtype=np.bool_)
        together = complex(np.vdot(self.mean, heard))
        if abs(together) > 0.0:
            # A phase that all turn by is the oscillator's, or a path's that is not followed.
            self.mean *= together / abs(together)
            self._second *= together / abs(together)
        ahead = heard - self.mean
        off = power_of(ahead)
        walk, noisier = self._moved(off, self.variance + noise, sweeps)
        self.moved = float(walk[0] / max(power[0], np.finfo(float).tiny))
        noise = noise * noisier[:, None]
        self.variance += walk[:, None]
        both = self.variance + noise
        likely = _density(off, both)
        # While a change is suspected the first account is held: it must not follow what may be the new answer. After
        # one it begins afresh, because the window in which an element changes shows part of either answer.
        before = self._changed
        gain = np.where(before, 1.0, np.where(self._gained > SUSPECTED, 0.0, self.variance / both))
        self.mean += gain * ahead
        self.variance = np.where(before, noise, np.maximum(self.variance * (1.0 - gain), noise / MOST_AVERAGED))
        # An account begun afresh expects any response, or none; one begun before, what it saw since.
        begun = self._gained > 0.0
        ahead = heard - np.where(begun, self._second, 0.0)
        expected = np.where(begun, self._second_variance + walk[:, None], power[:, None])
        both, off = expected + noise, power_of(ahead)
        since = _density(off, both)
        none = _density(off, noise)
        since = np.where(begun, since, np.logaddexp(since, none) - math.log(2.0))
        self._gained = np.where(before, 0.0, np.maximum(self._gained, 0.0) + since - likely)
        self._second = np.where(begun, self._second + (expected / both) * ahead, heard)
        self._second_variance = np.where(begun, expected * (noise / both), noise)
        changed = self._changed = self._gained > CHANGED
        if changed.any():
            # How much of the step is still to come is not known.
            step = power_of(self._second[:, changed] - self.mean[:, changed])
            self.mean[:, changed] = self._second[:, changed]
            self.variance[:, changed] = self._second_variance[:, changed] + step
            self._gained[changed] = 0.0
        return changed.copy()

    def _moved(self, off: Real, expected: Real, sweeps: float) -> tuple[Real, Real]:
        """Measure q w, shape (k,), and the factor by which this window is noisier than it says, shape (k,)."""
        middle = off.shape[1] // 2
        beyond = np.partition(off / expected, middle, axis=1)[:, middle] / MEDIAN
        # The harmonic mean leaves out elements that were not heard.
        moved = (beyond - 1.0) / (1.0 / expected).mean(axis=1)
        self._taken += 1
        if np.any(beyond > CHANGED_ALL):
            return np.maximum(moved, 0.0), np.ones(beyond.size)
        self._walk = self._walk + (moved / sweeps - self._walk) / min(self._taken - 1, MEMORY)
        return np.maximum(self._walk * sweeps, 0.0), np.where(beyond > NOISY, beyond, 1.0)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "taken": self._taken,
            "walk": self._walk.copy(),
            "gained": self._gained.copy(),
            "second": self._second.copy(),
            "second_variance": self._second_variance.copy(),
            "changed": self._changed.copy(),
            "mean": self.mean.copy(),
            "variance": self.variance.copy(),
            "moved": self.moved,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._taken = int(snapshot["taken"])
        self._walk = np.array(snapshot["walk"], dtype=np.float64)
        self._gained = np.array(snapshot["gained"], dtype=np.float64)
        self._second = np.array(snapshot["second"], dtype=np.complex128)
        self._second_variance = np.array(snapshot["second_variance"], dtype=np.float64)
        self._changed = np.array(snapshot["changed"], dtype=np.bool_)
        self.mean = np.array(snapshot["mean"], dtype=np.complex128)
        self.variance = np.array(snapshot["variance"], dtype=np.float64)
        self.moved = float(snapshot["moved"])


def power_of(values: Complex) -> Real:
    """|values|², of any shape."""
    return np.asarray(values.real**2 + values.imag**2)


def _density(power: Real, variance: Real) -> Real:
    """Log-density of circular Gaussians, over the directions, shape (N,), less a constant."""
    return np.asarray(-(np.log(variance) + power / variance).sum(axis=0))
