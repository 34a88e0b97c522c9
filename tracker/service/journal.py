"""The journal: everything taken in and given out, on disk before anyone is answered.

One file after another in a folder; each holds the settings, and how the tracker started into it, as attachments, so
that each can be replayed by itself.
"""

import os
import threading
import time
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

from tracker.logs import LogError, LogWriter

from .errors import ServiceError

# Distance of syncs to the device, s. A killed process loses nothing without them; a machine without power does.
SYNC_S = 1.0
# After a failure a new file is tried so often, s.
RETRY_S = 5.0


class Journal:
    """Writes the journal of one link.

    Parameters
    ----------
    folder : Path
        Made when it is not there.
    link : str
    settings : str
        Text of the settings in force.
    rotate_mb : float
        Size at which the next file begins.
    start : callable
        Returns how the tracker stands, packed, at the beginning of a file.

    Raises
    ------
    ServiceError
        When no file can be made.
    """

    def __init__(self, folder: Path, link: str, settings: str, rotate_mb: float, start: Callable[[], bytes]) -> None:
        self._folder, self._link, self._settings, self._start = folder, link, settings, start
        self._rotate_bytes = rotate_mb * 1e6
        self._syncer = _Syncer()
        self._writer: LogWriter | None = None
        self._retry_ns = 0
        self.path: Path | None = None
        try:
            self._open()
        except (OSError, LogError) as error:
            self._syncer.close()
            raise ServiceError(f"{folder}: no journal can be written: {error}") from None

    def write(self, records: list[tuple[str, bytes, int, int]]) -> bool:
        """Write one block's records: topic, body, log time and publish time in ns.

        Returns
        -------
        bool
            True when they will outlive this process; False while the disk fails.
        """
        if self._writer is None and not self._reopen():
            return False
        assert self._writer is not None
        try:
            for topic, body, log_ns, publish_ns in records:
                self._writer.add(topic, body, log_ns, publish_ns)
            self._writer.commit()
        except OSError:
            self._give_up()
            return False
        self._syncer.dirty.set()
        return True

    @property
    def full(self) -> bool:
        """Whether the next file is due."""
        return self._writer is not None and self._writer.bytes_written >= self._rotate_bytes

    def rotate(self) -> None:
        """Begin the next file; a failure shows at the next write."""
        self.close_file()
        self._reopen()

    def close_file(self) -> None:
        """End the file in hand properly."""
        self._syncer.watch(None)
        if self._writer is not None:
            with suppress(OSError):  # what had been committed is on disk; the missing footer is read around
                self._writer.close()
            self._writer = None

    def close(self) -> None:
        """End the journal."""
        self.close_file()
        self._syncer.close()

    def _open(self) -> None:
        self._folder.mkdir(parents=True, exist_ok=True)
        stamp = time.strftime("%Y%m%dT%H%M%SZ", time.gmtime())
        for count in range(1000):
            path = self._folder / f"{self._link}-{stamp}-{count:03d}.mcap"
            if not path.exists():
                break
        attachments = {"settings.toml": self._settings.encode(), "start.msgpack": self._start()}
        self._writer = LogWriter(path, attachments=attachments, clock_ns=time.time_ns)
        self.path = path
        self._syncer.watch(path)

    def _reopen(self) -> bool:
        if time.monotonic_ns() < self._retry_ns:
            return False
        try:
            self._open()
        except (OSError, LogError):
            self._give_up()
            return False
        return True

    def _give_up(self) -> None:
        self.close_file()
        self._retry_ns = time.monotonic_ns() + round(RETRY_S * 1e9)


class _Syncer:
    """Syncs the file to the device from a thread, where it may block for as long as it likes."""

    def __init__(self) -> None:
        self.dirty = threading.Event()
        self._closing = threading.Event()
        self._lock = threading.Lock()
        self._file: int | None = None
        self._thread = threading.Thread(target=self._run, name="journal-sync", daemon=True)
        self._thread.start()

    def watch(self, path: Path | None) -> None:
        """Sync this file from now on, and the one before it a last time."""
        with self._lock:
            if self._file is not None:
                os.fdatasync(self._file)
                os.close(self._file)
            self._file = os.open(path, os.O_RDONLY) if path else None

    def close(self) -> None:
        """End the thread."""
        self._closing.set()
        self._thread.join()
        self.watch(None)

    def _run(self) -> None:
        while not self._closing.wait(SYNC_S):
            if not self.dirty.is_set():
                continue
            self.dirty.clear()
            with self._lock:
                if self._file is not None:
                    try:
                        os.fdatasync(self._file)
                    except OSError:
                        self.dirty.set()  # the writer meets the same disk and reports it
