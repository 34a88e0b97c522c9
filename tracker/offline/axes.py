"""Axes of a drawing: what limits and marks to choose, for values and for times from milliseconds to days."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

# Steps between marks of time, s, and the unit that they are labelled in.
MINUTE, HOUR, DAY = 60.0, 3600.0, 86400.0
STEPS = (
    *(factor * 10.0**power for power in range(-3, 1) for factor in (1, 2, 5)),
    *(10.0, 15.0, 30.0),
    *(minutes * MINUTE for minutes in (1, 2, 5, 10, 15, 30)),
    *(hours * HOUR for hours in (1, 2, 3, 6, 12)),
    *(days * DAY for days in (1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 5000, 20000)),
)
UNITS = ((DAY, "d"), (HOUR, "h"), (MINUTE, "min"), (1.0, "s"))
# The ratio axis shows at least this much to either side of 1, and at most that much.
LEAST_RATIO, MOST_RATIO = 2.0, 128.0


@dataclass(frozen=True, slots=True)
class Axis:
    """A range of values on a stretch of the drawing.

    Parameters
    ----------
    low, high : float
        Values at the ends.
    start, end : float
        Where these lie, px.
    logarithmic : bool
    """

    low: float
    high: float
    start: float
    end: float
    logarithmic: bool = False

    def place(self, value: float) -> float:
        """Where a value lies, px; values beyond the ends lie at them."""
        if self.logarithmic:
            value = max(value, self.low)
            share = math.log(value / self.low) / math.log(self.high / self.low)
        else:
            share = (value - self.low) / (self.high - self.low)
        return self.start + min(max(share, 0.0), 1.0) * (self.end - self.start)


def value_limits(
    values: Sequence[float], parts: int, least: float, *, zero: bool = False
) -> tuple[float, float, float]:
    """Round limits that hold all values, and the step between marks.

    Parameters
    ----------
    values : sequence of float
    parts : int
        Most steps.
    least : float
        How far apart the limits are at least.
    zero : bool
        Whether the axis begins at zero.
    """
    low, high = (min(values), max(values)) if values else (0.0, 1.0)
    low = 0.0 if zero else low
    more = max(least - (high - low), 0.0)
    low, high = (low, high + more) if zero else (low - more / 2.0, high + more / 2.0)
    power = 10.0 ** math.floor(math.log10((high - low) / parts))
    for step in (power, 2 * power, 5 * power, 10 * power, 20 * power):
        bottom = math.floor(low / step + 1e-9) * step
        top = max(math.ceil(high / step - 1e-9) * step, bottom + step)
        if top - bottom <= (parts + 0.5) * step:
            break
    return bottom, top, step


def ratio_limit(values: Sequence[float]) -> float:
    """How far an axis about 1 goes to either side: a power of 2 that holds all values, within reason."""
    farthest = max((abs(math.log2(value)) for value in values if value > 0), default=0.0)
    return min(max(2.0 ** math.ceil(farthest - 1e-9), LEAST_RATIO), MOST_RATIO)


def time_marks(span_s: float, most: int = 12) -> list[tuple[float, str]]:
    """Give the marks of a time axis that begins at zero: seconds, and the label in s, min, h or d.

    Parameters
    ----------
    span_s : float
    most : int
        Most marks.
    """
    step = next((step for step in STEPS if span_s / step <= most - 1), STEPS[-1])
    size, unit = next(((size, unit) for size, unit in UNITS if step >= size), UNITS[-1])
    digits = max(-math.floor(math.log10(step) + 1e-9), 0) if step < 1 else 0
    count = min(math.floor(span_s / step + 1e-9), 10 * most)
    return [(number * step, f"{number * step / size:.{digits}f} {unit}") for number in range(count + 1)]
