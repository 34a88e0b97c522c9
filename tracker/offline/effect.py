"""What something did to the link: the measured rate before it, the lowest after, and when it was back."""

from array import array
from bisect import bisect_left
from dataclasses import dataclass, field

# The rate before is the mean over this time, or over so many values where fewer lie in it.
BEFORE_NS = 1_000_000_000
LEAST_BEFORE = 5
# Back is when the mean of so many values in a row is this share of the rate before.
IN_A_ROW = 3
BACK = 0.95
# What did not fall within this time, and so many values, did not fall for that.
SOON_NS = 2_000_000_000
LEAST_SOON = 8
# Whatever was not back within this time, and so many values, is not waited for.
PATIENCE_NS = 600_000_000_000
LEAST_PATIENT = 500
# Effects waited for at a time; the eldest are given up when there are more.
MOST_OPEN = 64
# Values remembered: the beginning of a slow change lies some time back.
REMEMBERED = 1 << 16


@dataclass(slots=True)
class Effect:
    """Rates about something that happened, bit/s/Hz.

    Parameters
    ----------
    since_ns, decided_ns : int
        When it began, as estimated, and when it was told.
    before : float
        Mean measured rate before it began.
    lowest : float or None
        Lowest measured rate since, until it was back, or until it was clear that it does not fall.
    back_ns : int or None
        When the rate was back at 95 % of before; None when it did not fall below that, or never came back.
    open : bool
        Whether it is still waited for.
    """

    since_ns: int
    decided_ns: int
    before: float
    lowest: float | None = None
    back_ns: int | None = None
    open: bool = True
    _seen: int = 0
    _latest: list[tuple[int, float]] = field(default_factory=list)

    @property
    def fell(self) -> bool:
        """Whether the rate fell below 95 % of before."""
        return self.lowest is not None and self.lowest < BACK * self.before

    @property
    def back_after_s(self) -> float | None:
        """Time from the beginning until it was back, s."""
        return None if self.back_ns is None else (self.back_ns - self.since_ns) / 1e9

    @property
    def depth(self) -> float:
        """Share of the rate that was lost at worst."""
        return 1.0 - self.lowest / self.before if self.lowest is not None and self.before > 0 else 0.0

    def follow(self, t_ns: int, rate: float) -> None:
        """Take in the next measured rate."""
        if not self.open or t_ns < self.since_ns:
            return
        if t_ns - self.since_ns > PATIENCE_NS and self._seen >= LEAST_PATIENT:
            self.open = False
            return
        self.lowest = rate if self.lowest is None else min(self.lowest, rate)
        self._latest = [*self._latest[-(IN_A_ROW - 1) :], (t_ns, rate)]
        self._seen += t_ns > self.decided_ns
        if self.fell:
            together = sum(value for _, value in self._latest) / len(self._latest)
            if len(self._latest) == IN_A_ROW and together >= BACK * self.before:
                self.back_ns = next(moment for moment, value in self._latest if value >= BACK * self.before)
                self.open = False
        elif self._seen >= LEAST_SOON and t_ns - self.decided_ns > SOON_NS:
            self.open = False


class Rates:
    """The measured rate of late, and the effects that are waited for."""

    def __init__(self) -> None:
        self._times, self._rates = array("q"), array("d")
        self._open: list[Effect] = []

    def add(self, t_ns: int, rate: float) -> None:
        """Take in a measured rate."""
        if self._times and t_ns < self._times[-1]:
            # A clock that was set back: what came before tells nothing of what lies before a time any more.
            self._times, self._rates = array("q"), array("d")
        self._times.append(t_ns)
        self._rates.append(rate)
        if len(self._times) >= 2 * REMEMBERED:
            del self._times[:REMEMBERED], self._rates[:REMEMBERED]
        if self._open:
            for effect in self._open:
                effect.follow(t_ns, rate)
            self._open = [effect for effect in self._open if effect.open]

    def watch(self, since_ns: int, decided_ns: int) -> Effect | None:
        """Wait for the effect of something; None when no rate was measured before it."""
        start = bisect_left(self._times, since_ns)
        begin = min(bisect_left(self._times, since_ns - BEFORE_NS), max(start - LEAST_BEFORE, 0))
        before = self._rates[begin:start]
        if not before:
            return None
        effect = Effect(since_ns, decided_ns, sum(before) / len(before))
        for t_ns, rate in zip(self._times[start:], self._rates[start:], strict=True):
            effect.follow(t_ns, rate)
        if effect.open:
            self._open.append(effect)
            if len(self._open) > MOST_OPEN:
                self._open.pop(0).open = False
        return effect
