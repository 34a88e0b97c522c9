"""Logs worked off side by side, a process each: files of a journal say how the tracker stood when they began.

So none has to wait for the one before it, and what comes out is the same as one after the other, in the same order.
"""

import os
import sys
from collections.abc import Callable, Sequence
from concurrent.futures import Future, ProcessPoolExecutor, wait
from contextlib import suppress
from multiprocessing import get_context
from multiprocessing.sharedctypes import SynchronizedArray
from pathlib import Path

from threadpoolctl import threadpool_limits

from tracker.logs import LogError, LogReader, LogWriter
from tracker.snapshots import START

from .progress import progress_bar
from .rerun import Replay

# Bytes in logs beside the largest from which a second process is worth its start, which takes about as long.
WORTH = 30_000_000
# A fork has all that is imported already; elsewhere system libraries do not outlive one.
START_METHOD = "fork" if sys.platform == "linux" else "spawn"
# Time between two looks at how far the processes are, s.
LOOK_S = 0.2

Message = tuple[str, bytes, int, int]

_done: "SynchronizedArray[int] | None" = None  # of a process: bytes done of each log


class Kept:
    """Messages of a replay by block, kept to be written in the order of the logs."""

    def __init__(self) -> None:
        self.blocks: list[list[Message]] = [[]]

    def add(self, topic: str, body: bytes, log_time_ns: int, publish_time_ns: int) -> None:
        """Take a message."""
        self.blocks[-1].append((topic, body, log_time_ns, publish_time_ns))

    def commit(self) -> None:
        """End a block."""
        self.blocks.append([])


def processes_for(paths: Sequence[Path]) -> int:
    """How many processes are worth while for logs under their own settings; 1 when they need one another."""
    with suppress(OSError, LogError):  # told when the log is replayed
        sizes = [path.stat().st_size for path in paths]
        if sum(sizes) - max(sizes) < WORTH:
            return 1
        if all(START in LogReader(path).first_attachments for path in paths):
            return min(len(paths), len(os.sched_getaffinity(0)))
    return 1


def replay_side_by_side(
    work: Replay, paths: Sequence[Path], processes: int, writer: LogWriter | None, progress: bool
) -> None:
    """Replay logs that do not need one another under their own settings.

    Parameters
    ----------
    work : Replay
        Takes what is found.
    paths : sequence of Path
    processes : int
    writer : LogWriter or None
        Takes what would have been published, in the order of the logs.
    progress : bool
        Whether to show progress.

    Raises
    ------
    LogError, OfflineError, SettingsError
        Of the first log, in their order, that cannot be replayed.
    """
    context = get_context(START_METHOD)
    done: SynchronizedArray[int] = context.Array("Q", len(paths))
    sizes = [path.stat().st_size for path in paths]
    with ProcessPoolExecutor(processes, context, _begin, (done,)) as pool:
        # The processes start here, before the thread that draws the bars: forked with it they might wait for its locks.
        parts = [pool.submit(_replay, number, path, writer is not None) for number, path in enumerate(paths)]
        try:
            with progress_bar(progress, len(paths)) as bars:
                advanced = [bars.begin(path.name) for path in paths]
                for part, path in zip(parts, paths, strict=True):
                    found, blocks = _awaited(part, lambda: _show(advanced, done, sizes))
                    work.join(found, path)
                    _write(writer, blocks)
                _show(advanced, done, sizes)
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            raise


def _begin(done: "SynchronizedArray[int]") -> None:
    global _done  # noqa: PLW0603 - shared memory reaches a process only when it starts
    _done = done


def _replay(number: int, path: Path, keep: bool) -> tuple[Replay, list[list[Message]]]:
    kept = Kept()
    work = Replay(None, path.parent, kept if keep else None)

    def advanced(bytes_done: int, size: int) -> None:
        if _done is not None:
            _done[number] = bytes_done

    with threadpool_limits(limits=1):
        work.run(path, advanced)
    work.finish()
    return work, kept.blocks


def _awaited(
    part: "Future[tuple[Replay, list[list[Message]]]]", look: Callable[[], None]
) -> tuple[Replay, list[list[Message]]]:
    """Wait for a part, and look at the progress of all meanwhile."""
    while not part.done():
        wait([part], LOOK_S)
        look()
    return part.result()


def _show(advanced: Sequence[Callable[[int, int], None]], done: "SynchronizedArray[int]", sizes: Sequence[int]) -> None:
    for one, bytes_done, size in zip(advanced, done[:], sizes, strict=True):
        one(bytes_done, size)


def _write(writer: LogWriter | None, blocks: Sequence[Sequence[Message]]) -> None:
    if writer is None:
        return
    for block in blocks:
        for message in block:
            writer.add(*message)
        if block:
            writer.commit()
