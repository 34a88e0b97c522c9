"""What a replay has to say: how the log went, how the replay went, and whether they are the same."""

from collections import Counter, deque
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np

from tracker.engine.events import Alarm, Event, Pattern, State
from tracker.messages import decode_alarm, decode_pattern, decode_state

from .blocks import Said


@dataclass(slots=True)
class Mean:
    """A mean that needs no memory of its values."""

    count: int = 0
    total: float = 0.0

    def add(self, value: float, times: int = 1) -> None:
        """Take a value in, so many times."""
        self.count += times
        self.total += value * times

    def join(self, other: "Mean") -> None:
        """Take in the values of another."""
        self.count += other.count
        self.total += other.total

    @property
    def value(self) -> float | None:
        """The mean; None before the first value."""
        return self.total / self.count if self.count else None


@dataclass(slots=True)
class Account:
    """One side's account: the log's own, or the replay's.

    Parameters
    ----------
    patterns, alarms : int, Counter
        Refreshes published, alarms by kind.
    predicted, measured, innovation, error : Mean
        Over bursts, where there is a value.
    """

    patterns: int = 0
    alarms: Counter[str] = field(default_factory=Counter)
    predicted: Mean = field(default_factory=Mean)
    measured: Mean = field(default_factory=Mean)
    innovation: Mean = field(default_factory=Mean)
    error: Mean = field(default_factory=Mean)

    def take(self, event: Event) -> None:
        """Take in one event."""
        if isinstance(event, Pattern):
            self.patterns += 1
        elif isinstance(event, Alarm):
            self.alarms[event.kind] += 1
        elif isinstance(event, State):
            self.take_rates(event.rate_measured, event.rate_predicted, event.innovation)

    def join(self, other: "Account") -> None:
        """Take in what another has taken."""
        self.patterns += other.patterns
        self.alarms += other.alarms
        for name in ("predicted", "measured", "innovation", "error"):
            getattr(self, name).join(getattr(other, name))

    def take_rates(self, measured: float | None, predicted: float | None, innovation: Sequence[float]) -> None:
        """Take in what a state says of the link."""
        if predicted is not None:
            self.predicted.add(predicted)
        if measured is not None:
            self.measured.add(measured)
        if innovation:
            self.innovation.add(sum(innovation) / len(innovation))

    def as_dict(self) -> dict[str, Any]:
        """Summarise as plain values."""
        return {
            "patterns": self.patterns,
            "alarms": dict(self.alarms),
            "rate_predicted": self.predicted.value,
            "rate_measured": self.measured.value,
            "innovation": self.innovation.value,
            "prediction_error": self.error.value,
        }


class Comparison:
    """Holds the patterns of a replay against those that the log says were published, one after another."""

    def __init__(self) -> None:
        self._logged: deque[Pattern] = deque()
        self._replayed: deque[Pattern] = deque()
        self.same = 0
        self.first_difference: str | None = None

    def logged(self, pattern: Pattern) -> None:
        """Take a pattern from the log."""
        self._logged.append(pattern)
        self._settle()

    def replayed(self, pattern: Pattern) -> None:
        """Take a pattern from the replay."""
        self._replayed.append(pattern)
        self._settle()

    def join(self, other: "Comparison") -> None:
        """Go on with the patterns of another, in order."""
        self._logged += other._logged
        self._replayed += other._replayed
        self.same += other.same
        self.first_difference = self.first_difference or other.first_difference

    @property
    def unmatched(self) -> tuple[int, int]:
        """Patterns that only the log, and that only the replay has."""
        return len(self._logged), len(self._replayed)

    def _settle(self) -> None:
        while self._logged and self._replayed:
            logged, replayed = self._logged.popleft(), self._replayed.popleft()
            different = [name for name in _names() if not _equal(getattr(logged, name), getattr(replayed, name))]
            if not different:
                self.same += 1
            elif self.first_difference is None:
                self.first_difference = f"pattern {logged.id} differs in {', '.join(different)}"


def decode_said(said: Said) -> Event:
    """Decode what the tracker had said.

    Raises
    ------
    Refused
    """
    if said.kind == "pattern":
        return decode_pattern(said.body).event
    if said.kind == "alarm":
        return decode_alarm(said.body).event
    return decode_state(said.body).event


def _names() -> Iterable[str]:
    return (field.name for field in fields(Pattern))


def _equal(a: Any, b: Any) -> bool:
    return bool(np.array_equal(a, b))
