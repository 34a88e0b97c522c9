"""Simulated annealing of the rate by single flips, as a yardstick: slow, plain, and hard to beat."""

import numpy as np

from tracker.engine.search.channel import Channel

HOT, COLD = 0.3, 3e-4
"""First and last temperature, in mean sizes of the change that a flip makes to a random pattern (in trials, starting
hotter or ending warmer came out worse, or had its chains agree less)."""


def anneal(channel: Channel, steps: int, chains: int, seed: int) -> float:
    """Find a rate by annealing (Metropolis, geometric cooling) from random patterns.

    Parameters
    ----------
    channel : Channel
    steps : int
        Proposals of a chain, one flip each, at O(RK).
    chains : int
        Independent chains, worked in step.
    seed : int

    Returns
    -------
    float
        The best rate of all chains, bit/s/Hz.
    """
    rng = np.random.default_rng(seed)
    elements, size = channel.elements, channel.receivers * channel.tones
    reflected = (channel.surface @ channel.basis.T).reshape(elements, size)
    turn = 2.0 * np.concatenate([reflected.real, reflected.imag], axis=1)
    fixed = (channel.direct @ channel.basis.T).reshape(size)
    states = rng.choice([-1.0, 1.0], (chains, elements))
    heard = np.concatenate([fixed.real, fixed.imag]) + 0.5 * states @ turn
    row = np.arange(chains)

    def value(heard: np.ndarray) -> np.ndarray:
        squared = heard * heard
        load = squared[:, :size]
        load += squared[:, size:]
        load += 1.0
        np.log2(load, out=load)
        return np.asarray(load.sum(axis=1))

    now = value(heard)
    some = rng.integers(0, elements, (64, chains))
    changes = [np.abs(value(heard - states[row, one][:, None] * turn[one]) - now).mean() for one in some]
    hottest, best = HOT * float(np.mean(changes)), now.copy()
    block = min(1000, steps)
    for done in range(0, steps, block):
        temperature = hottest * (COLD / HOT) ** (done / steps)
        which = rng.integers(0, elements, (block, chains))
        least = temperature * np.log(rng.random((block, chains)))
        for one, floor in zip(which, least, strict=True):
            tried = heard - states[row, one][:, None] * turn[one]
            then = value(tried)
            taken = then - now > floor
            if taken.any():
                changed = row[taken]
                heard[changed] = tried[changed]
                now[changed] = then[changed]
                states[changed, one[changed]] *= -1.0
        np.maximum(best, now, out=best)
    return float(best.max()) / size
