"""Faulty elements beside the journal: the file of them is written anew whenever others are found."""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from tracker.engine.events import Event, State
from tracker.faults_file import faults_text, write_faults
from tracker.settings import Settings


class FaultsFile:
    """Keeps the file of one link.

    What an earlier run of the service found stays in the file until this one has found something.

    Parameters
    ----------
    path : Path
    settings : Settings
    log : structlog logger
    """

    def __init__(self, path: Path, settings: Settings, log: Any) -> None:
        self._path, self._settings, self._log = path, settings, log
        self._written: frozenset[tuple[int, str]] = frozenset()
        self._failed = False

    def take(self, events: Sequence[Event]) -> None:
        """Take in what a block led to; a disk that fails is tried again with the next block."""
        state = next((event for event in reversed(events) if isinstance(event, State)), None)
        if state is None:
            return
        found = frozenset((element, fault) for element, fault, _ in state.faults)
        if found == self._written:
            return
        try:
            write_faults(self._path, faults_text(self._settings, state))
        except OSError as error:
            if not self._failed:
                self._log.warning("faulty elements are not written", path=str(self._path), why=error.strerror)
            self._failed = True
            return
        self._written, self._failed = found, False
        self._log.info("faulty elements", found=len(found), path=str(self._path))
