"""Replay: the same engine over one or more logs, as fast as it can.

With the log's own settings the patterns come out bit by bit as they were published, and the summary proves it; with
others it says what would have changed.
"""

import json
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from threadpoolctl import threadpool_limits

from tracker.assembly import configure, shape
from tracker.decisions import Command, carry_out
from tracker.engine.budget import Steps
from tracker.engine.events import Event, Pattern
from tracker.engine.refusal import Refused
from tracker.engine.tracker import Tracker
from tracker.logs import LogReader, LogWriter
from tracker.outgoing import encode
from tracker.settings import Settings, load, parse
from tracker.snapshots import SnapshotError, unpack_start

from .blocks import Block, Said, steps
from .errors import OfflineError
from .progress import progress_bar
from .summary import Account, Comparison, decode_said


class Replay:
    """A replay under way; `run` takes one log after another, each going on where the last one ended.

    Parameters
    ----------
    settings : Settings or None
        To use instead of the log's own.
    folder : Path
        Where relative paths of the settings start.
    writer : LogWriter or None
        Takes what would have been published.
    """

    def __init__(self, settings: Settings | None, folder: Path, writer: LogWriter | None = None) -> None:
        self._given, self._folder, self._writer = settings, folder, writer
        self._settings: Settings | None = settings
        self._tracker: Tracker | None = None
        self.logged, self.replayed, self.comparison = Account(), Account(), Comparison()
        self.refused = 0
        self.span_s = 0.0
        self.damage: list[str] = []
        self.own_settings = True

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
        settings, follow = self._prepare(path, reader)
        tracker = self._tracker
        if tracker is None:
            raise OfflineError(f"{path}: no tracker could be made")
        first_ns = last_ns = None
        for step in steps(reader, settings.link.name, shape(settings), follow=follow):
            if isinstance(step, Block):
                self._advance(tracker, step, settings)
                first_ns = first_ns if first_ns is not None else step.taken[0].burst.t_ns
                last_ns = step.taken[-1].burst.end_ns
                advanced(reader.tell(), reader.size)
            elif isinstance(step, Command):
                carry_out(step, tracker, settings.panel.elements)
            elif isinstance(step, Said):
                self._heard(step)
            else:
                self.refused += 1
        if first_ns is not None and last_ns is not None:
            self.span_s += (last_ns - first_ns) / 1e9
        if reader.damage:
            self.damage.append(f"{path}: {reader.damage}")

    @property
    def counts(self) -> dict[str, int]:
        """What the engine took and did not take."""
        if self._tracker is None:
            return {}
        counts = self._tracker.counts
        return {
            "bursts": counts.bursts,
            "frames": counts.frames,
            "lost": counts.lost,
            "duplicate": counts.duplicate,
            "refused": self.refused,
            "dropped_frames": counts.dropped_frames,
        }

    def _prepare(self, path: Path, reader: LogReader) -> tuple[Settings, bool]:
        """Find the settings, and the tracker that starts into this log."""
        text = reader.attachments.get("settings.toml")
        own = parse(text.decode(errors="replace"), f"{path}: settings.toml") if text is not None else None
        settings = self._given or own
        if settings is None:
            raise OfflineError(f"{path}: holds no settings; give them with --settings")
        follow = own == settings and "start.msgpack" in reader.attachments
        self.own_settings &= own == settings
        if follow:
            try:
                start = unpack_start(reader.attachments["start.msgpack"])
            except SnapshotError as error:
                raise OfflineError(f"{path}: {error}") from None
            self._tracker = Tracker(configure(settings, self._folder), start.first_id)
            if start.snapshot is not None:
                self._tracker.load(start.snapshot)
        elif self._tracker is None or settings != self._settings:
            self._tracker = Tracker(configure(settings, self._folder))
        self._settings = settings
        return settings, follow

    def _advance(self, tracker: Tracker, block: Block, settings: Settings) -> None:
        bursts = []
        for taken in block.taken:
            try:
                tracker.admit(taken.burst, taken.arrival_ns)
                bursts.append(taken.burst)
            except Refused as refused:
                tracker.refuse(refused.reason)
                self.refused += 1
        if not bursts:
            return
        budget = Steps(settings.refresh.most_steps if block.steps is None else block.steps)
        outcome = tracker.advance(bursts, budget)
        self.replayed.error.extend([outcome.error] * len(bursts))
        for event in outcome.events:
            self.replayed.take(event)
            if isinstance(event, Pattern):
                self.comparison.replayed(event)
        if self._writer is not None:
            self._write(self._writer, settings.link.name, outcome.events, block.time_ns)

    @staticmethod
    def _write(writer: LogWriter, link: str, events: list[Event], time_ns: int) -> None:
        for event in events:
            kind, body, t_ns = encode(link, event, 0, {})
            writer.add(f"{kind}/{link}", body, time_ns, t_ns)
        writer.commit()

    def _heard(self, said: Said) -> None:
        try:
            event = decode_said(said)
        except Refused:
            self.refused += 1
            return
        self.logged.take(event)
        if isinstance(event, Pattern):
            self.comparison.logged(event)


def replay(
    paths: list[Path], settings_path: Path | None, out: Path | None, summary_path: Path | None, progress: bool
) -> int:
    """Replay logs and say how it went.

    Parameters
    ----------
    paths : list of Path
        Logs, in the order in which they continue one another.
    settings_path : Path or None
        Settings to use instead of the logs' own.
    out : Path or None
        Log to write of what would have been published.
    summary_path : Path or None
        JSON file to write the summary to.
    progress : bool
        Whether to show progress.

    Returns
    -------
    int
        Exit status.

    Raises
    ------
    SettingsError, LogError, OfflineError
        One line for the user.
    """
    settings = load(settings_path) if settings_path else None
    folder = settings_path.parent if settings_path else paths[0].parent
    writer = None
    if out is not None:
        text = (
            settings_path.read_bytes() if settings_path else LogReader(paths[0]).attachments.get("settings.toml", b"")
        )
        # A fixed clock: the same replay twice writes the same file.
        writer = LogWriter(out, attachments={"settings.toml": text}, clock_ns=lambda: 0)
    work = Replay(settings, folder, writer)
    began = time.perf_counter()
    try:
        with threadpool_limits(limits=1), progress_bar(progress, len(paths)) as bar:
            for path in paths:
                work.run(path, bar.begin(path.name))
    finally:
        if writer is not None:
            writer.close()
    result = _result(work, paths, time.perf_counter() - began)
    if summary_path is not None:
        try:
            summary_path.write_text(json.dumps(result, indent=2) + "\n", encoding="utf-8")
        except OSError as error:
            raise OfflineError(f"{summary_path}: cannot be written: {error.strerror}") from None
    sys.stdout.write(render(result))
    return 0


def _result(work: Replay, paths: list[Path], took_s: float) -> dict[str, Any]:
    only_log, only_replay = work.comparison.unmatched
    return {
        "logs": [str(path) for path in paths],
        "own_settings": work.own_settings,
        "span_s": work.span_s,
        "took_s": took_s,
        "times_real_time": work.span_s / took_s if took_s > 0 else None,
        "counts": work.counts,
        "logged": work.logged.as_dict(),
        "replayed": work.replayed.as_dict(),
        "patterns_same": work.comparison.same,
        "patterns_only_in_log": only_log,
        "patterns_only_in_replay": only_replay,
        "first_difference": work.comparison.first_difference,
        "damage": work.damage,
    }


def render(result: dict[str, Any]) -> str:
    """Write a summary as text for a person."""
    counts, logged, replayed = result["counts"], result["logged"], result["replayed"]
    lines = [
        f"{counts.get('bursts', 0)} bursts, {counts.get('frames', 0)} frames over {result['span_s']:.3f} s, "
        f"worked off in {result['took_s']:.2f} s ({result['times_real_time'] or 0:.1f} times real time)",
        f"lost {counts.get('lost', 0)}, refused {counts.get('refused', 0)}, frames left out "
        f"{counts.get('dropped_frames', 0)}",
        "",
        f"{'':24}{'logged':>12}{'replayed':>12}",
    ]
    rows = [
        ("patterns published", "patterns", "d"),
        ("rate measured", "rate_measured", ".3f"),
        ("rate predicted", "rate_predicted", ".3f"),
        ("innovation ratio", "innovation", ".3f"),
        ("prediction error", "prediction_error", ".3f"),
    ]
    for label, key, form in rows:
        lines.append(f"{label:24}{_cell(logged[key], form):>12}{_cell(replayed[key], form):>12}")
    for kind in sorted({*logged["alarms"], *replayed["alarms"]}):
        label = f"alarms: {kind}"
        lines.append(f"{label:24}{logged['alarms'].get(kind, 0):>12}{replayed['alarms'].get(kind, 0):>12}")
    lines += ["", _verdict(result)]
    lines += [f"damage: {text}" for text in result["damage"]]
    return "\n".join(lines) + "\n"


def _verdict(result: dict[str, Any]) -> str:
    same, logged = result["patterns_same"], result["logged"]["patterns"]
    if not logged:
        return "The log holds no published patterns to compare with."
    if not result["own_settings"]:
        return "Other settings than the log's own: what is replayed is what they would have done with the same frames."
    if same == logged and not result["patterns_only_in_replay"]:
        return f"All {logged} patterns came out bit by bit as published."
    parts = [f"{same} of {logged} patterns came out bit by bit as published"]
    if result["first_difference"]:
        parts.append(f"first difference: {result['first_difference']}")
    if result["patterns_only_in_log"] or result["patterns_only_in_replay"]:
        parts.append(f"{result['patterns_only_in_log']} only in the log, {result['patterns_only_in_replay']} only here")
    return "; ".join(parts) + "."


def _cell(value: float | None, form: str) -> str:
    return "–" if value is None else format(value, form)
