"""Every kind of change at two sizes: how late the alarm comes, and whether it says what happened.

Sizes are chosen so that a sweep since the change holds as many nats as a test that knows the change needs for so few
false alarms (0 dB), or ten times as many. Links are of seeds that nothing was tuned on.
"""

import math
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchmarks._still_link import CHANGES, FRAME_NS, TAPS, Changed, Link, information, size_for
from benchmarks.row import Row
from tracker.engine.events import Alarm, Event
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker

ELEMENTS, FRAMES = 63, 64
SWEEP = ELEMENTS + 1
FALSE_ALARM_S = 36_000.0
# The first seed of links: the tests and their constants were tuned on others.
FIRST_SEED = 20_000
QUIET_BLOCKS = 400
# Frames in which a change must have been noticed.
PATIENCE = 40 * FRAMES
# The time constant of tracking in the yard, and one that goes with a link that stands still.
TIME_CONSTANTS_S = (0.5, 20.0)
# What a test needs whose false alarms are as rare, nats (Lorden, Ann. Math. Stat. 42, 1971).
NEEDED = math.log(FALSE_ALARM_S * 1e9 / FRAME_NS)
# Deviations by which the power of a burst must stand out for as rare false alarms, for one test of one statistic.
STANDS_OUT = math.sqrt(2.0 * math.log(FALSE_ALARM_S * 1e9 / FRAME_NS / FRAMES))
# What a link that may move can do by itself within its time constant is no change, however well it is known.
MOVES = "of this size the filter takes it for motion that its time constant allows"
REASONS = {
    "channel": "its shape is unknown: power in all {degrees} directions stands out after {power:.0f} frames",
    "interference": "its tones are unknown, and 16 frames of a burst are looked at",
    "direct-path": MOVES,
    "timing": MOVES,
    "gain": MOVES,
    "elements": "which element is unknown, and it shows in the estimate only as that takes the change in",
}


@dataclass(slots=True)
class Found:
    """What changes of one kind and size led to, a link each."""

    bounds: list[float] = field(default_factory=list)
    power: list[float] = field(default_factory=list)
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
            known = np.cumsum(information(link, kind, size, PATIENCE))
            one = found.setdefault((kind, level, time_constant_s), Found())
            one.bounds.append(float(np.searchsorted(known, NEEDED) + 1))
            # Power of n frames in so many directions spreads by √(n · directions).
            spread = STANDS_OUT * np.sqrt(TAPS * np.arange(1, PATIENCE + 1))
            one.power.append(float(np.argmax(known >= spread) + 1 if (known >= spread).any() else PATIENCE))
            told, delay = _change(tracker, link, kind, size)
            one.delays.append(delay)
            one.told[told] += 1


def _delay_row(kind: str, level: float, time_constant_s: float, found: Found) -> Row:
    bound = float(np.median(found.bounds))
    median, late = np.percentile(found.delays, [50, 95])
    # A burst is worked off as a whole: half of one is waited for on average.
    allowed = 2.0 * (bound + FRAMES / 2)
    note = f"95 %: {late:.0f}; a test that knows the change (Lorden): {bound:.0f}, and bursts of {FRAMES}"
    if median > allowed and kind in REASONS:
        note += "; " + REASONS[kind].format(degrees=FRAMES * TAPS, power=np.median(found.power))
    return Row(
        f"{kind}, {10 * math.log10(level):.0f} dB, time constant {time_constant_s:g} s: frames until the alarm",
        float(median),
        "frames",
        f"<= {allowed:.0f}",
        bool(median <= allowed),
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


def _advance(
    tracker: Tracker, link: Link, number: int, states: NDArray[np.float64], changed: Changed | None = None
) -> list[Event]:
    burst = link.burst(number, states, changed)
    tracker.admit(burst, burst.end_ns)
    return tracker.advance([burst], Steps(20)).events


def _change(tracker: Tracker, link: Link, kind: str, size: float) -> tuple[str, float]:
    """Play a change that begins anywhere in a burst; what the alarm says, and frames until then."""
    begins = int(link.rng.integers(0, FRAMES))
    for number in range(PATIENCE // FRAMES):
        states = link.states(FRAMES)
        since = number * FRAMES - begins + np.arange(FRAMES)
        changed = CHANGES[kind][0](link, states, since * FRAME_NS / 1e9, size)
        if number == 0:
            before = link.shown(states)
            response = np.where((since >= 0)[:, None, None], changed.response, before)
            noise = np.where((since >= 0)[:, None, None], changed.noise, 1.0)
            changed = Changed(response, noise)
        events = _advance(tracker, link, QUIET_BLOCKS + number, states, changed)
        for event in events:
            if isinstance(event, Alarm):
                return event.kind, float((number + 1) * FRAMES - begins)
    return "none", float(PATIENCE)
