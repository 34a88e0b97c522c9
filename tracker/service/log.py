"""The service's log: one line a burst at debug, one line an event at info; JSON when no person is reading."""

import logging
import sys
from typing import Any

import structlog


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
        logger_factory=structlog.PrintLoggerFactory(sys.stderr),
        cache_logger_on_first_use=True,
    )
    return structlog.get_logger()
