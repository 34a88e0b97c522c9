"""The bursts of logs to learn from: which of them, when there are more than can be worked off, and in what pieces."""

import hashlib
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from tracker.engine.burst import Burst
from tracker.engine.estimation.estimator import STRETCH_NS
from tracker.engine.estimation.frames import Frames
from tracker.engine.refusal import Refused
from tracker.logs import LogReader, Record
from tracker.messages import Shape, decode_pilots

from .errors import OfflineError

# Parts that a log is worked off in when it is too long to take whole, spread evenly over it.
PARTS = 4


@dataclass(frozen=True, slots=True)
class Recorded:
    """A log with bursts of a link.

    Parameters
    ----------
    path : Path
    sha256 : str
    bursts : int
        Messages that hold one.
    frames : int
        Frames in the first.
    stretches : int
        Pieces that it is cut into.
    damage : str or None
        Where it is not whole.
    """

    path: Path
    sha256: str
    bursts: int
    frames: int
    stretches: int
    damage: str | None


@dataclass(frozen=True, slots=True, eq=False)
class Piece:
    """Frames over which phases turn evenly, as they lie in a log.

    Parameters
    ----------
    part : int
        Pieces of one part follow one another without a gap.
    number : int
        Counted over all parts.
    frames : Frames
    """

    part: int
    number: int
    frames: Frames


def take_stock(path: Path, link: str, shape: Shape, advanced: Callable[[int, int], None]) -> Recorded:
    """Count the bursts of a link, and look at the first.

    Raises
    ------
    LogError
        When the file is no log.
    OfflineError
        When it holds no bursts that fit.
    """
    reader = LogReader(path)
    bursts = 0
    first: Burst | None = None
    refused = ""
    for record in _pilots(reader, link, advanced):
        bursts += 1
        if first is None:
            try:
                first = decode_pilots(record.body, link, shape)
            except Refused as error:
                refused = error.detail
    if not bursts:
        raise OfflineError(f"{path}: holds no bursts of link {link!r}; `ris-tracker inspect` says what it holds")
    if first is None:
        raise OfflineError(f"{path}: its bursts do not fit the settings: {refused}")
    stretches = sum(1 for _ in Frames.of(first).stretches(STRETCH_NS))
    return Recorded(path, _sha256(path), bursts, first.frames, stretches, reader.damage)


@dataclass(frozen=True, slots=True)
class Plan:
    """Which bursts to take.

    Parameters
    ----------
    logs : sequence of Recorded
    most_frames : int
        What can be worked off.
    """

    logs: Sequence[Recorded]
    most_frames: int

    @property
    def share(self) -> float:
        """Share of all frames that is taken."""
        return min(1.0, self.most_frames / sum(log.bursts * log.frames for log in self.logs))

    @property
    def bursts(self) -> int:
        """Bursts taken, about."""
        return round(self.share * sum(log.bursts for log in self.logs))

    def part(self, log: Recorded, burst: int) -> int | None:
        """Tell the part of a log that a burst lies in; None when it is not taken."""
        if self.share == 1.0:
            return 0
        place = PARTS * burst / log.bursts
        return int(place) if place % 1.0 < self.share else None

    def pieces(self, link: str, shape: Shape, begin: Callable[[str], Callable[[int, int], None]]) -> Iterator[Piece]:
        """Yield the frames of all logs, piece by piece."""
        number = 0
        for index, log in enumerate(self.logs):
            for count, record in enumerate(_pilots(LogReader(log.path), link, begin(log.path.name))):
                part = self.part(log, count)
                if part is None:
                    continue
                try:
                    burst = decode_pilots(record.body, link, shape)
                except Refused:
                    continue
                for frames in Frames.of(burst).stretches(STRETCH_NS):
                    yield Piece(index * PARTS + part, number, frames)
                    number += 1


def _pilots(reader: LogReader, link: str, advanced: Callable[[int, int], None]) -> Iterator[Record]:
    for record in reader:
        if record.topic == f"pilots/{link}":
            yield record
        advanced(reader.tell(), reader.size)


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
