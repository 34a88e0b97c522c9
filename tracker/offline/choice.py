"""How many columns a basis should have, and how much of the surface they hold: told by frames not learned from."""

import math
from collections.abc import Collection, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import groupby

import numpy as np
from numpy.typing import NDArray

from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Columns
from tracker.engine.estimation.estimator import Estimator

from .recorded import Piece
from .subspace import Subspace, regressors
from .turned import Stretch

# Every so many blocks of stretches one is held out.
HELD_OUT_EVERY = 10
HELD_OUT_AT = 5
# A share of the energy that is no better known than this is none.
WORST_KNOWN = 0.25
# Frames of a block, in columns: they have to tell the coefficients of the columns and what is left over.
FRAMES_A_COLUMN = 2


@dataclass(frozen=True, slots=True)
class Blocks:
    """Which pieces of a log are held out: whole blocks of neighbours, in which the channel hardly moves.

    Parameters
    ----------
    length : int
        Pieces in a block.
    """

    length: int

    @classmethod
    def of(cls, frames: float, columns: int) -> "Blocks":
        """Choose the length for pieces of so many frames, and so many columns at most."""
        return cls(max(1, math.ceil(FRAMES_A_COLUMN * columns / frames)))

    def held_out(self, number: int) -> int | None:
        """Tell the block that a piece is held out with; None when it is to be learned from."""
        block = number // self.length
        return block if block % HELD_OUT_EVERY == HELD_OUT_AT else None


@dataclass(frozen=True, slots=True)
class Trials:
    """What numbers of columns predict.

    Parameters
    ----------
    sizes : tuple of int
    errors : tuple of float
        Mean squared error of predicting held-out frames with each, in units of the noise; 1 is all that can be had.
    size : int
        The smallest that predicts as well as the best, within one standard error of the difference (the rule of
        Breiman, Friedman, Olshen & Stone, Classification and Regression Trees, 1984).
    """

    sizes: tuple[int, ...]
    errors: tuple[float, ...]
    size: int


def try_sizes(
    pieces: Iterable[Piece], config: Config, space: Subspace, sizes: Sequence[int], at: Collection[int]
) -> Trials:
    """Run the engine with the first columns, for several numbers of columns side by side.

    Parameters
    ----------
    pieces : iterable of Piece
        All of them: what is held out from learning the columns is still taken in by the engine, after its prediction.
    config : Config
        Its aperture basis is not used.
    space : Subspace
    sizes : sequence of int
        Ascending.
    at : collection of int
        Numbers of the pieces whose errors count.
    """
    configs = [
        replace(config, aperture=Columns(space.columns[:, :size], space.variances[:size]), follow_phase=True)
        for size in sizes
    ]
    part: int | None = None
    estimators: list[Estimator] = []
    rows: list[list[float]] = []
    for piece in pieces:
        if piece.part != part:
            part, estimators = piece.part, [Estimator(one) for one in configs]
        errors = [estimator.update([piece.frames]).error for estimator in estimators]
        if piece.number in at:
            rows.append(errors)
    return _judged(np.array(rows), sizes)


def _judged(rows: NDArray[np.float64], sizes: Sequence[int]) -> Trials:
    errors = rows.mean(axis=0)
    best = int(np.argmin(errors))
    difference = rows - rows[:, [best]]
    spread = difference.std(axis=0) / np.sqrt(max(rows.shape[0], 1))
    enough = difference.mean(axis=0) <= spread
    return Trials(tuple(sizes), tuple(float(error) for error in errors), sizes[int(np.argmax(enough))])


@dataclass(frozen=True, slots=True)
class Held:
    """A share of the surface's energy.

    Parameters
    ----------
    share : float
        Between 0 and 1.
    deviation : float
        Its standard deviation.
    """

    share: float
    deviation: float


def share_held(stretches: Sequence[Stretch], space: Subspace, blocks: Blocks) -> Held | None:
    """Estimate the share of the surface's energy that lies in the columns, from held-out frames.

    Least squares in the columns is fitted to each held-out block. A response v⊥ outside of them, to patterns that are
    as good as random, adds |v⊥|² to the noise that is left over, so over the degrees of freedom that are left the mean
    power is 1 + |v⊥|². Frames whose pattern is repeated are left out where there are others: a pattern in force is
    aligned with the columns and would speak for them.

    Returns
    -------
    Held or None
        None when no block has more frames than unknowns, or too little is heard of the surface.
    """
    outside = heard = freedom = count = 0.0
    for members in _held_out(stretches, blocks):
        rows = _unrepeated(np.concatenate([stretch.patterns for stretch in members]))
        z = np.concatenate([regressors(stretch, space.columns) for stretch in members])[rows]
        outputs = np.concatenate([stretch.outputs for stretch in members])[rows]
        if z.shape[0] <= z.shape[1]:
            continue
        orthonormal = np.linalg.qr(z)[0]
        residual = outputs - orthonormal @ (orthonormal.conj().T @ outputs)
        outside += float((np.abs(residual) ** 2).sum())
        freedom += (z.shape[0] - z.shape[1]) * outputs.shape[1]
        heard += float((np.abs(outputs) ** 2).sum())
        count += outputs.size
    surface = heard / max(count, 1.0) - 1.0
    if not freedom or surface <= 0.0:
        return None
    share = 1.0 - (outside / freedom - 1.0) / surface
    deviation = float(outside / freedom / np.sqrt(freedom) / surface)
    return Held(float(np.clip(share, 0.0, 1.0)), deviation) if deviation < WORST_KNOWN else None


def _held_out(stretches: Sequence[Stretch], blocks: Blocks) -> Iterator[list[Stretch]]:
    """Yield the stretches of each held-out block."""
    marked = ((blocks.held_out(stretch.number), stretch) for stretch in stretches)
    for block, members in groupby(marked, key=lambda pair: pair[0]):
        if block is not None:
            yield [stretch for _, stretch in members]


def _unrepeated(patterns: NDArray[np.uint8]) -> NDArray[np.intp]:
    _, group, count = np.unique(patterns, axis=0, return_inverse=True, return_counts=True)
    rows = np.flatnonzero(count[group.reshape(-1)] == 1)
    return rows if rows.size else np.arange(patterns.shape[0])
