"""Syncs the journal to the device from a thread of its own, where it may block for as long as it likes.

A killed process loses nothing without this; a machine that loses power does.
"""

import os
import threading
from pathlib import Path

# Distance of syncs, s.
SYNC_S = 1.0
# Closing waits no longer than this for a device that hangs, s.
PATIENCE_S = 10.0

# Not every system can leave out the times of the file.
_sync = getattr(os, "fdatasync", os.fsync)


class Syncer:
    """Syncs one file after another.

    Attributes
    ----------
    dirty : bool
        Set by whoever has written; cleared before a sync.
    fault : str
        Why the device did not take the file in hand; empty while it does.
    """

    def __init__(self) -> None:
        self.dirty = False
        self.fault = ""
        self._lock = threading.Lock()
        self._file: int | None = None
        self._ended: list[int] = []  # files synced a last time, and closed, by the thread
        self._closing = threading.Event()
        self._thread = threading.Thread(target=self._run, name="journal-sync", daemon=True)
        self._thread.start()

    def watch(self, path: Path | None) -> None:
        """Sync this file from now on, and the one before it a last time; never blocks on the device.

        Raises
        ------
        OSError
            When the file cannot be opened.
        """
        file = os.open(path, os.O_RDONLY) if path is not None else None
        with self._lock:
            if self._file is not None:
                self._ended.append(self._file)
            self._file = file
            self.fault = ""

    def close(self) -> None:
        """Sync a last time and end the thread."""
        self.watch(None)
        self._closing.set()
        self._thread.join(PATIENCE_S)

    def _run(self) -> None:
        while not self._closing.wait(SYNC_S):
            self._sync_all()
        self._sync_all()

    def _sync_all(self) -> None:
        with self._lock:
            ended, self._ended = self._ended, []
            file, dirty = self._file, self.dirty
            self.dirty = False
        for each in ended:
            self._try(each, None)
            os.close(each)
        if file is not None and dirty:
            # Outside of the lock: only this thread closes files, so `file` stays valid.
            self._try(file, file)

    def _try(self, file: int, in_hand: int | None) -> None:
        try:
            _sync(file)
        except OSError as error:
            with self._lock:
                if in_hand is not None and self._file == in_hand:
                    self.fault = error.strerror or str(error)
