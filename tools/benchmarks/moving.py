"""How good the pattern in force is while things move, with bases of all kinds, against the best there is.

The engine and the stand-in testbed in simulated time: the container yard in the shadow of the stacks, 28 000 frames a
second in bursts of 64 unless told otherwise, 128 of 256 tones, one receiver; Hadamard sweeps, every eighth frame sounds
the pattern in force. What the engine decides after a burst is in force one burst later. Each figure is the mean, over
the second half of a run and over seeds, of the rate of the pattern in force over that of the best pattern, both with
the channel known exactly. The carrier starts at another place of the lane for each seed.

A learned basis comes from a log of an earlier pass at 1 m/s through the same stretch, in front of the same panel, with
the same oscillators; noise and patterns are others.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from statistics import mean
from tempfile import TemporaryDirectory

import numpy as np

from benchmarks.row import Row
from tracker.basis_file import pack_basis
from tracker.engine.events import Pattern, State
from tracker.offline.learn import take_all, work_out
from tracker.offline.progress import Bars
from tracker.settings import parse
from tracker.simulation.best import best_pattern
from tracker.simulation.closed_loop import EngineInLoop, turns
from tracker.simulation.config import SceneConfig
from tracker.simulation.impairments import Oscillator
from tracker.simulation.motion import Still, Track, Waypoints
from tracker.simulation.record import record
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import LANE_X, Scenario, lane, yard

FAST_NS = 35_714  # 28 000 frames/s
START_NS = 1_750_000_000_000_000_000
# The best pattern is looked for so thoroughly, and once in so many bursts.
BEST_STEPS, BEST_EVERY = 600, 4
# Speed of the pass that is learned from, and of the way back to its start, m/s.
LEARNED_AT, BACK_AT = 1.0, 100.0
# An oscillator without offset.
STEADY = Oscillator()
# Predicted rates may be off by this share.
MOST_OFF = 0.03

LEARNED = '\n[aperture]\nbasis = "learned"\nfile = "basis.npz"\n'
# What a person would measure in the yard: the lane, the ground, the stack behind it.
REGION = f"""
[aperture]
basis = "region"

[site]
carrier_ghz = 3.75
panel_m = [38.0, 32.0, 11.0]
facing = [0.1, -1.0, 0.0]
transmitter_m = [0.0, 0.0, 22.0]
region_m = [[{LANE_X - 0.5}, -8.0, 4.5], [{LANE_X + 0.5}, 8.0, 5.5]]

[[site.mirrors]]
point_m = [0.0, 0.0, 0.0]
normal = [0.0, 0.0, 1.0]
loss_db = 8.0

[[site.mirrors]]
point_m = [72.0, 0.0, 0.0]
normal = [-1.0, 0.0, 0.0]
loss_db = 4.0
"""


@dataclass(frozen=True, slots=True)
class Case:
    """A scene, how it is estimated, and what is asked of it.

    Parameters
    ----------
    name : str
    least, aim : float
        Rate over the best: what is asked, and what is hoped for.
    time_constant_ms : float
        Of the settings, one for all seeds.
    columns, rows : int
    speed : float
        m/s; 0 stays where it is.
    snr_db : float
    oscillator : Oscillator
    terminals : int
        So many carriers, 6 m apart, served by one pattern.
    seconds : float
    frames, frame_ns : int
        Of a burst.
    basis : str
        ``elements``, ``learned`` or ``region``.
    seeds : int
        Runs that are averaged; more where a run is short and runs differ much.
    """

    name: str
    least: float
    aim: float
    time_constant_ms: float
    columns: int = 16
    rows: int = 16
    speed: float = 0.0
    snr_db: float = -8.0
    oscillator: Oscillator = STEADY
    terminals: int = 1
    seconds: float = 0.3
    frames: int = 64
    frame_ns: int = FAST_NS
    basis: str = "elements"
    seeds: int = 5


def walking() -> Case:
    """Drive at walking pace."""
    return Case("N 256, 1.2 m/s, elements", 0.96, 0.985, 220.0, speed=1.2, seeds=10)


def driving() -> Case:
    """Drive fast."""
    return Case("N 256, 3 m/s, elements", 0.97, 0.985, 160.0, speed=3.0, seeds=10)


def driving_learned() -> Case:
    """Drive as fast with a learned basis."""
    return Case("N 256, 3 m/s, learned", 0.985, 0.995, 100.0, speed=3.0, basis="learned")


def large(basis: str) -> Case:
    """Drive before a panel with more elements than can be sounded while the channel stays."""
    return Case(f"N 1024, 3 m/s, -10 dB, {basis}", 0.975, 0.99, 100.0, 32, 32, 3.0, -10.0, basis=basis)


def offset() -> Case:
    """Move nothing but the phase."""
    return Case("N 256, still, 280 Hz", 0.985, 0.995, 2000.0, oscillator=Oscillator(280.0))


def offset_learned() -> Case:
    """Move phase and carrier."""
    return Case(
        "N 320, 2 m/s, -410 Hz, learned",
        0.975,
        0.99,
        100.0,
        columns=20,
        speed=2.0,
        oscillator=Oscillator(-410.0),
        basis="learned",
    )


def slow_bench() -> Case:
    """Sound a bench slowly, with an oscillator that wanders."""
    return Case(
        "N 256, still, 20 frames/s in bursts of 4, 0 dB, wandering 5 Hz",
        0.95,
        0.99,
        60_000.0,
        snr_db=0.0,
        oscillator=Oscillator(0.0, 0.0, 5.0),
        seconds=60.0,
        frames=4,
        frame_ns=50_000_000,
    )


def two_carriers() -> Case:
    """Serve two carriers by one pattern."""
    return Case("N 256, two terminals, 0.5 m/s, elements", 0.96, 0.985, 300.0, speed=0.5, terminals=2)


CASES: tuple[Callable[[], Case], ...] = (
    walking,
    driving,
    driving_learned,
    lambda: large("learned"),
    lambda: large("region"),
    offset,
    offset_learned,
    slow_bench,
    two_carriers,
)
QUICK = {walking, driving_learned, offset}


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    for make in CASES:
        if not quick or make in QUICK:
            case = make()
            yield from _rows(case, range(1, 2 if quick else 1 + case.seeds))


def _rows(case: Case, seeds: range) -> Iterator[Row]:
    achieved, predicted = zip(*(play(case, seed) for seed in seeds), strict=True)
    fraction = mean(achieved)
    note = f"aim {case.aim}; worst of {len(achieved)} seeds {min(achieved):.4f}; {case.time_constant_ms:g} ms"
    yield Row(
        f"moving, {case.name}: rate over the best", fraction, "ratio", f">= {case.least}", fraction >= case.least, note
    )
    off = mean(predicted) - 1.0
    note = "predicted over achieved " + ", ".join(f"{one:.3f}" for one in predicted)
    yield Row(
        f"moving, {case.name}: predicted beyond achieved",
        100.0 * off,
        "%",
        f"within {100 * MOST_OFF:g}",
        abs(off) <= MOST_OFF,
        note,
    )


@dataclass(frozen=True, slots=True)
class Begun:
    """A run that is set up: testbed, engine, when it begins, how many bursts it is, and how many a second."""

    bed: Testbed
    engine: EngineInLoop
    start_ns: int
    count: int
    pace: float


def play(case: Case, seed: int) -> tuple[float, float]:
    """Play one run; give the rate of the pattern in force over the best, and the predicted rate over the achieved."""
    run = begin(case, seed, seed)
    return _run(case, run.bed, run.engine, run.start_ns, run.count)


def begin(case: Case, seed: int, place: int) -> Begun:
    """Set up a run, from a place in the lane 2 m further north for each number."""
    length = case.speed * case.seconds
    first_s = length * (1.0 / LEARNED_AT + 1.0 / BACK_AT) if case.basis == "learned" else 0.0
    scene = _scene(case, place, length)
    frames = TestbedConfig(scene, frames=case.frames, frame_ns=case.frame_ns)
    pace = 1e9 / (case.frames * case.frame_ns)
    scenario = Scenario("moving", case.name, frames, pace, case.time_constant_ms, follow_phase=True)
    text = scenario.settings()
    bed = Testbed(frames, seed, start_ns=START_NS)
    with TemporaryDirectory(prefix="ris-tracker-bench-") as name:
        folder = Path(name)
        if case.basis == "learned":
            _learn(bed, text, pace, length / LEARNED_AT, folder)
            text += LEARNED
        elif case.basis == "region":
            spacing_mm = 500.0 * 299_792_458.0 / scene.carrier_hz
            text = text.replace("[panel]", f"[panel]\nspacing_mm = {spacing_mm}") + REGION
        engine = EngineInLoop(parse(text), folder)
    return Begun(bed, engine, START_NS + round(1e9 * first_s), round(case.seconds * pace), pace)


def _scene(case: Case, seed: int, length: float) -> SceneConfig:
    tracks: list[Track] = []
    for terminal in range(case.terminals):
        north = -6.0 + 2.0 * seed + 6.0 * terminal
        if not case.speed:
            tracks.append(Still(lane(north)[0]))
        elif case.basis == "learned":
            speeds = (LEARNED_AT, BACK_AT, case.speed)
            tracks.append(Waypoints(lane(north, north + length, north, north + length), speeds))
        else:
            tracks.append(Waypoints(lane(north, north + 12.0), case.speed))
    scene = yard(tuple(tracks), shadow_db=42.0, snr_db=case.snr_db, columns=case.columns, rows=case.rows)
    return replace(scene, terminals=tuple(replace(one, oscillator=case.oscillator) for one in scene.terminals))


def _learn(bed: Testbed, text: str, pace: float, seconds: float, folder: Path) -> None:
    """Record the first pass, with the engine in the loop, and learn from it."""
    log = folder / "pass.mcap"
    settings = parse(text)
    record(turns(bed, START_NS, pace, int(seconds * pace), EngineInLoop(settings)), log, "yard", text)
    bars = Bars(None)
    basis = work_out(take_all([log], settings, bars), settings, text, None, bars)
    (folder / "basis.npz").write_bytes(pack_basis(basis))


def _run(case: Case, bed: Testbed, engine: EngineInLoop, start_ns: int, count: int) -> tuple[float, float]:
    bed.apply(None, np.ones(case.columns * case.rows, dtype=np.int8))
    achieved, predicted = [], []
    best = decided = None
    for number in range(count):
        burst = bed.next_burst(start_ns + number * bed.burst_ns)
        told = [event for event in engine.take(burst, burst.t_ns + bed.burst_ns) if isinstance(event, Pattern | State)]
        if number >= count // 2 and number % BEST_EVERY == 0:
            true = bed.report(burst.t_ns + bed.burst_ns)
            best, rate = best_pattern(true.channel, best if best is not None else true.states, BEST_STEPS)
            achieved.append(true.rate / rate)
            state = next(event for event in told if isinstance(event, State))
            predicted.append((state.rate_predicted if state.rate_predicted is not None else np.nan) / true.rate)
        if decided is not None:
            bed.apply(decided.id, decided.states)
        decided = next((event for event in told if isinstance(event, Pattern)), None)
    return mean(achieved), float(np.nanmean(predicted))
