"""Wording of what the engine says: alarms, and one state a burst."""

from collections.abc import Sequence
from dataclasses import dataclass

from ..burst import Burst
from ..detection.changes import Verdict
from ..detection.drift import DriftMonitor, Suspicion
from ..estimation.frames import Fit
from ..events import Alarm, Mode, State
from ..health.faults import FAULTS, SILENT, SURE, Finding


@dataclass(frozen=True, slots=True)
class Stand:
    """The last burst that something rests on.

    Parameters
    ----------
    run, seq : int
    t_ns : int
        Time of its last frame.
    """

    run: int
    seq: int
    t_ns: int


@dataclass(slots=True)
class Counts:
    """What was taken and what was not, since start."""

    bursts: int = 0
    frames: int = 0
    lost: int = 0
    duplicate: int = 0
    refused: int = 0
    dropped_frames: int = 0


@dataclass(frozen=True, slots=True)
class Link:
    """How the pattern in use does.

    Parameters
    ----------
    pattern : int or None
        Its id.
    measured, predicted : float or None
        Rates, bit/s/Hz; nothing is predicted without lock.
    offset_hz : float
        Frequency offset followed.
    phase_rad : (float, float)
        Phase of the direct and of the surface path.
    promise_kept : float or None
        Share of the last promises that were kept.
    frames : int
        Frames that `measured` rests on.
    """

    pattern: int | None
    measured: float | None
    predicted: float | None
    offset_hz: float = 0.0
    phase_rad: tuple[float, float] = (0.0, 0.0)
    promise_kept: float | None = None
    frames: int = 0


def drift_alarm(suspicion: Suspicion, verdict: Verdict, action: str, stand: Stand) -> Alarm:
    """Say what left its baseline, what that means and what is done about it."""
    return Alarm(
        run=stand.run,
        seq=stand.seq,
        t_ns=stand.t_ns,
        since_ns=stand.t_ns - round(suspicion.since_s * 1e9),
        kind=verdict.kind,
        receiver=verdict.receiver,
        statistic=suspicion.change.statistic,
        threshold=suspicion.change.threshold,
        next_kind=verdict.next_kind,
        action=action,
    )


def lock_alarm(receiver: int, quality: float, threshold: float, stand: Stand) -> Alarm:
    """Phases of a receiver can no longer be followed; its frames are left out until they can."""
    return Alarm(
        run=stand.run,
        seq=stand.seq,
        t_ns=stand.t_ns,
        since_ns=stand.t_ns,
        kind="lock",
        receiver=receiver,
        statistic=quality,
        threshold=threshold,
        next_kind="channel",
        action="search",
    )


def gap_alarm(lost: int, since_ns: int, stand: Stand) -> Alarm:
    """Bursts were lost on the way; the estimate ages by the time they took."""
    return Alarm(
        run=stand.run,
        seq=stand.seq,
        t_ns=stand.t_ns,
        since_ns=since_ns,
        kind="gap",
        receiver=None,
        statistic=float(lost),
        threshold=1.0,
        next_kind="",
        action="none",
    )


def elements_alarm(found: Sequence[Finding], stand: Stand) -> Alarm:
    """Elements were found not to follow their bits; the least sure of them is the evidence."""
    silent = any(FAULTS.index(one.fault) in SILENT for one in found)
    return Alarm(
        run=stand.run,
        seq=stand.seq,
        t_ns=stand.t_ns,
        since_ns=stand.t_ns,
        kind="elements",
        receiver=None,
        statistic=min(one.doubt for one in found),
        threshold=SURE,
        next_kind="",
        action="leave elements out" if silent else "none",
    )


def states(
    bursts: Sequence[Burst],
    mode: Mode,
    counts: Counts,
    noise: Sequence[float],
    fit: Fit,
    link: Link,
    time_constant_s: float,
    drift: DriftMonitor,
    faults: tuple[tuple[int, str, float], ...],
) -> list[State]:
    """One state for each burst of a block; they differ in what names the burst alone."""
    statistic, threshold = drift.highest
    return [
        State(
            run=burst.run,
            seq=burst.seq,
            t_ns=burst.end_ns,
            mode=mode,
            bursts=counts.bursts,
            frames=counts.frames,
            lost=counts.lost,
            duplicate=counts.duplicate,
            refused=counts.refused,
            dropped_frames=counts.dropped_frames,
            noise=tuple(float(power) for power in noise),
            innovation=tuple(float(ratio) for ratio in fit.ratio),
            rate_measured=link.measured,
            rate_predicted=link.predicted,
            offset_hz=link.offset_hz,
            phase_rad=link.phase_rad,
            time_constant_ms=time_constant_s * 1e3,
            pattern=link.pattern,
            faults=faults,
            together=len(bursts),
            statistic=statistic,
            threshold=threshold,
            promise_kept=link.promise_kept,
        )
        for burst in bursts
    ]
