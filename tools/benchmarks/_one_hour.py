"""One false alarm an hour: waited for in the whole tracker, and worked out from the tests alone.

A slow bench has a burst of a few frames five times a second, so an hour is 18 000 bursts, and a dozen hours and more of
a link that stands still are played in minutes. They cannot be many hundred, so their count is given with its interval
of confidence (Garwood, Biometrika 28, 1936), in which what importance sampling gives for the same hour must lie.
"""

from collections.abc import Iterator
from dataclasses import replace

from scipy.stats import chi2

from benchmarks._excursions import interval_ratio
from benchmarks._still_link import Link
from benchmarks.row import Row
from tracker.engine.estimation.estimator import Estimator
from tracker.engine.events import Alarm
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker

HOUR_S, BURSTS_HZ = 3600.0, 5.0
FRAMES, ELEMENTS, SEED = 16, 15, 40_000
# A link that stands still on a bench.
TIME_CONSTANT_S = 60.0
# Bursts before anything is counted: the first estimate is formed, baselines are known to within a few percent.
SETTLED = 3000
CONFIDENCE = 0.95


def hour(hours: int, runs: int) -> Iterator[Row]:
    """Play so many hours; `runs` excursions of importance sampling."""
    link = Link(SEED, ELEMENTS, surface=0.5)
    config = link.config(HOUR_S, TIME_CONSTANT_S)
    tracker, alarms = Tracker(config), 0
    bursts = round(hours * HOUR_S * BURSTS_HZ)
    for number in range(SETTLED + bursts):
        burst = replace(link.burst(number, link.states(FRAMES)), t_ns=round(number * 1e9 / BURSTS_HZ))
        tracker.admit(burst, burst.end_ns)
        events = tracker.advance([burst], Steps(0)).events
        alarms += sum(isinstance(event, Alarm) for event in events) if number >= SETTLED else 0
    tail = (1.0 - CONFIDENCE) / 2
    fewest = 0.5 * float(chi2.ppf(tail, 2 * alarms)) if alarms else 0.0
    most = 0.5 * float(chi2.isf(tail, 2 * alarms + 2))
    alone = interval_ratio(HOUR_S * BURSTS_HZ, len(Estimator(config).watched), runs)
    shortest, longest = hours / most, hours / fewest if fewest else float("inf")
    yield Row(
        f"false alarms of the whole tracker at {BURSTS_HZ:.0f} bursts/s, 1 h asked: interval over that",
        hours / max(alarms, 1),
        "ratio",
        f"agrees with {alone:.2f}",
        shortest <= alone <= longest,
        f"{alarms} in {hours} h: {100 * CONFIDENCE:.0f} % interval {shortest:.2f} to {longest:.2f}; "
        f"the tests alone, by importance sampling at 1 h: {alone:.2f}",
    )
