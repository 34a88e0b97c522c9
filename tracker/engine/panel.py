"""Patterns of the panel: packing, unpacking, and what a real panel cannot do (stuck and tied elements)."""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

# The eight states in a byte of bits: looking them up is faster than working them out. Shape (256, 8).
_BITS = np.unpackbits(np.arange(256, dtype=np.uint8)[:, None], axis=1, bitorder="little")
STATES_OF_BYTE = 2.0 * _BITS.astype(np.float64) - 1.0
_SINGLE_STATES_OF_BYTE = STATES_OF_BYTE.astype(np.float32)


def pack(states: NDArray[np.generic]) -> NDArray[np.uint8]:
    """Pack states into bits, least significant first; a state above zero is a set bit.

    Parameters
    ----------
    states : ndarray, shape (..., N)
        States +1 and −1.

    Returns
    -------
    ndarray of uint8, shape (..., ceil(N/8))
    """
    return np.packbits(np.asarray(states) > 0, axis=-1, bitorder="little")


def unpack(bits: NDArray[np.uint8], elements: int) -> NDArray[np.float64]:
    """Unpack bits into states.

    Parameters
    ----------
    bits : ndarray of uint8, shape (..., ceil(N/8))
    elements : int
        N.

    Returns
    -------
    ndarray of float64, shape (..., N)
        States +1.0 and −1.0.
    """
    states = STATES_OF_BYTE.take(bits, axis=0).reshape(*bits.shape[:-1], -1)
    return states if states.shape[-1] == elements else states[..., :elements].copy()


def unpack_single(bits: NDArray[np.uint8], elements: int) -> NDArray[np.float32]:
    """Do as `unpack` does, in single precision."""
    return _SINGLE_STATES_OF_BYTE.take(bits, axis=0).reshape(*bits.shape[:-1], -1)[..., :elements]


@dataclass(frozen=True, slots=True)
class Limits:
    """What this panel cannot do.

    Parameters
    ----------
    stuck : mapping of int to int
        Elements that stay in one state (+1 or −1) whatever they are told.
    tied : sequence of sequences of int
        Elements driven by one line: those of a group always show the same state.
    most_changes : int or None
        Elements that may change in one refresh; None for any number.
    """

    stuck: dict[int, int] = field(default_factory=dict)
    tied: Sequence[Sequence[int]] = ()
    most_changes: int | None = None
