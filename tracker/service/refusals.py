"""Refused bursts: counted by reason, and told to the log once a second at most."""

import time
from collections import Counter
from typing import Any

from tracker.engine.refusal import Refused

TELL_EVERY_NS = 1_000_000_000


class Refusals:
    """Counts refusals, and lets one line a second through.

    Parameters
    ----------
    log : structlog logger
    """

    def __init__(self, log: Any) -> None:
        self._log = log
        self.counts: Counter[str] = Counter()
        self._untold: Counter[str] = Counter()
        self._last_detail = ""
        self._told_ns = -TELL_EVERY_NS

    def take(self, refused: Refused) -> None:
        """Count one."""
        self.counts[str(refused.reason)] += 1
        self._untold[str(refused.reason)] += 1
        self._last_detail = refused.detail
        self.tell()

    def tell(self, *, at_once: bool = False) -> None:
        """Write what is untold, if a second has passed since the last line or it is to be told at once."""
        now = time.monotonic_ns()
        if not self._untold or (now - self._told_ns < TELL_EVERY_NS and not at_once):
            return
        self._log.warning("refused", by_reason=dict(self._untold), last=self._last_detail)
        self._untold.clear()
        self._told_ns = now
