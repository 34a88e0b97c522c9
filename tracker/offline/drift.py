"""Drift: what changed when, as a table and a picture.

A journal of the service says it itself: states, alarms and patterns are taken as they stand. A log without states, or
with other settings, is replayed, and the timeline made of what comes out.
"""

import json
import os
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TextIO

from rich.console import Console
from threadpoolctl import threadpool_limits

from tracker.engine.events import Event
from tracker.engine.refusal import Refused
from tracker.faults_file import faults_text, write_faults
from tracker.logs import LogReader
from tracker.settings import Settings, SettingsError, load, parse

from .blocks import Said
from .errors import OfflineError
from .picture import picture
from .progress import Bars, progress_bar
from .rerun import Replay
from .summary import Account, decode_said
from .timeline import Timeline
from .timeline_text import heading, summary, table

SAID = ("state", "alarm", "pattern")
# Characters of a line where no terminal tells.
WIDTH = 200


class _Telling(Account):
    """An account of a replay that hands on each event that it is told."""

    def __init__(self, told: Callable[[Event], None]) -> None:
        super().__init__()
        self._told = told

    def take(self, event: Event) -> None:
        super().take(event)
        self._told(event)


@dataclass(slots=True)
class Drift:
    """A timeline, and where it comes from.

    Parameters
    ----------
    timeline : Timeline
    source : str
        ``published`` (as the tracker said it at the time) or ``replayed``.
    own_settings : bool or None
        Whether a replay was under the log's own settings.
    link : str
    settings : Settings or None
        Of the link, when they are known.
    damage, notes : list of str
        Where logs are not whole; what else there is to know.
    unreadable : int
        Messages that could not be read.
    """

    timeline: Timeline = field(default_factory=Timeline)
    source: str = "published"
    own_settings: bool | None = None
    link: str = ""
    settings: Settings | None = None
    damage: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    unreadable: int = 0

    def as_dict(self) -> dict[str, Any]:
        """Give everything as plain values."""
        return {
            "link": self.link,
            "source": self.source,
            "own_settings": self.own_settings,
            "panel": None if self.settings is None else [self.settings.panel.columns, self.settings.panel.rows],
            **self.timeline.as_dict(),
            "unreadable": self.unreadable,
            "notes": self.notes,
            "damage": self.damage,
        }


def follow(paths: Sequence[Path], settings_path: Path | None = None, bars: Bars | None = None) -> Drift:
    """Make the timeline of logs.

    Parameters
    ----------
    paths : sequence of Path
        In the order of recording.
    settings_path : Path or None
        Settings to replay under; None takes what the tracker said, where the logs hold it.
    bars : Bars or None
        Told how far each log is read.

    Raises
    ------
    LogError, OfflineError, SettingsError
        One line for the user.
    """
    bars = bars or Bars(None)
    if settings_path is not None:
        return _replayed(paths, load(settings_path), settings_path.parent, bars)
    drift, bursts = _listened(paths, bars)
    if drift.timeline.states:
        return drift
    if not bursts:
        raise OfflineError(
            f"{paths[0]}: holds neither states nor bursts, so there is nothing to show; "
            "`ris-tracker inspect` says what it holds"
        )
    return _replayed(paths, None, paths[0].parent, bars)


def _listened(paths: Sequence[Path], bars: Bars) -> tuple[Drift, int]:
    """Take what the tracker said; also count the bursts of the link."""
    drift = Drift()
    others: set[str] = set()
    all_bursts = 0
    for path in paths:
        reader = LogReader(path)
        settings = _own_settings(reader)
        if settings is not None:
            drift.link = drift.link or settings.link.name
            if settings.link.name == drift.link:
                drift.settings = settings
        advanced = bars.begin(path.name)
        states, bursts = drift.timeline.states, 0
        for record in reader:
            kind, _, link = record.topic.partition("/")
            if kind in SAID:
                drift.link = drift.link or link
                if link != drift.link:
                    others.add(link)
                    continue
                try:
                    drift.timeline.take(decode_said(Said(kind, record.body)))
                except Refused:
                    drift.unreadable += 1
            bursts += kind == "pilots" and link == (drift.link or link)
            advanced(reader.tell(), reader.size)
        advanced(reader.size, reader.size)
        if reader.damage:
            drift.damage.append(f"{path}: {reader.damage}")
        if bursts and drift.timeline.states == states:
            drift.notes.append(f"{path}: holds bursts but no states, and is left out; --settings replays all logs")
        all_bursts += bursts
    if others:
        drift.notes.append(f"links {', '.join(sorted(others))} are left out: settings in the log name {drift.link}")
    return drift, all_bursts


def _own_settings(reader: LogReader) -> Settings | None:
    text = reader.attachments.get("settings.toml")
    if text is None:
        return None
    try:
        return parse(text.decode(errors="replace"))
    except SettingsError:
        return None  # what the tracker said can be shown without


def _replayed(paths: Sequence[Path], settings: Settings | None, folder: Path, bars: Bars) -> Drift:
    """Replay logs, and take what comes out."""
    drift = Drift(source="replayed")
    work = Replay(settings, folder)
    work.replayed = _Telling(drift.timeline.take)
    with threadpool_limits(limits=1):
        for path in paths:
            work.run(path, bars.begin(f"{path.name}, replay"))
    used = settings or _own_settings(LogReader(paths[0]))
    if used is not None:
        drift.link, drift.settings = used.link.name, used
    drift.own_settings, drift.damage = work.own_settings, work.damage
    if work.refused:
        drift.notes.append(f"{work.refused} bursts or messages were refused in the replay")
    if not drift.timeline.states:
        raise OfflineError(f"{paths[0]}: no burst in it could be used, so there is nothing to show")
    return drift


def drift(
    paths: Sequence[Path],
    settings_path: Path | None = None,
    svg_path: Path | None = None,
    json_path: Path | None = None,
    faults_path: Path | None = None,
    *,
    progress: bool = True,
) -> int:
    """Say on standard output what changed when, and draw it.

    Parameters
    ----------
    paths : sequence of Path
        In the order of recording.
    settings_path : Path or None
        Settings to replay the logs under.
    svg_path : Path or None
        Picture to write, which must not exist; by default beside the first log, under its name or the next free one.
    json_path : Path or None
        JSON file to write the same to.
    faults_path : Path or None
        File to write the faults in the last state to.
    progress : bool
        Whether to show progress.

    Returns
    -------
    int
        Exit status.

    Raises
    ------
    LogError, OfflineError, SettingsError
        One line for the user.
    """
    for path in (json_path, faults_path):
        if path is not None and not path.parent.is_dir():
            raise OfflineError(f"{path}: cannot be written: there is no folder {path.parent}")
    with _new_picture(paths[0], svg_path) as (place, file):
        with progress_bar(progress, len(paths)) as bars:
            found = follow(paths, settings_path, bars)
        told = {"logs": [str(path) for path in paths], "picture": str(place), **found.as_dict()}
        file.write(picture(told, found.timeline.bins))
    if json_path is not None:
        try:
            json_path.write_text(json.dumps(told, indent=1) + "\n", encoding="utf-8")
        except OSError as error:
            raise OfflineError(f"{json_path}: cannot be written: {error.strerror}") from None
    if faults_path is not None:
        _write_faults(faults_path, found)
    _print(told)
    return 0


def _write_faults(path: Path, found: Drift) -> None:
    state = found.timeline.state
    if found.settings is None or state is None:
        raise OfflineError(f"{path}: is not written: the logs hold no settings; give them with --settings")
    try:
        write_faults(path, faults_text(found.settings, state))
    except OSError as error:
        raise OfflineError(f"{path}: cannot be written: {error.strerror}") from None


def _print(told: dict[str, Any]) -> None:
    terminal = Console(highlight=False)
    console = terminal if terminal.is_terminal else Console(highlight=False, width=WIDTH)
    with console.capture() as laid_out:
        console.print(heading(told), "", table(told), "", sep="\n")
    lines = [line.rstrip() for line in laid_out.get().splitlines()]
    # The figures name files, which must not be broken.
    sys.stdout.write("\n".join([*lines, summary(told), ""]))


@contextmanager
def _new_picture(first: Path, given: Path | None) -> Iterator[tuple[Path, TextIO]]:
    """Open the picture to be written, before the work is done; it goes again when there is nothing to draw."""
    place, file = _opened(given) if given is not None else _beside(first)
    try:
        with file:
            yield place, file
    except BaseException:
        place.unlink(missing_ok=True)
        raise


def _opened(path: Path) -> tuple[Path, TextIO]:
    try:
        return path, path.open("x", encoding="utf-8")
    except FileExistsError:
        raise OfflineError(f"{path}: exists already, nothing is overwritten; choose another name") from None
    except OSError as error:
        raise OfflineError(f"{path}: cannot be written: {error.strerror}; name another place with --svg") from None


def _beside(log: Path) -> tuple[Path, TextIO]:
    """Open a picture beside a log, under its name or the next free one."""
    path, number = log.with_suffix(".svg"), 1
    while os.path.lexists(path):
        number += 1
        path = log.with_name(f"{log.stem}-{number}.svg")
    return _opened(path)
