"""The engine: bursts and times in, events out.

A block is one burst, or several that waited together. For each block, in order: estimate, drift test, lifecycle,
refresh. Whatever hangs on the clock of the machine comes in from outside (which bursts were taken together, how many
optimizer steps there was time for), so the same input gives the same events bit by bit.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from . import panel
from .admission import Admission
from .burst import Burst
from .config import Config
from .detection.anchor import CHANNEL, CHANNEL_LONG, DIRECT, SURFACE_MOVED
from .detection.changes import Verdict
from .detection.drift import DriftMonitor, Sample, Suspicion
from .detection.innovation import INNOVATION
from .detection.reaction import HARMLESS, react
from .estimation.aperture import Elements
from .estimation.estimator import Estimator
from .estimation.frames import Fit, Frames
from .events import Cause, Event, Mode, Pattern, Plan
from .health.health import Health
from .lifecycle import Happening, after
from .oscillators.following import KEPT, Lock
from .planning.plan import Planner, Situation
from .publishing.calibration import Calibration
from .publishing.expectation import expectation
from .publishing.refresh import Refresher
from .publishing.report import Counts, Link, Stand, drift_alarm, elements_alarm, gap_alarm, lock_alarm, states
from .refusal import Reason
from .search.budget import Budget
from .search.channel import Channel
from .search.rate import rate

# While no sum is beyond this share of its threshold, nothing is suspected.
CALM = 0.3
# A change seen in so few frames, or of a kind likelier than the next by less than so much (nats) where more frames may
# tell, is looked at again with the blocks that follow, for no more than so many frames.
FEW_FRAMES, SURE, MOST_WAIT = 16, 6.0, 64
# A new channel pays beforehand for all that is free in it: when it leads at all it is sure sooner.
SURE_OF = {"channel": 3.0}
# Kinds after which the noise has the same baseline: not even what fractional delays leak into it has changed.
DELAYS_STAY = ("phase", "mismatch", "elements")
# Statistics that only grow with a change.
MISFITS = (INNOVATION, DIRECT, CHANNEL, CHANNEL_LONG, SURFACE_MOVED)
# Innovations this many times what is expected do not fit, and the tracker does not call itself ready.
WORST_FIT = 3.0
# A silence of this many time constants leaves nothing of the estimate to trust.
SILENCE_TIME_CONSTANTS = 2.0


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a block led to.

    Parameters
    ----------
    events : list of Event
        Alarms, then the pattern if one is published, then the plan if one is, then one state a burst.
    steps : int
        Optimizer steps taken, 0 when none was due; a replay passes them back as its budget.
    error : float
        Mean squared prediction error of the block, see `Fit`.
    """

    events: list[Event]
    steps: int
    error: float


class Tracker:
    """Keeps the pattern of one link right.

    Parameters
    ----------
    config : Config
    first_id : int
        Id of the first pattern to publish.
    """

    def __init__(self, config: Config, first_id: int = 1) -> None:
        self._config = config
        self._admission = Admission(config.clock_skew_ns)
        self._estimator = Estimator(config)
        self._drift = DriftMonitor(config.false_alarm_s, self._estimator.watched, self._estimator.groups)
        self._refresher = Refresher(config, first_id)
        self._calibration = Calibration(in_columns=config.aperture.size < config.elements)
        self._planner = Planner(config, config.plan) if config.plan is not None else None
        self._health: Health | None = None
        if config.panel is not None and isinstance(config.aperture, Elements):
            self._health = Health(config.panel, config.forgetting, config.limits)
        self._counts = Counts()
        self._mode = Mode.ACQUIRING
        self._frames_since = 0
        self._suspected: Suspicion | None = None
        self._waited = 0
        self._pending_cause: Cause | None = None
        self._adopted: NDArray[np.int8] | None = None
        self._gap: tuple[int, int] | None = None

    @property
    def mode(self) -> Mode:
        """Where the tracker stands."""
        return self._mode

    @property
    def counts(self) -> Counts:
        """What was taken and what was not, since start."""
        return replace(self._counts)

    @property
    def next_id(self) -> int:
        """Id that the next pattern will have."""
        return self._refresher.next_id

    def admit(self, burst: Burst, arrival_ns: int, *, vouched: bool = False) -> None:
        """Let a burst in, to be worked off by the next `advance`; count what was lost before it.

        See `Admission.admit` for the parameters.

        Raises
        ------
        Refused
            The burst is not to be used; see `Admission.admit`. It is not counted here: call `refuse`.
        """
        lost = self._admission.admit(burst, arrival_ns, vouched=vouched)
        if lost:
            self._counts.lost += lost
            self._gap = ((self._gap[0] if self._gap else 0) + lost, self._gap[1] if self._gap else burst.t_ns)

    def refuse(self, reason: Reason) -> None:
        """Count a burst that was refused, here or at the edge."""
        if reason is Reason.DUPLICATE:
            self._counts.duplicate += 1
        else:
            self._counts.refused += 1

    def hold(self) -> None:
        """Leave the pattern in use alone; go on estimating."""
        self._mode = after(self._mode, Happening.HOLD)

    def resume(self) -> None:
        """Publish again after `hold`."""
        self._mode = after(self._mode, Happening.RESUME)

    def refresh(self) -> None:
        """Search thoroughly and publish at the next block, whatever it gains."""
        self._pending_cause = Cause.OPERATOR
        self._refresher.begin_afresh()

    def relearn(self) -> None:
        """Throw the estimate away and begin again."""
        self._mode = after(self._mode, Happening.RELEARN)
        self._estimator.relearn()
        if self._health is not None:
            self._health.forget()
        self._start_over()

    def adopt(self, states: NDArray[np.int8]) -> None:
        """Publish this pattern at the next block.

        Raises
        ------
        ValueError
            When it is not of N elements.
        """
        if states.shape != (self._config.elements,):
            raise ValueError(f"a pattern of {self._config.elements} elements is needed, not of shape {states.shape}")
        self._adopted = np.where(states > 0, 1, -1).astype(np.int8)

    def advance(self, bursts: Sequence[Burst], budget: Budget) -> Outcome:
        """Work off admitted bursts as one block.

        Parameters
        ----------
        bursts : sequence of Burst
            One or more, in order.
        budget : Budget
            For the optimizer.
        """
        stand = Stand(bursts[-1].run, bursts[-1].seq, bursts[-1].end_ns)
        frames = [Frames.of(burst) for burst in bursts]
        events: list[Event] = []
        if self._gap:
            events.append(gap_alarm(*self._gap, stand))
            self._gap = None
        # Bursts are estimated and watched one by one, so that neither depends on how many had to wait together; the
        # search for a pattern, and all that follows, is done once for the block.
        fits = []
        for burst, part in zip(bursts, frames, strict=True):
            fits.append(self._estimator.update([part]))
            if self._health is not None:
                events.extend(self._judge_elements(self._health, burst, fits[-1]))
            events.extend(self._watch(burst, fits[-1]))
        fit = Fit.together(fits)
        # A pattern chosen now is in force from the burst after next at the latest: one burst ahead is about its middle.
        channel = self._estimator.channel(stand.t_ns + bursts[-1].frames * bursts[-1].dt_ns)
        if self._health is not None:
            channel.surface[self._health.silent] = 0.0
        self._refresher.hear(bursts[-1].run, bursts[-1].pattern_id, len(bursts))
        link = self._link(channel, bursts[-1].pattern_id, frames)
        self._calibration.observe(link.pattern, link.measured, link.frames)
        link = replace(link, promise_kept=self._calibration.kept_share)
        pattern, steps = self._consider(channel, link, len(bursts), budget, stand)
        if pattern:
            events.append(self._promised(channel, pattern))
        if self._planner is not None and (plan := self._plan(self._planner, channel, fit, frames, stand)):
            events.append(plan)
        noise, time_constant_s = self._estimator.reception.noise_power.tolist(), self._estimator.time_constant_s
        faults = self._health.faults if self._health is not None else ()
        events.extend(states(bursts, self._mode, self._counts, noise, fit, link, time_constant_s, self._drift, faults))
        return Outcome(events, steps, fit.error)

    def snapshot(self) -> dict[str, Any]:
        """All state as plain values and arrays; `load` goes on from it bit by bit."""
        counts = self._counts
        return {
            "admission": self._admission.snapshot(),
            "estimator": self._estimator.snapshot(),
            "drift": self._drift.snapshot(),
            "refresher": self._refresher.snapshot(),
            "calibration": self._calibration.snapshot(),
            "planner": self._planner.snapshot() if self._planner is not None else None,
            "health": self._health.snapshot() if self._health is not None else None,
            "counts": [getattr(counts, name) for name in Counts.__slots__],
            "mode": str(self._mode),
            "frames_since": self._frames_since,
            "waited": self._waited,
            "suspected": self._suspected.snapshot() if self._suspected is not None else None,
            "pending_cause": str(self._pending_cause) if self._pending_cause else None,
            "adopted": self._adopted.copy() if self._adopted is not None else None,
            "gap": list(self._gap) if self._gap else None,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot made under the same configuration."""
        self._admission.load(snapshot["admission"])
        self._estimator.load(snapshot["estimator"])
        self._drift.load(snapshot["drift"])
        self._refresher.load(snapshot["refresher"])
        self._calibration.load(snapshot["calibration"])
        if self._planner is not None:
            self._planner.load(snapshot["planner"])
        if self._health is not None:
            self._health.load(snapshot["health"])
        self._counts = Counts(*(int(count) for count in snapshot["counts"]))
        self._mode = Mode(snapshot["mode"])
        self._frames_since = int(snapshot["frames_since"])
        self._waited, suspected = int(snapshot["waited"]), snapshot["suspected"]
        self._suspected = Suspicion.restore(suspected) if suspected is not None else None
        cause, adopted, gap = snapshot["pending_cause"], snapshot["adopted"], snapshot["gap"]
        self._pending_cause = Cause(cause) if cause else None
        self._adopted = np.array(adopted, dtype=np.int8) if adopted is not None else None
        self._gap = (int(gap[0]), int(gap[1])) if gap else None

    def _start_over(self, kept: Sequence[str] = ()) -> None:
        """Begin anew but for the baselines of the statistics named."""
        self._frames_since = 0
        self._suspected, self._waited = None, 0
        self._estimator.forget_calm()
        if self._health is not None:
            self._health.begin(self._estimator.posterior)
        self._drift.reset(kept)
        self._refresher.begin_afresh()

    def _judge_elements(self, health: Health, burst: Burst, fit: Fit) -> list[Event]:
        """See whether elements follow their bits; return an alarm when some are newly found not to."""
        if self._estimator.reception.lock is not Lock.LOCKED or fit.mean_ratio > WORST_FIT:
            health.begin(None)
            return []
        if not health.due(burst.frames - fit.left_out, fit.elapsed_s):
            return []
        posterior = self._estimator.posterior
        found = health.update(posterior) if posterior is not None else ()
        return [elements_alarm(found, Stand(burst.run, burst.seq, burst.end_ns))] if found else []

    def _watch(self, burst: Burst, fit: Fit) -> list[Event]:
        """Count a burst that was taken in, and see whether it fits; return alarms."""
        kept = int(np.count_nonzero(burst.keep))
        self._counts.bursts += 1
        self._counts.frames += kept
        self._counts.dropped_frames += burst.frames - kept + fit.left_out
        self._frames_since += kept
        stand = Stand(burst.run, burst.seq, burst.end_ns)
        following = self._estimator.reception.following
        alarms: list[Event] = [lock_alarm(one, following[one].quality, KEPT, stand) for one in fit.lost]
        suspicion = self._follow_drift(fit, self._estimator.readings())
        answer = self._answer(suspicion, burst.frames) if suspicion else None
        if suspicion and answer:
            alarms.append(drift_alarm(suspicion, *answer, stand))
        return alarms

    def _follow_drift(self, fit: Fit, readings: Sequence[Sample]) -> Suspicion | None:
        """Move through the lifecycle; return a change that calls for an alarm."""
        if fit.elapsed_s > SILENCE_TIME_CONSTANTS * self._config.time_constant_s and self._mode is Mode.TRACKING:
            self._mode = after(self._mode, Happening.SILENCE)
            self._start_over()
        if fit.lost:
            self._mode = after(self._mode, Happening.CHANGE)
            self._start_over()
        if self._frames_since >= self._estimator.ready_after and fit.mean_ratio < WORST_FIT:
            self._mode = after(self._mode, Happening.READY)
        if self._mode is not Mode.TRACKING:
            return None
        suspicions = []
        for one in self._drift.update(readings, fit.elapsed_s):
            if one.change.up or one.name not in MISFITS:
                suspicions.append(one)
            else:
                # A link that fits better than before has not changed: patterns came again sooner than usual, as when
                # a sweep was cut off, or the baseline was wrong.
                self._drift.renew(one.name)
        if self._suspected is not None:
            return replace(self._suspected, since_s=self._suspected.since_s + fit.elapsed_s)
        if suspicions:
            return max(suspicions, key=lambda one: one.change.statistic / one.change.threshold)
        if self._drift.height < CALM:
            self._estimator.calm()
        else:
            self._estimator.keep()
        return None

    def _answer(self, suspicion: Suspicion, frames: int) -> tuple[Verdict, str] | None:
        """Find out what changed, and do what is to be done about it; None when the next block will tell better."""
        self._estimator.keep()
        verdict = self._estimator.judge() or Verdict("unclear", "", 0.0)
        self._suspected = None
        doubtful = verdict.margin < SURE_OF.get(verdict.kind, SURE) and not verdict.limited
        doubtful = doubtful or 0 < verdict.frames < FEW_FRAMES
        if doubtful and self._waited < MOST_WAIT:
            self._suspected = suspicion
            self._waited += frames
            return None
        action = react(self._estimator, verdict)
        if action not in HARMLESS:
            self._mode = after(self._mode, Happening.CHANGE)
            self._pending_cause = Cause.DRIFT
        self._start_over(self._estimator.reception.watched if verdict.kind in DELAYS_STAY else ())
        return verdict, action

    def _consider(
        self, channel: Channel, link: Link, bursts: int, budget: Budget, stand: Stand
    ) -> tuple[Pattern | None, int]:
        """Publish a pattern if one is due and worth it; also say how many optimizer steps were taken."""
        if self._adopted is not None:
            adopted, self._adopted = self._adopted, None
            return self._refresher.adopt(channel, adopted, stand), 0
        # Without lock nothing is known of what another pattern would give: the one in use stays.
        if self._mode is Mode.HELD or self._estimator.reception.lock is Lock.LOST:
            return None, 0
        if not (self._refresher.due(bursts) or self._pending_cause):
            return None, 0
        cause = self._pending_cause or Cause.REFRESH
        if self._refresher.latest is None:
            cause = Cause.FIRST
        before = link.predicted if link.pattern == self._refresher.latest else None
        limits = self._health.limits if self._health is not None else self._config.limits
        variance = self._estimator.variance
        pattern, steps = self._refresher.choose(channel, cause, budget, stand, limits, variance, before)
        # The cause of a change stays until a pattern answers to it, or until all is well again without.
        if pattern or self._mode is Mode.TRACKING:
            self._pending_cause = None
        return pattern, steps

    def _promised(self, channel: Channel, pattern: Pattern) -> Pattern:
        """Complete a pattern by the rates that are to be expected, and the one that is promised."""
        expected = expectation(channel, pattern.states, self._estimator.doubt(pattern.states))
        promised = self._calibration.promise(pattern.id, expected, acquiring=self._mode is Mode.ACQUIRING)
        # What is to be put back of the estimate is put back for the pattern replaced as well.
        before = pattern.rate_before * (expected.rate / pattern.rate if pattern.rate > 0.0 else 1.0)
        bound = max(pattern.rate_bound, expected.rate)
        return replace(pattern, rate=expected.rate, rate_low=promised, rate_before=before, rate_bound=bound)

    def _plan(
        self, planner: Planner, channel: Channel, fit: Fit, frames: Sequence[Frames], stand: Stand
    ) -> Plan | None:
        """Say what to sound next, when that is due."""
        prior, variance = self._estimator.surface_variances
        situation = Situation(
            mode=self._mode,
            lock=self._estimator.reception.lock,
            in_use=self._refresher.states(self._refresher.latest),
            channel=channel,
            prior=prior,
            variance=variance,
            time_constant_s=self._estimator.time_constant_s,
            fit=fit,
            frames=sum(part.time_ns.size for part in frames),
        )
        before = planner.choice
        plan = planner.advance(situation, stand)
        if planner.choice != before:
            # Frames sounded in another way fit the estimate in another way: the drift test needs a new baseline.
            self._drift.reset()
        return plan

    def _link(
        self,
        channel: Channel,
        told: int | None,
        frames: Sequence[Frames],
    ) -> Link:
        """How the pattern in use does: predicted, and measured on the frames that sounded it."""
        in_use = told if told is not None else self._refresher.latest
        chosen = self._refresher.states(in_use)
        if chosen is None:
            return Link(in_use, None, None, *self._estimator.reception.phase)
        packed = panel.pack(chosen)
        sounded = Frames.together([part.showing(packed) for part in frames])
        measured = None
        if sounded.time_ns.size:
            measured = self._estimator.reception.rate(sounded)
        predicted = rate(channel, chosen) if self._estimator.reception.lock is not Lock.LOST else None
        return Link(in_use, measured, predicted, *self._estimator.reception.phase, frames=sounded.time_ns.size)
