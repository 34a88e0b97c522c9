"""What happens when: losses that come and go with a ramp, steps at a time."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

NEVER = float("inf")


@dataclass(frozen=True, slots=True)
class Block:
    """A loss that comes, stays and goes: something drives into the way and out again.

    Parameters
    ----------
    from_s, until_s : float
        When the loss begins to come, and when it begins to go, s.
    loss_db : float
        Loss while it stays.
    ramp_s : float
        Time to come, and to go; linear in dB.
    """

    from_s: float
    until_s: float = NEVER
    loss_db: float = 20.0
    ramp_s: float = 0.2

    def loss_at(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Loss at times (B,), dB."""
        if self.ramp_s <= 0:
            inside = (t_s >= self.from_s) & (t_s < self.until_s)
            return np.where(inside, self.loss_db, 0.0)
        coming = np.clip((t_s - self.from_s) / self.ramp_s, 0.0, 1.0)
        going = np.clip((t_s - self.until_s) / self.ramp_s, 0.0, 1.0)
        return self.loss_db * (coming - going)


def amplitude_left(blocks: Sequence[Block], t_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Amplitude factor that all blocks together leave at times (B,)."""
    loss_db = np.zeros(t_s.size)
    for block in blocks:
        loss_db += block.loss_at(t_s)
    result: NDArray[np.float64] = 10 ** (-loss_db / 20)
    return result


@dataclass(frozen=True, slots=True)
class Step:
    """A value that changes by `size` at a time and stays there.

    Parameters
    ----------
    at_s : float
        s.
    size : float
        In the unit of whatever steps.
    """

    at_s: float
    size: float


def stepped(steps: Sequence[Step], t_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Sum of all steps taken by times (B,)."""
    total = np.zeros(t_s.size)
    for step in steps:
        total += np.where(t_s >= step.at_s, step.size, 0.0)
    return total


@dataclass(frozen=True, slots=True)
class Episode:
    """A stretch of the scene in words, for whoever watches.

    Parameters
    ----------
    from_s, until_s : float
        s.
    text : str
    """

    from_s: float
    until_s: float
    text: str


def text_at(episodes: Sequence[Episode], t_s: float) -> str | None:
    """Say what happens at a time; the episode that began last wins; None when nothing happens."""
    running = [episode for episode in episodes if episode.from_s <= t_s < episode.until_s]
    return max(running, key=lambda episode: episode.from_s).text if running else None
