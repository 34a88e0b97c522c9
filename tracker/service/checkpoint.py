"""The estimate over a planned restart: written when the service ends, taken up once when it starts again.

A file is used only once, and only by the same version under the same settings and basis: after a crash there is none,
and an old estimate is never mistaken for a fresh one.
"""

import hashlib
import os
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import msgpack

from tracker import __version__
from tracker.engine.tracker import Tracker
from tracker.snapshots import SnapshotError, Start, pack_start, unpack_start


class Checkpoint:
    """The checkpoint file of one link.

    Parameters
    ----------
    path : Path
    attachments : mapping of str to bytes
        What is in force: settings, and the learned basis if there is one.
    """

    def __init__(self, path: Path, attachments: Mapping[str, bytes]) -> None:
        self._path = path
        digest = hashlib.sha256(__version__.encode())
        for name, data in sorted(attachments.items()):
            digest.update(f"\n{name} {len(data)}\n".encode() + data)
        self._in_force = digest.digest()

    def resume(self, afresh: Callable[[], Tracker]) -> tuple[Tracker, bool]:
        """Make a tracker, from the file if there is one that fits; the file is gone afterwards.

        Parameters
        ----------
        afresh : callable
            Makes a tracker that knows nothing.

        Returns
        -------
        tracker : Tracker
        resumed : bool
            Whether it goes on from the file.
        """
        tracker = afresh()
        snapshot = self._take()
        if snapshot is None:
            return tracker, False
        try:
            if snapshot["refresher"]["next_id"] == tracker.next_id:
                tracker.load(snapshot)
                return tracker, True
        except (LookupError, TypeError, ValueError, AttributeError):
            return afresh(), False  # of another version: what it took over by then is thrown away
        return tracker, False

    def keep(self, tracker: Tracker) -> None:
        """Write the file, whole or not at all.

        Raises
        ------
        OSError
            When the disk fails.
        """
        part = self._path.with_suffix(".part")
        start = pack_start(Start(tracker.next_id, tracker.snapshot()))
        part.write_bytes(msgpack.packb([self._in_force, start]))
        os.replace(part, self._path)

    def _take(self) -> Mapping[str, Any] | None:
        try:
            data = self._path.read_bytes()
            self._path.unlink()
        except OSError:
            return None
        try:
            in_force, start = msgpack.unpackb(data)
            return unpack_start(start).snapshot if in_force == self._in_force else None
        except (SnapshotError, ValueError, TypeError, msgpack.UnpackException):
            return None
