"""How the elements reflect: two states each, with a spread from element to element.

An element reflects with Γ₊ or Γ₋. Half their sum reflects whatever the element is told, and so belongs to the
direct part of the channel; half their difference follows the state s = ±1: Γ(s) = mean + s · half.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class ReflectionConfig:
    """Reflection of an element in its two states.

    Parameters
    ----------
    plus_loss_db, minus_loss_db : float
        Loss in state +1 and −1.
    phase_difference_rad : float
        Phase of state −1 over state +1.
    gain_spread_db, phase_spread_rad : float
        Standard deviation over the elements, common to both states of an element.
    difference_spread_rad : float
        Standard deviation over the elements of the phase difference.
    """

    plus_loss_db: float = 0.5
    minus_loss_db: float = 1.5
    phase_difference_rad: float = np.pi
    gain_spread_db: float = 0.5
    phase_spread_rad: float = 0.1
    difference_spread_rad: float = 0.05


@dataclass(frozen=True, slots=True, eq=False)
class Reflection:
    """Reflection of every element.

    Parameters
    ----------
    mean, half : ndarray of complex128, shape (N,)
        Γ(s) = mean + s · half.
    """

    mean: NDArray[np.complex128]
    half: NDArray[np.complex128]


def draw(config: ReflectionConfig, elements: int, rng: np.random.Generator) -> Reflection:
    """Draw the reflection of `elements` elements."""
    common = 10 ** (config.gain_spread_db * rng.standard_normal(elements) / 20) * np.exp(
        1j * config.phase_spread_rad * rng.standard_normal(elements)
    )
    difference_rad = config.phase_difference_rad + config.difference_spread_rad * rng.standard_normal(elements)
    plus = common * 10 ** (-config.plus_loss_db / 20)
    minus = common * 10 ** (-config.minus_loss_db / 20) * np.exp(1j * difference_rad)
    return Reflection((plus + minus) / 2, (plus - minus) / 2)
