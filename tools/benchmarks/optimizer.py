"""The optimizer against long annealings, against general-purpose solvers, and against what its parts must cost."""

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from statistics import median
from typing import Any, cast

import dimod
import numpy as np
from dwave.samplers import SimulatedAnnealingSampler, TabuSampler
from numpy.typing import NDArray

from benchmarks._annealing import anneal
from benchmarks._channels import channel
from benchmarks.row import Row
from tracker.engine.panel import Limits
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.flips import Climb, Effort, optimize
from tracker.engine.search.one_carrier import one_carrier_optimum, rate_bound
from tracker.engine.search.rate import rate

UNBOUNDED = Steps(10**9)
CHAINS = 4
SHORTFALL = 1e-3
"""How far below the best annealing counts as having got there."""


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    yield from _against_annealing(1024, 256, 1, 4 if quick else 20, 40_000 if quick else 400_000)
    yield from _against_annealing(256, 128, 2, 2 if quick else 12, 40_000 if quick else 400_000)
    yield from _within_deadline(2 if quick else 12)
    yield from _warm(20 if quick else 200)
    yield from _bound(5 if quick else 50)
    yield from _one_carrier(1 if quick else 3)


def _thorough(link: Channel, steps: int | None = None) -> Climb:
    return optimize(link, None, Limits(), UNBOUNDED if steps is None else Steps(steps), Effort.THOROUGH)


def _against_annealing(elements: int, tones: int, receivers: int, channels: int, steps: int) -> Iterator[Row]:
    """Give both the same channels; the annealing keeps the best of its chains."""
    size = f"N {elements}, K {tones}, R {receivers}"
    gaps, times, whole, annealing = [], [], [], []
    for number in range(channels):
        link = channel(number, elements, tones, receivers)
        begun = time.perf_counter()
        reached = anneal(link, steps, CHAINS, seed=number)
        annealing.append(time.perf_counter() - begun)
        found = _thorough(link)
        gaps.append(1.0 - found.rate / reached)
        whole.append(_best_time(lambda link=link: _thorough(link), 3))  # type: ignore[misc]
        if gaps[-1] <= SHORTFALL:
            least = _least_steps(link, (1.0 - SHORTFALL) * reached, found.steps)
            times.append(_best_time(lambda link=link, least=least: _thorough(link, least), 3))  # type: ignore[misc]
    worst = 100.0 * max(0.0, *gaps)
    ahead = sum(gap < -1e-9 for gap in gaps)
    level = sum(abs(gap) <= 1e-9 for gap in gaps)
    yield Row(
        f"thorough, {size}: worst shortfall against annealing",
        worst,
        "%",
        "<= 0.1",
        worst <= 100.0 * SHORTFALL,
        f"best of {CHAINS} annealings of {steps} flips, {channels} channels, half by rays, half Rayleigh; "
        f"level to 9 digits in {level}, ahead in {ahead}" + (f" by up to {-100.0 * min(gaps):.2f} %" if ahead else ""),
    )
    if times:
        yield Row(
            f"thorough, {size}: time to within 0.1 % of that annealing",
            1e3 * median(times),
            "ms",
            note=f"median; longest {1e3 * max(times):.1f} ms; whole search {1e3 * median(whole):.1f} ms; "
            f"annealing took {median(annealing):.1f} s, {median(annealing) / median(times):.0f} times as long",
        )


def _least_steps(link: Channel, wanted: float, enough: int) -> int:
    """Find by bisection how many steps reach a rate; the rate never falls with more steps."""
    low, high = -1, enough
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if _thorough(link, middle).rate >= wanted else (middle, high)
    return high


@dataclass(slots=True)
class _Deadline:
    """A budget by the clock, as the service has it."""

    end: float

    def spent(self, steps: int) -> bool:
        return time.perf_counter() >= self.end


def _within_deadline(channels: int) -> Iterator[Row]:
    """N = 1024: what a search cut off by the clock reaches, and how late it is."""
    for milliseconds in (2.0, 5.0):
        losses, late = [], []
        for number in range(channels):
            link = channel(number, 1024, 256, 1)
            whole = _thorough(link).rate
            tries = []
            for _ in range(5):
                begun = time.perf_counter()
                found = optimize(link, None, Limits(), _Deadline(begun + milliseconds / 1e3), Effort.THOROUGH)
                tries.append((1e3 * (time.perf_counter() - begun) - milliseconds, 1.0 - found.rate / whole))
            # The median of five: what else runs on the machine stalls one or the other.
            late.append(median(lateness for lateness, _ in tries))
            losses.append(100.0 * median(loss for _, loss in tries))
        yield Row(
            f"thorough, N 1024, K 256: lost when cut off after {milliseconds:.0f} ms",
            median(losses),
            "%",
            note=f"median of {channels} channels; worst {max(losses):.2f} %; "
            f"returned {median(late):.2f} ms after the deadline (worst {max(late):.2f})",
        )


def _warm(rounds: int) -> Iterator[Row]:
    """Call from a pattern that is best already, beside one plain evaluation of its rate."""
    for elements, tones in ((256, 128), (1024, 256)):
        calls, evaluations = [], []
        for number in range(6):
            link = channel(number, elements, tones, 1)
            best = _thorough(link).states
            settled = optimize(link, best, Limits(), UNBOUNDED, Effort.CLIMB).states
            calls.append(
                _best_time(
                    lambda link=link, settled=settled: optimize(link, settled, Limits(), UNBOUNDED, Effort.CLIMB),  # type: ignore[misc]
                    rounds,
                )
            )
            evaluations.append(_best_time(lambda link=link, settled=settled: rate(link, settled), rounds))  # type: ignore[misc]
        yield Row(
            f"warm call at its optimum, N {elements}, K {tones}",
            1e6 * median(calls),
            "µs",
            note=f"median of 6 channels (longest {1e6 * max(calls):.0f}); proves that no flip gains and tries "
            f"pairs, in the time of {median(calls) / median(evaluations):.0f} evaluations of the rate",
        )


def _bound(rounds: int) -> Iterator[Row]:
    """rate_bound beside sorting alone, the part that no exact method can leave out."""
    for elements, tones in ((256, 128), (1024, 256)):
        link = channel(1, elements, tones, 1)
        keys = np.random.default_rng(3).standard_normal((tones, elements))
        ours = _best_time(lambda link=link: rate_bound(link), rounds)  # type: ignore[misc]
        limit = _best_time(lambda keys=keys: np.argsort(keys, axis=1), rounds)  # type: ignore[misc]
        yield Row(
            f"rate_bound, N {elements}, K {tones}, over its sorting alone",
            ours / limit,
            "ratio",
            note=f"{1e3 * ours:.2f} ms against {1e3 * limit:.2f} ms",
        )


def _one_carrier(problems: int) -> Iterator[Row]:
    """Largest power on one carrier, N = 1024, as a binary quadratic problem for solvers that know nothing else."""
    exact: list[float] = []
    flips: list[float] = []
    tabu: list[float] = []
    annealing: list[float] = []
    for number in range(problems):
        rng = np.random.default_rng([5, number])
        elements = rng.standard_normal(1024) + 1j * rng.standard_normal(1024)
        direct = complex(rng.standard_normal(), rng.standard_normal()) * 10.0
        _, power = one_carrier_optimum(direct, elements)
        exact.append(_best_time(lambda d=direct, h=elements: one_carrier_optimum(d, h), 5))  # type: ignore[misc]
        # The same problem four times side by side, so that the search by flips has to do it and not the exact method.
        flat = Channel(np.full((4, 1), 0.5 + 0j), np.array([[2 * direct]]), (2 * elements)[:, None, None])
        wanted = math.log2(1.0 + power * (1.0 - 1e-9))
        least = _least_steps(flat, wanted, 10_000)
        if _thorough(flat, least).rate >= wanted:
            flips.append(_best_time(lambda flat=flat, least=least: _thorough(flat, least), 3))  # type: ignore[misc]
        problem, offset = _quadratic(direct, elements)
        for seconds, solve in ((tabu, _tabu), (annealing, _sampled_annealing)):
            seconds.append(_effort(lambda effort, s=solve, b=problem: s(b, effort), offset, power))  # type: ignore[misc]
    peer = min(median(tabu), median(annealing))
    yield Row(
        "one carrier, N 1024: fastest solver over the exact method",
        peer / median(exact),
        "ratio",
        "> 1",
        peer > median(exact),
        f"{1e6 * median(exact):.0f} µs; dwave-samplers tabu {1e3 * median(tabu):.0f} ms, annealing "
        f"{1e3 * median(annealing):.0f} ms, each with the least effort, by doubling, that reaches the same value; "
        "most of that is their taking in half a million coefficients",
    )
    if len(flips) == problems:
        yield Row(
            "one carrier, N 1024: fastest solver over the search by flips",
            peer / median(flips),
            "ratio",
            "> 1",
            peer > median(flips),
            f"{1e3 * median(flips):.2f} ms to the optimum, to 9 digits, found in {len(flips)} of {problems}",
        )


def _tabu(problem: Any, milliseconds: int) -> Any:
    return cast(Any, TabuSampler)().sample(problem, timeout=milliseconds, num_reads=1, seed=1)


def _sampled_annealing(problem: Any, sweeps: int) -> Any:
    return cast(Any, SimulatedAnnealingSampler)().sample(problem, num_sweeps=sweeps, num_reads=1, seed=1)


def _quadratic(direct: complex, elements: NDArray[np.complex128]) -> tuple[Any, float]:
    """Write −|d + hᵀs|² as linear and quadratic terms, and the constant left out."""
    left, right = np.triu_indices(len(elements), 1)
    coupling = -2.0 * (elements[left] * elements[right].conj()).real
    linear = -2.0 * (direct.conjugate() * elements).real
    model = dimod.BinaryQuadraticModel.from_numpy_vectors(linear, (left, right, coupling), 0.0, dimod.SPIN)
    return model, -(abs(direct) ** 2) - float((np.abs(elements) ** 2).sum())


def _effort(solve: Callable[[int], Any], offset: float, power: float) -> float:
    """Double a solver's effort until it reaches a power; seconds that the last call took."""
    effort = 1
    while True:
        begun = time.perf_counter()
        found = solve(effort)
        seconds = time.perf_counter() - begun
        if -(found.first.energy + offset) >= power * (1.0 - 1e-9) or effort >= 1 << 14:
            return seconds
        effort *= 2


def _best_time(call: Callable[[], object], rounds: int) -> float:
    """Give the shortest time of several calls, seconds: what the call costs when nothing else runs."""
    call()
    best = math.inf
    for _ in range(rounds):
        begun = time.perf_counter()
        call()
        best = min(best, time.perf_counter() - begun)
    return best
