"""Large panels at full pace: decode to published pattern on one core, with sockets and journal in the loop.

A carrier waits in the container yard's lane before panels of 1024 and 4096 elements; 256 tones, 28 000 frames/s,
every eighth frame sounds the same pattern, the others sweeps of orthogonal patterns, or patterns that never come again.
The basis is that of the region in which the carrier may be. With so short a memory and no least gain the estimate moves
with its noise: every block searches and publishes. Cores and latencies are those of the benchmark `service`.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchmarks._link import FIRST_SEQ, Played, play, work_folder, write_settings
from benchmarks.moving import REGION
from benchmarks.row import Row
from tracker.engine.burst import Burst
from tracker.engine.panel import pack
from tracker.messages import encode_pilots
from tracker.simulation.config import ToneGrid
from tracker.simulation.motion import Still
from tracker.simulation.scene import Scene
from tracker.simulation.sounding import sweep
from tracker.simulation.testbed import TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

FRAMES_PER_S = 28_000.0
FRAME_NS = 35_714
TONES = ToneGrid(fft=512, first=128, count=256, spacing_hz=78_125.0)
TIME_CONSTANT_MS = 50.0
REFERENCE_EVERY = 8
# The settings' own budget, ms; a pattern may be later by the burst that the service is still at.
BUDGET_MS = 5.0
# The size that is asked to be so prompt; the larger one is asked to keep up while patterns repeat, and lose nothing.
PROMPT_ELEMENTS = 1024
KEPT_UP = 0.98
# Bursts of patterns that never come again: played over and over, they would fill the store of products about twice
# before the first comes again, so none is found there.
FRESH_BURSTS = {1024: 1188, 4096: 250}
# Sweeps played over and over: their noise repeats after longer than an estimate remembers.
SWEEPS = 6


@dataclass(frozen=True, slots=True)
class Size:
    """N, r, and frames a burst."""

    elements: int
    columns: int
    frames: int

    @property
    def bursts_per_s(self) -> float:
        """Pace of the bursts."""
        return FRAMES_PER_S / self.frames

    def __str__(self) -> str:
        return f"N {self.elements}, r {self.columns}, K {TONES.count}, bursts of {self.frames}"


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    for size in (Size(1024, 64, 64), Size(4096, 128, 128)):
        scene = _scene(size)
        for sweeps in (True, False):
            seconds = 2.0 if quick else 20.0
            made = _bursts(size, scene, seconds, sweeps=sweeps)
            yield from _run(size, scene, made, seconds, sweeps=sweeps)


def _scene(size: Size) -> Scenario:
    """Make a scene in which a carrier waits."""
    side = round(size.elements**0.5)
    scene = replace(yard((Still(lane(0.0)[0]),), shadow_db=42.0, snr_db=-8.0, columns=side, rows=side), tones=TONES)
    return Scenario("large", "a carrier waits", TestbedConfig(scene), time_constant_ms=TIME_CONSTANT_MS)


def _run(size: Size, scene: Scenario, made: list[bytes], seconds: float, *, sweeps: bool) -> Iterator[Row]:
    name = f"{size}, {'sweeps' if sweeps else 'never repeating'}"
    with work_folder() as folder:
        path = write_settings(scene, folder, _more(size))
        text = path.read_text(encoding="utf-8").replace("\n[tones]", "spacing_mm = 40.0\n\n[tones]")
        path.write_text(text, encoding="utf-8")
        played = play(path, made, seconds, bursts_per_s=size.bursts_per_s)
    yield _lost(name, size, played, seconds)
    most_ms = 1e3 / size.bursts_per_s + BUDGET_MS if size.elements == PROMPT_ELEMENTS else None
    yield _latency(f"{name}: burst to pattern", played.latencies_ms(played.pattern_ns), most_ms)
    yield _latency(f"{name}: burst to state", played.latencies_ms(played.state_ns), None)
    yield _kept_up(name, size, played, asked=sweeps)
    engine = float(np.sum(played.engine_us)) / 1e6 / seconds
    yield Row(
        f"{name}: the service's core in use",
        100.0 * played.cpu_s / seconds,
        "%",
        note=f"of which the engine {100.0 * engine:.0f} (wall clock); "
        f"{len(played.pattern_ns)} patterns from {len(played.sent_ns)} bursts",
    )


def _kept_up(name: str, size: Size, played: Played, *, asked: bool) -> Row:
    """Say how many frames were worked off by the time the last was sent."""
    last_ns = int(played.sent_ns[-1])
    done = sum(at <= last_ns for at in played.state_ns.values())
    pace = done * size.frames / ((last_ns - int(played.sent_ns[0])) / 1e9)
    target, met = (f">= {KEPT_UP * FRAMES_PER_S:.0f}", pace >= KEPT_UP * FRAMES_PER_S) if asked else ("", None)
    return Row(f"{name}: worked off while they came", pace, "frames/s", target, met, f"sent: {FRAMES_PER_S:.0f}")


def _more(size: Size) -> str:
    """Write the settings beside those of the scene."""
    basis = REGION.replace("[aperture]\n", f"[aperture]\nsize = {size.columns}\n")
    return f"{basis}\n[refresh]\nbudget_ms = {BUDGET_MS}\nleast_gain = 0.0\n"


def _bursts(size: Size, scene: Scenario, seconds: float, *, sweeps: bool) -> list[bytes]:
    """Encode bursts; as the scene stands still, one exact channel serves them all."""
    rng = np.random.default_rng([3, size.elements, sweeps])
    truth = Scene(scene.config, seed=1)
    direct, surface = (part.astype(np.complex64) for part in truth.truth(0.0))
    flat = np.ascontiguousarray(surface.reshape(size.elements, -1)).view(np.float32)
    spread = np.sqrt(truth.noise_power / 2.0).astype(np.float32)[:, None]
    made = []
    for number, states in enumerate(_patterns(size, rng, seconds, sweeps=sweeps)):
        response = (states.astype(np.float32) @ flat).view(np.complex64).reshape(size.frames, *direct.shape) + direct
        noise = rng.standard_normal((*response.shape[:-1], 2 * response.shape[-1]), dtype=np.float32) * spread
        burst = Burst(
            run=1,
            seq=FIRST_SEQ,
            t_ns=1_750_000_000_000_000_000 + number,
            dt_ns=FRAME_NS,
            elements=size.elements,
            patterns=pack(states),
            response=response + noise.view(np.complex64),
            keep=np.ones(size.frames, dtype=np.bool_),
        )
        made.append(encode_pilots("yard", burst))
    return made


def _patterns(size: Size, rng: np.random.Generator, seconds: float, *, sweeps: bool) -> Iterator[NDArray[np.int8]]:
    """Patterns (B, N) of burst after burst, of no more than a run needs."""
    sounded = np.arange(size.frames) % REFERENCE_EVERY != 0
    each = int(sounded.sum())
    states = np.ones((size.frames, size.elements), dtype=np.int8)
    needed = round(seconds * size.bursts_per_s)
    if not sweeps:
        for _ in range(min(FRESH_BURSTS[size.elements], needed)):
            states[sounded] = rng.choice(np.array([-1, 1], dtype=np.int8), (each, size.elements))
            yield states
        return
    cycle = sweep(size.elements, rng)
    bursts = -(-len(cycle) // each)
    for number in range(min(SWEEPS * bursts, needed)):
        first = number % bursts * each
        states[sounded] = 1
        part = cycle[first : first + each]
        states[np.flatnonzero(sounded)[: len(part)]] = part
        yield states


def _lost(name: str, size: Size, played: Played, seconds: float) -> Row:
    sent, status = len(played.sent_ns), played.status
    missing = sent - len(played.state_ns) + status["lost"] + sum(status["refused"].values())
    late_ms = float(np.max(np.diff(played.sent_ns))) / 1e6 - 1e3 / size.bursts_per_s
    pace = sent * size.frames / seconds
    note = f"of {sent} bursts in {seconds:g} s, {pace:.0f} frames/s; the sender was late by {late_ms:.1f} ms at most"
    return Row(f"{name}: bursts lost", missing, "bursts", "0", missing == 0, note)


def _latency(name: str, values_ms: NDArray[np.float64], target_ms: float | None) -> Row:
    half, most, rare = np.percentile(values_ms, [50, 99, 99.9])
    note = f"median {half:.2f}, 99.9 % {rare:.2f}, largest {values_ms.max():.2f} ms"
    if target_ms is None:
        return Row(f"{name}, 99 %", most, "ms", note=note)
    note += "; asked: one burst and the budget"
    return Row(f"{name}, 99 %", most, "ms", f"<= {target_ms:.1f}", bool(most <= target_ms), note)
