"""What the engine says: a refreshed pattern, the state after a burst, an alarm, what to sound next."""

from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray


class Mode(StrEnum):
    """Where the tracker stands (see `lifecycle`)."""

    ACQUIRING = "acquiring"
    TRACKING = "tracking"
    REACQUIRING = "reacquiring"
    HELD = "held"


class Cause(StrEnum):
    """Why a pattern was published."""

    FIRST = "first"
    REFRESH = "refresh"
    DRIFT = "drift"
    OPERATOR = "operator"


@dataclass(frozen=True, slots=True, eq=False)
class Pattern:
    """A refreshed pattern.

    Rates are means over tones and receivers of log2(1 + |H|²/σ²), bit/s/Hz.

    Parameters
    ----------
    id : int
        1, 2, 3 … over the life of the link.
    run, seq : int
        The last burst that the pattern rests on.
    t_ns : int
        Time of the last frame that it rests on.
    states : ndarray of int8, shape (N,)
        States +1 and −1.
    rate, rate_low, rate_before, rate_bound : float
        Predicted rate; the rate expected to be met with probability 0.95 on the mean over the time in force; the
        predicted rate of the pattern replaced, under the same estimate; a rate that no pattern exceeds under the same
        estimate.
    cause : Cause
    steps : int
        Optimizer steps taken.
    """

    id: int
    run: int
    seq: int
    t_ns: int
    states: NDArray[np.int8]
    rate: float
    rate_low: float
    rate_before: float
    rate_bound: float
    cause: Cause
    steps: int


@dataclass(frozen=True, slots=True)
class State:
    """Where the tracker stands after a burst.

    Parameters
    ----------
    run, seq, t_ns : int
        The burst, and the time of its last frame.
    mode : Mode
    bursts, frames, lost, duplicate, refused : int
        Counts since start: bursts and frames worked into the estimate, bursts lost by `seq`, repeats,
        bursts refused.
    dropped_frames : int
        Frames left out: they held NaN or infinity, or came while the phases could not be followed.
    noise : tuple of float
        Noise power on a tone, a receiver, in the units of |response|².
    innovation : tuple of float
        Ratio of measured to expected innovation power, a receiver; 1 when all is well.
    rate_measured : float or None
        Rate measured under the pattern in use, bit/s/Hz; None when it was not sounded.
    rate_predicted : float or None
        Rate predicted for the pattern in use; None before the first.
    offset_hz : float
        Frequency offset followed, Hz (0 when nothing is followed).
    phase_rad : tuple of float
        Phase of the direct and of the surface path, rad.
    time_constant_ms : float
        Time constant of forgetting in force.
    pattern : int or None
        Id of the pattern in use.
    faults : tuple of (int, str, float)
        Element, fault, confidence.
    together : int
        Bursts worked off as one block with this one.
    statistic : float
        Drift statistic: the larger of the two CUSUM sums.
    threshold : float
        Its alarm threshold.
    promise_kept : float or None
        Share of the last promises (`Pattern.rate_low`) that the mean of the measured rate kept; None before any was
        tested.
    """

    run: int
    seq: int
    t_ns: int
    mode: Mode
    bursts: int
    frames: int
    lost: int
    duplicate: int
    refused: int
    dropped_frames: int
    noise: tuple[float, ...]
    innovation: tuple[float, ...]
    rate_measured: float | None
    rate_predicted: float | None
    offset_hz: float
    phase_rad: tuple[float, float]
    time_constant_ms: float
    pattern: int | None
    faults: tuple[tuple[int, str, float], ...]
    together: int
    statistic: float
    threshold: float
    promise_kept: float | None = None


@dataclass(frozen=True, slots=True)
class Alarm:
    """Something changed, with the evidence and what the tracker does about it.

    Parameters
    ----------
    run, seq, t_ns : int
        The burst at which it was decided, and the time of its last frame.
    since_ns : int
        When it began, as estimated.
    kind, next_kind : str
        What it is, and the runner-up (empty when there is none).
    receiver : int or None
    statistic, threshold : float
    action : str
    """

    run: int
    seq: int
    t_ns: int
    since_ns: int
    kind: str
    receiver: int | None
    statistic: float
    threshold: float
    next_kind: str
    action: str


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """Patterns to sound next, in order, over and over until another plan comes.

    Parameters
    ----------
    run, seq, t_ns : int
        The last burst that the plan rests on, and the time of its last frame.
    elements : int
        N.
    patterns : ndarray of uint8, shape (P, ceil(N/8))
        Packed as in a burst; one burst has one frame for each.
    reference : int
        Which of them is the reference, the pattern in use. Patterns equal to it are references too.
    every : int
        One frame in so many is sounded, at even distances; the others carry payload under the pattern in use.
    in_service : ndarray of bool, shape (P,), or empty for none
        Frames that are to carry payload all the same, because their patterns are near the one in use.
    net_rate : float or None
        Predicted rate of payload over all frames, bit/s/Hz; None while nothing can be said.
    """

    run: int
    seq: int
    t_ns: int
    elements: int
    patterns: NDArray[np.uint8]
    reference: int
    every: int = 1
    in_service: NDArray[np.bool_] = field(default_factory=lambda: np.zeros(0, dtype=np.bool_))
    net_rate: float | None = None


Event = Pattern | State | Alarm | Plan
