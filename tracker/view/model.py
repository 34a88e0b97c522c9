"""What is known about a link from what its service published: counts, histories, latest values. No socket, no screen.

Times named `now` are seconds of whatever steady clock the caller uses, always the same one.
"""

import math
from collections import Counter, deque
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from tracker.engine import events
from tracker.messages import AlarmMessage, PatternMessage, PlanMessage, StateMessage
from tracker.view.trace import History

REMEMBERED_PATTERNS = 256
REMEMBERED_NOTES = 100
# Elements named in one note.
NAMED = 8


def clean(text: str) -> str:
    """Replace control characters: what came over the network must not steer the terminal."""
    return "".join(character if character.isprintable() else "?" for character in text)


@dataclass(frozen=True, slots=True)
class Truth:
    """What only a stand-in testbed can know, because it made the channel.

    Parameters
    ----------
    pattern : int or None
        Id of the pattern in force.
    rate : float
        Rate of that pattern with the channel known exactly, bit/s/Hz.
    best : float
        Best rate found with the channel known exactly, bit/s/Hz.
    event : str or None
        What happens to the channel now.
    net : float or None
        Rate of payload over all frames, those that are sounded included, bit/s/Hz; None when it does not say.
    """

    pattern: int | None
    rate: float
    best: float
    event: str | None
    net: float | None = None


@dataclass(frozen=True, slots=True)
class Note:
    """Something worth a line: an alarm, a change of mode, a pattern out of the ordinary.

    Parameters
    ----------
    at : float
    kind : str
        One word.
    text : str
    grave : bool
        Whether it needs attention.
    count : int
        How often it came in a row.
    """

    at: float
    kind: str
    text: str
    grave: bool = False
    count: int = 1

    def __str__(self) -> str:
        return self.text if self.count == 1 else f"{self.text} ({self.count} times)"


@dataclass(slots=True)
class LinkModel:
    """All that is known about one link.

    Parameters
    ----------
    link : str
    latency_span_s : float
        How far back latencies are kept.
    """

    link: str
    latency_span_s: float = 60.0
    heard_at: float | None = None
    state: events.State | None = None
    stages_us: dict[str, int] = field(default_factory=dict)
    pattern: events.Pattern | None = None
    plan: events.Plan | None = None
    truth: Truth | None = None
    patterns: int = 0
    alarms: Counter[str] = field(default_factory=Counter)
    unreadable: int = 0
    unreadable_why: str = ""
    noted: int = 0
    notes: deque[Note] = field(default_factory=lambda: deque(maxlen=REMEMBERED_NOTES))
    measured: History = field(default_factory=History)
    predicted: History = field(default_factory=History)
    exact: History = field(default_factory=History)
    best: History = field(default_factory=History)
    innovation: History = field(default_factory=History)
    drift: History = field(default_factory=History)
    net: History = field(default_factory=History)
    achieved_sum: float = 0.0
    net_sum: float = 0.0
    gross_sum: float = 0.0
    best_sum: float = 0.0
    _latencies: deque[tuple[float, int]] = field(default_factory=deque)
    _published: dict[int, events.Pattern] = field(default_factory=dict)

    def take_state(self, message: StateMessage, now: float) -> None:
        """Take in the state after a burst."""
        state, before = message.event, self.state
        self.heard_at = now
        if before is not None and state.run != before.run:
            self.note(now, "run", "the controller started anew")
        if before is None or state.mode != before.mode:
            self.note(now, "mode", str(state.mode), grave=state.mode is events.Mode.REACQUIRING)
        if before is not None and state.lost > before.lost:
            self.note(now, "lost", "bursts lost on the way in", grave=True)
        self._note_faults(before.faults if before is not None else (), state.faults, now)
        self.state, self.stages_us = state, {clean(stage): us for stage, us in message.latency_us.items()}
        self.measured.add(now, state.rate_measured)
        self.predicted.add(now, state.rate_predicted)
        if state.innovation:
            self.innovation.add(now, max(state.innovation))
        if state.threshold > 0:
            self.drift.add(now, state.statistic / state.threshold)

    def take_pattern(self, message: PatternMessage, now: float) -> None:
        """Take in a refreshed pattern."""
        pattern = message.event
        self.heard_at = now
        self.pattern = pattern
        self.patterns += 1
        self._published[pattern.id] = pattern
        if len(self._published) > REMEMBERED_PATTERNS:
            del self._published[next(iter(self._published))]
        if pattern.cause is not events.Cause.REFRESH:
            self.note(now, "pattern", f"published for cause {pattern.cause}")
        self._latencies.append((now, message.latency_us))
        self._forget(now)

    def take_alarm(self, message: AlarmMessage, now: float) -> None:
        """Take in an alarm."""
        alarm = message.event
        self.heard_at = now
        self.alarms[alarm.kind] += 1
        where = "" if alarm.receiver is None else f" at receiver {alarm.receiver}"
        runner_up = f", else {alarm.next_kind}" if alarm.next_kind else ""
        ago = (alarm.t_ns - alarm.since_ns) / 1e6
        since = f", began {ago:,.0f} ms before" if ago > 0 else ""
        size = f"{alarm.statistic:.3g} against {alarm.threshold:.3g}"
        self.note(now, "alarm", f"{alarm.kind}{where}{runner_up}: {size}{since}; {alarm.action}", grave=True)

    def take_plan(self, message: PlanMessage, now: float) -> None:
        """Take in a sounding plan."""
        self.heard_at = now
        self.plan = message.event

    def take_truth(self, truth: Truth, now: float) -> None:
        """Take in what the stand-in testbed knows."""
        if truth.event and (self.truth is None or truth.event != self.truth.event):
            self.note(now, "testbed", truth.event)
        self.heard_at = now
        self.truth = truth
        self.exact.add(now, truth.rate)
        self.best.add(now, truth.best)
        if math.isfinite(truth.rate) and math.isfinite(truth.best):
            self.achieved_sum += truth.rate
            self.best_sum += truth.best
        if truth.net is not None and math.isfinite(truth.net) and math.isfinite(truth.rate):
            self.net.add(now, truth.net)
            self.net_sum += truth.net
            self.gross_sum += truth.rate

    def take_unreadable(self, why: str, now: float) -> None:
        """Count a message that could not be read, and say so the first time."""
        self.heard_at = now
        if not self.unreadable:
            self.note(now, "message", f"cannot be read: {why}", grave=True)
        self.unreadable += 1
        self.unreadable_why = why

    def note(self, now: float, kind: str, text: str, *, grave: bool = False) -> None:
        """Keep a line for the list of events; one that says the same as the last is counted with it."""
        text = clean(text)
        last = self.notes[-1] if self.notes else None
        if last is not None and (last.kind, last.text) == (kind, text):
            self.notes[-1] = Note(now, kind, text, grave, last.count + 1)
        else:
            self.notes.append(Note(now, kind, text, grave))
            self.noted += 1

    def _note_faults(
        self, before: Sequence[tuple[int, str, float]], faults: Sequence[tuple[int, str, float]], now: float
    ) -> None:
        """Name elements that are newly faulty, and those that are no longer."""
        known, faulty = {element for element, _, _ in before}, {element for element, _, _ in faults}
        if found := [f"{element} {fault}" for element, fault, _ in faults if element not in known]:
            self.note(now, "fault", f"elements do not follow: {_some(found)}", grave=True)
        if mended := [str(element) for element, _, _ in before if element not in faulty]:
            self.note(now, "fault", f"elements follow again: {_some(mended)}")

    @property
    def in_use(self) -> events.Pattern | None:
        """The pattern that the controller says it uses, None when it was published before this view began."""
        if self.state is None or self.state.pattern is None:
            return None
        return self._published.get(self.state.pattern)

    @property
    def achieved(self) -> float | None:
        """Rate in force over the best possible, from the testbed's last word; None without one."""
        if self.truth is None or not self.truth.best > 0:
            return None
        return self.truth.rate / self.truth.best

    @property
    def achieved_so_far(self) -> float | None:
        """The same over all that was heard, as the ratio of the sums."""
        return self.achieved_sum / self.best_sum if self.best_sum > 0 else None

    @property
    def net_so_far(self) -> float | None:
        """Rate of payload over all frames, over the rate in force, as the ratio of the sums."""
        return self.net_sum / self.gross_sum if self.gross_sum > 0 else None

    def latency_ms(self, now: float) -> tuple[float, float] | None:
        """Median and 99th percentile of burst-to-pattern latency over `latency_span_s`, ms."""
        self._forget(now)
        if not self._latencies:
            return None
        values = np.array([latency for _, latency in self._latencies]) / 1e3
        return float(np.median(values)), float(np.percentile(values, 99))

    def _forget(self, now: float) -> None:
        while self._latencies and self._latencies[0][0] < now - self.latency_span_s:
            self._latencies.popleft()


def _some(words: Sequence[str]) -> str:
    """List the first few."""
    more = f" and {len(words) - NAMED} more" if len(words) > NAMED else ""
    return ", ".join(words[:NAMED]) + more
