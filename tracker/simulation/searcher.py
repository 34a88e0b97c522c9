"""Searches the best rate in a process of its own, so that the bursts go on in time."""

import contextlib
import multiprocessing
import os
import signal
from multiprocessing.connection import Connection

from threadpoolctl import threadpool_limits

from tracker.simulation.best import best_pattern
from tracker.simulation.testbed import Report

STOP_S = 2.0
"""How long stopping waits for a search under way."""


class Searcher:
    """One search at a time.

    Parameters
    ----------
    steps : int
        Optimizer steps a search.
    """

    def __init__(self, steps: int) -> None:
        # Spawned, not forked: sockets of the parent are no business of the child.
        context = multiprocessing.get_context("spawn")
        self._pipe, theirs = context.Pipe()
        self._process = context.Process(target=_search, args=(theirs, steps), daemon=True)
        self._process.start()
        theirs.close()
        self._asked: Report | None = None

    @property
    def busy(self) -> bool:
        """Whether a search is under way."""
        return self._asked is not None

    def ask(self, report: Report) -> None:
        """Begin a search in the channel of a report."""
        self._pipe.send((report.channel, report.states))
        self._asked = report

    def answer(self) -> tuple[Report, float] | None:
        """Give the report asked about and the best rate found, once, when the search is done.

        Raises
        ------
        EOFError
            When the process has ended.
        """
        if self._asked is None or not self._pipe.poll():
            return None
        asked, self._asked = self._asked, None
        return asked, float(self._pipe.recv())

    def close(self) -> None:
        """End the process."""
        self._pipe.close()
        self._process.join(STOP_S)
        if self._process.is_alive():
            self._process.terminate()
            self._process.join(STOP_S)


def _search(pipe: Connection, steps: int) -> None:
    """Answer until the other end of the pipe closes, however its process ended."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C reaches the whole group; the parent closes the pipe
    with contextlib.suppress(OSError):
        os.nice(5)
    with threadpool_limits(limits=1), contextlib.suppress(EOFError, ConnectionError):
        while True:
            channel, states = pipe.recv()
            pipe.send(best_pattern(channel, states, steps)[1])
