"""Trying time constants: which lets the estimator predict the recorded frames best.

How fast a channel seems to change depends on the pattern that it is looked at through; what the estimator makes of it
does not. So the engine itself works off stretches of the log with one time constant after another.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.refusal import Refused
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker

# Stretches of the log, spread evenly, so that a channel that moves now and then is seen doing both.
STRETCHES = 3
# Bursts of a stretch whose errors count.
COUNTED = 80
# Sweeps over all unknowns before errors count.
WARM_SWEEPS = 2
# Time constants a decade, from a third of a sweep to this many times as long as a stretch.
A_DECADE = 3
MOST_STRETCHES_LONG = 10.0
# The shortest time constant that errs by no more than this share above the best is taken: what is forgotten sooner is
# followed sooner when the channel takes to moving.
MARGIN = 0.02
# Work that a person will wait for: a minute or two on one core.
MOST_FLOPS = 3e11
# Memory for the bursts of the stretches, bytes.
MOST_BYTES = 256 * 1024 * 1024


@dataclass(frozen=True, slots=True)
class Stretches:
    """Which bursts to try on: `count` stretches of `warm` + `counted` bursts each, beginning at `starts`."""

    starts: tuple[int, ...]
    warm: int
    counted: int

    def index(self, burst: int) -> int | None:
        """Tell the stretch that a burst of the log, counted from 0, lies in."""
        for number, start in enumerate(self.starts):
            if start <= burst < start + self.warm + self.counted:
                return number
        return None


@dataclass(frozen=True, slots=True)
class Trial:
    """The outcome.

    Parameters
    ----------
    time_constant_s : float
        The shortest with which the frames were predicted about as well as with any.
    error : float
        Mean squared error of the prediction with it, in units of the noise; 1 is all that can be had.
    tried : tuple of (float, float)
        Each time constant tried, s, and its error.
    """

    time_constant_s: float
    error: float
    tried: tuple[tuple[float, float], ...]


def plan(bursts: int, frames: int, unknowns: int, burst_bytes: int) -> Stretches | None:
    """Choose the stretches of a log; None when it is too short, or the work would take too long.

    Parameters
    ----------
    bursts, frames : int
        Bursts in the log, and frames in each.
    unknowns : int
        M.
    burst_bytes : int
        Memory for one.
    """
    warm = math.ceil(WARM_SWEEPS * unknowns / frames)
    counted = min(COUNTED, bursts - warm)
    if counted < COUNTED // 4:
        return None
    length = warm + counted
    candidates = 4 * A_DECADE
    work = 3.0 * candidates * length * frames * unknowns**2
    count = min(STRETCHES, bursts // length, int(MOST_FLOPS // work), MOST_BYTES // (length * burst_bytes))
    if count < 1:
        return None
    starts = [0] if count == 1 else [round(k * (bursts - length) / (count - 1)) for k in range(count)]
    return Stretches(tuple(starts), warm, counted)


def try_out(
    stretches: Sequence[Sequence[Burst]], warm: int, config: Config, advanced: Callable[[int, int], None]
) -> Trial | None:
    """Work off stretches of bursts with one time constant after another.

    Parameters
    ----------
    stretches : sequence of sequence of Burst
    warm : int
        Bursts of each whose errors do not count.
    config : Config
        Its time constant is not used.
    advanced : callable
        Told how many runs of how many are done.

    Returns
    -------
    Trial or None
        None when no time is covered.
    """
    span_s = max(((part[-1].end_ns - part[0].t_ns) / 1e9 for part in stretches if part), default=0.0)
    frames = sum(burst.frames for part in stretches for burst in part)
    if span_s <= 0.0:
        return None
    sweep_s = span_s * len(stretches) / frames * (config.aperture.size + 1)
    shortest, longest = sweep_s / 3.0, MOST_STRETCHES_LONG * span_s
    count = max(3, 1 + round(A_DECADE * math.log10(longest / shortest)))
    candidates = np.geomspace(shortest, longest, count)
    errors = []
    for done, candidate in enumerate(candidates, 1):
        setting = replace(config, time_constant_s=float(candidate))
        errors.append(float(np.mean([_error(part, warm, setting) for part in stretches])))
        advanced(done, count)
    if not np.isfinite(errors).any():
        return None
    tried = tuple((float(candidate), error) for candidate, error in zip(candidates, errors, strict=True))
    enough = min(errors) * (1.0 + MARGIN)
    return Trial(*next(pair for pair in tried if pair[1] <= enough), tried)


def _error(bursts: Sequence[Burst], warm: int, config: Config) -> float:
    """Mean error of prediction after the warm-up."""
    tracker = Tracker(config)
    tracker.hold()  # estimate, choose no patterns
    errors = []
    for burst in bursts:
        try:
            tracker.admit(burst, burst.end_ns)
            errors.append(tracker.advance([burst], Steps(0)).error)
        except Refused:
            continue
        except FloatingPointError:  # forgetting this fast leaves nothing to rest on
            return math.inf
    return float(np.mean(errors[warm:])) if len(errors) > warm else math.inf
