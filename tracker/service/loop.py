"""The loop: bursts off the socket, through the engine, into the journal, and only then out to the world.

What is waiting when a block is done is taken together as the next, larger block, up to `MOST_TOGETHER` frames: a
larger block costs less a frame, so falling behind is what catches up again. Nothing is dropped here; what the queue
in front of the socket cannot hold shows as a gap in `seq`.
"""

import gc
import time
from dataclasses import dataclass
from typing import Any

import zmq

from tracker.assembly import shape
from tracker.decisions import COMMAND, DECISION, Command, carry_out, encode_command, encode_decision
from tracker.engine.burst import Burst
from tracker.engine.events import Alarm, Event, Pattern
from tracker.engine.tracker import Outcome, Tracker
from tracker.messages import Reason, Refused, decode_pilots
from tracker.outgoing import encode
from tracker.settings import Settings

from .control import Control
from .deadline import Deadline
from .identity import IdFile
from .journal import Journal
from .latency import Latencies
from .notices import Notices
from .refusals import Refusals
from .sockets import Sockets

MOST_TOGETHER = 512
POLL_MS = 100
# Cycles are collected when nothing has come for a poll, or after so long without a pause, ns.
COLLECT_NS = 60_000_000_000


@dataclass(frozen=True, slots=True)
class _Arrival:
    burst: Burst
    body: bytes
    wall_ns: int
    monotonic_ns: int


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
        log: Any,
    ) -> None:
        self._settings, self._tracker = settings, tracker
        self._sockets, self._journal, self._ids, self._log = sockets, journal, ids, log
        self._link = settings.link.name
        self._shape = shape(settings)
        self._topic = f"pilots/{self._link}".encode()
        self._refusals = Refusals(log)
        self._latencies = Latencies()
        self._notices = Notices(self._link, log)
        self._control = Control(settings.panel.elements, self._change, self.stop, self._status, text)
        self._stopping = False
        self._collected_ns = time.monotonic_ns()
        self._journal_us = 0

    def stop(self) -> None:
        """Ask the loop to end; what has arrived by then is still worked off."""
        self._stopping = True

    def run(self) -> None:
        """Serve until stopped."""
        poller = zmq.Poller()
        poller.register(self._sockets.pilots, zmq.POLLIN)
        poller.register(self._sockets.control, zmq.POLLIN)
        gc.collect()
        gc.freeze()
        gc.disable()
        try:
            while not self._stopping:
                waiting = dict(poller.poll(POLL_MS))
                if self._sockets.control in waiting:
                    self._sockets.control.send(self._control.answer(self._sockets.control.recv()))
                if self._sockets.pilots in waiting:
                    self._work_off()
                self._look_after(idle=not waiting)
            while self._work_off():
                pass
        finally:
            gc.enable()
            gc.unfreeze()

    def _work_off(self) -> bool:
        """Take what is waiting as one block; False when nothing was."""
        arrivals, heard = self._drain()
        if arrivals:
            self._advance(arrivals)
        return heard

    def _drain(self) -> tuple[list[_Arrival], bool]:
        """Receive, decode and admit what is waiting, up to one block's worth."""
        arrivals: list[_Arrival] = []
        frames = 0
        heard = False
        while frames < MOST_TOGETHER:
            try:
                parts = self._sockets.pilots.recv_multipart(zmq.NOBLOCK)
            except zmq.Again:
                break
            heard = True
            wall_ns, monotonic_ns = time.time_ns(), time.monotonic_ns()
            if parts[0] != self._topic:
                continue  # another link whose name begins like ours
            try:
                if len(parts) != 2:
                    raise Refused(Reason.NOT_MSGPACK, f"{len(parts)} parts, a message has two: topic and body")
                burst = decode_pilots(parts[1], self._link, self._shape)
                self._tracker.admit(burst, wall_ns)
            except Refused as refused:
                self._refuse(refused)
                continue
            arrivals.append(_Arrival(burst, parts[1], wall_ns, monotonic_ns))
            frames += burst.frames
        self._notices.load(frames >= MOST_TOGETHER)
        return arrivals, heard

    def _refuse(self, refused: Refused) -> None:
        self._tracker.refuse(refused.reason)
        self._refusals.take(refused)
        if refused.reason in (Reason.FAR_FUTURE, Reason.FAR_PAST):
            self._notices.clock(refused.detail)

    def _advance(self, arrivals: list[_Arrival]) -> None:
        first, last = arrivals[0], arrivals[-1]
        started_ns = time.monotonic_ns()
        refresh = self._settings.refresh
        deadline = Deadline(first.monotonic_ns, refresh.budget_ms, refresh.most_steps)
        outcome = self._tracker.advance([arrival.burst for arrival in arrivals], deadline)
        done_ns = time.monotonic_ns()
        stages_us = {
            "intake": (started_ns - last.monotonic_ns) // 1000,
            "engine": (done_ns - started_ns) // 1000,
            "journal": self._journal_us,  # of the block before: this one's is still to come
            "whole": (done_ns - first.monotonic_ns) // 1000,
        }
        self._give_out(arrivals, outcome, stages_us)

    def _give_out(self, arrivals: list[_Arrival], outcome: Outcome, stages_us: dict[str, int]) -> None:
        """Journal the block, then publish what came of it."""
        events: list[Event] = [*self._notices.take(arrivals[-1].burst), *outcome.events]
        now_ns = time.time_ns()
        records = [(f"pilots/{self._link}", arrival.body, arrival.wall_ns, arrival.burst.t_ns) for arrival in arrivals]
        named = [(arrival.burst.run, arrival.burst.seq) for arrival in arrivals]
        records.append((f"{DECISION}/{self._link}", encode_decision(named, outcome.steps), now_ns, now_ns))
        out: list[tuple[str, bytes, bool]] = []
        for event in events:
            kind, body, t_ns = encode(self._link, event, stages_us["whole"], stages_us)
            records.append((f"{kind}/{self._link}", body, now_ns, t_ns))
            out.append((f"{kind}/{self._link}", body, kind == "pattern"))
        before_ns = time.monotonic_ns()
        if self._ids.next_id != self._tracker.next_id:
            self._ids.keep(self._tracker.next_id)
        kept = self._journal.write(records)
        self._journal_us = (time.monotonic_ns() - before_ns) // 1000
        self._notices.disk(kept)
        for topic, body, binding in out:
            # A pattern that could not be recorded is withheld, unless the settings say that recording is no condition.
            if kept or not binding or not self._settings.journal.required:
                self._sockets.publish.send_multipart((topic.encode(), body))
        self._latencies.add((time.monotonic_ns() - arrivals[0].monotonic_ns) // 1000)
        self._tell(events, stages_us)
        if self._journal.full:
            self._journal.rotate()

    def _tell(self, events: list[Event], stages_us: dict[str, int]) -> None:
        for event in events:
            if isinstance(event, Pattern):
                self._log.info(
                    "pattern",
                    id=event.id,
                    cause=str(event.cause),
                    rate=round(event.rate, 3),
                    before=round(event.rate_before, 3),
                    bound=round(event.rate_bound, 3),
                    steps=event.steps,
                )
            elif isinstance(event, Alarm):
                self._log.warning(
                    "alarm",
                    kind=event.kind,
                    statistic=round(event.statistic, 2),
                    threshold=round(event.threshold, 2),
                    action=event.action,
                )
            else:
                self._log.debug("burst", seq=event.seq, mode=str(event.mode), together=event.together, **stages_us)

    def _change(self, command: Command) -> None:
        """Carry out a verb that changes the engine, and journal it where it stood in the order of things."""
        carry_out(command, self._tracker, self._settings.panel.elements)
        now_ns = time.time_ns()
        self._notices.disk(self._journal.write([(f"{COMMAND}/{self._link}", encode_command(command), now_ns, now_ns)]))
        self._log.info("command", verb=command.verb)

    def totals(self) -> dict[str, Any]:
        """Return the counts since start, for the last line of the log."""
        status = self._status()
        return {key: status[key] for key in ("bursts", "frames", "lost", "refused", "pattern", "latency_us")}

    def _status(self) -> dict[str, Any]:
        counts = self._tracker.counts
        return {
            "link": self._link,
            "mode": str(self._tracker.mode),
            "bursts": counts.bursts,
            "frames": counts.frames,
            "lost": counts.lost,
            "dropped_frames": counts.dropped_frames,
            "refused": dict(self._refusals.counts),
            "pattern": self._tracker.next_id - 1,
            "latency_us": self._latencies.summary(),
            "journal": str(self._journal.path) if self._journal.path else None,
        }

    def _look_after(self, *, idle: bool) -> None:
        """Housekeeping: untold refusals, and memory cycles when nobody is waiting."""
        self._refusals.tell()
        if idle or time.monotonic_ns() - self._collected_ns > COLLECT_NS:
            gc.collect(1 if idle else 0)
            self._collected_ns = time.monotonic_ns()
