"""The command `replay`: the same engine over one or more logs, as fast as it can.

With the log's own settings the patterns come out bit by bit as they were published, and the summary proves it; with
others it says what would have changed. Logs that do not need one another are worked off side by side.
"""

import json
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from threadpoolctl import threadpool_limits

from tracker.logs import LogError, LogReader, LogWriter
from tracker.settings import SettingsError, load

from .errors import OfflineError
from .progress import progress_bar
from .replay_text import render
from .rerun import Replay
from .side_by_side import processes_for, replay_side_by_side


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
    if summary_path is not None and not summary_path.parent.is_dir():
        raise OfflineError(f"{summary_path}: cannot be written: there is no folder {summary_path.parent}")
    began = time.perf_counter()
    with _written(out, settings_path, paths[0]) as writer:
        work = Replay(settings, folder, writer)
        processes = processes_for(paths) if settings is None else 1
        with threadpool_limits(limits=1):
            if processes > 1:
                replay_side_by_side(work, paths, processes, writer, progress)
            else:
                with progress_bar(progress, len(paths)) as bars:
                    for path in paths:
                        work.run(path, bars.begin(path.name))
    result = _result(work, paths, time.perf_counter() - began)
    if summary_path is not None:
        try:
            summary_path.write_text(json.dumps(result, indent=2) + "\n", encoding="utf-8")
        except OSError as error:
            raise OfflineError(f"{summary_path}: cannot be written: {error.strerror}") from None
    sys.stdout.write(render(result))
    return 0


@contextmanager
def _written(out: Path | None, settings_path: Path | None, first: Path) -> Iterator[LogWriter | None]:
    """Open the log of what would have been published; it goes again when the user's mistake left nothing to write."""
    if out is None:
        yield None
        return
    text = settings_path.read_bytes() if settings_path else LogReader(first).attachments.get("settings.toml", b"")
    # A fixed clock: the same replay twice writes the same file.
    with LogWriter(out, attachments={"settings.toml": text}, clock_ns=lambda: 0) as writer:
        begun = writer.bytes_written
        try:
            yield writer
        except (LogError, OfflineError, SettingsError):
            if writer.bytes_written == begun:
                out.unlink()
            raise


def _result(work: Replay, paths: list[Path], took_s: float) -> dict[str, Any]:
    only_log, only_replay = work.comparison.unmatched
    own = work.own_settings
    return {
        "logs": [str(path) for path in paths],
        "own_settings": own,
        "span_s": work.span_s,
        "took_s": took_s,
        "times_real_time": work.span_s / took_s if took_s > 0 else None,
        "counts": work.counts,
        "logged": work.logged.as_dict(),
        "replayed": work.replayed.as_dict(),
        "patterns_same": work.comparison.same,
        "patterns_only_in_log": only_log,
        "patterns_only_in_replay": only_replay,
        # Under other settings patterns are meant to differ.
        "first_difference": work.comparison.first_difference if own else None,
        "damage": work.damage,
    }
