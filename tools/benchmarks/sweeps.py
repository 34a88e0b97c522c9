"""Sweeps of orthogonal patterns against the dense filter, and kept products against worked-out ones, in one run.

The filters are held against each other by themselves, and at work in the whole engine: two trackers take the same
bursts in turn, one of which notices sweeps.
"""

import time
from collections.abc import Callable, Iterator
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from benchmarks._still_link import Link
from benchmarks.row import Row
from tracker.engine import panel
from tracker.engine.estimation.products import ProductCache
from tracker.engine.estimation.rls import BlockRls, forgetting
from tracker.engine.orthogonal.cycle import SweepDetector
from tracker.engine.orthogonal.lookout import MIXED
from tracker.engine.orthogonal.sweeps import SweepRls
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.simulation.sounding import sweep

FRAMES = 64
SPACING_S = 1 / 28_000
TIME_CONSTANT_S = 0.2
FORGOTTEN = forgetting("resetting", FRAMES * SPACING_S, TIME_CONSTANT_S)


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    for elements, outputs, turns in ((256, 16, 40), (256, 32, 40), (1024, 16, 20), (1024, 32, 20), (4096, 16, 4)):
        if quick and elements == 4096:
            continue
        yield from _against_dense(elements, outputs, turns // 4 if quick else turns)
    for elements, in_use in ((256, False), (256, True), (1024, False), (1024, True)):
        yield _engine(elements, in_use=in_use, bursts=60 if quick else 240)
    yield from _products(1024 if quick else 4096, 64 if quick else 128, 10 if quick else 30)


def _against_dense(elements: int, outputs: int, turns: int) -> Iterator[Row]:
    """Take the same frames in both filters in turn, from packed patterns to the estimate; and copying beside it."""
    rng = np.random.default_rng(elements + outputs)
    states = sweep(elements, rng)
    packed, order = panel.pack(states), states.shape[0]
    prior = np.full(elements + 1, 3.0 / elements)
    prior[0] = 6.0
    detector = SweepDetector(elements)
    heard = (rng.normal(size=(8, FRAMES, outputs)) + 1j * rng.normal(size=(8, FRAMES, outputs))).astype(np.complex128)

    def numbers(block: int) -> NDArray[np.intp]:
        found = detector.rows(packed[(block * FRAMES + np.arange(FRAMES)) % order])
        if found is None:
            raise RuntimeError("the sweep was not found")
        return found

    first = _seconds(lambda: [numbers(block) for block in range(-(-order // FRAMES))])
    filters = SweepRls(prior, outputs, detector), BlockRls(prior, outputs)

    def diagonal(block: int) -> None:
        found = numbers(block)
        filters[0].forget(*FORGOTTEN)
        filters[0].update(found, heard[block % 8])

    def dense(block: int) -> None:
        z = np.ones((FRAMES, elements + 1))
        z[:, 1:] = panel.unpack(packed[(block * FRAMES + np.arange(FRAMES)) % order], elements)
        filters[1].forget(*FORGOTTEN)
        filters[1].update(z, heard[block % 8])

    # What any filter must move a frame: read what is heard, read and write the row's state, write both innovations.
    source, target = np.ones((5, FRAMES, outputs), dtype=np.complex128), np.empty((5, FRAMES, outputs), np.complex128)
    took: dict[str, list[float]] = {"sweep": [], "dense": [], "read": [], "copy": []}
    for turn in range(turns):
        for part in range(8):
            block = turn * 8 + part
            took["sweep"].append(_seconds(lambda block=block: diagonal(block)))  # type: ignore[misc]
            took["read"].append(_seconds(lambda: filters[0].coefficients))
            took["copy"].append(_seconds(lambda: np.copyto(target, source)))
        took["dense"].append(_seconds(lambda turn=turn: dense(turn)))  # type: ignore[misc]
    speed = {name: FRAMES / float(np.median(times)) for name, times in took.items()}
    both = FRAMES / float(np.median(np.add(took["sweep"], took["read"])))
    name = f"N {elements}, D {outputs}, B {FRAMES}"
    note = f"{speed['sweep']:,.0f} against {speed['dense']:,.0f} frames/s; M = {order}"
    ratio = speed["sweep"] / speed["dense"]
    yield Row(f"sweeps over dense filter, {name}", ratio, "times", "> 1", ratio > 1, note)
    note = f"{both:,.0f} frames/s when the estimate is read after each block"
    ratio = both / speed["dense"]
    yield Row(f"the same with the estimate read, {name}", ratio, "times", "> 1", ratio > 1, note)
    yield Row(
        f"sweeps over copying the data, {name}",
        speed["sweep"] / speed["copy"],
        "ratio",
        note=f"{speed['copy']:,.0f} frames/s moved at most; calls into numpy, not memory, bound blocks of {FRAMES}",
    )
    note = "looking patterns up and proving them orthogonal, once, in the first sweep"
    yield Row(f"finding the sweep, N {elements}", order / first, "frames/s", "> 28 000", order / first > 28_000, note)


def _engine(elements: int, *, in_use: bool, bursts: int) -> Row:
    """Cost of a burst in the whole engine without a filter for sweeps over that with one."""
    link = Link(1, elements)
    config = link.config(36_000.0)
    trackers = Tracker(replace(config, sweeps_from=None)), Tracker(replace(config, sweeps_from=0))
    took: tuple[list[float], list[float]] = ([], [])
    other = link.rng.choice([-1.0, 1.0], elements)
    for number in range(bursts):
        states = link.states(FRAMES - FRAMES // 8 if in_use else FRAMES)
        if in_use:
            states = np.insert(states, np.arange(0, states.shape[0], 7), other, axis=0)
        burst = link.burst(number, states)
        for tracker, times in zip(trackers, took, strict=True):
            tracker.admit(burst, burst.end_ns)
            times.append(_seconds(lambda tracker=tracker, burst=burst: tracker.advance([burst], Steps(50))))  # type: ignore[misc]
    # The first sweeps are learned, and the first pattern is looked for.
    dense, swept = (float(np.median(times[bursts // 3 :])) for times in took)
    between = ", every eighth frame another pattern" if in_use else ""
    note = f"{1e3 * dense:.2f} against {1e3 * swept:.2f} ms a burst of {FRAMES} frames"
    name = f"whole engine, dense filter over sweeps, N {elements}{between}"
    if in_use and elements * FRAMES < MIXED * (config.sweeps_from or 0):
        return Row(name, dense / swept, "times", note=f"{note}; left to the dense filter as a rule")
    return Row(name, dense / swept, "times", "> 1", dense / swept > 1, note)


def _products(elements: int, size: int, turns: int) -> Iterator[Row]:
    """Products of a sweep's patterns: worked out, found, and as a plain matrix product of states at hand."""
    rng = np.random.default_rng(1)
    columns = np.linalg.qr(rng.normal(size=(elements, size)) + 1j * rng.normal(size=(elements, size)))[0]
    states = sweep(elements, rng)
    packed = panel.pack(states)
    full = ProductCache(columns, 100.0)
    for start in range(0, packed.shape[0], 256):
        full.products(packed[start : start + 256])
    empty = ProductCache(columns, 0.0)
    parts = np.ascontiguousarray(columns).view(np.float64)
    took: dict[str, list[float]] = {"found": [], "worked out": [], "multiplied": [], "copied": []}
    target = np.empty((FRAMES, size), dtype=np.complex128)
    for turn in range(turns):
        index = (turn * FRAMES + np.arange(FRAMES)) % packed.shape[0]
        block, shown = packed[index], states[index].astype(np.float64)
        took["found"].append(_seconds(lambda block=block: full.products(block)))  # type: ignore[misc]
        took["worked out"].append(_seconds(lambda block=block: empty.products(block)))  # type: ignore[misc]
        took["multiplied"].append(_seconds(lambda shown=shown: shown @ parts))  # type: ignore[misc]
        kept = full.products(block)
        took["copied"].append(_seconds(lambda kept=kept: np.copyto(target, kept)))  # type: ignore[misc]
    same = float(np.abs(full.products(packed[:FRAMES]) - states[:FRAMES] @ columns).max())
    speed = {name: FRAMES / float(np.median(times)) for name, times in took.items()}
    name = f"N {elements}, r {size}, B {FRAMES}"
    ratio = speed["found"] / speed["worked out"]
    note = f"{speed['found']:,.0f} against {speed['worked out']:,.0f} frames/s"
    yield Row(f"products found over worked out, {name}", ratio, "times", "> 1", ratio > 1, note)
    yield Row(
        f"products found over copying them, {name}",
        speed["found"] / speed["copied"],
        "ratio",
        note=f"{speed['copied']:,.0f} frames/s copied",
    )
    yield Row(
        f"products worked out over a plain matrix product, {name}",
        speed["worked out"] / speed["multiplied"],
        "ratio",
        note="the rest unpacks the patterns",
    )
    yield Row(f"exact products, {name}", same, "largest difference", "<= 1e-10", same <= 1e-10, "to plain ones")


def _seconds(work: Callable[[], object]) -> float:
    began = time.perf_counter()
    work()
    return time.perf_counter() - began
