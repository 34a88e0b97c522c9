"""The best rate that could be had: the optimizer let loose on the channel as it truly is."""

import numpy as np
from numpy.typing import NDArray

from tracker.engine.panel import Limits
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.flips import Effort, optimize


def best_pattern(channel: Channel, start: NDArray[np.int8] | None, steps: int) -> tuple[NDArray[np.int8], float]:
    """Search the pattern of the highest rate.

    Parameters
    ----------
    channel : Channel
    start : ndarray of int8, shape (N,), or None
        A pattern to climb from besides the optimizer's own starts.
    steps : int
        Optimizer steps allowed.

    Returns
    -------
    states : ndarray of int8, shape (N,)
    rate : float
        bit/s/Hz, as `Scene.rate`.
    """
    found = optimize(channel, start, Limits(), Steps(steps), Effort.THOROUGH)
    return found.states, float(found.rate)
