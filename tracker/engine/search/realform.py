"""The channel in real numbers, laid out for the inner loops of the optimizer.

States are real, so a complex coefficient is two real ones side by side: everything becomes products of real
matrices, with half the work of complex ones. All matrices lie in memory that starts at a multiple of 64 bytes:
some BLAS kernels treat the ends of misaligned vectors apart and then round differently, and a replay has to get the
same bits wherever its memory happens to lie.
"""

import copy
import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.floating[Any]]

_ALIGNMENT = 64


def aligned(*shapes: tuple[int, ...], precision: type[np.floating[Any]] = np.float64) -> list[Real]:
    """Allocate arrays of these shapes, not initialised, that start at multiples of 64 bytes."""
    size = np.dtype(precision).itemsize
    room = [-(-size * math.prod(shape) // _ALIGNMENT) * _ALIGNMENT for shape in shapes]
    memory = np.empty(sum(room) + _ALIGNMENT, dtype=np.uint8)
    first = -memory.ctypes.data % _ALIGNMENT
    arrays = []
    for shape, bytes_ in zip(shapes, room, strict=True):
        arrays.append(memory[first : first + size * math.prod(shape)].view(precision).reshape(shape))
        first += bytes_
    return arrays


class RealForm:
    """A channel, its elements joined to lines, as real matrices.

    Parameters
    ----------
    basis : ndarray of complex128, shape (K, Q)
    direct : ndarray of complex128, shape (R, Q)
    surface : ndarray of complex128, shape (G, R, Q)
        What each of G lines adds in state +1.

    Attributes
    ----------
    lines, receivers, tones, delays : int
        G, R, K, Q.
    width : int
        L = 2RQ, real coefficients of a sum over lines.
    direct : ndarray, shape (L,)
        Re and Im side by side.
    surface : ndarray, shape (G, L)
    energy : ndarray, shape (G,)
        Σ_rk |basis · surface[g]|², equal to the squared norm of a row of `surface`, for the basis is orthonormal.
    """

    def __init__(
        self, basis: NDArray[np.complex128], direct: NDArray[np.complex128], surface: NDArray[np.complex128]
    ) -> None:
        self.lines, self.receivers, self.delays = (int(n) for n in surface.shape)
        self.tones = int(basis.shape[0])
        self.width = 2 * self.receivers * self.delays
        tones = self.tones
        self.surface, self.direct, squares, ones, self._to_tones = aligned(
            (self.lines, self.width),
            (self.width,),
            (self.lines, self.width),
            (self.width,),
            (2 * self.delays, 2 * tones),
        )
        self.surface.view(np.complex128).reshape(surface.shape)[...] = surface
        self.direct.view(np.complex128).reshape(direct.shape)[...] = direct
        np.multiply(self.surface, self.surface, out=squares)
        ones[:] = 1.0
        self.energy = squares @ ones
        # A row of coefficients (Re, Im, Re, Im …) times this is a row of responses (Re of all tones, Im of all tones).
        self._to_tones[0::2, :tones] = self._to_tones[1::2, tones:] = basis.real.T
        self._to_tones[0::2, tones:] = basis.imag.T
        np.negative(basis.imag.T, out=self._to_tones[1::2, :tones])
        self._from_tones = self._to_tones.T

    def single(self) -> "RealForm":
        """Give the same in single precision: half the time, and exact enough to compare starts."""
        form = copy.copy(self)
        for name in ("surface", "direct", "energy", "_to_tones"):
            whole = getattr(self, name)
            (half,) = aligned(whole.shape, precision=np.float32)
            half[...] = whole
            setattr(form, name, half)
        form._from_tones = form._to_tones.T
        return form

    def heard(self, sums: Real) -> Real:
        """Respond on the tones: coefficients (…, L) to responses (…, R, 2K), real parts first."""
        rows = np.matmul(sums.reshape(-1, 2 * self.delays), self._to_tones)
        return np.asarray(rows.reshape(*sums.shape[:-1], self.receivers, 2 * self.tones))

    def back(self, heard: Real) -> Real:
        """Apply the transpose of `heard`: (…, R, 2K) to (…, L)."""
        rows = heard.reshape(-1, 2 * self.tones) @ self._from_tones
        return np.asarray(rows.reshape(*heard.shape[:-2], self.width))

    def power(self, heard: Real) -> Real:
        """Give |H|², shape (…, R, K), of responses (…, R, 2K)."""
        squared = heard * heard
        return squared[..., : self.tones] + squared[..., self.tones :]

    def weigh(self, heard: Real, weight: Real) -> Real:
        """Multiply responses (…, R, 2K) by real weights (…, R, K)."""
        split = heard.reshape(*heard.shape[:-1], 2, self.tones)
        return (split * weight[..., None, :]).reshape(heard.shape)


def bits(power: Real) -> Real:
    """Add up log2(1 + |H|²) over receivers and tones: (n, R, K) to (n,). Overwrites `power`."""
    if power.dtype == np.float32:
        # Far below the noise, 1 + |H|² would lose |H|² in single precision.
        nats = np.log1p(power, out=power)
        return np.asarray(nats.reshape(len(nats), -1).sum(axis=1) / np.float32(math.log(2.0)))
    power += 1.0
    np.log2(power, out=power)
    return np.asarray(power.reshape(len(power), -1).sum(axis=1))
