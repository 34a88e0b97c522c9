"""What the service itself has to say: overload, a failing disk, a wrong clock; as alarms, and not too often."""

import time
from typing import Any

from tracker.engine.burst import Burst
from tracker.engine.events import Alarm

AGAIN_NS = 10_000_000_000
# Full blocks in a row that count as overload: one or two are a hiccup of the machine.
FULL_IN_A_ROW = 8


class Notices:
    """Gathers the service's own alarms; `take` hands them to the next block.

    Parameters
    ----------
    link : str
    log : structlog logger
    """

    def __init__(self, link: str, log: Any) -> None:
        self._link, self._log = link, log
        self._full = 0
        self._last_ns: dict[str, int] = {}
        self._due: list[tuple[str, float, float, str]] = []

    def load(self, full: bool) -> None:
        """Note whether a block was filled to the brim, which says that more is waiting."""
        self._full = self._full + 1 if full else 0
        if self._full >= FULL_IN_A_ROW:
            self._raise("overload", float(self._full), float(FULL_IN_A_ROW), "larger blocks")

    def clock(self, detail: str) -> None:
        """Note a burst from the far future or past."""
        del detail  # the refusal is logged with it; the alarm says that it happened
        self._raise("clock", 1.0, 1.0, "burst refused")

    def disk(self, kept: bool) -> None:
        """Note whether the journal took what it was given."""
        if not kept:
            self._raise("disk", 1.0, 1.0, "patterns withheld until the journal works")

    def take(self, burst: Burst) -> list[Alarm]:
        """Return what is due, as alarms beside a burst."""
        due, self._due = self._due, []
        return [
            Alarm(
                run=burst.run,
                seq=burst.seq,
                t_ns=burst.end_ns,
                since_ns=burst.end_ns,
                kind=kind,
                receiver=None,
                statistic=statistic,
                threshold=threshold,
                next_kind="",
                action=action,
            )
            for kind, statistic, threshold, action in due
        ]

    def _raise(self, kind: str, statistic: float, threshold: float, action: str) -> None:
        now = time.monotonic_ns()
        if now - self._last_ns.get(kind, -AGAIN_NS) < AGAIN_NS:
            return
        self._last_ns[kind] = now
        self._due.append((kind, statistic, threshold, action))
