"""The sounding plan against what one does without: a full sweep, least squares, optimize, hold until the next sweep.

Both have the same stream of frames in the same computed yard, N = 256, K = 128, −8 dB a tone under random patterns, and
the same optimizer. The one that sweeps does so in one go, at the full frame rate, knows the noise, has its pattern in
force without delay, and spends the share of frames that the plan of sweeps chose; beside it stands the share, out of
several, that is best for it. Mast and carrier share an oscillator: a sweep that is solved as it stands cannot take an
offset off (50 Hz turns it by half a turn from end to end, and a tenth of the rate is left), and that a tracker can do
so is no merit of its plan. Net rate: what all frames carry, with the channel known exactly.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchmarks.row import Row
from tracker.assembly import configure
from tracker.engine.panel import Limits
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.flips import Effort, optimize
from tracker.settings import Settings, parse
from tracker.simulation.closed_loop import EngineInLoop, turns
from tracker.simulation.motion import Still, Waypoints
from tracker.simulation.sounding import sweep
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

SPEEDS = (0.0, 1.0, 3.0)
SEEDS = (1, 2, 3)
# Of the run, what is left out while the estimate forms.
LEFT_OUT = 0.3
STEPS = 400
# One frame in so many, for the one that sweeps: what is best for it is picked.
EVERY = (8, 16, 32, 64, 128)


@dataclass(frozen=True, slots=True)
class Planned:
    """What planning gave: net rate, bit/s/Hz, share of frames sounded, net rate over the rate in force."""

    net: float
    share: float
    kept: float


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    seconds, seeds = (0.8, SEEDS[:1]) if quick else (2.0, SEEDS)
    for speed in SPEEDS:
        swept = [_planned(speed, seed, seconds, in_service=False) for seed in seeds]
        served = [_planned(speed, seed, seconds, in_service=True) for seed in seeds]
        same = [_held(speed, seed, seconds, round(1 / one.share)) for one, seed in zip(swept, seeds, strict=True)]
        by_share = {every: [_held(speed, seed, seconds, every) for seed in seeds] for every in EVERY}
        best = max(EVERY, key=lambda every: float(np.mean(by_share[every])))
        where = f"{speed:.0f} m/s"
        ratios = [one.net / other for one, other in zip(swept, same, strict=True)]
        yield Row(
            f"net rate, plan of sweeps over sweep and hold, same share, {where}",
            float(np.mean(ratios)),
            "ratio",
            ">= 1",
            float(np.mean(ratios)) >= 1,
            f"{_listed(ratios)}; share {_percent(swept)}; {_mean(swept):.2f} against {np.mean(same):.2f} bit/s/Hz",
        )
        ratios = [one.net / other for one, other in zip(served, by_share[best], strict=True)]
        yield Row(
            f"net rate, plan in service over sweep and hold at its best share, {where}",
            float(np.mean(ratios)),
            "ratio",
            ">= 1",
            float(np.mean(ratios)) >= 1,
            f"{_listed(ratios)}; share {_percent(served)}, {100 * np.mean([one.kept for one in served]):.0f} % of the "
            f"rate in force is net; {_mean(served):.2f} against {np.mean(by_share[best]):.2f} bit/s/Hz at 1 in {best}",
        )


def _link(speed: float, *, in_service: bool = False) -> tuple[Scenario, Settings]:
    track = Still(lane(-2.0)[0]) if speed == 0 else Waypoints(lane(-2.0, 10.0), speed)
    scene = yard((track,), shadow_db=42.0, snr_db=-8.0)
    scenario = Scenario(
        "plan",
        "a carrier in the lane",
        TestbedConfig(scene, obeys=True),
        time_constant_ms=400.0,
        follow_phase=True,
    )
    text = scenario.settings().replace("[follow]", "bank = 3\n\n[follow]")
    return scenario, parse(text if in_service else text.replace("in_service = true", "in_service = false"))


def _planned(speed: float, seed: int, seconds: float, *, in_service: bool) -> Planned:
    """Run the tracker and a testbed that obeys its plans."""
    scenario, settings = _link(speed, in_service=in_service)
    testbed = Testbed(scenario.testbed, seed)
    net, rate, lasts, sounded = [], [], [], 0
    for turn in turns(testbed, 0, 1.0, 1_000_000, EngineInLoop(settings)):
        burst = turn.burst
        if turn.arrival_ns > seconds * 1e9:
            break
        if burst.t_ns > LEFT_OUT * seconds * 1e9:
            report = testbed.report((burst.t_ns + turn.arrival_ns) // 2)
            net.append(report.net or 0.0)
            rate.append(report.rate)
            lasts.append(turn.arrival_ns - burst.t_ns)
            sounded += burst.frames
    share = sounded * scenario.testbed.frame_ns / sum(lasts)
    return Planned(float(np.average(net, weights=lasts)), share, float(np.dot(net, lasts) / np.dot(rate, lasts)))


def _held(speed: float, seed: int, seconds: float, every: int) -> float:
    """Sweep in one go, solve, optimize, hold; return the net rate."""
    scenario, settings = _link(speed)
    scene, frame_ns = Testbed(scenario.testbed, seed).scene, scenario.testbed.frame_ns
    basis = configure(settings, Path()).delay
    patterns = sweep(scene.config.elements, np.random.default_rng(seed))
    regressors = np.column_stack([np.ones(len(patterns)), patterns]).astype(np.float64)
    takes_s = len(patterns) * frame_ns / 1e9
    period_s = takes_s * every
    states: NDArray[np.int8] | None = None
    rates = []
    # As many whole periods as fit, at least two: the first pattern rests on as much as any later one.
    for number in range(max(round(seconds / period_s), 2)):
        begins_s = number * period_s
        times_s: NDArray[np.float64] = begins_s + frame_ns / 1e9 * np.arange(len(patterns), dtype=np.float64)
        heard = scene.frames(times_s, patterns)
        noise = np.sqrt(scene.noise_at(begins_s))
        solved = np.linalg.lstsq(regressors, (heard[:, 0] / noise[0]) @ basis.conj(), rcond=None)[0]
        channel = Channel(basis, solved[:1], np.ascontiguousarray(solved[1:, None, :]))
        states = optimize(channel, states, Limits(), Steps(STEPS), Effort.THOROUGH).states
        held_s = np.linspace(begins_s + takes_s, begins_s + period_s, 9)
        rates.append(np.mean([scene.rate(float(at_s), states) for at_s in held_s]))
    return float(np.mean(rates)) * (1.0 - 1.0 / every)


def _mean(planned: list[Planned]) -> float:
    return float(np.mean([one.net for one in planned]))


def _percent(planned: list[Planned]) -> str:
    shares = sorted(100 * one.share for one in planned)
    return f"{shares[0]:.1f} %" if len(shares) == 1 else f"{shares[0]:.1f} to {shares[-1]:.1f} %"


def _listed(ratios: list[float]) -> str:
    return "by seed " + ", ".join(f"{ratio:.2f}" for ratio in ratios)
