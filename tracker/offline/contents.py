"""What the messages of one link amount to, taken in one by one as they lie in the logs."""

from array import array
from collections import Counter, deque
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.refusal import Refused
from tracker.logs import Record
from tracker.messages import decode_alarm, decode_pattern, decode_pilots
from tracker.settings import Settings

from .levels import Level, Levels

# Bursts remembered to tell a repeat from one that is merely late.
REMEMBERED = 1024
# Patterns counted at a time; the rare ones are dropped when there are more.
MOST_PATTERNS = 1 << 16


@dataclass(frozen=True, slots=True)
class Sizes:
    """Sizes of a burst: B, N, R, K."""

    frames: int
    elements: int
    receivers: int
    tones: int


@dataclass(slots=True)
class Order:
    """How the bursts follow one another by run and seq.

    Parameters
    ----------
    runs : int
        Runs, each begun by a start of the controller.
    gaps, lost, longest : int
        Gaps in `seq`, bursts missing in them, and the most in one gap.
    duplicates, late : int
        Bursts whose `seq` came before, and those that came after a later one.
    """

    runs: int = 0
    gaps: int = 0
    lost: int = 0
    longest: int = 0
    duplicates: int = 0
    late: int = 0
    _run: int | None = None
    _next: int = 0
    _recent: deque[int] = field(default_factory=lambda: deque(maxlen=REMEMBERED))

    def follows(self, burst: Burst) -> bool:
        """Take in a burst; tells whether it follows directly on the one before."""
        if burst.run != self._run:
            self.runs += 1
            self._run, self._next = burst.run, burst.seq + 1
            self._recent.clear()
            self._recent.append(burst.seq)
            return False
        if burst.seq < self._next:
            if burst.seq in self._recent:
                self.duplicates += 1
            else:
                self.late += 1
            return False
        missing = burst.seq - self._next
        self._next = burst.seq + 1
        self._recent.append(burst.seq)
        if missing:
            self.gaps += 1
            self.lost += missing
            self.longest = max(self.longest, missing)
        return missing == 0


class Contents:
    """What is known of a link so far.

    Parameters
    ----------
    link : str
    """

    def __init__(self, link: str) -> None:
        self.link = link
        self.messages: Counter[str] = Counter()
        self.refused: Counter[str] = Counter()
        self.sizes: Counter[Sizes] = Counter()
        self.spacing: Counter[int] = Counter()
        self.order = Order()
        self.bursts = self.frames = self.left_out = self.bytes = self.misfits = 0
        self.first_ns: int | None = None
        self.last_ns: int | None = None
        self.interval_s = array("d")  # from start to start of bursts that follow one another
        self.arrival_s = array("d")  # from the last frame to the log time
        self.causes: Counter[str] = Counter()
        self.rates = array("d")
        self.alarms: Counter[str] = Counter()
        self.alarm_ns: dict[str, int] = {}
        self.patterns: Counter[bytes] = Counter()
        self.bursts_with: Counter[bytes] = Counter()
        self._settings: Settings | None = None
        self._levels: dict[tuple[object, ...], Levels] = {}
        self._before: Burst | None = None

    def use(self, settings: Settings | None) -> None:
        """Use these settings, as far as they are of this link, for the bursts to come."""
        self._settings = settings if settings is not None and settings.link.name == self.link else None

    def take(self, kind: str, record: Record) -> None:
        """Take in a message."""
        self.messages[kind] += 1
        try:
            if kind == "pilots":
                self._burst(decode_pilots(record.body, self.link, None), record)
            elif kind == "pattern":
                pattern = decode_pattern(record.body).event
                self.causes[pattern.cause] += 1
                self.rates.append(pattern.rate)
            elif kind == "alarm":
                alarm = decode_alarm(record.body).event
                self.alarms[alarm.kind] += 1
                self.alarm_ns.setdefault(alarm.kind, alarm.t_ns)
        except Refused as refused:
            self.refused[refused.reason] += 1

    @property
    def size(self) -> Sizes | None:
        """The commonest sizes."""
        return self.sizes.most_common(1)[0][0] if self.sizes else None

    @property
    def repeated_share(self) -> float:
        """Share of the frames that repeat a pattern of their burst."""
        repeated = sum(levels.repeated for levels in self._levels.values())
        return repeated / max(self.frames - self.left_out, 1)

    @property
    def commonest(self) -> tuple[bytes, float, float] | None:
        """The commonest pattern, packed, its share of the frames and of the bursts; None when none recurs."""
        if not self.patterns:
            return None
        pattern, count = self.patterns.most_common(1)[0]
        if count < 2:
            return None
        return pattern, count / self.frames, self.bursts_with[pattern] / self.bursts

    @property
    def levels(self) -> list[Level]:
        """Noise and signal at each receiver, from the bursts of the commonest kind."""
        measured = self.measured
        return measured.levels() if measured else []

    @property
    def measured(self) -> Levels | None:
        """The running powers that rest on the most frames."""
        return max(self._levels.values(), key=lambda levels: levels.frames, default=None)

    def _burst(self, burst: Burst, record: Record) -> None:
        receivers, tones = burst.response.shape[1:]
        sizes = Sizes(burst.frames, burst.elements, receivers, tones)
        self.sizes[sizes] += 1
        self.spacing[burst.dt_ns] += 1
        self.bytes += len(record.body)
        self.bursts += 1
        self.frames += burst.frames
        self.left_out += int(burst.frames - np.count_nonzero(burst.keep))
        self.first_ns = burst.t_ns if self.first_ns is None else min(self.first_ns, burst.t_ns)
        self.last_ns = burst.end_ns if self.last_ns is None else max(self.last_ns, burst.end_ns)
        self.arrival_s.append((record.log_time_ns - burst.end_ns) / 1e9)
        if self.order.follows(burst) and self._before is not None:
            self.interval_s.append((burst.t_ns - self._before.t_ns) / 1e9)
        self._before = burst
        self._count_patterns(burst.patterns)
        self._measure(burst, sizes)

    def _measure(self, burst: Burst, sizes: Sizes) -> None:
        key: tuple[object, ...] = (sizes.receivers, sizes.tones)
        settings = self._settings
        if settings is not None:
            wanted = (settings.panel.elements, settings.link.receivers, settings.tones.count)
            if wanted == (sizes.elements, sizes.receivers, sizes.tones):
                key += (settings.tones, settings.delay)
            else:
                self.misfits += 1
        levels = self._levels.get(key)
        if levels is None:
            basis = _basis(settings) if settings is not None and len(key) > 2 else None
            levels = self._levels[key] = Levels(sizes.receivers, sizes.tones, basis)
        levels.update(burst)

    def _count_patterns(self, patterns: NDArray[np.uint8]) -> None:
        found = Counter(row.tobytes() for row in patterns)
        self.patterns.update(found)
        self.bursts_with.update(found.keys())
        if len(self.patterns) > MOST_PATTERNS:
            for counter in (self.patterns, self.bursts_with):
                kept = {pattern: counter[pattern] for pattern, count in self.patterns.most_common(MOST_PATTERNS // 4)}
                counter.clear()
                counter.update(kept)


def _basis(settings: Settings) -> NDArray[np.complex128]:
    tones, delay = settings.tones, settings.delay
    return delay_basis(tones.fft, tones.first, tones.count, delay.taps, delay.before)
