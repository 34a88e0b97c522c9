"""The block filter against what the machine can do, and against textbook filters of general-purpose libraries."""

import time
from collections.abc import Callable, Iterator
from statistics import median

import filterpy.kalman
import numpy as np
import padasip

from benchmarks.row import Row
from tracker.engine.estimation.rls import BlockRls, forgetting


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    yield _against_multiply(10 if quick else 40)
    yield from _against_peers(40 if quick else 400)


def _against_multiply(rounds: int) -> Row:
    """N = 1024, B = 128, float64: flops at 3N² a frame over those of a matrix multiply, taken in turn in one run.

    Eight blocks come one after the other, as in a stream: the first after a multiply finds its covariance out of cache.
    """
    size, frames = 1024, 128
    rng = np.random.default_rng(1)
    square = rng.normal(size=(size, size))
    product = np.empty_like(square)
    rls = BlockRls(np.full(size + 1, 0.01), 1)
    blocks = [np.ascontiguousarray(rng.choice([-1.0, 1.0], (frames, size + 1))) for _ in range(8)]
    heard = rng.normal(size=(frames, 1)).astype(np.complex128)
    ours, limit = [], []
    for _ in range(rounds):
        for z in blocks:
            rls.forget(*forgetting("resetting", 0.005, 0.5))
            ours.append(_seconds(lambda z=z: rls.update(z, heard)))  # type: ignore[misc]
        limit.append(_seconds(lambda: np.matmul(square, square, out=product)))
    speed = 3 * size**2 * frames / np.array(ours)
    most = 2 * size**3 / np.array(limit)
    ratio = float(np.median(speed) / np.median(most))
    note = (
        f"medians {np.median(speed) / 1e9:.0f} of {np.median(most) / 1e9:.0f} Gflop/s, "
        f"best {speed.max() / 1e9:.0f} of {most.max() / 1e9:.0f} (ratio {speed.max() / most.max():.2f}); "
        f"{frames / median(ours):.0f} frames/s"
    )
    return Row("block RLS, N 1024, B 128, over matrix multiply", ratio, "ratio", ">= 0.75", ratio >= 0.75, note)


def _against_peers(frames: int) -> Iterator[Row]:
    """N = 256: the same frames through ours and through filters of libraries, same answers."""
    size, decay, prior = 256, 0.999, 0.05
    rng = np.random.default_rng(2)
    z = rng.choice([-1.0, 1.0], (frames, size))
    y = z @ rng.normal(scale=np.sqrt(prior), size=size) + rng.normal(size=frames)

    kalman = filterpy.kalman.KalmanFilter(dim_x=size, dim_z=1)
    kalman.x, kalman.P = np.zeros((size, 1)), prior * np.eye(size)
    kalman.F, kalman.Q, kalman.R = np.eye(size), np.zeros((size, size)), np.array([[1.0]])
    kalman.alpha = decay**-0.5

    def textbook() -> None:
        for row, value in zip(z, y, strict=True):
            kalman.predict()
            kalman.H = row[None, :]
            kalman.update(np.array([[value]]))

    peer = padasip.filters.FilterRLS(n=size, mu=decay, eps=1 / prior, w="zeros")

    def recursive() -> None:
        for row, value in zip(z, y, strict=True):
            peer.adapt(float(value), row)

    ours = BlockRls(np.full(size, prior), 1)
    single = BlockRls(np.full(size, prior), 1)
    heard = y.astype(np.complex128)[:, None]

    def blocks() -> None:
        for start in range(0, frames, 40):
            ours.forget(1 / decay**40, 0.0)
            ours.update(z[start : start + 40], heard[start : start + 40])

    def frame_by_frame() -> None:
        for index in range(frames):
            single.forget(1 / decay, 0.0)
            single.update(z[index : index + 1], heard[index : index + 1])

    took = {name: _seconds(work) for name, work in _named(textbook, recursive, blocks, frame_by_frame)}
    same = max(
        float(np.abs(single.coefficients[:, 0].real - kalman.x[:, 0]).max()),
        float(np.abs(single.coefficients[:, 0].real - peer.w).max()),
    )
    yield Row(
        "block RLS, N 256, over a textbook Kalman filter (filterpy)",
        took["textbook"] / took["blocks"],
        "times",
        "> 1",
        took["blocks"] < took["textbook"],
        f"{frames / took['blocks']:.0f} against {frames / took['textbook']:.0f} frames/s",
    )
    yield Row(
        "block RLS, N 256, over a library's RLS (padasip)",
        took["recursive"] / took["blocks"],
        "times",
        "> 1",
        took["blocks"] < took["recursive"],
        f"{frames / took['blocks']:.0f} against {frames / took['recursive']:.0f} frames/s",
    )
    yield Row(
        "same answers, frame by frame, ours and both peers",
        same,
        "largest difference",
        "<= 1e-9",
        same <= 1e-9,
        f"ours frame by frame: {frames / took['frame_by_frame']:.0f} frames/s",
    )


def _named(*works: Callable[[], None]) -> list[tuple[str, Callable[[], None]]]:
    return [(work.__name__, work) for work in works]


def _seconds(work: Callable[[], object]) -> float:
    began = time.perf_counter()
    work()
    return time.perf_counter() - began
