"""The service's log: what a person has to know, and not more of it than a person can read."""

import time
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from structlog.testing import CapturingLogger

from tests.service.station import bursts, settings_text
from tracker.assembly import configure
from tracker.engine.events import Alarm, Cause, Event, Pattern
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.service.log import Account
from tracker.settings import parse

PATTERN = Pattern(1, 7, 1, 0, np.ones(16, np.int8), 5.4321, 5.1, 5.2, 6.0, Cause.REFRESH, 12)
ALARM = Alarm(7, 1, 0, 0, "channel", None, 9.512, 9.0, "motion", "reacquire")


class Told:
    """An account, what it wrote, and a clock that stands still until it is moved."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch) -> None:
        self.now_ns = 0
        self._log = CapturingLogger()
        self.account = Account(self._log)
        monkeypatch.setattr(time, "monotonic_ns", lambda: self.now_ns)

    def take(self, *events: Event) -> None:
        self.account.take(events, {"engine": 900})

    @property
    def lines(self) -> list[tuple[str, str, dict[str, Any]]]:
        """Level, event and fields of each line."""
        return [(call.method_name, call.args[0], dict(call.kwargs)) for call in self._log.calls]


@pytest.fixture
def told(monkeypatch: pytest.MonkeyPatch) -> Told:
    return Told(monkeypatch)


def test_patterns_are_told_once_a_second_at_most(told: Told) -> None:
    """The first at once; then the latest with the number of those that came since the last line."""
    for number in range(1, 438):
        told.take(replace(PATTERN, id=number))
    told.now_ns = 999_999_999
    told.account.tell()
    assert [(line[1], line[2]["id"], line[2]["since_last_line"]) for line in told.lines] == [("pattern", 1, 1)]
    told.now_ns = 1_000_000_000
    told.account.tell()
    assert [(line[2]["id"], line[2]["since_last_line"]) for line in told.lines] == [(1, 1), (437, 436)]
    told.now_ns = 10_000_000_000
    told.account.tell()
    assert len(told.lines) == 2, "nothing new, nothing told"


def test_alarms_are_told_at_once(told: Told) -> None:
    """Each of them, as a warning, with its numbers."""
    told.take(ALARM)
    told.take(ALARM)
    fields = {"kind": "channel", "statistic": 9.51, "threshold": 9.0, "action": "reacquire"}
    assert told.lines == [("warning", "alarm", fields)] * 2


def test_bursts_are_told_at_debug(told: Told, tmp_path: Any) -> None:
    """One line a burst, with the time that each stage took."""
    tracker = Tracker(configure(parse(settings_text("tcp://127.0.0.1:1")), tmp_path))
    (burst,) = bursts(1)
    tracker.admit(burst, burst.end_ns)
    told.take(*tracker.advance([burst], Steps(12)).events)
    debug = [line for line in told.lines if line[0] == "debug"]
    assert debug == [("debug", "burst", {"seq": 0, "mode": "acquiring", "together": 1, "engine": 900})]
