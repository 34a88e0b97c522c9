"""What an engine is built from: everything that stays as it is while the tracker runs."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from .estimation.aperture import ApertureBasis
from .panel import Limits


@dataclass(frozen=True, slots=True)
class PlanConfig:
    """How the tracker may plan the sounding.

    Parameters
    ----------
    frames_per_s : float
        Frames a second, sounding and payload together.
    most_frames : int
        Frames of a plan.
    burst_s : float
        Time that a plan is to last: it has as many frames as fit in.
    least_share, most_share : float
        Of the frames, to be sounded.
    in_service : bool
        Whether the controller measures frames that carry payload.
    least_service : float
        Part of the rate in use that a frame in service must keep.
    """

    frames_per_s: float
    most_frames: int = 64
    burst_s: float = 0.02
    least_share: float = 0.005
    most_share: float = 0.5
    in_service: bool = False
    least_service: float = 0.8


@dataclass(frozen=True, slots=True, eq=False)
class Config:
    """Settings of the engine, in its own terms.

    Parameters
    ----------
    receivers : int
        R.
    delay : ndarray of complex, shape (K, Q)
        Delay basis.
    aperture : ApertureBasis
    forgetting : str
        ``resetting`` or ``exponential``.
    time_constant_s : float
        Of forgetting.
    bank : int
        Time constants side by side, that one in the middle.
    false_alarm_s : float
        Wanted mean time between false drift alarms.
    every_bursts : int
        A refresh is considered once in so many bursts.
    frequency_hz : ndarray, shape (K,), or None
        Of the tones, about the carrier; needed to follow a timing drift.
    follow_phase : bool
        Whether the phases of direct and surface path are followed.
    least_gain : float
        Predicted gain below which the pattern in use stays, bit/s/Hz.
    switching_s : float
        Time that the link loses when the panel switches, s.
    clock_skew_ns : int
        Largest difference allowed between a burst's time and its arrival.
    limits : Limits
        What the panel cannot do.
    sweeps_from : int or None
        Elements times frames of a block from which sweeps of orthogonal patterns are noticed, to estimate at less cost
        while they are sounded, see `lookout`: in smaller blocks there is nothing to be gained. None for never.
    panel : (int, int) or None
        Columns and rows of the panel, so that elements can be judged by their neighbours; None when not known.
    plan : PlanConfig or None
        How the sounding is planned; None leaves it to the controller.
    """

    receivers: int
    delay: NDArray[np.complex128]
    aperture: ApertureBasis
    forgetting: str = "resetting"
    time_constant_s: float = 0.5
    bank: int = 1
    false_alarm_s: float = 36_000.0
    frequency_hz: NDArray[np.float64] | None = None
    follow_phase: bool = False
    every_bursts: int = 1
    least_gain: float = 0.01
    switching_s: float = 0.0
    clock_skew_ns: int = 60_000_000_000
    limits: Limits = field(default_factory=Limits)
    sweeps_from: int | None = 16_384
    panel: tuple[int, int] | None = None
    plan: PlanConfig | None = None

    @property
    def elements(self) -> int:
        """N."""
        return self.aperture.elements

    @property
    def tones(self) -> int:
        """K."""
        return int(self.delay.shape[0])
