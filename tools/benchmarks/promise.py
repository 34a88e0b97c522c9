"""How often the rate that is promised with a pattern is met, and how much is promised.

Each published pattern promises `rate_low`, to be met with probability 0.95. Here it is held, over the bursts in which
the pattern was in force, against the mean of its rate with the channel known exactly, and against the mean of
`rate_measured`, which is all that a user sees. Each row is a scene, in simulated time, from a cold start: the engine
and the stand-in testbed, patterns in force one burst late, as in the benchmarks of the same names; `rate_low` over
`rate` stands in the note, as a promise is easily kept that says nothing. Of the logs in replay_logs/ no more is known
than what was measured.
"""

import math
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path
from statistics import mean

import numpy as np

from benchmarks import elements, moving
from benchmarks._recovery import CHANGED_S
from benchmarks.row import Row
from benchmarks.still import PLAIN, WIDE
from tracker.assembly import shape
from tracker.engine.burst import Burst
from tracker.engine.events import Pattern, State
from tracker.logs import LogReader
from tracker.offline.blocks import Block, steps
from tracker.settings import parse
from tracker.simulation.closed_loop import EngineInLoop
from tracker.simulation.config import SceneConfig
from tracker.simulation.motion import Still
from tracker.simulation.schedule import Block as Blocked
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

WANTED, OFF = 0.95, 0.02
# Promises from which on the share kept is held against that.
ENOUGH = 100
LOGS = Path(__file__).resolve().parents[2] / "replay_logs"
# Runs begin at so many places in the lane, one after the other.
PLACES = 7
BURSTS = 131


@dataclass(slots=True)
class Promise:
    """A pattern with what it promised, and its rates over the bursts in which it was in force, bit/s/Hz."""

    low: float
    rate: float
    true: list[float] = field(default_factory=list)
    measured: list[float] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class Scene:
    """A scene: its name, a run of it from a seed, runs, and runs in a quick measurement."""

    name: str
    play: Callable[[int], list[Promise]]
    seeds: int
    quick: int = 0


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    every: list[Promise] = []
    runs = 0
    for scene in SCENES:
        seeds = scene.quick if quick else scene.seeds
        found = [promise for seed in range(1, 1 + seeds) for promise in scene.play(seed)]
        if found:
            yield _row(f"promise, {scene.name}", found, f"{seeds} runs")
            every, runs = every + found, runs + seeds
    yield _row("promise, all scenes together", every, f"{runs} runs")
    for path in sorted(LOGS.glob("*.mcap")):
        yield _row(f"promise, log {path.stem}", replayed(path), "measured rate", measured=True)


def _row(name: str, found: list[Promise], note: str, *, measured: bool = False) -> Row:
    seen = [promise for promise in found if promise.measured]
    by_measured = mean(mean(promise.measured) >= promise.low for promise in seen)
    value = by_measured if measured else mean(mean(promise.true) >= promise.low for promise in found)
    share = mean(promise.low / promise.rate for promise in found)
    if not measured:
        note += f"; by the measured rate {by_measured:.3f}"
    note += f"; {len(found)} refreshes; rate_low is {share:.3f} of rate"
    # Of few promises, chance alone may break so many.
    met = abs(value - WANTED) <= OFF if len(found) >= ENOUGH else None
    return Row(f"{name}: kept", value, "of promises", f"{WANTED} ± {OFF}", met, note)


def play(bed: Testbed, engine: EngineInLoop, start_ns: int, count: int, pace: float) -> list[Promise]:
    """Run the loop; gives the promises of the patterns that came into force."""
    promises: dict[int, Promise] = {}
    decided: Pattern | None = None
    bed.apply(None, np.ones_like(bed.states))
    for number in range(count):
        burst = bed.next_burst(start_ns + round(number * 1e9 / pace))
        if bed.pattern_id is not None:
            promises[bed.pattern_id].true.append(bed.report(burst.t_ns + bed.burst_ns // 2).rate)
        told = _take(engine, burst, burst.t_ns + bed.burst_ns, promises)
        if decided is not None:
            bed.apply(decided.id, decided.states)
        decided = told
    return [promise for promise in promises.values() if promise.true]


def replayed(path: Path) -> list[Promise]:
    """Replay a log with its own settings; gives the promises of the patterns that were measured."""
    reader = LogReader(path)
    settings = parse(reader.attachments["settings.toml"].decode())
    engine = EngineInLoop(settings)
    promises: dict[int, Promise] = {}
    for step in steps(reader, settings.link.name, shape(settings), follow=False):
        if isinstance(step, Block):
            for taken in step.taken:
                _take(engine, taken.burst, taken.arrival_ns, promises)
    return [promise for promise in promises.values() if promise.measured]


def _take(engine: EngineInLoop, burst: Burst, arrival_ns: int, promises: dict[int, Promise]) -> Pattern | None:
    """Let the engine take a burst, and note what it says."""
    decided = None
    for event in engine.take(burst, arrival_ns):
        if isinstance(event, Pattern):
            decided = event
            promises[event.id] = Promise(event.rate_low, event.rate)
        elif isinstance(event, State) and event.pattern in promises and event.rate_measured is not None:
            promises[event.pattern].measured.append(event.rate_measured)
    return decided


def _moving(make: Callable[[], moving.Case]) -> Callable[[int], list[Promise]]:
    def run(seed: int) -> list[Promise]:
        begun = moving.begin(make(), seed, 1 + seed % PLACES)
        return play(begun.bed, begun.engine, begun.start_ns, begun.count, begun.pace)

    return run


def _yard(make: Callable[[int], Scenario], bursts: int = BURSTS, more: str = "") -> Callable[[int], list[Promise]]:
    def run(seed: int) -> list[Promise]:
        scenario = make(seed)
        bed = Testbed(scenario.testbed, seed)
        engine = EngineInLoop(parse(scenario.settings() + more))
        return play(bed, engine, 0, bursts, 1e9 / bed.burst_ns)

    return run


def _still(scene: SceneConfig) -> Callable[[int], Scenario]:
    return lambda seed: Scenario("still", "", TestbedConfig(scene))


def _stuck(seed: int) -> Scenario:
    return elements.scenario(elements.drawn("stuck", seed, 256, round(elements.SHARE * 256)))


def _blocked(seed: int) -> Scenario:
    scene = yard((Still(lane(0.0)[0]),), shadow_db=12.0, snr_db=20.0)
    block = Blocked(CHANGED_S, math.inf, 25.0, 0.0)
    scene = replace(scene, direct=replace(scene.direct, blocks=(block,)))
    return Scenario("blocked", "", TestbedConfig(scene), time_constant_ms=300.0)


def _cases(cases: Iterable[tuple[Callable[[], moving.Case], int, int]]) -> list[Scene]:
    return [Scene(make().name, _moving(make), seeds, quick) for make, seeds, quick in cases]


SCENES: tuple[Scene, ...] = (
    Scene("N 256, still", _yard(_still(PLAIN)), 20, 3),
    Scene("N 320, two receivers, still", _yard(_still(WIDE)), 25),
    Scene(
        "N 256, still, 5 % of the elements stuck",
        _yard(_stuck, more=f"[refresh]\nmost_steps = {elements.STEPS}\n"),
        20,
        3,
    ),
    Scene("N 256, direct path blocked", _yard(_blocked, 2 * BURSTS + 130), 15, 2),
    *_cases(
        (
            (moving.walking, 20, 3),
            (moving.driving, 20, 3),
            (moving.driving_learned, 10, 0),
            (lambda: moving.large("learned"), 6, 0),
            (lambda: moving.large("region"), 8, 0),
            (moving.offset, 25, 3),
            (moving.offset_learned, 11, 0),
            (moving.slow_bench, 8, 1),
            (moving.two_carriers, 20, 0),
        )
    ),
)
