"""How good the published pattern is on a still scene, soon after the start: held against the best there is.

The engine and the stand-in testbed in simulated time: the container yard with the direct path blocked, 28 000 frames/s
in bursts of 64, −8 dB a tone under random patterns; every eighth frame sounds the pattern in force. Beside it, what the
same frames give to an estimator that is told what ours has to find out: the noise, and the mean power of the elements
on each delay.
"""

from collections.abc import Iterator
from dataclasses import replace
from math import ceil
from statistics import mean
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from benchmarks.row import Row
from tracker.engine.burst import Burst
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.events import Pattern
from tracker.engine.panel import Limits, unpack
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.flips import Effort, optimize
from tracker.engine.search.rate import rate
from tracker.settings import parse
from tracker.simulation.best import best_pattern
from tracker.simulation.closed_loop import EngineInLoop
from tracker.simulation.config import SceneConfig, ToneGrid
from tracker.simulation.motion import Still
from tracker.simulation.sounding import SoundingConfig
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

FRAMES = 64
# Loss of the direct path over free space, dB: what is left of it is a tenth of what random patterns bring.
BLOCKED_DB = 60.0
# Optimizer steps for the best pattern with the channel known exactly.
BEST_STEPS = 4000

# N = 256, 128 of 256 tones, one receiver.
PLAIN = yard((Still(lane(0.0)[0]),), shadow_db=BLOCKED_DB, snr_db=-8.0)
# N = 320, guard bands on either side, two receivers in different places.
WIDE = replace(
    yard((Still(lane(0.0)[0]), Still(lane(6.0)[0])), shadow_db=BLOCKED_DB, snr_db=-8.0, columns=20, rows=16),
    tones=ToneGrid(fft=256, first=28, count=200, spacing_hz=156_250.0),
)


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    seeds = range(1, 2 if quick else 6)
    for size, scene, target in (
        ("N 256, K 128", PLAIN, 0.98),
        ("N 320, 200 of 256 tones, two receivers", WIDE, 0.95),
    ):
        yield _row(f"still, {size}, two Hadamard sweeps: rate over the best", scene, "hadamard", seeds, target)
        yield _row(f"still, {size}, as many random patterns: rate over the best", scene, "random", seeds, None)


def _row(name: str, scene: SceneConfig, kind: Literal["hadamard", "random"], seeds: range, target: float | None) -> Row:
    scenario = Scenario("still", "nothing moves", TestbedConfig(scene, SoundingConfig(kind), FRAMES))
    ours, told = zip(*(after_two_sweeps(scenario, seed) for seed in seeds), strict=True)
    note = f"worst of {len(ours)} seeds {min(ours):.4f}; told noise and powers: mean {mean(told):.4f}"
    if target is None:  # random patterns are no sweep: shown for what they cost
        return Row(name, mean(ours), "ratio", note=note)
    return Row(name, mean(ours), "ratio", f">= {target}", mean(ours) >= target, note)


def after_two_sweeps(scenario: Scenario, seed: int) -> tuple[float, float]:
    """Play 2 (N + 1) frames; give the rate of the pattern then in force over that of the best, and of the one told."""
    bed = Testbed(scenario.testbed, seed)
    engine = EngineInLoop(parse(scenario.settings()))
    left, heard = 2 * (scenario.config.elements + 1), []
    for number in range(ceil(left / FRAMES)):
        burst = _first(bed.next_burst(number * bed.burst_ns), min(left, FRAMES))
        left -= burst.frames
        heard.append(burst)
        for event in engine.take(burst, burst.end_ns):
            if isinstance(event, Pattern):
                bed.apply(event.id, event.states)
    report = bed.report(0)
    _, best = best_pattern(report.channel, report.states, BEST_STEPS)
    best = max(best, report.rate)
    noise = bed.scene.noise_at(0.0)
    return report.rate / best, _told(scenario.config, report.channel, noise, heard) / best


def _first(burst: Burst, frames: int) -> Burst:
    """Cut a burst to its first frames."""
    return replace(burst, patterns=burst.patterns[:frames], response=burst.response[:frames], keep=burst.keep[:frames])


def _told(scene: SceneConfig, known: Channel, noise: NDArray[np.float64], bursts: list[Burst]) -> float:
    """Rate of the pattern from the conditional mean of the channel, delay by delay, under independent elements."""
    tones = scene.tones
    basis = delay_basis(tones.fft, tones.first, tones.count, 16, 1)
    patterns = np.concatenate([unpack(burst.patterns, scene.elements) for burst in bursts])
    regressors = np.column_stack([np.ones(len(patterns)), patterns])
    # All in units of the noise.
    true = np.concatenate([known.direct[None], known.surface]) @ (known.basis.T @ basis.conj())
    heard = np.concatenate([burst.response for burst in bursts]) @ basis.conj() / np.sqrt(noise)[:, None]
    found = np.empty_like(true)
    for receiver in range(scene.receivers):
        own = true[1:, receiver]
        powers, turned = np.linalg.eigh(own.T @ own.conj() / scene.elements)
        outputs, direct = heard[:, receiver] @ turned.conj(), true[0, receiver] @ turned.conj()
        for delay, power in enumerate(np.maximum(powers, 1e-12)):
            prior = np.append(abs(direct[delay]) ** 2, np.full(scene.elements, power))
            gain = (regressors * prior) @ regressors.T + np.eye(len(regressors))
            found[:, receiver, delay] = (regressors * prior).T @ np.linalg.solve(gain, outputs[:, delay])
        found[:, receiver] = found[:, receiver] @ turned.T
    estimate = Channel(basis, found[0], np.ascontiguousarray(found[1:]))
    return float(rate(known, optimize(estimate, None, Limits(), Steps(BEST_STEPS), Effort.THOROUGH).states))
