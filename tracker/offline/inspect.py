"""Inspect: what recorded logs hold, before anyone works on them."""

import json
import sys
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from threadpoolctl import threadpool_limits

from tracker.engine.refusal import Refused
from tracker.logs import LogReader
from tracker.messages import parse_topic
from tracker.settings import Settings, SettingsError, parse

from .contents import Contents
from .errors import OfflineError
from .inspection_text import render
from .progress import Bars, progress_bar


@dataclass(frozen=True, slots=True)
class LogPart:
    """One log as a file.

    Parameters
    ----------
    path : str
    size : int
        Bytes.
    messages : int
    attachments : list of str
        Names of the files in it.
    settings : str or None
        What is wrong with the settings in it; None when they are right or there are none.
    damage : str or None
        Where and why reading stopped short.
    """

    path: str
    size: int
    messages: int
    attachments: list[str]
    settings: str | None
    damage: str | None


@dataclass(slots=True)
class Inspection:
    """What was found: the logs as files, what each link's messages amount to, and topics of no link."""

    logs: list[LogPart] = field(default_factory=list)
    links: dict[str, Contents] = field(default_factory=dict)
    strange: dict[str, int] = field(default_factory=dict)

    def as_dict(self) -> dict[str, Any]:
        """Give everything as plain values, for JSON."""
        return {
            "logs": [asdict(log) for log in self.logs],
            "links": {name: _plain(contents) for name, contents in sorted(self.links.items())},
            "strange_topics": self.strange,
        }


def examine(paths: Sequence[Path], bars: Bars | None = None) -> Inspection:
    """Read logs and take stock of them.

    Parameters
    ----------
    paths : sequence of Path
        In the order of recording.
    bars : Bars or None
        Told how far each log is read.

    Raises
    ------
    LogError
        When a file is no log at all; damage is told, not raised.
    """
    result = Inspection()
    bars = bars or Bars(None)
    for path in paths:
        _examine(path, result, bars.begin(path.name))
    return result


def _examine(path: Path, result: Inspection, advanced: Callable[[int, int], None]) -> None:
    reader = LogReader(path)
    settings, wrong = _settings(reader)
    for known in result.links.values():
        known.use(settings)
    messages = 0
    for record in reader:
        messages += 1
        try:
            kind, link = parse_topic(record.topic)
        except Refused:
            result.strange[record.topic] = result.strange.get(record.topic, 0) + 1
            continue
        contents = result.links.get(link)
        if contents is None:
            contents = result.links[link] = Contents(link)
            contents.use(settings)
        contents.take(kind, record)
        advanced(reader.tell(), reader.size)
    advanced(reader.size, reader.size)
    result.logs.append(LogPart(str(path), reader.size, messages, sorted(reader.attachments), wrong, reader.damage))


def _settings(reader: LogReader) -> tuple[Settings | None, str | None]:
    text = reader.attachments.get("settings.toml")
    if text is None:
        return None, None
    try:
        return parse(text.decode(errors="replace"), "settings.toml"), None
    except SettingsError as error:
        return None, str(error)


def _plain(contents: Contents) -> dict[str, Any]:
    """Sum up a link in plain values."""
    commonest = contents.commonest
    first, last = contents.first_ns, contents.last_ns
    span_s = (last - first) / 1e9 if first is not None and last is not None else 0.0
    order = contents.order
    return {
        "messages": dict(contents.messages),
        "refused": dict(contents.refused),
        "first_ns": first,
        "last_ns": last,
        "span_s": span_s,
        "bursts": contents.bursts,
        "frames": contents.frames,
        "frames_left_out": contents.left_out,
        "bytes": contents.bytes,
        "runs": order.runs,
        "gaps": order.gaps,
        "lost": order.lost,
        "longest_gap": order.longest,
        "duplicates": order.duplicates,
        "late": order.late,
        "sizes": [asdict(size) | {"bursts": count} for size, count in contents.sizes.most_common()],
        "unlike_settings": contents.misfits,
        "frame_spacing_ns": {str(dt): count for dt, count in contents.spacing.most_common()},
        "burst_interval_s": _spread(contents.interval_s),
        "arrival_s": _spread(contents.arrival_s),
        "repeated_share": contents.repeated_share,
        "commonest_pattern": None if commonest is None else {"frames": commonest[1], "bursts": commonest[2]},
        "receivers": [asdict(level) | {"ratio_db": level.ratio_db} for level in contents.levels],
        "published": dict(contents.causes),
        "rate_predicted": float(np.mean(contents.rates)) if contents.rates else None,
        "alarms": {
            kind: {"count": count, "first_ns": contents.alarm_ns[kind]} for kind, count in contents.alarms.most_common()
        },
    }


def _spread(values: Sequence[float]) -> dict[str, float] | None:
    """Least, median, 99th percentile and most."""
    if not values:
        return None
    least, median, most_of, most = np.percentile(np.asarray(values), [0, 50, 99, 100])
    return {"least": float(least), "median": float(median), "p99": float(most_of), "most": float(most)}


def inspect(paths: Sequence[Path], json_path: Path | None = None, progress: bool = True) -> int:
    """Say on standard output what logs hold.

    Parameters
    ----------
    paths : sequence of Path
        In the order of recording.
    json_path : Path or None
        JSON file to write the same to.
    progress : bool
        Whether to show progress.

    Returns
    -------
    int
        Exit status.

    Raises
    ------
    LogError, OfflineError
        One line for the user.
    """
    with threadpool_limits(limits=1), progress_bar(progress, len(paths)) as bars:
        result = examine(paths, bars).as_dict()
    if json_path is not None:
        try:
            json_path.write_text(json.dumps(result, indent=2) + "\n", encoding="utf-8")
        except OSError as error:
            raise OfflineError(f"{json_path}: cannot be written: {error.strerror}") from None
    sys.stdout.write(render(result))
    return 0
