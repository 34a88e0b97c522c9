"""The journal: everything taken in and given out, on disk before anyone is answered.

One file after another in a folder; each holds the settings, the learned basis if there is one, and how the tracker
stood when it began, as attachments, so that each can be replayed by itself.
"""

import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import suppress
from pathlib import Path

from tracker.logs import LogError, LogWriter
from tracker.snapshots import START

from .errors import ServiceError
from .syncing import Syncer

# After a failure a new file is tried so often, s.
RETRY_S = 5.0

# A record to write: topic, body, log time and publish time in ns.
Entry = tuple[str, bytes, int, int]


class Journal:
    """Writes the journal of one link.

    When the disk fails, the file in hand is given up: with a block missing it could not be replayed beyond. A new one
    begins when `mend` is called, between two blocks, and with how the tracker stands then.

    Parameters
    ----------
    folder : Path
        Made when it is not there.
    link : str
    attachments : mapping of str to bytes
        Files that every log holds.
    rotate_mb : float
        Size at which the next file begins.
    start : callable
        Returns how the tracker stands, packed.
    create : callable
        Makes the writer of a log; `LogWriter` or what behaves like it.

    Attributes
    ----------
    path : Path or None
        File in hand, or the last one.
    fault : str
        What last went wrong; empty while nothing has.

    Raises
    ------
    ServiceError
        When no file can be made.
    """

    def __init__(
        self,
        folder: Path,
        link: str,
        attachments: Mapping[str, bytes],
        rotate_mb: float,
        start: Callable[[], bytes],
        create: Callable[..., LogWriter] = LogWriter,
    ) -> None:
        self._folder, self._link, self._attachments, self._start = folder, link, attachments, start
        self._create = create
        self._rotate_bytes = rotate_mb * 1e6
        self._syncer = Syncer()
        self._writer: LogWriter | None = None
        self._retry_ns = 0
        self._stamp = ""
        self.path: Path | None = None
        self.fault = ""
        if not self._open():
            self._syncer.close()
            raise ServiceError(f"{folder}: no journal can be written: {self.fault}")

    def write(self, entries: Sequence[Entry]) -> bool:
        """Write records that belong together.

        Returns
        -------
        bool
            True when they will outlive this process; False while the disk fails.
        """
        if self._syncer.fault:
            self._give_up(self._syncer.fault)
        if self._writer is None:
            return False
        try:
            for topic, body, log_ns, publish_ns in entries:
                self._writer.add(topic, body, log_ns, publish_ns)
            self._writer.commit()
        except OSError as error:
            self._give_up(_said(error))
            return False
        self._syncer.wrote(sum(len(body) for _, body, _, _ in entries))
        return True

    @property
    def folder(self) -> Path:
        """Where the files lie."""
        return self._folder

    @property
    def full(self) -> bool:
        """Whether the next file is due."""
        return self._writer is not None and self._writer.bytes_written >= self._rotate_bytes

    @property
    def broken(self) -> bool:
        """Whether nothing can be written before `mend`."""
        return self._writer is None

    def rotate(self) -> None:
        """Begin the next file."""
        self._end_file()
        self._open()

    def mend(self) -> bool:
        """Try to begin a new file after a failure, once in a while; whether there is one now."""
        if time.monotonic_ns() < self._retry_ns:
            return False
        return self._open()

    def close(self) -> None:
        """End the journal."""
        self._end_file()
        self._syncer.close()

    def _open(self) -> bool:
        """Begin a file; whether that was possible."""
        try:
            self._folder.mkdir(parents=True, exist_ok=True)
            path = self._free_name()
            attachments = {**self._attachments, START: self._start()}
            self._writer = self._create(path, attachments=attachments, clock_ns=time.time_ns)
            self.path = path
            self._syncer.watch(path)
        except (OSError, LogError) as error:
            self._give_up(_said(error))
            return False
        return True

    def _free_name(self) -> Path:
        """Find a name that sorts after those of the files before it, even when the clock is set back."""
        self._stamp = max(self._stamp, time.strftime("%Y%m%dT%H%M%SZ", time.gmtime()))
        for count in range(1000):
            path = self._folder / f"{self._link}-{self._stamp}-{count:03d}.mcap"
            if not path.exists():
                return path
        raise LogError(f"{self._folder}: 1000 files within a second; raise journal.rotate_mb")

    def _end_file(self) -> None:
        self._syncer.watch(None)
        if self._writer is not None:
            with suppress(OSError):  # what was committed is there; the missing index is read around
                self._writer.close()
            self._writer = None

    def _give_up(self, fault: str) -> None:
        self.fault = fault
        self._retry_ns = time.monotonic_ns() + round(RETRY_S * 1e9)
        self._end_file()


def _said(error: Exception) -> str:
    return (error.strerror if isinstance(error, OSError) else None) or str(error)
