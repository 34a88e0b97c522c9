"""The estimate over a planned restart: written when the service ends, taken up once when it starts again.

A file is used only once and only under the same settings: after a crash there is none, and an old estimate is never
mistaken for a fresh one.
"""

import os
from pathlib import Path

import msgpack

from tracker.engine.tracker import Tracker
from tracker.snapshots import SnapshotError, Start, pack_start, unpack_start


class Checkpoint:
    """The checkpoint file of one link.

    Parameters
    ----------
    path : Path
    settings : str
        Text of the settings in force.
    """

    def __init__(self, path: Path, settings: str) -> None:
        self._path, self._settings = path, settings

    def resume(self, tracker: Tracker) -> bool:
        """Load the tracker from the file, if there is one for these settings; the file is gone afterwards."""
        try:
            data = self._path.read_bytes()
            self._path.unlink()
        except OSError:
            return False
        try:
            settings, start = msgpack.unpackb(data)
            snapshot = unpack_start(start).snapshot if settings == self._settings else None
        except (SnapshotError, ValueError, TypeError):
            return False
        if snapshot is None or snapshot["refresher"]["next_id"] != tracker.next_id:
            return False
        tracker.load(snapshot)
        return True

    def keep(self, tracker: Tracker) -> None:
        """Write the file, whole or not at all."""
        part = self._path.with_suffix(".part")
        start = pack_start(Start(tracker.next_id, tracker.snapshot()))
        part.write_bytes(msgpack.packb([self._settings, start]))
        os.replace(part, self._path)
