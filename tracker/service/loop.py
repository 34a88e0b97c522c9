"""The loop: bursts off the socket, through the engine, into the journal, and only then out to the world."""

import gc
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import zmq

from tracker.assembly import shape
from tracker.decisions import Command, carry_out
from tracker.engine.events import Pattern
from tracker.engine.tracker import Tracker
from tracker.messages import Verb
from tracker.settings import Settings

from .control import Control
from .deadline import Deadline, Reserve
from .faults import FaultsFile
from .identity import IdFile
from .intake import Intake
from .journal import Journal
from .latency import Latencies
from .log import Account
from .notices import Notices
from .outlet import Outlet
from .refusals import Refusals
from .sockets import Sockets, receive_queue

POLL_MS = 100
# Cycles are collected when nothing has come for a poll, or after so long without a pause, ns.
COLLECT_NS = 60_000_000_000


class Service:
    """Runs one link until it is stopped.

    Parameters
    ----------
    settings : Settings
    text : str
        The settings file as it was read.
    tracker : Tracker
    sockets : Sockets
    journal : Journal
    ids : IdFile
    faults : FaultsFile
    log : structlog logger
    """

    def __init__(
        self,
        settings: Settings,
        text: str,
        tracker: Tracker,
        sockets: Sockets,
        journal: Journal,
        ids: IdFile,
        faults: FaultsFile,
        log: Any,
    ) -> None:
        self._settings, self._tracker, self._sockets = settings, tracker, sockets
        self._journal, self._faults, self._log = journal, faults, log
        link, required = settings.link.name, settings.journal.required
        self._refusals = Refusals(log)
        self._notices = Notices(log, required=required)
        self._intake = Intake(sockets.pilots, link, shape(settings), tracker, self._refusals, self._notices)
        self._outlet = Outlet(link, sockets.publish, journal, ids, required=required)
        self._control = Control(settings.panel.elements, self._change, self.stop, self._status, text)
        self._account = Account(log)
        self._latencies = Latencies()
        self._reserve = Reserve(settings.refresh.budget_ms)
        self._last = (0, 0)  # run and seq of the last burst worked off
        self._stopping = False
        self._collected_ns = time.monotonic_ns()

    def stop(self) -> None:
        """Ask the loop to end; what has arrived by then is still worked off. May be called from a signal handler."""
        self._stopping = True

    def run(self) -> None:
        """Serve until stopped."""
        poller = zmq.Poller()
        poller.register(self._sockets.pilots, zmq.POLLIN)
        poller.register(self._sockets.control, zmq.POLLIN)
        with _no_collection():
            while not self._stopping:
                waiting = dict(poller.poll(POLL_MS))
                if self._sockets.control in waiting:
                    self._answer()
                if self._sockets.pilots in waiting:
                    self._work_off()
                self._look_after(idle=not waiting)
            self._intake.close(receive_queue(self._settings))
            while self._intake.waiting:
                self._work_off()
                self._look_after(idle=False)
            self._refusals.tell(at_once=True)

    def totals(self) -> dict[str, Any]:
        """Return the counts since start, for the last line of the log."""
        status = self._status()
        return {key: status[key] for key in ("bursts", "frames", "lost", "refused", "pattern", "latency_us")}

    def _answer(self) -> None:
        # All parts: the socket takes no reply before the request is read to its end.
        self._sockets.control.send(self._control.answer(self._sockets.control.recv_multipart()))

    def _work_off(self) -> None:
        """Take what is waiting as one block, work it off and give out what came of it."""
        arrivals = self._intake.take()
        if not arrivals:
            return
        first, last = arrivals[0], arrivals[-1]
        started_ns = time.monotonic_ns()
        refresh = self._settings.refresh
        deadline = Deadline(first.monotonic_ns, refresh.budget_ms, refresh.most_steps, self._reserve)
        try:
            outcome = self._tracker.advance([arrival.burst for arrival in arrivals], deadline)
        except Exception:
            self._outlet.unfinished(arrivals)
            raise
        done_ns = time.monotonic_ns()
        stages_us = {
            "intake": (started_ns - last.monotonic_ns) // 1000,
            "engine": (done_ns - started_ns) // 1000,
            "journal": self._outlet.journal_us,  # of the block before: this one's is still to come
            "whole": (done_ns - first.monotonic_ns) // 1000,
        }
        self._last = (last.burst.run, last.burst.seq)
        kept = self._outlet.block(arrivals, outcome.steps, outcome.events, self._tracker.next_id, stages_us)
        out_ns = time.monotonic_ns()
        if deadline.asked_ns is not None and any(isinstance(event, Pattern) for event in outcome.events):
            self._reserve.observe(out_ns - deadline.asked_ns)
        self._latencies.add((out_ns - first.monotonic_ns) // 1000)
        self._account.take(outcome.events, stages_us)
        self._faults.take(outcome.events)
        if not kept:
            self._notices.disk(self._outlet.fault)
        if self._journal.full:
            self._journal.rotate()

    def _change(self, command: Command) -> None:
        """Carry out a verb that changes the engine, and journal it where it stood in the order of things."""
        carry_out(command, self._tracker, self._settings.panel.elements)
        if not self._outlet.command(command):
            self._notices.disk(self._outlet.fault)
        self._log.info("command", verb=command.verb)

    def _look_after(self, *, idle: bool) -> None:
        """Housekeeping between two blocks: the journal, what is untold, and memory cycles when nobody is waiting."""
        if self._journal.broken and self._journal.mend():
            self._log.info("journal", journal=str(self._journal.path))
        if self._outlet.works_again():
            # The tracker takes the pattern that was withheld for the one in use: have it publish one that goes out.
            self._change(Command(str(Verb.REFRESH)))
        if alarms := self._notices.take(*self._last):
            self._outlet.alarms(alarms)
        self._refusals.tell()
        self._account.tell()
        if idle or time.monotonic_ns() - self._collected_ns > COLLECT_NS:
            gc.collect(1 if idle else 0)
            self._collected_ns = time.monotonic_ns()

    def _status(self) -> dict[str, Any]:
        counts = self._tracker.counts
        return {
            "link": self._settings.link.name,
            "mode": str(self._tracker.mode),
            "bursts": counts.bursts,
            "frames": counts.frames,
            "lost": counts.lost,
            "dropped_frames": counts.dropped_frames,
            "refused": dict(self._refusals.counts),
            "pattern": self._tracker.next_id - 1,
            "latency_us": self._latencies.summary(),
            "journal": str(self._journal.path) if self._journal.path else None,
            "journal_works": not self._journal.broken,
        }


@contextmanager
def _no_collection() -> Iterator[None]:
    """Keep the search for memory cycles out of the way: a full one takes tens of milliseconds."""
    gc.collect()
    gc.freeze()
    gc.disable()
    try:
        yield
    finally:
        gc.enable()
        gc.unfreeze()
