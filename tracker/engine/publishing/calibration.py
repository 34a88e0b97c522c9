"""Promises that are held against what is measured afterwards.

Each published pattern promises a rate that it meets with probability 0.95. What the posterior spread alone would
promise is right only when the model is; so the margin, in spreads, is moved after every promise: up when it was
broken, down when it was kept, such that in the long run one in twenty is broken whatever the model gets wrong
(adaptive conformal inference: Gibbs & Candès, NeurIPS 2021; stochastic approximation of a quantile: Robbins & Monro
1951). A margin so moved is late where the model is wrong altogether, as when a slow sounding has followed phases to a
false estimate: dozens of spreads are missing at once. So the spreads themselves are widened by how far the rates of
late fell short of what was expected (the a-posteriori variance factor of least squares). While the tracker acquires,
models are wrong in other ways than later, so it has a margin and a factor of its own then.

A promise is for the time that the pattern is in force, and is settled by the mean of what was measured in that time:
when another pattern takes its place, or as soon as the measurement is so exact that more would change nothing.
"""

import math
from collections import deque
from dataclasses import astuple, dataclass
from typing import Any

from .expectation import Expectation

KEPT_SHARE = 0.95
# Margins to begin with. The normal distribution has its 95 % point at 1.645. Where every element is estimated by itself
# the estimate errs to the safe side; where a basis of fewer columns stands for the elements, patterns are found that
# make the most of what it holds and the surface does not. Both as measured by the benchmark `promise`.
FIRST_MARGIN, FIRST_MARGIN_IN_COLUMNS = 1.1, 2.0
# Step of the margin, in spreads, for a broken promise; a kept one moves it back by a nineteenth of that.
STEP = 0.4
# Bounds of the margin: a promise never exceeds the prediction by much, and one wild outlier cannot ruin it for long.
LEAST_MARGIN, MOST_MARGIN = -3.0, 30.0
# What one promise counts for at most in the mean of shortfalls: ten spreads. A change of the channel may take all of
# the rate, and says little of the promises after it.
MOST_SHORTFALL = 2.0 * 10.0**2
# A spread is taken to be at least this share of the rate: no model is more exact.
LEAST_SPREAD = 0.003
# A measurement whose standard deviation is at most this share of the spread settles a promise.
EXACT = 0.25
# Promises open at a time: patterns published before the controller shows the first of them.
MOST_OPEN = 16
# Weight of the last promise in the means of the frames that settle one, and of shortfalls.
MEMORY = 0.1
# Promises remembered for the share that is shown.
REMEMBERED = 200


@dataclass(slots=True)
class _Promise:
    """A promise, and what was measured of it so far."""

    low: float
    enough: float  # frames that settle it
    acquiring: bool
    rate: float  # expected
    spread: float  # of the true rate about it, by the model
    frame_spread: float
    frames: int = 0
    total: float = 0.0  # of the rates measured on them

    @property
    def measured(self) -> float:
        """Mean of the measured rates."""
        return self.total / self.frames

    @property
    def shortfall(self) -> float:
        """Square of what was missing of the rate, over what the model has it; 1 in the mean where it is right."""
        variance = self.spread**2 + self.frame_spread**2 / self.frames
        # Half of the variance lies below the mean.
        missing = 2.0 * max(self.rate - self.measured, 0.0) ** 2
        return min(missing / variance, MOST_SHORTFALL) if variance > 0.0 else 1.0


class Calibration:
    """The margins between prediction and promise.

    Parameters
    ----------
    in_columns : bool
        Whether fewer columns stand for the elements.
    """

    def __init__(self, *, in_columns: bool = False) -> None:
        first = FIRST_MARGIN_IN_COLUMNS if in_columns else FIRST_MARGIN
        self._margins = {True: first, False: first}  # by whether the tracker acquires
        self._shortfalls = {True: 1.0, False: 1.0}  # means of late, by the same
        self._open: dict[int, _Promise] = {}  # by the id of the pattern, in order
        self._kept: deque[bool] = deque(maxlen=REMEMBERED)
        self._frames = 0.0  # that promises were settled by of late; 0 before the first

    @property
    def kept_share(self) -> float | None:
        """Share of the last promises that were kept; None before any was put to the test."""
        return sum(self._kept) / len(self._kept) if self._kept else None

    def promise(self, pattern: int, expected: Expectation, *, acquiring: bool) -> float:
        """Return the rate promised for a pattern, and remember it.

        Parameters
        ----------
        pattern : int
            Its id.
        expected : Expectation
            Of its rate.
        acquiring : bool
            Whether the tracker has yet to find the channel.
        """
        rate = expected.rate
        model = max(expected.spread, LEAST_SPREAD * rate)
        noise = expected.frame_spread / math.sqrt(self._frames) if self._frames else 0.0
        spread = math.sqrt(max(self._shortfalls[acquiring], 1.0)) * math.hypot(model, noise)
        low = min(max(rate - self._margins[acquiring] * spread, 0.0), rate)
        enough = (expected.frame_spread / (EXACT * model)) ** 2 if model > 0.0 else 1.0
        self._open[pattern] = _Promise(low, enough, acquiring, rate, model, expected.frame_spread)
        if len(self._open) > MOST_OPEN:
            self._settle(min(self._open))
        return low

    def observe(self, pattern: int | None, rate: float | None, frames: int) -> None:
        """Take the rate measured under the pattern in use, on so many frames.

        Parameters
        ----------
        pattern : int or None
            Id of the pattern in use; all before it have been replaced.
        rate : float or None
            None when it was not sounded.
        frames : int
        """
        if pattern is None:
            return
        for replaced in [one for one in self._open if one < pattern]:
            self._settle(replaced)
        promise = self._open.get(pattern)
        if promise is None or rate is None:
            return
        promise.frames += frames
        promise.total += frames * rate
        if promise.frames >= promise.enough:
            self._settle(pattern)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "margins": [self._margins[True], self._margins[False]],
            "shortfalls": [self._shortfalls[True], self._shortfalls[False]],
            "open": [[pattern, *astuple(promise)] for pattern, promise in self._open.items()],
            "kept": list(self._kept),
            "frames": self._frames,
        }

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        acquiring, tracking = snapshot["margins"]
        self._margins = {True: float(acquiring), False: float(tracking)}
        acquiring, tracking = snapshot["shortfalls"]
        self._shortfalls = {True: float(acquiring), False: float(tracking)}
        self._open = {}
        for pattern, low, enough, is_acquiring, rate, spread, frame_spread, frames, total in snapshot["open"]:
            self._open[int(pattern)] = _Promise(
                float(low),
                float(enough),
                bool(is_acquiring),
                float(rate),
                float(spread),
                float(frame_spread),
                int(frames),
                float(total),
            )
        self._kept = deque((bool(kept) for kept in snapshot["kept"]), maxlen=REMEMBERED)
        self._frames = float(snapshot["frames"])

    def _settle(self, pattern: int) -> None:
        """Close a promise; what was never measured teaches nothing."""
        promise = self._open.pop(pattern)
        if not promise.frames:
            return
        self._frames += (promise.frames - self._frames) * (MEMORY if self._frames else 1.0)
        shortfall = self._shortfalls[promise.acquiring]
        self._shortfalls[promise.acquiring] += MEMORY * (promise.shortfall - shortfall)
        kept = promise.total >= promise.low * promise.frames
        self._kept.append(kept)
        moved = -STEP * (1.0 - KEPT_SHARE) if kept else STEP * KEPT_SHARE
        margin = self._margins[promise.acquiring] + moved
        self._margins[promise.acquiring] = min(max(margin, LEAST_MARGIN), MOST_MARGIN)
