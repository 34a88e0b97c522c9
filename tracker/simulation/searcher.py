"""Works out what is true in a process of its own, so that the bursts go on in time.

The process builds the same testbed from the same seed: what is true at a time follows from these alone.
"""

import contextlib
import multiprocessing
import os
import signal
from dataclasses import dataclass
from multiprocessing.connection import Connection

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from tracker.engine.events import Plan
from tracker.simulation.best import best_pattern
from tracker.simulation.testbed import Testbed, TestbedConfig

STOP_S = 2.0
"""How long stopping waits for a search under way."""


@dataclass(frozen=True, slots=True)
class Known:
    """What is true at a time.

    Parameters
    ----------
    t_ns : int
    pattern_id : int or None
        Id of the pattern in force.
    rate : float
        Its rate with the channel known exactly, bit/s/Hz.
    best : float
        The best rate found with the channel known exactly; not below `rate`.
    happening : str or None
        What the scene does, in words.
    net : float or None
        Rate of payload over all frames of the stream, bit/s/Hz; None when there is no stream.
    """

    t_ns: int
    pattern_id: int | None
    rate: float
    best: float
    happening: str | None
    net: float | None = None


class Searcher:
    """Answers one question at a time.

    Parameters
    ----------
    config : TestbedConfig
    seed, start_ns : int
        As the testbed's own.
    steps : int
        Optimizer steps a search.
    """

    def __init__(self, config: TestbedConfig, seed: int, start_ns: int, steps: int) -> None:
        # Spawned, not forked: sockets of the parent are no business of the child.
        context = multiprocessing.get_context("spawn")
        self._pipe, theirs = context.Pipe()
        self._process = context.Process(target=_answer, args=(theirs, config, seed, start_ns, steps), daemon=True)
        self._process.start()
        theirs.close()
        self.busy = False

    def ask(self, t_ns: int, pattern_id: int | None, states: NDArray[np.int8], plan: Plan | None = None) -> None:
        """Ask what is true at a time with this pattern, and this plan, in force.

        Raises
        ------
        OSError
            When the process has ended.
        """
        self._pipe.send((t_ns, pattern_id, states, plan))
        self.busy = True

    def wait(self, seconds: float) -> bool:
        """Wait for the answer; False when it has not come in time."""
        return self._pipe.poll(seconds)

    def answer(self) -> Known | None:
        """Give the answer, once, when it is there.

        Raises
        ------
        EOFError, OSError
            When the process has ended.
        """
        if not self.busy or not self._pipe.poll():
            return None
        self.busy = False
        known: Known = self._pipe.recv()
        return known

    def close(self) -> None:
        """End the process."""
        self._pipe.close()
        self._process.join(STOP_S)
        if self._process.is_alive():
            self._process.terminate()
            self._process.join(STOP_S)


def _answer(pipe: Connection, config: TestbedConfig, seed: int, start_ns: int, steps: int) -> None:
    """Answer until the other end of the pipe closes, however its process ended."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C reaches the whole group; the parent closes the pipe
    with contextlib.suppress(OSError):
        os.nice(5)
    testbed = Testbed(config, seed, start_ns=start_ns)
    with threadpool_limits(limits=1), contextlib.suppress(EOFError, ConnectionError):
        while True:
            t_ns, pattern_id, states, plan = pipe.recv()
            testbed.apply(pattern_id, states)
            testbed.obey(plan)
            report = testbed.report(t_ns)
            best = best_pattern(report.channel, states, steps)[1]
            # Both are the same number, rounded differently, when the pattern in force is the best.
            pipe.send(Known(t_ns, pattern_id, report.rate, max(best, report.rate), report.happening, report.net))
