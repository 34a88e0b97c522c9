"""Promises that are held against what is measured afterwards.

Each published pattern promises a rate that it meets with probability 0.95. What the posterior spread alone would
promise is right only when the model is; so the margin, in spreads, is moved after every promise: up when it was
broken, down when it was kept, such that in the long run one in twenty is broken whatever the model gets wrong
(adaptive conformal inference: Gibbs & Candès, NeurIPS 2021; stochastic approximation of a quantile: Robbins & Monro
1951).
"""

from collections import deque
from typing import Any

KEPT_SHARE = 0.95
# One-sided 95 % point of the normal distribution: right from the start when the model is.
FIRST_MARGIN = 1.645
# Step of the margin, in spreads, for a broken promise; a kept one moves it back by a nineteenth of that.
STEP = 0.4
# Bounds of the margin: a promise never exceeds the prediction by much, and one wild outlier cannot ruin it for long.
LEAST_MARGIN, MOST_MARGIN = -3.0, 30.0
# A spread is taken to be at least this share of the rate: below it, measuring is no more exact than predicting.
LEAST_SPREAD = 0.005
# Promises remembered for the share that is shown.
REMEMBERED = 200


class Calibration:
    """The margin between prediction and promise."""

    def __init__(self) -> None:
        self.margin = FIRST_MARGIN
        self._open: tuple[int, float] | None = None  # the pattern promised last, and its promise
        self._kept: deque[bool] = deque(maxlen=REMEMBERED)

    @property
    def kept_share(self) -> float | None:
        """Share of the last promises that were kept; None before any was put to the test."""
        return sum(self._kept) / len(self._kept) if self._kept else None

    def promise(self, pattern: int, rate: float, spread: float) -> float:
        """Return the rate promised for a pattern, and remember it.

        Parameters
        ----------
        pattern : int
            Its id.
        rate, spread : float
            Predicted rate and its standard deviation, bit/s/Hz.
        """
        low = min(max(rate - self.margin * max(spread, LEAST_SPREAD * rate), 0.0), rate)
        self._open = (pattern, low)
        return low

    def observe(self, pattern: int | None, rate: float | None) -> None:
        """Take the rate measured under the pattern in use; the first one settles its promise."""
        if rate is None or self._open is None or pattern != self._open[0]:
            return
        kept = rate >= self._open[1]
        self._open = None
        self._kept.append(kept)
        moved = -STEP * (1.0 - KEPT_SHARE) if kept else STEP * KEPT_SHARE
        self.margin = min(max(self.margin + moved, LEAST_MARGIN), MOST_MARGIN)

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {"margin": self.margin, "open": list(self._open) if self._open else None, "kept": list(self._kept)}

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        self.margin = float(snapshot["margin"])
        promised = snapshot["open"]
        self._open = (int(promised[0]), float(promised[1])) if promised else None
        self._kept = deque((bool(kept) for kept in snapshot["kept"]), maxlen=REMEMBERED)
