"""Watches a running service until told to stop: a live screen on a terminal, one line a second anywhere else."""

import sys
import time

from rich.console import Console

from tracker.settings import SettingsError
from tracker.view.plain import write_lines
from tracker.view.stream import Stream
from tracker.view.terminal import show


def watch(
    endpoint: str, link: str, shape: tuple[int, int] | None = None, *, plain: bool = False, seconds: float | None = None
) -> int:
    """Show what the service at an endpoint publishes about a link.

    Parameters
    ----------
    endpoint, link : str
    shape : tuple of int or None
        Columns and rows of the panel when they are known.
    plain : bool
        One line a second although there is a terminal.
    seconds : float or None
        When to end; None for never.

    Returns
    -------
    int
        0; Ctrl-C is the usual end.

    Raises
    ------
    SettingsError
        When endpoint or link cannot be used.
    """
    until = float("inf") if seconds is None else time.monotonic() + seconds
    try:
        stream = Stream(endpoint, link=link)
    except ValueError as error:
        raise SettingsError(str(error)) from None
    console = Console()

    def running() -> bool:
        return time.monotonic() < until

    with stream:
        try:
            if plain or not console.is_terminal:
                write_lines(stream, sys.stdout, running)
            else:
                show(stream, console, shape, running)
        except KeyboardInterrupt:
            pass
    return 0
