"""Every kind of change at two sizes: how late the alarm comes, and whether it says what happened.

Sizes are chosen so that a sweep since the change holds as many nats as a test that knows the change needs for so few
false alarms (0 dB), or ten times as many. Links are of seeds that nothing was tuned on.

Beside each delay stands that of the optimal test, on the same frames: the CUSUM of the likelihood ratio of a change
that is known in all but its time (Moustakides, Ann. Statist. 14, 1986), with as rare false alarms. Bursts are worked
off as a whole, so both delays are counted to the end of the burst in which the test comes to its conclusion.
"""

import math
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchmarks._still_link import CHANGES, FRAME_NS, Changed, Link, information, size_for
from benchmarks.row import Row
from tracker.engine.detection.likelihood import averaged
from tracker.engine.events import Alarm
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker

ELEMENTS, FRAMES = 63, 64
SWEEP = ELEMENTS + 1
FALSE_ALARM_S = 36_000.0
# The first seed of links: the tests and their constants were tuned on others.
FIRST_SEED = 50_000
# Bursts before: what is sampled every eighth has its baseline by then.
QUIET_BLOCKS = 1000
# Frames in which a change must have been noticed.
PATIENCE = 40 * FRAMES
# The time constant of tracking in the yard, and one that goes with a link that stands still.
TIME_CONSTANTS_S = (0.5, 20.0)
# What a test needs whose false alarms are as rare, nats (Lorden, Ann. Math. Stat. 42, 1971).
NEEDED = math.log(FALSE_ALARM_S * 1e9 / FRAME_NS)
# How much later than the optimal test, at most.
ALLOWED = 2.0
# Frames of a new channel up to which the test that does not know it is asked.
MOST_UNSEEN = 12 * FRAMES


@dataclass(slots=True)
class Found:
    """What changes of one kind and size led to, a link each."""

    known: list[float] = field(default_factory=list)
    known_frames: list[float] = field(default_factory=list)
    unseen: list[float] = field(default_factory=list)
    delays: list[float] = field(default_factory=list)
    told: Counter[str] = field(default_factory=Counter)


def kinds(links: int, of_them_small: int) -> Iterator[Row]:
    """Measure delays and verdicts on so many links, small changes and other time constants on fewer."""
    found: dict[tuple[str, float, float], Found] = {}
    for number in range(links):
        for time_constant_s in TIME_CONSTANTS_S if number < of_them_small else TIME_CONSTANTS_S[:1]:
            _link(FIRST_SEED + number, time_constant_s, number < of_them_small, found)
    for key, one in sorted(found.items(), key=lambda item: (item[0][0] != "all", item[0][2])):
        yield _delay_row(*key, one)
    large = {kind: one for (kind, level, constant_s), one in found.items() if level > 1.0 and constant_s < 1.0}
    yield from _verdicts(large, links)


def _link(seed: int, time_constant_s: float, small: bool, found: dict[tuple[str, float, float], Found]) -> None:
    """Play all changes on one link."""
    link = Link(seed, ELEMENTS, surface=3.0)
    config = link.config(FALSE_ALARM_S, time_constant_s)
    tracker = Tracker(config)
    for number in range(QUIET_BLOCKS):
        _advance(tracker, link, number, link.states(FRAMES))
    settled, place = tracker.snapshot(), link.place
    slow = time_constant_s > TIME_CONSTANTS_S[0]
    for kind in CHANGES:
        for level in (1.0,) if slow else (1.0, 10.0) if small else (10.0,):
            link.place = place
            size = size_for(link, kind, NEEDED * level, SWEEP)
            tracker = Tracker(config)
            tracker.load(settled)
            one = found.setdefault((kind, level, time_constant_s), Found())
            unseen = Unseen(link) if kind == "channel" else None
            told, delay, known = _change(tracker, link, kind, size, unseen)
            one.known.append(known.delay)
            one.known_frames.append(known.frames)
            if unseen is not None:
                one.unseen.append(unseen.delay)
            one.delays.append(delay)
            one.told[told] += 1


def _delay_row(kind: str, level: float, time_constant_s: float, found: Found) -> Row:
    delays, known = (np.percentile(of, [50, 95]) for of in (found.delays, found.known))
    ratio = delays / known
    met = bool((ratio <= ALLOWED).all())
    note = f"95 %: {delays[1]:.0f}; a CUSUM that knows the change: {known[0]:.0f}, 95 %: {known[1]:.0f}"
    note += f" (frame by frame {np.median(found.known_frames):.0f}); ratios {ratio[0]:.2f}, {ratio[1]:.2f}"
    if found.unseen:
        note += f"; a test that knows all but the numbers of the new channel: {np.median(found.unseen):.0f}"
    return Row(
        f"{kind}, {10 * math.log10(level):.0f} dB, time constant {time_constant_s:g} s: frames until the alarm",
        float(delays[0]),
        "frames",
        f"<= {ALLOWED * known[0]:.0f}, 95 % <= {ALLOWED * known[1]:.0f}",
        met,
        f"{note}; {len(found.delays)} links",
    )


def _verdicts(found: dict[str, Found], links: int) -> Iterator[Row]:
    """Give the confusion matrix, a row a kind, and its diagonal; "unclear" counts half."""
    right = 0.0
    for kind, one in found.items():
        share = (one.told[kind] + 0.5 * one.told["unclear"]) / links
        right += share / len(found)
        note = ", ".join(f"{name} {count}" for name, count in one.told.most_common())
        yield Row(f"{kind}, 10 dB: told right", 100 * share, "%", ">= 95", share >= 0.95, f"told: {note}")
    note = f"{links} links each, seeds from {FIRST_SEED} that nothing was tuned on"
    yield Row("all kinds, 10 dB: told right", 100 * right, "%", ">= 95", right >= 0.95, note)


def _advance(tracker: Tracker, link: Link, number: int, states: NDArray[np.float64]) -> None:
    burst = link.burst(number, states)
    tracker.admit(burst, burst.end_ns)
    tracker.advance([burst], Steps(20))


class Known:
    """The optimal test: all of the change is known but its time.

    Parameters
    ----------
    nats : float
        Gained a frame on average once the change is there.

    Attributes
    ----------
    delay, frames : float
        Frames from the change to the end of the burst in which it was found, and to the frame itself.
    """

    def __init__(self, nats: float) -> None:
        # Siegmund (Sequential Analysis, 1985, eq. 2.56): ARL = exp(h + 1.166 √(2 I)) / I, less what is small beside it.
        self._threshold = max(NEEDED + math.log(nats) - 1.166 * math.sqrt(2.0 * nats), 0.0)
        self._sum = 0.0
        self.delay = self.frames = float(PATIENCE)
        self.found = False

    def take(
        self, response: NDArray[np.complex64], before: NDArray[Any], changed: Changed, since: NDArray[Any]
    ) -> None:
        """Take in a burst: as heard, as it would be without the change and with it, (B, R, K), and frames since."""
        variance = np.asarray(changed.noise) ** 2 + np.zeros(response.shape[2])
        gains = np.abs(response - before) ** 2 - np.abs(response - changed.response) ** 2 / variance - np.log(variance)
        for frame, gain in zip(since.tolist(), gains.sum(axis=(1, 2)).tolist(), strict=True):
            if frame >= 0 and not self.found:
                self._sum = max(self._sum + gain, 0.0)
                self.found = self._sum > self._threshold
                self.frames, self.delay = frame + 1.0, float(since[-1] + 1)


class Unseen:
    """A test that knows all of a new channel but its numbers: when it came, how strong it is, how that is spread.

    Its likelihood ratio is the mean over all such channels: no test that has to do without the numbers gains more on
    average (Neyman and Pearson).

    Attributes
    ----------
    delay : float
        Frames from the change to the end of the burst in which it was found.
    """

    def __init__(self, link: Link) -> None:
        self._basis, self._elements = link.config(FALSE_ALARM_S).delay, link.elements
        self._errors: list[NDArray[np.complex128]] = []
        self._states: list[NDArray[np.float64]] = []
        self.delay = float(PATIENCE)
        self.found = False

    def take(self, error: NDArray[np.complex128], states: NDArray[np.float64], since: NDArray[Any]) -> None:
        """Take in a burst: what is heard beyond what was there before, (B, R, K), patterns, and frames since."""
        after = since >= 0
        self._errors.append((error[after] @ self._basis.conj()).reshape(int(after.sum()), -1))
        self._states.append(states[after])
        errors, shown = np.concatenate(self._errors), np.concatenate(self._states)
        # The direct path has a quarter of the power of all elements together, see `Link`.
        covariance = shown @ shown.T / self._elements + 0.25
        if averaged(covariance, errors, None) > NEEDED:
            self.found, self.delay = True, float(since[-1] + 1)


def _change(tracker: Tracker, link: Link, kind: str, size: float, unseen: Unseen | None) -> tuple[str, float, Known]:
    """Play a change that begins anywhere in a burst; what the alarm says, frames until then, and the optimal test."""
    begins = int(link.rng.integers(0, FRAMES))
    known = Known(float(information(link, kind, size, SWEEP).mean()))
    told, delay = "none", float(PATIENCE)
    for number in range(PATIENCE // FRAMES):
        states = link.states(FRAMES)
        since = number * FRAMES - begins + np.arange(FRAMES)
        changed = CHANGES[kind][0](link, states, since * FRAME_NS / 1e9, size)
        before, played = link.shown(states), changed
        if number == 0:
            response = np.where((since >= 0)[:, None, None], changed.response, before)
            played = Changed(response, np.where((since >= 0)[:, None, None], changed.noise, 1.0))
        burst = link.burst(QUIET_BLOCKS + number, states, played)
        if not known.found:
            known.take(burst.response, before, changed, since)
        waits = unseen is not None and not unseen.found and number * FRAMES < MOST_UNSEEN
        if waits and unseen is not None:
            unseen.take(burst.response - before, states, since)
        if told == "none":
            tracker.admit(burst, burst.end_ns)
            for event in tracker.advance([burst], Steps(20)).events:
                if isinstance(event, Alarm) and told == "none":
                    told, delay = event.kind, float(since[-1] + 1)
        if known.found and told != "none" and not waits:
            break
    return told, delay, known
