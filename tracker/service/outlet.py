"""The way out: what a block led to is journaled first, and only then does anyone hear of it."""

import time
from collections.abc import Mapping, Sequence

import zmq

from tracker.decisions import COMMAND, DECISION, Command, encode_command, encode_decision
from tracker.engine.events import Alarm, Event, Pattern
from tracker.outgoing import encode

from .identity import IdFile
from .intake import Arrival
from .journal import Entry, Journal


class Outlet:
    """Journals and publishes for one link.

    Parameters
    ----------
    link : str
    publish : zmq.Socket
    journal : Journal
    ids : IdFile
    required : bool
        Whether a pattern that could not be recorded is withheld.

    Attributes
    ----------
    withheld : bool
        Whether the latest pattern of the tracker was not sent.
    journal_us : int
        How long the last block took to be written, µs.
    fault : str
        Why something could not be recorded, when last it could not.
    """

    def __init__(
        self, link: str, publish: "zmq.Socket[bytes]", journal: Journal, ids: IdFile, *, required: bool
    ) -> None:
        self._link, self._publish, self._journal, self._ids = link, publish, journal, ids
        self._required = required
        self.withheld = False
        self.journal_us = 0
        self.fault = ""

    def block(
        self,
        arrivals: Sequence[Arrival],
        steps: int,
        events: Sequence[Event],
        next_id: int,
        stages_us: Mapping[str, int],
    ) -> bool:
        """Give out a block that was worked off.

        Parameters
        ----------
        arrivals : sequence of Arrival
        steps : int
            Optimizer steps taken.
        events : sequence of Event
        next_id : int
            Id that the next pattern will have.
        stages_us : mapping
            Latency by stage, µs.

        Returns
        -------
        bool
            Whether all of it is recorded.
        """
        now_ns = time.time_ns()
        entries = self._heard(arrivals)
        named = [(arrival.burst.run, arrival.burst.seq) for arrival in arrivals]
        entries.append((f"{DECISION}/{self._link}", encode_decision(named, steps), now_ns, now_ns))
        before_ns = time.monotonic_ns()
        kept = self._give_out(entries, events, next_id, stages_us, now_ns)
        self.journal_us = (time.monotonic_ns() - before_ns) // 1000
        return kept

    def alarms(self, alarms: Sequence[Alarm]) -> bool:
        """Give out alarms of the service itself; they go out whether they could be recorded or not."""
        return self._give_out([], alarms, self._ids.next_id, {}, time.time_ns())

    def command(self, command: Command) -> bool:
        """Record a command where it stands in the order of things."""
        now_ns = time.time_ns()
        return self._record([(f"{COMMAND}/{self._link}", encode_command(command), now_ns, now_ns)])

    def unfinished(self, arrivals: Sequence[Arrival]) -> None:
        """Record bursts that the tracker could not work off, so that a replay meets the same fault."""
        self._record(self._heard(arrivals))

    def works_again(self) -> bool:
        """Whether a pattern was withheld and the next one can be recorded; said once."""
        if not self.withheld or self._journal.broken or not self._keep_id(self._ids.next_id):
            return False
        self.withheld = False
        return True

    def _heard(self, arrivals: Sequence[Arrival]) -> list[Entry]:
        topic = f"pilots/{self._link}"
        return [(topic, arrival.body, arrival.wall_ns, arrival.burst.t_ns) for arrival in arrivals]

    def _give_out(
        self,
        entries: list[Entry],
        events: Sequence[Event],
        next_id: int,
        stages_us: Mapping[str, int],
        now_ns: int,
    ) -> bool:
        out: list[tuple[str, bytes, bool]] = []
        for event in events:
            kind, body, t_ns = encode(self._link, event, stages_us.get("whole", 0), stages_us)
            topic = f"{kind}/{self._link}"
            entries.append((topic, body, now_ns, t_ns))
            out.append((topic, body, isinstance(event, Pattern)))
        kept = (next_id == self._ids.next_id or self._keep_id(next_id)) and self._record(entries)
        for topic, body, is_pattern in out:
            # A pattern that could not be recorded is withheld, unless the settings say that recording is no condition.
            if is_pattern:
                self.withheld = self._required and not kept
                if self.withheld:
                    continue
            self._publish.send_multipart((topic.encode(), body))
        return kept

    def _keep_id(self, next_id: int) -> bool:
        try:
            self._ids.keep(next_id)
        except OSError as error:
            self.fault = f"the next pattern id cannot be written: {error.strerror}"
            return False
        return True

    def _record(self, entries: list[Entry]) -> bool:
        kept = self._journal.write(entries)
        if not kept:
            self.fault = f"{self._journal.folder}: {self._journal.fault}"
        return kept
