"""How cost grows: frames a second through the engine against elements N, columns r of the basis, and tones K.

A still link with a channel of six paths, one receiver, bursts of 64 frames of orthogonal sweeps that repeat unless told
otherwise, default settings; bursts go through `Tracker.advance`, search and all, once the first pattern stands.
Processor time is counted, so that other programs on the machine disturb little; the speed of its matrix multiply is
measured beside. Bases with fewer columns than elements are random orthonormal ones, and the channel lies in their span.

`tools/bench --only growth --pictures FOLDER` draws the figures.
"""

import math
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from statistics import median

import numpy as np

from benchmarks._curves import Curve, Panel, page
from benchmarks.row import Row
from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import ApertureBasis, Columns, Elements
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.panel import pack
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.simulation.sounding import sweep

FRAMES, FRAME_NS = 64, 35_714
TAPS, PATHS = 16, 6
STEPS = 400
# Power on a tone under random patterns, in units of the noise.
POWER = 0.2
# Pace of the fast testbed, frames/s, drawn for comparison.
PACE = 28_000.0


@dataclass(frozen=True, slots=True)
class Line:
    """One curve: what is varied, over which values, and what stays.

    Parameters
    ----------
    name : str
    axis : str
        ``N``, ``r`` or ``K``.
    values, quick : tuple of int
        Values taken, and those taken by a quick run.
    elements, columns, tones : int
        What the others are; as many columns as elements where there are 0.
    sweeps : bool
        Whether sweeps are sounded; else patterns at random.
    """

    name: str
    axis: str
    values: tuple[int, ...]
    quick: tuple[int, ...]
    elements: int = 1024
    columns: int = 0
    tones: int = 128
    sweeps: bool = True

    def sizes(self, value: int) -> tuple[int, int, int]:
        """N, r and K at a value."""
        elements = value if self.axis == "N" else self.elements
        columns = value if self.axis == "r" else self.columns
        return elements, columns or elements, value if self.axis == "K" else self.tones


LINES = (
    Line("element by element, sweeps", "N", (64, 128, 256, 512, 1024, 2048, 4096), (64, 256, 512)),
    Line("element by element, random", "N", (64, 128, 256, 512, 1024, 2048, 4096), (64, 256), sweeps=False),
    Line("r = 64 columns, sweeps", "N", (128, 256, 512, 1024, 2048, 4096), (256, 1024), columns=64),
    Line("N = 1024, K = 128", "r", (16, 32, 64, 128, 256, 512), (16, 64)),
    Line("N = 4096, K = 128", "r", (16, 32, 64, 128, 256, 512), (64,), elements=4096),
    Line("N = 256 element by element", "K", (32, 64, 128, 256, 512, 1024), (64, 256), elements=256),
    Line("N = 1024, r = 64 columns", "K", (32, 64, 128, 256, 512, 1024), (64, 256), columns=64),
)
AXES = {"N": "elements N, at K = 128", "r": "columns r", "K": "tones K"}


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    multiply = _multiply_gflops()
    yield Row("matrix multiply of this core, 1024 × 1024, float64", multiply, "Gflop/s")
    for line in LINES:
        before: tuple[int, float] | None = None
        for value in line.quick if quick else line.values:
            elements, columns, tones = line.sizes(value)
            pace = _pace(elements, columns, tones, 0.2 if quick else 1.0, sweeps=line.sweeps)
            note = f"{pace / PACE:.2g} of {PACE:.0f} frames/s; {multiply * 1e9 / pace:.3g} multiply flops a frame"
            if before is not None:
                power = math.log(before[1] / pace) / math.log(value / before[0])
                note += f"; cost grew as {line.axis}^{power:.1f}"
            before = (value, pace)
            name = f"N {elements}, r {columns}, K {tones}" + ("" if line.sweeps else ", random patterns")
            yield Row(name, pace, "frames/s", note=note, curve=f"{line.axis}: {line.name}", x=float(value))


def picture(measured: Sequence[Row]) -> str:
    """Draw the rows as SVG: a panel each for N, r and K."""
    panels = []
    for axis, label in AXES.items():
        curves = []
        for line in (line for line in LINES if line.axis == axis):
            points = [(row.x, row.value) for row in measured if row.curve == f"{axis}: {line.name}" and row.x]
            curves.append(Curve(line.name, tuple(points)))
        panels.append(Panel(label, tuple(curve for curve in curves if curve.points)))
    multiply = next(row.value for row in measured if row.unit == "Gflop/s")
    title = "Frames a second through the engine, one core"
    below = f"still link, one receiver, bursts of {FRAMES}; this core multiplies matrices at {multiply:.0f} Gflop/s"
    return page(title, below, "frames/s", panels, (PACE, "28 000 frames/s"))


def _pace(elements: int, columns: int, tones: int, seconds: float, *, sweeps: bool = True) -> float:
    """Frames a second of processor time, the median over bursts."""
    rng = np.random.default_rng([5, elements, columns, tones])
    fft = 2 * tones
    aperture = _aperture(rng, elements, columns)
    config = Config(receivers=1, delay=delay_basis(fft, tones // 2, tones, min(TAPS, tones), 1), aperture=aperture)
    tracker, took = Tracker(config), []
    made = _bursts(rng, aperture, tones, fft, sweeps=sweeps)
    spent = 0.0
    # The first pattern is searched for thoroughly, and again now and then while the estimate forms.
    warm = 16 + 2 * elements // FRAMES
    for number, burst in enumerate(made):
        tracker.admit(burst, burst.end_ns)
        begun = time.thread_time()
        tracker.advance([burst], Steps(STEPS))
        once = time.thread_time() - begun
        spent += once
        if number >= warm:
            took.append(once)
        if (spent >= seconds and len(took) >= 8) or len(took) >= 1000:
            break
    return FRAMES / median(took)


def _aperture(rng: np.random.Generator, elements: int, columns: int) -> ApertureBasis:
    if columns == elements:
        return Elements(elements)
    waves = rng.standard_normal((elements, 2 * columns)).view(np.complex128)
    return Columns(np.linalg.qr(waves)[0], np.ones(columns))


def _bursts(
    rng: np.random.Generator, aperture: ApertureBasis, tones: int, fft: int, *, sweeps: bool
) -> Iterator[Burst]:
    """Sound sweep after sweep, or patterns at random, without end."""
    elements = aperture.elements
    delays = rng.uniform(0.0, min(TAPS, tones) - 3.0, PATHS)
    places = (np.arange(tones) - tones // 2) / fft
    shape = np.exp(-2j * np.pi * np.outer(delays, places))
    gains = rng.standard_normal((aperture.size + 1, 2 * PATHS)).view(np.complex128) * math.sqrt(POWER / (2 * PATHS))
    surface = aperture.surface(gains[1:] / math.sqrt(aperture.size))
    heard = (np.concatenate([gains[:1], surface]) @ shape).astype(np.complex64).view(np.float32)
    cycle = sweep(elements, rng) if sweeps else np.empty((0, elements), dtype=np.int8)
    number, place = 0, 0
    while True:
        if sweeps:
            states = cycle[(place + np.arange(FRAMES)) % len(cycle)]
        else:
            states = (2 * rng.integers(0, 2, (FRAMES, elements)) - 1).astype(np.int8)
        place += FRAMES
        noise = rng.standard_normal((FRAMES, 2 * tones), dtype=np.float32) * np.float32(math.sqrt(0.5))
        response = (heard[0] + states.astype(np.float32) @ heard[1:] + noise).view(np.complex64)
        yield Burst(
            run=1,
            seq=number,
            t_ns=number * FRAMES * FRAME_NS,
            dt_ns=FRAME_NS,
            elements=elements,
            patterns=pack(states),
            response=response[:, None, :],
            keep=np.ones(FRAMES, dtype=np.bool_),
        )
        number += 1


def _multiply_gflops() -> float:
    """Speed of a matrix multiply of this core, the median of some."""
    size = 1024
    square = np.random.default_rng(1).standard_normal((size, size))
    product, took = np.empty_like(square), []
    for _ in range(7):
        begun = time.thread_time()
        np.matmul(square, square, out=product)
        took.append(time.thread_time() - begun)
    return 2e-9 * size**3 / median(took)
