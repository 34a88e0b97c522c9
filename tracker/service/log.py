"""The service's log: a line a burst at debug, what a person has to know at info; JSON when no person is reading."""

import logging
import sys
import time
from collections.abc import Mapping, Sequence
from contextlib import suppress
from typing import Any

import structlog

from tracker.engine.events import Alarm, Event, Pattern, State

# While patterns come thick and fast, one line tells of all of them so often, ns.
TELL_EVERY_NS = 1_000_000_000


class _Stderr:
    """Standard error; the service outlives whoever reads it."""

    def write(self, text: str) -> int:
        with suppress(OSError, ValueError):
            sys.stderr.write(text)
        return len(text)

    def flush(self) -> None:
        with suppress(OSError, ValueError):
            sys.stderr.flush()


def configure_log(level: str) -> Any:
    """Set up structlog on standard error and return the logger.

    Parameters
    ----------
    level : str
        ``debug``, ``info``, ``warning`` or ``error``.
    """
    person = sys.stderr.isatty()
    renderer: Any = structlog.dev.ConsoleRenderer() if person else structlog.processors.JSONRenderer()
    structlog.configure(
        processors=[
            structlog.processors.add_log_level,
            structlog.processors.TimeStamper(fmt="iso", utc=True),
            structlog.processors.format_exc_info,
            renderer,
        ],
        wrapper_class=structlog.make_filtering_bound_logger(getattr(logging, level.upper())),
        logger_factory=structlog.PrintLoggerFactory(_Stderr()),  # type: ignore[arg-type]
        cache_logger_on_first_use=True,
    )
    return structlog.get_logger()


class Account:
    """Tells of what the tracker says: alarms at once, patterns in one line a second at most, bursts at debug.

    Parameters
    ----------
    log : structlog logger
    """

    def __init__(self, log: Any) -> None:
        self._log = log
        self._untold: Pattern | None = None
        self._more = 0
        self._told_ns = -TELL_EVERY_NS

    def take(self, events: Sequence[Event], stages_us: Mapping[str, int]) -> None:
        """Take in the events of a block."""
        for event in events:
            if isinstance(event, Pattern):
                self._more += self._untold is not None
                self._untold = event
            elif isinstance(event, Alarm):
                self._log.warning(
                    "alarm",
                    kind=event.kind,
                    statistic=round(event.statistic, 2),
                    threshold=round(event.threshold, 2),
                    action=event.action,
                )
            elif isinstance(event, State):
                self._log.debug("burst", seq=event.seq, mode=str(event.mode), together=event.together, **stages_us)
        self.tell()

    def tell(self) -> None:
        """Tell of the latest pattern, and how many came before it, if a second has passed since the last line."""
        now = time.monotonic_ns()
        event = self._untold
        if event is None or now - self._told_ns < TELL_EVERY_NS:
            return
        self._log.info(
            "pattern",
            id=event.id,
            cause=str(event.cause),
            rate=round(event.rate, 3),
            before=round(event.rate_before, 3),
            bound=round(event.rate_bound, 3),
            steps=event.steps,
            since_last_line=self._more + 1,
        )
        self._untold, self._more, self._told_ns = None, 0, now
