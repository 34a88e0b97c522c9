"""When the disk fails: told, patterns withheld as the settings say, estimates go on, and all works again afterwards."""

import errno
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from structlog.testing import CapturingLogger

from tests.service.station import PATIENCE_S, RESTLESS, Controller, bursts, running
from tracker.engine.events import Cause
from tracker.engine.tracker import Tracker
from tracker.logs import LogError, LogReader, LogWriter
from tracker.messages import decode_pattern
from tracker.offline.rerun import Replay
from tracker.service import journal as journal_module
from tracker.service import syncing
from tracker.service.errors import ServiceError
from tracker.service.identity import IdFile
from tracker.service.journal import Journal


class Disk:
    """Makes log writers that work as long as the disk does."""

    def __init__(self) -> None:
        self.works = True

    def create(self, path: Path, **arguments: Any) -> LogWriter:
        if not self.works:
            raise LogError(f"{path}: cannot be made: {NO_SPACE.strerror}")
        return Writer(self, path, **arguments)


class Writer(LogWriter):
    def __init__(self, disk: Disk, path: Path, **arguments: Any) -> None:
        self._disk = disk
        super().__init__(path, **arguments)

    def _write(self, data: bytes) -> None:
        if not self._disk.works:
            raise NO_SPACE
        super()._write(data)


NO_SPACE = OSError(errno.ENOSPC, "No space left on device")


@pytest.fixture(autouse=True)
def _no_waiting(monkeypatch: pytest.MonkeyPatch) -> None:
    """A new file is tried with every turn of the loop."""
    monkeypatch.setattr(journal_module, "RETRY_S", 0.0)


def settled(controller: Controller, wanted: Callable[[dict[str, Any]], bool]) -> None:
    """Ask until the status is as wanted."""
    for _ in range(1000):
        if wanted(controller.ask("status").values):
            return
    raise AssertionError("never so")


def assert_replays(controller: Controller) -> None:
    """Each of two files gives its patterns bit by bit; together they hold those that went out, and none withheld."""
    paths = sorted(controller.journal.glob("*.mcap"))
    assert len(paths) == 2
    held = []
    for path in paths:
        work = Replay(None, path.parent)
        work.run(path)
        assert work.comparison.first_difference is None
        assert work.comparison.unmatched == (0, 0)
        held += [decode_pattern(record.body).event.id for record in LogReader(path) if record.topic == "pattern/yard"]
    assert held == [pattern.id for pattern in controller.heard.pattern]


def test_patterns_are_withheld_while_they_cannot_be_recorded(make_controller: Callable[..., Controller]) -> None:
    """States go on and an alarm says why; once the disk works a pattern goes out that rests on all bursts."""
    controller, disk = make_controller(estimator=RESTLESS), Disk()
    played = bursts(60)
    with running(controller, disk.create) as this:
        for burst in played[:20]:
            controller.step(burst)
        before = [pattern.id for pattern in controller.heard.pattern]
        disk.works = False
        for burst in played[20:40]:
            controller.step(burst)
        controller.listen(lambda heard: bool(heard.alarm))
        assert [pattern.id for pattern in controller.heard.pattern] == before
        assert controller.ask("status").values["journal_works"] is False
        disk.works = True
        settled(controller, lambda status: status["journal_works"])
        for burst in played[40:]:
            controller.step(burst)
        heard = controller.heard
    assert this.fault is None
    assert [(alarm.kind, alarm.action) for alarm in heard.alarm] == [("disk", "patterns withheld until it works")]
    assert [state.bursts for state in heard.state] == list(range(1, 61))
    after = heard.pattern[len(before) :]
    assert (after[0].cause, after[0].seq) == (Cause.OPERATOR, 40)
    assert after[0].id > before[-1] + 1, "some were withheld, and their ids are not given again"
    assert_replays(controller)


def test_patterns_go_out_when_recording_is_no_condition(make_controller: Callable[..., Controller]) -> None:
    """With `journal.required = false` the alarm says so and patterns go on."""
    controller, disk = make_controller(estimator=RESTLESS, journal="required = false"), Disk()
    played = bursts(40)
    with running(controller, disk.create) as this:
        for burst in played[:20]:
            controller.step(burst)
        before = len(controller.heard.pattern)
        disk.works = False
        for burst in played[20:]:
            controller.step(burst)
        heard = controller.listen(lambda heard: bool(heard.alarm))
    assert this.fault is None
    assert [(alarm.kind, alarm.action) for alarm in heard.alarm] == [("disk", "patterns go out unrecorded")]
    ids = [pattern.id for pattern in heard.pattern]
    assert ids == list(range(1, len(ids) + 1))
    assert len(ids) > before


def test_an_id_that_cannot_be_kept_withholds_its_pattern(
    controller: Controller, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Else it could be given again after a kill; a pattern follows once the file can be written."""
    fails = [True]
    written = IdFile.keep

    def maybe(self: IdFile, next_id: int) -> None:
        if fails[0]:
            raise NO_SPACE
        written(self, next_id)

    monkeypatch.setattr(IdFile, "keep", maybe)
    played = bursts(4)
    with running(controller) as this:
        for burst in played[:3]:
            controller.step(burst)
        heard = controller.listen(lambda heard: bool(heard.alarm))
        assert heard.pattern == []
        fails[0] = False
        assert controller.ask("status").ok
        controller.step(played[3])
    assert this.fault is None
    assert [pattern.cause for pattern in controller.heard.pattern] == [Cause.OPERATOR]


def test_commands_that_cannot_be_recorded_are_carried_out(controller: Controller) -> None:
    """An operator who wants the pattern left alone is not told to mend the disk first; the log names the folder."""
    disk, log = Disk(), CapturingLogger()
    with running(controller, disk.create, log) as this:
        controller.step(bursts(1)[0])
        disk.works = False
        assert controller.ask("hold").values["mode"] == "held"
        controller.listen(lambda heard: bool(heard.alarm))
    assert this.fault is None
    (told,) = [call.kwargs for call in log.calls if call.kwargs.get("kind") == "disk"]
    assert told["detail"] == f"{controller.journal}: No space left on device"


def test_a_journal_that_cannot_begin_says_why(tmp_path: Path) -> None:
    """One line with the folder and what the disk said."""
    disk = Disk()
    disk.works = False
    with pytest.raises(ServiceError, match="No space left on device") as caught:
        Journal(tmp_path, "yard", {}, 1.0, lambda: b"", disk.create)
    assert str(tmp_path) in str(caught.value)
    assert list(tmp_path.iterdir()) == []


def test_a_failing_sync_is_a_failing_disk(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """What the device did not take may be lost: the file is given up, and the next write says so."""
    monkeypatch.setattr(syncing, "LOOK_S", 0.01)
    monkeypatch.setattr(syncing, "SYNC_S", 0.01)

    def broken(file: int) -> None:
        raise OSError(errno.EIO, "Input/output error")

    monkeypatch.setattr(syncing, "_sync", broken)
    journal = Journal(tmp_path, "yard", {}, 1.0, lambda: b"")
    try:
        written = 0
        while journal.write([("pilots/yard", b"x", 1, 1)]):
            written += 1
            assert written < 10**6
        assert (journal.broken, journal.fault) == (True, "Input/output error")
    finally:
        journal.close()
    path = journal.path
    assert path is not None
    assert len(list(LogReader(path))) == written


def test_files_sort_in_the_order_they_were_begun(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Also when several begin within a second, and when the machine's clock is set back."""
    real = time.gmtime
    back = [0.0]
    monkeypatch.setattr(time, "gmtime", lambda: real(time.time() - back[0]))
    journal = Journal(tmp_path, "yard", {}, 1e-6, lambda: b"")
    begun = [journal.path]
    for turn in range(12):
        back[0] = 3600.0 * (turn > 5)
        assert journal.full
        journal.rotate()
        begun.append(journal.path)
    journal.close()
    assert begun == sorted(tmp_path.glob("*.mcap"))


def test_bursts_that_met_a_fault_of_ours_are_kept(
    controller: Controller, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """When the engine raises, the service ends with that error, and the journal leads a replay to the same place."""
    advance = Tracker.advance

    def broken(self: Tracker, taken: Any, budget: Any) -> Any:
        if taken[0].seq == 3:
            raise ZeroDivisionError("burst 3")
        return advance(self, taken, budget)

    monkeypatch.setattr(Tracker, "advance", broken)
    played = bursts(4)
    with running(controller) as this:
        for burst in played[:3]:
            controller.step(burst)
        controller.send(played[3])
        assert this.ended.wait(PATIENCE_S)
    assert isinstance(this.fault, ZeroDivisionError)
    path = this.journal.path
    assert path is not None
    with pytest.raises(ZeroDivisionError, match="burst 3"):
        Replay(None, tmp_path).run(path)
    monkeypatch.setattr(Tracker, "advance", advance)
    mended = Replay(None, tmp_path)
    mended.run(path)
    assert mended.counts["bursts"] == 4
