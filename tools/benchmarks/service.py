"""The live service at full pace over loopback: what is lost, and how long from a burst to its pattern.

N = 256, 128 tones, bursts of 64 frames at 437.5 bursts/s, everything journaled. Latency counts from just before the
sender hands a burst to its socket until the subscriber has the message in hand; both share one core, the service has
another. Other programs on the machine show in the tails.
"""

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from benchmarks._link import BURSTS_PER_S, CYCLE_S, Played, bodies, play, work_folder, write_settings
from benchmarks.row import Row
from tracker.simulation.motion import Still, Sway
from tracker.simulation.testbed import TestbedConfig
from tracker.simulation.yard import Scenario, lane, scenario, yard

# From a burst to its pattern, 99 of 100.
MOST_P99_MS = 5.0


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    yield from _run("still", scenario("quiet"), 3.0 if quick else 60.0, 1.0 if quick else 5.0, "")
    # A short memory and no least gain: nearly every burst publishes.
    swaying = yard((Sway(Still(lane(0.0)[0]), (0.0, 0.02, 0.0), (CYCLE_S,) * 3),), shadow_db=42.0, snr_db=-8.0)
    restless = Scenario("restless", "a carrier sways", TestbedConfig(swaying), time_constant_ms=20.0)
    yield from _run(
        "restless", restless, 2.0 if quick else 30.0, 0.0, "[refresh]\nleast_gain = 0.0\nswitching_ms = 0.0"
    )


def _run(name: str, scene: Scenario, seconds: float, idle_s: float, more: str) -> Iterator[Row]:
    with work_folder() as folder:
        played = play(write_settings(scene, folder, more), bodies(scene), seconds, idle_s)
    yield from _losses(name, played, seconds)
    yield from _latency(f"{name}: burst to pattern", played.latencies_ms(played.pattern_ns), MOST_P99_MS)
    yield from _latency(f"{name}: burst to state", played.latencies_ms(played.state_ns), None)
    sent = len(played.sent_ns)
    engine_us = float(np.sum(played.engine_us))
    yield Row(
        f"{name}: processor time of the service a burst",
        played.cpu_s / sent * 1e6,
        "µs",
        note=f"of which the engine {engine_us / sent:.0f} (wall clock); sockets, journal and the rest "
        f"{(played.cpu_s * 1e6 - engine_us) / sent:.0f}",
    )
    if idle_s:
        yield Row(
            f"{name}: processor time while idle", 100 * played.idle_cpu, "% of a core", "<= 2", played.idle_cpu <= 0.02
        )
        yield Row(
            f"{name}: memory after the first quarter", played.grown_mb, "MB more", note=f"over {0.75 * seconds:g} s"
        )


def _losses(name: str, played: Played, seconds: float) -> Iterator[Row]:
    sent, status = len(played.sent_ns), played.status
    missing = sent - len(played.state_ns) + status["lost"] + sum(status["refused"].values())
    late_ms = float(np.max(np.diff(played.sent_ns)) / 1e6 - 1e3 / BURSTS_PER_S)
    note = f"of {sent} bursts in {seconds:g} s; the sender was late by {late_ms:.1f} ms at most"
    yield Row(f"{name}: bursts lost", missing, "bursts", "0", missing == 0, note)


def _latency(name: str, values_ms: NDArray[np.float64], target_ms: float | None) -> Iterator[Row]:
    half, most, rare = np.percentile(values_ms, [50, 99, 99.9])
    note = f"{len(values_ms)} of them; median {half:.2f}, 99.9 % {rare:.2f}, largest {values_ms.max():.2f} ms"
    if target_ms is None:
        yield Row(f"{name}, 99 %", most, "ms", note=note)
    else:
        yield Row(f"{name}, 99 %", most, "ms", f"<= {target_ms:g}", bool(most <= target_ms), note)
