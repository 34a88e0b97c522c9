"""Ten million frames on end: the estimate stays what a fresh engine makes of the last frames, and P a covariance.

A link of 16 elements whose direct and surface path turn, each at its own rate; phases are followed. The whole engine
takes bursts of 256 frames as fast as it can. At the end a fresh engine is fed the last twelve time constants alone,
and both estimates of the channel are compared, apart from one phase common to all of it, which only the history of the
loops decides. How far apart they may be:

- Estimates are posterior means. What was before the window is forgotten as exp(−m) in m time constants at least, in the
  mean as in the covariance (`rls`), so exp(−m) of the channel is left of any difference there was.
- Both measure the noise, in the unit of which they estimate, with a memory of so many frames; what differed before the
  window (at most the spread of such an average) is left by exp(−frames / memory).
- Under ``resetting`` the estimate leans on the variances granted before any data, which either engine takes from its
  own first burst. A coefficient of variance p under prior p₀ is shrunk by about p/p₀, so priors p₀ and p₀' move it
  apart by p |1/p₀ − 1/p₀'| of itself. ``exponential`` forgets the prior as well.
- Rounding: 10⁻¹⁶ a step, forgotten as all else.
"""

import math
import time
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchmarks.row import Row
from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Elements
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.estimation.noise import MEMORY_FRAMES
from tracker.engine.estimation.rls import BlockRls
from tracker.engine.events import Alarm
from tracker.engine.panel import pack
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker

FRAMES, FRAME_NS = 256, 35_714
ELEMENTS, TONES, TAPS = 16, 24, 6
TIME_CONSTANT_S = 0.2
WINDOW = 12.0
"""Time constants that the fresh engine is fed."""
DIRECT_HZ, SURFACE_HZ = 11.0, -7.0
POWER = 0.5
"""Of the surface path on a tone under random patterns, in units of the noise; the direct path has as much."""
LOOK_EVERY = 256
"""Bursts from one look at the covariance to the next."""
MARGIN = 3.0
"""What is expected holds to first order."""

Complex = NDArray[np.complex128]


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    for forgetting in ("resetting", "exponential"):
        yield from _endure(forgetting, 100_000 if quick else 10_000_000)


@dataclass(frozen=True, slots=True, eq=False)
class Estimate:
    """What an engine holds.

    Parameters
    ----------
    coefficients : ndarray of complex, shape (N + 1, Q)
        In units of the noise amplitude.
    covariance : ndarray, shape (N + 1, N + 1)
    prior : ndarray, shape (N + 1,)
    noise : float
        Noise power on a tone.
    """

    coefficients: Complex
    covariance: NDArray[Any]
    prior: NDArray[np.float64]
    noise: float

    @classmethod
    def of(cls, tracker: Tracker) -> "Estimate":
        """Take it out of an engine."""
        state = tracker.snapshot()["estimator"]
        rls = BlockRls.restore(state["bank"]["filters"][0])
        return cls(rls.coefficients, rls.covariance, rls.prior, float(state["reception"]["noise"]["power"][0]))


class Link:
    """A link without end; bursts come from their numbers alone, so that a window can be had again."""

    def __init__(self) -> None:
        rng = np.random.default_rng(41)
        self.basis = delay_basis(2 * TONES, TONES // 2, TONES, TAPS, 1)
        size = self.basis.shape[1]
        strength = math.sqrt(POWER * TONES / size / 2.0)
        self.direct = strength * rng.standard_normal((1, 2 * size)).view(np.complex128)
        surface = rng.standard_normal((ELEMENTS, 2 * size)).view(np.complex128)
        self.surface = strength / math.sqrt(ELEMENTS) * surface

    def burst(self, number: int) -> Burst:
        """Sound random patterns, and one and the same in every eighth frame."""
        rng = np.random.default_rng([42, number])
        states = rng.choice([-1.0, 1.0], (FRAMES, ELEMENTS))
        states[::8] = 1.0
        time_s = (number * FRAMES + np.arange(FRAMES))[:, None] * (FRAME_NS / 1e9)
        outputs = np.exp(2j * np.pi * DIRECT_HZ * time_s) * self.direct
        outputs = outputs + np.exp(2j * np.pi * SURFACE_HZ * time_s) * (states @ self.surface)
        noise = rng.standard_normal((FRAMES, 2 * TONES), dtype=np.float32).view(np.complex64)
        heard = outputs @ self.basis.T + noise * math.sqrt(0.5)
        return Burst(
            run=1,
            seq=number,
            t_ns=number * FRAMES * FRAME_NS,
            dt_ns=FRAME_NS,
            elements=ELEMENTS,
            patterns=pack(states),
            response=heard.astype(np.complex64)[:, None],
            keep=np.ones(FRAMES, dtype=np.bool_),
        )

    def engine(self, forgetting: str) -> Tracker:
        """Make an engine for it that follows phases; the search for patterns is not what is tried here."""
        return Tracker(
            Config(
                receivers=1,
                delay=self.basis,
                aperture=Elements(ELEMENTS),
                forgetting=forgetting,
                time_constant_s=TIME_CONSTANT_S,
                follow_phase=True,
                every_bursts=1 << 40,
            )
        )


def expected(one: Estimate, other: Estimate) -> float:
    """Give how far apart estimates may be, relative to their size; see the head of this file."""
    frames = WINDOW * TIME_CONSTANT_S * 1e9 / FRAME_NS
    forgotten = math.exp(-WINDOW)
    degrees = MEMORY_FRAMES * (TONES - one.coefficients.shape[1])
    noise = math.exp(-frames / MEMORY_FRAMES) / math.sqrt(degrees)
    leaning = float(np.max(one.covariance.diagonal().real * np.abs(1.0 / one.prior - 1.0 / other.prior)))
    return MARGIN * (forgotten + noise + leaning)


def apart(one: Complex, other: Complex) -> float:
    """Give the distance of two estimates relative to their size, but for a common phase."""
    turn = np.vdot(other, one)
    return float(np.linalg.norm(one - turn / abs(turn) * other) / np.linalg.norm(one))


def _endure(forgetting: str, frames: int) -> Iterator[Row]:
    link = Link()
    tracker = link.engine(forgetting)
    bursts = -(-frames // FRAMES)
    window = round(WINDOW * TIME_CONSTANT_S * 1e9 / (FRAMES * FRAME_NS))
    alarms, smallest, largest, began = 0, np.inf, 0.0, time.perf_counter()
    for number in range(bursts):
        alarms += _feed(tracker, link.burst(number))
        if number % LOOK_EVERY == 0 or number == bursts - 1:
            found = Estimate.of(tracker)
            unit = 1.0 / np.sqrt(found.prior)
            values = np.linalg.eigvalsh(unit[:, None] * found.covariance * unit)
            smallest, largest = min(smallest, float(values[0])), max(largest, float(values[-1]))
    took = time.perf_counter() - began
    fresh = link.engine(forgetting)
    for number in range(bursts - window, bursts):
        _feed(fresh, link.burst(number))
    old, new = Estimate.of(tracker), Estimate.of(fresh)
    name = f"{forgetting}, {bursts * FRAMES:.1e} frames with phases followed"
    difference = apart(old.coefficients, new.coefficients)
    most = expected(old, new) if forgetting == "resetting" else expected(old, old)
    note = (
        f"fresh engine over the last {window * FRAMES} frames; {bursts * FRAMES / took:.0f} frames/s; {alarms} alarms"
    )
    yield Row(f"{name}: from a fresh estimate", difference, "of it", f"<= {most:.1e}", difference <= most, note)
    looks = f"{-(-bursts // LOOK_EVERY)} looks, the last at the end; largest eigenvalue {largest:.3g}"
    yield Row(f"{name}: smallest eigenvalue of P", smallest, "of the prior", "> 0", smallest > 0.0, looks)


def _feed(tracker: Tracker, burst: Burst) -> int:
    """Hand a burst to an engine; return how many alarms it raised."""
    tracker.admit(burst, burst.end_ns)
    return sum(isinstance(event, Alarm) for event in tracker.advance([burst], Steps(1)).events)
