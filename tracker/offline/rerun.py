"""The replay of logs itself: the engine of the live service over what is recorded, one log after another."""

from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Protocol

from tracker.assembly import BASIS, configure, learned_basis, shape
from tracker.decisions import Command, carry_out
from tracker.engine.config import Config
from tracker.engine.events import Event, Pattern
from tracker.engine.publishing.report import Counts
from tracker.engine.refusal import Reason, Refused
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.logs import LogReader
from tracker.messages import decode_rates
from tracker.outgoing import encode
from tracker.settings import Settings, parse
from tracker.snapshots import START, SnapshotError, unpack_start

from .blocks import Block, Said, steps
from .errors import OfflineError
from .found import Found
from .summary import Account, Comparison, decode_said


class Writer(Protocol):
    """What takes the messages of a replay: a log, or what keeps them for one."""

    def add(self, topic: str, body: bytes, log_time_ns: int, publish_time_ns: int) -> None:
        """Take a message."""

    def commit(self) -> None:
        """End a block."""


class Replay:
    """A replay under way; `run` takes one log after another, each going on where the last one ended.

    Parameters
    ----------
    settings : Settings or None
        To use instead of the log's own.
    folder : Path
        Where relative paths of the settings start.
    writer : Writer or None
        Takes what would have been published.
    """

    def __init__(self, settings: Settings | None, folder: Path, writer: Writer | None = None) -> None:
        self._given, self._folder, self._writer = settings, folder, writer
        self._in_force: tuple[Settings | None, bytes | None] = None, None
        self._tracker: Tracker | None = None
        self._taken: Counter[str] = Counter()
        self.logged, self.replayed, self.comparison = Account(), Account(), Comparison()
        self.refused = 0
        self.span_s = 0.0
        self.damage: list[str] = []
        self.own_settings = True
        self.link = ""

    def run(self, path: Path, advanced: Callable[[int, int], None] = lambda done, size: None) -> None:
        """Replay one log.

        Parameters
        ----------
        path : Path
        advanced : callable
            Told how many bytes of how many are done.

        Raises
        ------
        LogError, OfflineError, SettingsError
        """
        reader = LogReader(path)
        settings, tracker, follow = self._prepare(path, reader)
        before = tracker.counts
        found = Found(settings.link.name)
        try:
            self._walk(reader, settings, tracker, found, advanced, follow=follow)
        except OfflineError as error:
            raise OfflineError(f"{path}: {error}") from None
        self._count(before, tracker.counts)
        self.span_s += found.span_s
        if reader.damage:
            self.damage.append(f"{path}: {reader.damage}")
        advanced(reader.size, reader.size)

    def _walk(
        self,
        reader: LogReader,
        settings: Settings,
        tracker: Tracker,
        found: Found,
        advanced: Callable[[int, int], None],
        *,
        follow: bool,
    ) -> None:
        for step in steps(found.noting(reader), settings.link.name, shape(settings), follow=follow):
            if isinstance(step, Block):
                self._advance(tracker, step, settings, found)
                advanced(reader.tell(), reader.size)
            elif isinstance(step, Command):
                self._carry_out(step, tracker, settings)
            elif isinstance(step, Said):
                self._heard(step)
            else:
                self._refuse(step, found)
                if step.reason is Reason.SETTINGS and not found.used:
                    break  # the log is of another panel: to read on to its end would change nothing
        found.check()

    def join(self, other: "Replay", path: Path) -> None:
        """Add what another replay found in the log that follows."""
        self._one_link(path, other.link)
        self._taken += other._taken
        self.logged.join(other.logged)
        self.replayed.join(other.replayed)
        self.comparison.join(other.comparison)
        self.refused += other.refused
        self.span_s += other.span_s
        self.damage += other.damage
        self.own_settings &= other.own_settings

    def finish(self) -> None:
        """Drop what is needed only to go on: the rest is little, and can be handed to another process."""
        self._tracker = self._writer = None
        self._in_force = None, None

    @property
    def counts(self) -> dict[str, int]:
        """What the engine took and did not take, over all logs."""
        names = ("bursts", "frames", "lost", "duplicate", "refused", "dropped_frames")
        return {name: self._taken[name] for name in names} | {"refused": self.refused}

    def _count(self, before: Counts, after: Counts) -> None:
        # A journal's counts go on from file to file: what is counted is what came in between.
        for name in Counts.__slots__:
            self._taken[name] += getattr(after, name) - getattr(before, name)

    def _prepare(self, path: Path, reader: LogReader) -> tuple[Settings, Tracker, bool]:
        """Find the settings, and the tracker that starts into this log."""
        attached = reader.first_attachments
        if START not in attached:  # not a journal: what belongs to it may lie anywhere
            attached = reader.attachments
        text, basis = attached.get("settings.toml"), attached.get(BASIS)
        own = parse(text.decode(errors="replace"), f"{path}: settings.toml") if text is not None else None
        settings = self._given or own
        if settings is None:
            raise OfflineError(f"{path}: holds no settings; give them with --settings")
        same = own == settings
        if self._given is not None:
            given = learned_basis(self._given, self._folder)
            same, basis = same and given == basis, given
        self._one_link(path, settings.link.name)
        self.own_settings &= same
        if same and START in attached:
            self._tracker = self._started(path, attached[START], configure(settings, self._folder, basis))
        elif self._tracker is None or (settings, basis) != self._in_force:
            self._tracker = Tracker(configure(settings, self._folder, basis))
        self._in_force = settings, basis
        return settings, self._tracker, same and START in attached

    def _one_link(self, path: Path, link: str) -> None:
        """Refuse logs of several links: figures of both together would be those of neither."""
        self.link = self.link or link
        if link != self.link:
            raise OfflineError(
                f"{path}: is of link {link!r}, the logs before it of {self.link!r}; give one link's logs"
            )

    @staticmethod
    def _started(path: Path, data: bytes, config: Config) -> Tracker:
        """Make the tracker as it stood when the journal's file began."""
        try:
            start = unpack_start(data)
            tracker = Tracker(config, start.first_id)
            if start.snapshot is not None:
                tracker.load(start.snapshot)
        except SnapshotError as error:
            raise OfflineError(f"{path}: {error}") from None
        except (LookupError, TypeError, ValueError, AttributeError) as error:
            raise OfflineError(
                f"{path}: start.msgpack was written by another version of this program ({error!r}); "
                "with --settings that differ from its own the log can be replayed all the same"
            ) from None
        return tracker

    def _advance(self, tracker: Tracker, block: Block, settings: Settings, found: Found) -> None:
        bursts = []
        for taken in block.taken:
            try:
                tracker.admit(taken.burst, taken.arrival_ns, vouched=block.steps is not None)
                bursts.append(taken.burst)
            except Refused as refused:
                tracker.refuse(refused.reason)
                self._refuse(refused, found)
        if not bursts:
            return
        found.use(bursts)
        budget = Steps(settings.refresh.most_steps if block.steps is None else block.steps)
        outcome = tracker.advance(bursts, budget)
        self.replayed.error.add(outcome.error, len(bursts))
        for event in outcome.events:
            self.replayed.take(event)
            if isinstance(event, Pattern):
                self.comparison.replayed(event)
        if self._writer is not None:
            self._write(self._writer, settings.link.name, outcome.events, block.time_ns)

    def _refuse(self, refused: Refused, found: Found) -> None:
        self.refused += 1
        found.refusal = found.refusal or refused

    @staticmethod
    def _write(writer: Writer, link: str, events: list[Event], time_ns: int) -> None:
        for event in events:
            kind, body, t_ns = encode(link, event, 0, {})
            writer.add(f"{kind}/{link}", body, time_ns, t_ns)
        writer.commit()

    def _carry_out(self, command: Command, tracker: Tracker, settings: Settings) -> None:
        try:
            carry_out(command, tracker, settings.panel.elements)
        except (Refused, ValueError):  # of a program that knows more verbs, or of another panel
            self.refused += 1

    def _heard(self, said: Said) -> None:
        try:
            if said.kind == "state":
                self.logged.take_rates(*decode_rates(said.body))
                return
            event = decode_said(said)
        except Refused:
            self.refused += 1
            return
        self.logged.take(event)
        if isinstance(event, Pattern):
            self.comparison.logged(event)
