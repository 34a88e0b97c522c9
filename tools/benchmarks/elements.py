"""Element health: how many faulty elements are found how soon, how many healthy ones are called faulty, what it costs.

The engine and the stand-in testbed in simulated time: the container yard behind its stacks, 256 elements, 28 000
frames/s in bursts of 64, −2 dB a tone under random patterns; every eighth frame sounds the pattern in force. Faults are
drawn at random. A sweep is as many frames as there are unknowns, 257.
"""

import time
from collections.abc import Iterator, Sequence
from dataclasses import replace
from math import ceil
from pathlib import Path
from statistics import mean, median
from typing import Any

import numpy as np

from benchmarks.row import Row
from tracker.assembly import configure
from tracker.engine.estimation.estimator import Estimator
from tracker.engine.estimation.frames import Frames
from tracker.engine.events import Pattern, State
from tracker.engine.health.health import Health
from tracker.engine.panel import Limits
from tracker.engine.search.budget import Steps
from tracker.engine.search.flips import Effort, optimize
from tracker.settings import parse
from tracker.simulation.closed_loop import EngineInLoop
from tracker.simulation.impairments import Fault, Impairments, Interference
from tracker.simulation.motion import Still, Waypoints
from tracker.simulation.schedule import Step
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

FRAMES, FRAME_NS = 64, 35_714
BURST_S = FRAMES * FRAME_NS / 1e9
SHARE = 0.05
# Optimizer steps a burst, and for the best pattern with the channel known exactly.
STEPS, BEST_STEPS = 60, 1000
KINDS = {"stuck": {"unmoved", "stuck+", "stuck-"}, "weak": {"weak"}, "swapped": {"swapped"}}
# When elements fail in service, s, and how long is looked for them afterwards.
FAILS_S, AFTER_S = 0.8, 0.25


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    yield from _found("stuck", 4, range(8 if quick else 200), 0.99)
    yield _rate(range(2 if quick else 40))
    yield from _found("weak", 120, range(1 if quick else 20), None)
    yield from _found("swapped", 16, range(3 if quick else 60), None)
    yield from _calm(range(1 if quick else 20))
    yield from _in_service(range(2 if quick else 40))
    yield from _cost(16, 16, 200)
    if not quick:
        yield from _cost(32, 32, 300)


def scenario(faults: Sequence[Fault] = (), speed: float = 0.0, side: int = 16, **changes: Any) -> Scenario:
    """Make the yard with faulty elements; its carrier stands, or drives up the lane and is followed."""
    track = Waypoints(lane(-2.0, 12.0), speed, from_s=0.0) if speed else Still(lane(-2.0)[0])
    scene = replace(
        yard((track,), shadow_db=42.0, snr_db=-2.0, columns=side, rows=side),
        impairments=Impairments(faults=tuple(faults), **changes),
    )
    moving: dict[str, Any] = {"time_constant_ms": 60.0, "follow_phase": True} if speed else {}
    return Scenario("elements", "", TestbedConfig(scene, frames=FRAMES), **moving)


def drawn(kind: str, seed: int, elements: int, count: int, from_s: float = 0.0) -> list[Fault]:
    """Draw faults at random places; swapped elements come in pairs."""
    rng = np.random.default_rng([19, seed])
    places = [int(place) for place in rng.permutation(elements)[:count]]
    if kind == "swapped":
        pairs = zip(places[0::2], places[1::2], strict=False)
        return [Fault(one, "swapped", from_s=from_s, other=other) for one, other in pairs]
    if kind == "weak":
        return [Fault(place, "weak", from_s=from_s) for place in places]
    return [Fault(place, "stuck+" if rng.random() < 0.5 else "stuck-", from_s=from_s) for place in places]


def named(faults: Sequence[Fault]) -> set[int]:
    """Elements that the faults are of."""
    return {each.element for each in faults} | {each.other for each in faults if each.kind == "swapped"}


def play(told: Scenario, seed: int, frames: int) -> Iterator[tuple[dict[int, str], Testbed, int]]:
    """Run the loop over so many frames; yields the faults told, the testbed and the frames so far, burst by burst."""
    bed = Testbed(told.testbed, seed)
    engine = EngineInLoop(parse(told.settings() + f"[refresh]\nmost_steps = {STEPS}\n"))
    for number in range(ceil(frames / FRAMES)):
        burst = bed.next_burst(number * bed.burst_ns)
        left = frames - number * FRAMES
        if left < FRAMES:
            cut = {name: getattr(burst, name)[:left] for name in ("patterns", "response", "keep")}
            burst = replace(burst, **cut)
        events = engine.take(burst, burst.end_ns)
        for event in events:
            if isinstance(event, Pattern):
                bed.apply(event.id, event.states)
        state = next(event for event in events if isinstance(event, State))
        yield {element: fault for element, fault, _ in state.faults}, bed, min(frames, (number + 1) * FRAMES)


def _found(kind: str, sweeps: int, seeds: range, target: float | None) -> Iterator[Row]:
    """After so many sweeps: faulty elements found, those named rightly, and healthy ones called faulty."""
    found = right = wrong = faulty = healthy = 0
    for seed in seeds:
        told = scenario(drawn(kind, seed, 256, round(SHARE * 256)))
        bad = named(told.testbed.scene.impairments.faults)
        (*_, (faults, _, _)) = play(told, seed, sweeps * 257)
        found += len(bad & set(faults))
        right += sum(faults.get(element) in KINDS[kind] for element in bad)
        wrong += len(set(faults) - bad)
        faulty, healthy = faulty + len(bad), healthy + 256 - len(bad)
    what = f"{100 * SHARE:.0f} % {kind}, N 256, −2 dB a tone, {sweeps} sweeps"
    note = f"{len(seeds)} seeds; {right / faulty:.4f} named rightly"
    share = found / faulty
    if target is None:
        yield Row(f"{what}: found", share, "of them", note=note)
    else:
        yield Row(f"{what}: found", share, "of them", f">= {target}", share >= target, note)
    bound = f"{wrong} of {healthy}; in truth below {_upper(wrong, healthy):.5f} (95 %)"
    yield Row(f"{what}: wrong", wrong / healthy, "of the healthy", "< 0.005", wrong / healthy < 0.005, bound)


def _upper(hits: int, trials: int) -> float:
    """Upper limit of a probability, 95 % (Clopper & Pearson, Biometrika 26, 1934)."""
    from scipy.stats import beta

    return float(beta.ppf(0.95, hits + 1, trials - hits)) if hits < trials else 1.0


def _rate(seeds: range) -> Row:
    """Rate of the pattern in force some sweeps later, over the best with the same elements held as they stick."""
    shares = []
    for seed in seeds:
        faults = drawn("stuck", seed, 256, round(SHARE * 256))
        (*_, (_, bed, _)) = play(scenario(faults), seed, 8 * 257)
        report = bed.report(8 * 257 * FRAME_NS)
        held = Limits(stuck={each.element: 1 if each.kind == "stuck+" else -1 for each in faults})
        best = optimize(report.channel, report.states, held, Steps(BEST_STEPS), Effort.THOROUGH).rate
        shares.append(report.rate / max(best, report.rate))
    note = f"worst of {len(shares)} seeds {min(shares):.4f}"
    share = mean(shares)
    return Row(
        "rate afterwards (8 sweeps) over the best with those held", share, "ratio", ">= 0.99", share >= 0.99, note
    )


def _calm(seeds: range) -> Iterator[Row]:
    """Share of time that healthy elements are called faulty, where much happens that is no fault."""
    fading: dict[str, Any] = {
        "transmit_power_db": (Step(20 * BURST_S, -9.0), Step(40 * BURST_S, 9.0)),
        "noise_db": (Step(50 * BURST_S, 6.0),),
        "interference": (Interference(10, 20, 15.0, 25 * BURST_S, 35 * BURST_S),),
    }
    for name, told in (
        ("still", scenario()),
        ("a carrier at 1 m/s", scenario(speed=1.0)),
        ("steps of power and noise, interference", scenario(**fading)),
    ):
        wrong = [len(faults) for seed in seeds for faults, _, _ in play(told, seed, 90 * FRAMES)]
        share = mean(wrong) / 256
        note = f"{len(seeds)} runs of 90 bursts; at most {max(wrong)} at a time"
        yield Row(f"healthy panel, {name}: called faulty", share, "of the time", "< 0.005", share < 0.005, note)


def _in_service(seeds: range) -> Iterator[Row]:
    """Three elements fail together in service: how long until all are found, and whether sides are told rightly."""
    took, right, wrong, faulty = [], 0, 0, 0
    frames = round((FAILS_S + AFTER_S) / BURST_S) * FRAMES
    for seed in seeds:
        faults = drawn("stuck", seed, 256, 3, FAILS_S)
        bad = named(faults)
        at = None
        for told, _, so_far in play(scenario(faults), seed, frames):
            if at is None and bad <= set(told):
                at = 1e3 * (so_far * FRAME_NS / 1e9 - FAILS_S)
        took.append(at if at is not None else 1e3 * AFTER_S)
        sides = [(told.get(each.element, ""), each.kind) for each in faults]
        right += sum(one == other for one, other in sides)
        wrong += sum(one.startswith("stuck") and one != other for one, other in sides)
        faulty += len(faults)
    note = f"{len(took)} seeds; longest {max(took):.0f} ms, of {1e3 * AFTER_S:.0f} looked at"
    yield Row("three fail in service: all found after", median(took), "ms", note=note)
    yield Row("which way they are stuck: told rightly", right / faulty, "of them", note=f"{wrong} of {faulty} wrongly")


def _cost(columns: int, rows: int, bursts: int) -> Iterator[Row]:
    """Processor time that judging takes a burst, on a still link with faults; the first half is the start."""
    elements = columns * rows
    told = scenario(drawn("stuck", 1, elements, round(SHARE * elements)), side=columns)
    bed, config = Testbed(told.testbed, 1), configure(parse(told.settings()), Path())
    estimator, health = Estimator(config), Health((columns, rows), config.forgetting, Limits())
    took = []
    for number in range(bursts):
        frames = Frames.of(bed.next_burst(number * bed.burst_ns))
        fit = estimator.update([frames])
        begun = time.thread_time()
        if health.due(FRAMES, fit.elapsed_s) and (posterior := estimator.posterior) is not None:
            health.update(posterior)
        took.append(1e6 * (time.thread_time() - begun))
    later = took[bursts // 2 :]
    note = f"longest {max(later):.0f} µs; the first {bursts // 2} bursts {mean(took[: bursts // 2]):.0f} µs"
    yield Row(f"judging {elements} elements, a burst of {FRAMES}", mean(later), "µs", note=note)
