"""A live journal cut, and with bits flipped, at random: what a replay makes of it.

Expected is what the library's own index of the undamaged log says: all bursts of the chunks that lie before the damage,
and no other; and the patterns that rest on them, bit by bit.
"""

import random
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import accumulate
from pathlib import Path

from mcap.reader import make_reader

from benchmarks._link import bodies, play, work_folder, write_settings
from benchmarks.row import Row
from tracker.logs import LogError, LogReader
from tracker.offline.errors import OfflineError
from tracker.offline.rerun import Replay
from tracker.simulation.yard import scenario


@dataclass(slots=True)
class Log:
    """An undamaged log.

    Parameters
    ----------
    data : bytes
    chunks : list of (int, int)
        Where each begins and ends.
    bursts : list of int
        Bursts up to the end of each.
    """

    data: bytes
    chunks: list[tuple[int, int]]
    bursts: list[int]

    def before(self, at: int) -> int:
        """Bursts in the chunks that end at or before a byte."""
        whole = sum(end <= at for _, end in self.chunks)
        return self.bursts[whole - 1] if whole else 0


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    scene, count = scenario("quiet"), 10 if quick else 100
    with work_folder() as folder:
        play(write_settings(scene, folder), bodies(scene, 450), 0.5 if quick else 1.0)
        (path,) = (folder / "journal").glob("*.mcap")
        log, spoilt = _read(path), folder / "spoilt.mcap"
        rng = random.Random(41)
        yield _row("cut at a random byte", count, lambda: _cut(log, spoilt, rng.randrange(len(log.data))))
        yield _row("with a random bit flipped", count, lambda: _flipped(log, spoilt, rng.randrange(8 * len(log.data))))


def _row(name: str, count: int, attempt: Callable[[], bool]) -> Row:
    right = sum(attempt() for _ in range(count))
    note = "all whole bursts before the damage used, none other, patterns the same, the place told"
    return Row(f"logs {name}, replayed as they should be", right, "logs", f"{count}", right == count, note)


def _cut(log: Log, path: Path, at: int) -> bool:
    path.write_bytes(log.data[:at])
    used = _replayed(path)
    if used is None:
        return at < log.chunks[0][0]
    bursts, same, told = used
    return bursts == log.before(at) and same and told


def _flipped(log: Log, path: Path, bit: int) -> bool:
    data, at = bytearray(log.data), bit // 8
    data[at] ^= 1 << bit % 8
    path.write_bytes(data)
    used = _replayed(path)
    if used is None:
        return at < log.chunks[0][0]
    bursts, same, told = used
    if at < log.chunks[0][0]:
        return bursts == log.bursts[-1] and (same or told)  # how the tracker started may be lost
    # All are used when the bit lies in an index, or in the times of a chunk, which nobody needs.
    return same and (bursts == log.bursts[-1] or (bursts == log.before(at) and told))


def _replayed(path: Path) -> tuple[int, bool, bool] | None:
    """Replay: bursts used, whether the patterns are the same, whether damage is told; None for a complaint."""
    work = Replay(None, path.parent)
    try:
        work.run(path)
    except (LogError, OfflineError):
        return None
    same = work.comparison.first_difference is None and work.comparison.unmatched == (0, 0)
    return work.counts["bursts"], same, bool(work.damage)


def _read(path: Path) -> Log:
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    if summary is None:
        raise ValueError(f"{path} has no index")
    starts = [index.chunk_start_offset for index in summary.chunk_indexes]
    counts = dict.fromkeys(starts, 0)
    for record in LogReader(path):
        counts[record.position] += record.topic.startswith("pilots/")
    ends = [index.chunk_start_offset + index.chunk_length for index in summary.chunk_indexes]
    return Log(path.read_bytes(), list(zip(starts, ends, strict=True)), list(accumulate(counts.values())))
