"""Time traces: what a quantity did over the last minute, kept in bins and drawn with block characters."""

import math
from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass, field

from rich.segment import Segment
from rich.style import Style

from tracker.view.palette import FILL, QUIET

BIN_S = 0.25
EIGHTHS = " ▁▂▃▄▅▆▇█"
AXIS = 7  # characters taken by the axis and its labels

Column = float | None


@dataclass(slots=True)
class History:
    """Means of a quantity over short bins of time.

    Parameters
    ----------
    keep_s : float
        How far back is kept.
    """

    keep_s: float = 600.0
    _bins: deque[list[float]] = field(default_factory=deque)  # [number of the bin, sum, count]
    _spacing_s: float = 0.0

    def add(self, now: float, value: float | None) -> None:
        """Add a value seen at time `now`, seconds; None and what is not finite leave a hole."""
        if value is None or not math.isfinite(value):
            return
        number = math.floor(now / BIN_S)
        if self._bins and self._bins[-1][0] == number:
            self._bins[-1][1] += value
            self._bins[-1][2] += 1
            return
        if self._bins:
            spacing = (number - self._bins[-1][0]) * BIN_S
            self._spacing_s += 0.2 * (spacing - self._spacing_s)
        self._bins.append([number, value, 1])
        while self._bins[0][0] < number - self.keep_s / BIN_S:
            self._bins.popleft()

    @property
    def last(self) -> float | None:
        """Mean over the latest bin, None before the first value."""
        return self._bins[-1][1] / self._bins[-1][2] if self._bins else None

    def columns(self, now: float, span_s: float, width: int) -> list[Column]:
        """Means over `width` columns that cover the last `span_s` seconds, the latest last.

        A link slower than a column still gives an unbroken trace: a value holds for three times the usual spacing.
        """
        step = span_s / width
        last = math.floor(now / step)
        sums, counts = [0.0] * width, [0.0] * width
        held: float | None = None
        held_at = -math.inf
        for number, total, count in self._bins:
            column = math.floor((number + 0.5) * BIN_S / step) - last + width - 1
            if 0 <= column < width:
                sums[column] += total
                counts[column] += count
            elif column < 0:
                held, held_at = total / count, column
        longest = 3.0 * max(self._spacing_s, BIN_S) / step
        made: list[Column] = []
        for column in range(width):
            if counts[column]:
                held, held_at = sums[column] / counts[column], column
            made.append(held if column - held_at <= longest else None)
        return made


@dataclass(frozen=True, slots=True)
class Line:
    """One quantity of a plot: filled from below when `glyph` is empty, else marked with it."""

    values: Sequence[Column]
    glyph: str = ""


def scale(lines: Sequence[Line], steps: int = 6) -> tuple[float, float]:
    """Limits of an axis that hold all values and fall on round numbers, so that the axis seldom moves."""
    values = [value for line in lines for value in line.values if value is not None]
    if not values:
        return 0.0, 1.0
    low, high = min(values), max(values)
    wide = max(high - low, 0.02 * max(abs(high), abs(low)), 1e-6)
    power = 10.0 ** math.floor(math.log10(wide / steps))
    step = next(factor * power for factor in (1, 2, 5, 10) if factor * power * steps >= wide)
    bottom = math.floor(low / step) * step
    return bottom, max(math.ceil(high / step) * step, bottom + step)


def draw(
    lines: Sequence[Line], *, width: int, height: int, limits: tuple[float, float], labels: tuple[str, str]
) -> list[list[Segment]]:
    """Draw lines of values over each other.

    Marks stand in the terminal's own colour, so that they read on the filled part and beside it.

    Parameters
    ----------
    lines : sequence of Line
        The later lie on top.
    width, height : int
        Characters, the axis included.
    limits : tuple of float
        Values at the bottom and at the top.
    labels : tuple of str
        What to write beside the top and the bottom.

    Returns
    -------
    list of list of Segment
        `height` lines, each `width` characters.
    """
    room = max(width - AXIS, 0)
    low, high = limits
    quiet, fill, on_fill = Style(color=QUIET), Style(color=FILL), Style(bgcolor=FILL, bold=True)
    drawn: list[list[Segment]] = []
    for row in range(height):
        label = labels[0] if row == 0 else labels[1] if row == height - 1 else ""
        cells = [Segment(f"{label[: AXIS - 1]:>{AXIS - 1}}▕", quiet)]
        floor = height - 1 - row  # whole cells below this one
        for column in range(room):
            glyph, filled = " ", 0.0
            for line in lines:
                index = len(line.values) - room + column
                value = line.values[index] if index >= 0 else None
                if value is None:
                    continue
                level = min(max((value - low) / (high - low), 0.0), 1.0) * height
                if not line.glyph:
                    filled = min(max(level - floor, 0.0), 1.0)
                elif floor == min(int(level), height - 1):
                    glyph = line.glyph
            if glyph == " ":
                cells.append(Segment(EIGHTHS[round(8 * filled)], fill))
            else:
                cells.append(Segment(glyph, on_fill if filled > 0.5 else Style(bold=True)))
        drawn.append(cells)
    return drawn
