"""What the service itself has to say: overload, a failing disk, a wrong clock; as alarms, and not too often."""

import time
from typing import Any

from tracker.engine.events import Alarm

AGAIN_NS = 10_000_000_000
# Full blocks in a row, with more waiting, that count as overload: one or two are a hiccup of the machine.
FULL_IN_A_ROW = 8


class Notices:
    """Gathers the service's own alarms until `take` gives them out; each kind at most once in ten seconds.

    Parameters
    ----------
    log : structlog logger
    required : bool
        Whether patterns are withheld while the journal does not work.
    """

    def __init__(self, log: Any, *, required: bool) -> None:
        self._log = log
        self._without_journal = "patterns withheld until it works" if required else "patterns go out unrecorded"
        self._full = 0
        self._last_ns: dict[str, int] = {}
        self._due: list[tuple[str, float, float, str]] = []

    def load(self, *, full: bool) -> None:
        """Note whether a block was filled to the brim and more is waiting."""
        self._full = self._full + 1 if full else 0
        if self._full >= FULL_IN_A_ROW:
            self._raise("overload", float(self._full), float(FULL_IN_A_ROW), "larger blocks", "bursts wait")

    def clock(self, detail: str) -> None:
        """Note a burst from the far future or past."""
        self._raise("clock", 1.0, 1.0, "burst refused", detail)

    def disk(self, detail: str) -> None:
        """Note that the journal does not take what it is given."""
        self._raise("disk", 1.0, 1.0, self._without_journal, detail)

    def take(self, run: int, seq: int) -> list[Alarm]:
        """Return what is due, as alarms after the burst named."""
        due, self._due = self._due, []
        now_ns = time.time_ns()
        return [
            Alarm(
                run=run,
                seq=seq,
                t_ns=now_ns,
                since_ns=now_ns,
                kind=kind,
                receiver=None,
                statistic=statistic,
                threshold=threshold,
                next_kind="",
                action=action,
            )
            for kind, statistic, threshold, action in due
        ]

    def _raise(self, kind: str, statistic: float, threshold: float, action: str, detail: str) -> None:
        now = time.monotonic_ns()
        if kind in self._last_ns and now - self._last_ns[kind] < AGAIN_NS:
            return
        self._last_ns[kind] = now
        self._due.append((kind, statistic, threshold, action))
        self._log.warning("alarm", kind=kind, detail=detail, action=action)
