"""Quantiles of a stream in bounded memory: a histogram whose steps are a fixed ratio apart.

Each value falls into the step ceil(log(value) / log(1 + ACCURACY)), and a quantile is the mean of the values in its
step: right to within that accuracy of itself, whatever the range.
"""

import math

ACCURACY = 0.005
# Below this, values count as zero: the number of steps stays bounded.
SMALLEST, LARGEST = 1e-40, 1e40
RATIO = math.log1p(ACCURACY)


class Spread:
    """Least, most and quantiles of values that are not negative."""

    def __init__(self) -> None:
        self.count = 0
        self.least, self.most = math.inf, -math.inf
        self._steps: dict[int, list[float]] = {}  # count and sum
        self._zeros = 0

    def add(self, value: float | None) -> None:
        """Take a value in; None and what is not finite are left out."""
        if value is None or not math.isfinite(value):
            return
        self.count += 1
        self.least, self.most = min(self.least, value), max(self.most, value)
        if value < SMALLEST:
            self._zeros += 1
            return
        step = math.ceil(math.log(min(value, LARGEST)) / RATIO)
        inside = self._steps.setdefault(step, [0, 0.0])
        inside[0] += 1
        inside[1] += value

    def quantile(self, share: float) -> float:
        """Give the least value that so large a share does not exceed; there must be a value."""
        left = max(math.ceil(share * self.count), 1) - self._zeros
        if left <= 0:
            return min(max(self.least, 0.0), self.most)
        for _, (count, total) in sorted(self._steps.items()):
            left -= int(count)
            if left <= 0:
                return total / count
        return self.most

    def as_dict(self) -> dict[str, float] | None:
        """Least, 5 %, median, 95 % and most; None when there was no value."""
        if not self.count:
            return None
        low, median, high = (self.quantile(share) for share in (0.05, 0.5, 0.95))
        return {"least": self.least, "q05": low, "median": median, "q95": high, "most": self.most}
