"""Time bins for logs of any length: each quantity's least, mean and most, in a bounded number of bins.

Bins lie on a fixed grid of time. When the log outgrows the number allowed, each two neighbours become one: the width
doubles, and what was extreme stays so.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field

MOST_BINS = 1500
FINEST_NS = 1_000_000


@dataclass(slots=True)
class Extent:
    """Least, mean and most of the values taken in."""

    count: int = 0
    total: float = 0.0
    least: float = math.inf
    most: float = -math.inf

    def add(self, value: float) -> None:
        """Take a value in."""
        self.count += 1
        self.total += value
        self.least = min(self.least, value)
        self.most = max(self.most, value)

    def merge(self, other: "Extent") -> None:
        """Take in all values of another."""
        self.count += other.count
        self.total += other.total
        self.least = min(self.least, other.least)
        self.most = max(self.most, other.most)

    @property
    def mean(self) -> float:
        """The mean; there must be a value."""
        return self.total / self.count


@dataclass(slots=True)
class Mark:
    """Alarms of one kind within a bin.

    Parameters
    ----------
    count : int
    t_ns, since_ns : int
        Of the first.
    """

    count: int
    t_ns: int
    since_ns: int


@dataclass(slots=True)
class Bin:
    """What happened within a stretch of time.

    Parameters
    ----------
    values : dict
        Extents by name of the quantity.
    modes : dict
        States by mode.
    alarms : dict
        Marks by kind.
    """

    values: dict[str, Extent] = field(default_factory=dict)
    modes: dict[str, int] = field(default_factory=dict)
    alarms: dict[str, Mark] = field(default_factory=dict)

    def add(self, name: str, value: float) -> None:
        """Take in a value of a quantity; what is not finite is left out."""
        if not math.isfinite(value):
            return
        extent = self.values.get(name)
        if extent is None:
            extent = self.values[name] = Extent()
        extent.add(value)

    def merge(self, other: "Bin") -> None:
        """Take in all that lies in another bin."""
        for name, extent in other.values.items():
            self.values.setdefault(name, Extent()).merge(extent)
        for mode, count in other.modes.items():
            self.modes[mode] = self.modes.get(mode, 0) + count
        for kind, mark in other.alarms.items():
            self.mark(kind, mark)

    def mark(self, kind: str, mark: Mark) -> None:
        """Take in alarms of a kind."""
        known = self.alarms.get(kind)
        if known is None:
            self.alarms[kind] = Mark(mark.count, mark.t_ns, mark.since_ns)
            return
        known.count += mark.count
        if mark.t_ns < known.t_ns:
            known.t_ns, known.since_ns = mark.t_ns, mark.since_ns


class Bins:
    """Bins over all time that was seen.

    Parameters
    ----------
    most : int
        Bins between the first and the last, both counted.
    width_ns : int
        To begin with.
    """

    def __init__(self, most: int = MOST_BINS, width_ns: int = FINEST_NS) -> None:
        self._most = most
        self.width_ns = width_ns
        self._bins: dict[int, Bin] = {}
        self._first = self._last = 0

    def at(self, t_ns: int) -> Bin:
        """Give the bin of a time, which need not be later than others before it."""
        number = t_ns // self.width_ns
        if not self._bins:
            self._first = self._last = number
        while max(number, self._last) - min(number, self._first) >= self._most:
            self._halve()
            number = t_ns // self.width_ns
        self._first, self._last = min(number, self._first), max(number, self._last)
        known = self._bins.get(number)
        if known is None:
            known = self._bins[number] = Bin()
        return known

    def __len__(self) -> int:
        return len(self._bins)

    def items(self) -> list[tuple[int, Bin]]:
        """Give the middle of each bin in which something happened, ns, and the bin; in order of time."""
        half = self.width_ns // 2
        return [(number * self.width_ns + half, self._bins[number]) for number in sorted(self._bins)]

    def series(self, name: str, form: Callable[[float], float] = float) -> list[tuple[int, float, float, float]]:
        """Give middle, least, mean and most of a quantity, each value brought into another form, where there is one."""
        found = []
        for t_ns, each in self.items():
            extent = each.values.get(name)
            if extent is not None:
                found.append((t_ns, form(extent.least), form(extent.mean), form(extent.most)))
        return found

    def coarser(self, most: int) -> "Bins":
        """Give a copy with no more bins than that."""
        made = Bins(most, self.width_ns)
        for number in sorted(self._bins):
            made.at(number * self.width_ns).merge(self._bins[number])
        return made

    def _halve(self) -> None:
        """Make one bin of each two."""
        before, self._bins = self._bins, {}
        self.width_ns *= 2
        for number, each in sorted(before.items()):
            known = self._bins.get(number >> 1)
            if known is None:
                self._bins[number >> 1] = each
            else:
                known.merge(each)
        self._first, self._last = self._first >> 1, self._last >> 1
