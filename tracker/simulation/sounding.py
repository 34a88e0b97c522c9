"""Which patterns the frames sound: sweeps of orthogonal patterns, random ones, one element at a time.

With unknowns [1, s] the patterns of one sweep are the rows of a Hadamard matrix: column 0, all ones, sounds the
direct path, one column each an element, and columns left over belong to phantom elements that no panel has.
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tracker.engine.orthogonal.hadamard import hadamard, hadamard_order


def sweep(elements: int, rng: np.random.Generator) -> NDArray[np.int8]:
    """Make one sweep of mutually orthogonal patterns.

    Parameters
    ----------
    elements : int
        N.
    rng : numpy.random.Generator
        Scrambles which column sounds which element, and the order of the patterns.

    Returns
    -------
    ndarray of int8, shape (M, N)
        M ≥ N + 1 patterns; [1, s] has orthogonal columns over the sweep.
    """
    matrix = hadamard(hadamard_order(elements + 1))
    columns = 1 + rng.permutation(matrix.shape[0] - 1)[:elements]
    return matrix[rng.permutation(matrix.shape[0])][:, columns]


def one_by_one(elements: int) -> NDArray[np.int8]:
    """Make the sweep of N + 1 patterns that has every element at −1, then one after another at +1."""
    patterns = np.full((elements + 1, elements), -1, dtype=np.int8)
    patterns[np.arange(1, elements + 1), np.arange(elements)] = 1
    return patterns


@dataclass(frozen=True, slots=True)
class SoundingConfig:
    """What the frames of a testbed sound.

    Parameters
    ----------
    kind : {"hadamard", "random", "single"}
        Sweeps of orthogonal patterns, random patterns, or one element at a time.
    reference_every : int
        Every so many frames the pattern in force is sounded, so that its rate is measured; 0 for never.
    near_share : float
        Share of the other frames, drawn at random, that sound a pattern close to the one in force.
    near_flips : float
        Share of elements, drawn at random, in which such a pattern differs from it.
    """

    kind: Literal["hadamard", "random", "single"] = "hadamard"
    reference_every: int = 8
    near_share: float = 0.0
    near_flips: float = 0.1


class Sounder:
    """Gives pattern after pattern.

    Parameters
    ----------
    config : SoundingConfig
    elements : int
        N.
    seed : int
    """

    def __init__(self, config: SoundingConfig, elements: int, seed: int) -> None:
        self._config, self._elements = config, elements
        self._rng = np.random.default_rng([seed, 10])
        self._cycle: NDArray[np.int8] | None = None
        if config.kind == "hadamard":
            self._cycle = sweep(elements, self._rng)
        elif config.kind == "single":
            self._cycle = one_by_one(elements)
        self._frame = 0
        self._place = 0

    def take(self, frames: int, in_force: NDArray[np.int8]) -> NDArray[np.int8]:
        """Patterns of the next frames.

        Parameters
        ----------
        frames : int
            B.
        in_force : ndarray of int8, shape (N,)
            The pattern in force.

        Returns
        -------
        ndarray of int8, shape (B, N)
        """
        patterns = np.empty((frames, self._elements), dtype=np.int8)
        every = self._config.reference_every
        reference = (self._frame + np.arange(frames)) % every == 0 if every else np.zeros(frames, dtype=np.bool_)
        self._frame += frames
        patterns[reference] = in_force
        others = np.flatnonzero(~reference)
        if self._config.near_share > 0:
            near = self._rng.random(others.size) < self._config.near_share
            flips = self._rng.random((int(near.sum()), self._elements)) < self._config.near_flips
            patterns[others[near]] = np.where(flips, -in_force, in_force)
            others = others[~near]
        patterns[others] = self._sounded(others.size)
        return patterns

    def _sounded(self, count: int) -> NDArray[np.int8]:
        if self._cycle is None:
            coins = self._rng.integers(0, 2, (count, self._elements), dtype=np.bool_)
            return np.where(coins, np.int8(1), np.int8(-1))
        places = (self._place + np.arange(count)) % self._cycle.shape[0]
        self._place = (self._place + count) % self._cycle.shape[0]
        patterns: NDArray[np.int8] = self._cycle[places]
        return patterns
