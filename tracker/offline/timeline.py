"""The timeline of a link: from what the tracker said, one event after another, to what changed when.

Memory is bounded however long the log: quantities go into time bins, happenings are folded, quantiles are counted.
"""

import math
from collections import Counter
from typing import Any

from tracker.engine.events import Alarm, Cause, Event, Mode, Pattern, State

from .bins import Bins, Mark
from .effect import Rates
from .happenings import MOST_ENTRIES, Happening, fold_close, fold_runs
from .spread import Spread

# Nothing said for so many times the usual spacing of states, and for so long, is a silence.
SILENT = 20.0
LEAST_SILENCE_NS = 1_000_000_000
# Kinds of alarm told apart; a log may name any number of them.
MOST_KINDS = 64
# Alarms whose statistic is no drift statistic.
OTHER_EVIDENCE = frozenset({"gap", "lock", "overload", "disk", "clock"})
COUNTED = ("lost", "refused", "duplicate", "dropped_frames")


def clean(text: str) -> str:
    """Replace control characters: what a log says must steer neither a terminal nor an XML reader."""
    return "".join(character if character.isprintable() else "?" for character in text)


class Timeline:
    """What the events of one link amount to.

    Attributes
    ----------
    bins : Bins
        With the quantities ``measured``, ``predicted`` (bit/s/Hz), ``innovation``, ``drift`` (statistic over
        threshold) and ``noise 0``, ``noise 1``, … (power on a tone); modes; alarms.
    pattern : Pattern or None
        The last one published.
    faults : tuple
        As in the last state.
    promise_kept : float or None
        As in the last state that told.
    """

    def __init__(self) -> None:
        self.bins = Bins()
        self.pattern: Pattern | None = None
        self.faults: tuple[tuple[int, str, float], ...] = ()
        self.states = self.receivers = 0
        self.first_ns: int | None = None
        self.last_ns: int | None = None
        self.silent_ns = 0
        self.alarms: Counter[str] = Counter()
        self.patterns: Counter[str] = Counter()
        self.promise_kept: float | None = None
        self.measured, self.predicted, self.innovation = Spread(), Spread(), Spread()
        self._counts: Counter[str] = Counter()
        self._noise: list[Spread] = []
        self._modes: Counter[str] = Counter()  # ns
        self._rates = Rates()
        self._entries: list[Happening] = []
        self._before: State | None = None
        self._spacing_ns = 0.0
        self._just: list[tuple[Alarm, Happening]] = []  # alarms at bursts whose state is still to come
        self._inside: tuple[Happening, int] | None = None  # what led to the mode in force, and since when

    def take(self, event: Event) -> None:
        """Take in what the tracker said next."""
        if isinstance(event, State):
            self._take_state(event)
        elif isinstance(event, Alarm):
            self._take_alarm(event)
        elif isinstance(event, Pattern):
            self._take_pattern(event)

    @property
    def state(self) -> State | None:
        """The last one."""
        return self._before

    @property
    def happenings(self) -> list[Happening]:
        """What happened, in order of the beginning of each; long runs of a kind as one."""
        self._entries = fold_runs(self._entries)
        return self._entries

    @property
    def start_ns(self) -> int:
        """Time that seconds are counted from: the first state's, or else the first alarm's."""
        if self.first_ns is not None:
            return self.first_ns
        return min((each.t_ns for each in self._entries), default=0)

    def as_dict(self) -> dict[str, Any]:
        """Give everything as plain values."""
        start_ns = self.start_ns
        span_ns = self.last_ns - start_ns if self.last_ns is not None else 0
        heard_h = max(span_ns - self.silent_ns, 0) / 3.6e12
        modes_ns = sum(self._modes.values())
        return {
            "start_ns": start_ns,
            "span_s": span_ns / 1e9,
            "silent_s": self.silent_ns / 1e9,
            "states": self.states,
            **{name: self._counts[name] for name in COUNTED},
            "happenings": [each.as_dict(start_ns) for each in self.happenings],
            "modes": {str(mode): self._modes[mode] / modes_ns for mode in Mode if self._modes[mode]},
            "alarms": dict(self.alarms.most_common()),
            "alarms_per_hour": sum(self.alarms.values()) / heard_h if heard_h > 0 else None,
            "patterns": dict(self.patterns),
            "promise_kept": self.promise_kept,
            "rate_measured": self.measured.as_dict(),
            "rate_predicted": self.predicted.as_dict(),
            "innovation": self.innovation.as_dict(),
            "noise_db": [_decibels(spread) for spread in self._noise],
            "faults": [[element, clean(fault)[:32], finite(sure)] for element, fault, sure in self.faults],
            "pattern": None
            if self.pattern is None
            else {
                "id": self.pattern.id,
                "t_s": (self.pattern.t_ns - start_ns) / 1e9,
                "states": "".join("+" if state > 0 else "-" for state in self.pattern.states),
            },
            "bins": self._bins_as_dict(start_ns),
        }

    def _take_state(self, state: State) -> None:
        before, cause = self._before, None
        if before is not None:
            cause = self._follow_time(before, state)
            anew = state.bursts < before.bursts
            for name in COUNTED:
                self._counts[name] += max(getattr(state, name) - (0 if anew else getattr(before, name)), 0)
        self.first_ns = state.t_ns if self.first_ns is None else min(self.first_ns, state.t_ns)
        self.last_ns = state.t_ns if self.last_ns is None else max(self.last_ns, state.t_ns)
        if before is None or state.mode != before.mode:
            self._enter(state, cause)
        if state.faults != self.faults:
            self._take_faults(state)
        self.states += 1
        self._measure(state)
        self._before = state
        self._just = [each for each in self._just if each[0].run == state.run and each[0].seq > state.seq]
        if len(self._entries) > MOST_ENTRIES:
            self._entries = fold_close(self._entries, MOST_ENTRIES // 2)

    def _follow_time(self, before: State, state: State) -> Happening | None:
        """Account for the time since the last state; return what happened in it."""
        happened = None
        passed_ns = state.t_ns - before.t_ns
        if passed_ns > max(SILENT * self._spacing_ns, LEAST_SILENCE_NS) and self._spacing_ns > 0:
            self.silent_ns += passed_ns
            happened = self._add("silence", "", state.t_ns, before.t_ns, amount=passed_ns / 1e9)
        elif passed_ns > 0:
            self._modes[before.mode] += passed_ns
            # A mean that begins with all of the first value and forgets over 16.
            self._spacing_ns += (passed_ns - self._spacing_ns) / min(self.states, 16)
        if state.run != before.run:
            happened = self._add("controller", "", state.t_ns, state.t_ns, detail="began a new run")
        if state.bursts < before.bursts:
            happened = self._add("tracker", "", state.t_ns, state.t_ns, detail="counts anew")
        return happened

    def _enter(self, state: State, cause: Happening | None) -> None:
        """Note a mode entered, with whatever led to it; tracking ends what led away from it."""
        if self._inside is not None:
            led, since_ns = self._inside
            led.mode_ns = state.t_ns - since_ns
            self._inside = None
        if state.mode is Mode.TRACKING:
            return
        for alarm, happening in self._just:
            if alarm.run == state.run and state.seq <= alarm.seq:
                cause = happening
        if cause is None:
            cause = self._add("mode", str(state.mode), state.t_ns, state.t_ns, watch=state.mode is Mode.HELD)
        cause.mode = str(state.mode)
        self._inside = cause, state.t_ns

    def _take_faults(self, state: State) -> None:
        known = {(element, fault) for element, fault, _ in self.faults}
        new: dict[str, list[str]] = {}
        for element, fault, confidence in state.faults:
            if (element, fault) not in known:
                new.setdefault(clean(fault)[:32], []).append(f"{element} ({confidence:.2f})")
        for kind, elements in list(new.items())[:MOST_KINDS]:
            shown = ", ".join(elements[:4]) + (f" and {len(elements) - 4} more" if len(elements) > 4 else "")
            word = "element" if len(elements) == 1 else "elements"
            self._add("fault", kind, state.t_ns, state.t_ns, detail=f"{word} {shown}", amount=len(elements))
        self.faults = state.faults

    def _measure(self, state: State) -> None:
        here = self.bins.at(state.t_ns)
        here.modes[state.mode] = here.modes.get(state.mode, 0) + 1
        if state.rate_measured is not None and math.isfinite(state.rate_measured):
            here.add("measured", state.rate_measured)
            self._rates.add(state.t_ns, state.rate_measured)
        if state.rate_predicted is not None:
            here.add("predicted", state.rate_predicted)
        self.measured.add(state.rate_measured)
        self.predicted.add(state.rate_predicted)
        for ratio in state.innovation:
            here.add("innovation", ratio)
            self.innovation.add(ratio)
        if state.threshold > 0:
            here.add("drift", state.statistic / state.threshold)
        self.receivers = max(self.receivers, len(state.noise))
        while len(self._noise) < len(state.noise):
            self._noise.append(Spread())
        for receiver, power in enumerate(state.noise):
            if power > 0:
                here.add(f"noise {receiver}", power)
                self._noise[receiver].add(power)
        if state.promise_kept is not None and math.isfinite(state.promise_kept):
            self.promise_kept = state.promise_kept

    def _take_alarm(self, alarm: Alarm) -> None:
        kind = clean(alarm.kind)
        if kind not in self.alarms and len(self.alarms) >= MOST_KINDS:
            kind = "other"
        self.alarms[kind] += 1
        here = self.bins.at(alarm.t_ns)
        here.mark(kind if alarm.receiver is None else f"{kind} r{alarm.receiver}", Mark(1, alarm.t_ns, alarm.since_ns))
        if alarm.threshold > 0 and kind not in OTHER_EVIDENCE:
            here.add("drift", alarm.statistic / alarm.threshold)
        happening = self._add(
            "alarm", kind, alarm.t_ns, alarm.since_ns, amount=finite(alarm.statistic) or 0.0 if kind == "gap" else 0.0
        )
        happening.receiver = alarm.receiver
        happening.statistic, happening.threshold = finite(alarm.statistic), finite(alarm.threshold)
        happening.next_kind, happening.action = clean(alarm.next_kind), clean(alarm.action)
        self._just.append((alarm, happening))

    def _take_pattern(self, pattern: Pattern) -> None:
        self.pattern = pattern
        self.patterns[str(pattern.cause)] += 1
        if pattern.cause not in (Cause.DRIFT, Cause.OPERATOR):
            return
        led = [each for alarm, each in self._just if (alarm.run, alarm.seq) == (pattern.run, pattern.seq)]
        if pattern.cause is Cause.OPERATOR or not led:
            led = [self._add("pattern", str(pattern.cause), pattern.t_ns, pattern.t_ns)]
        led[-1].pattern = pattern.id

    def _add(
        self,
        what: str,
        kind: str,
        t_ns: int,
        since_ns: int,
        *,
        detail: str = "",
        amount: float = 0.0,
        watch: bool = True,
    ) -> Happening:
        effect = self._rates.watch(since_ns, t_ns) if watch else None
        happening = Happening(what, kind, t_ns, since_ns, t_ns, detail=detail, amount=amount, effect=effect)
        self._entries.append(happening)
        return happening

    def _bins_as_dict(self, start_ns: int) -> dict[str, Any]:
        """Give the bins as columns; null where a bin has no value."""
        items = self.bins.items()
        names = sorted({name for _, each in items for name in each.values})
        columns: dict[str, Any] = {
            "width_s": self.bins.width_ns / 1e9,
            "t_s": [(t_ns - start_ns) / 1e9 for t_ns, _ in items],
            "modes": [dict(each.modes) for _, each in items],
        }
        for name in names:
            extents = [each.values.get(name) for _, each in items]
            columns[name.replace(" ", "_")] = {
                "least": [None if extent is None else extent.least for extent in extents],
                "mean": [None if extent is None else extent.mean for extent in extents],
                "most": [None if extent is None else extent.most for extent in extents],
            }
        return columns


def finite(value: float) -> float | None:
    """Give a number that JSON can hold; None for the others."""
    return value if math.isfinite(value) else None


def decibels(power: float) -> float:
    """Power in dB."""
    return 10.0 * math.log10(power)


def _decibels(spread: Spread) -> dict[str, float] | None:
    told = spread.as_dict()
    return None if told is None else {name: decibels(power) for name, power in told.items()}
