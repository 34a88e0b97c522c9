"""Sums over elements and rays, at the exact path lengths of every frame.

A ray of length L contributes a · exp(−2πj (f_c + f) L / c) on the tone f Hz off the carrier. The carrier phase is
evaluated for every element, ray and frame. Over the band the lengths of one ray to all elements differ by about
the size of the panel, which is little: with L = L₀ + h u, |u| ≤ 1, the Jacobi–Anger expansion

    exp(−jzu) = Σ_m ε_m (−j)^m J_m(z) T_m(u),   z = 2π f h / c,   ε_0 = 1, otherwise 2

(DLMF 10.12.2) needs only a few terms, so that a frame costs a few sums over the elements, not one a tone.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from scipy.special import jv

from tracker.simulation.geometry import LIGHT_MPS, Panel, Source

TAIL = 1e-7
"""Size of the first term left out of the expansion, relative to 1."""


def phasor(turns: NDArray[np.float64]) -> NDArray[np.complex64]:
    """exp(−2πj · turns), error below 1e−6 for any number of turns.

    Whole turns are taken off in double precision; what is left fits single precision, where sine and cosine are
    an order of magnitude faster.
    """
    angle = ((turns - np.rint(turns)) * (-2 * np.pi)).astype(np.float32)
    result = np.empty(angle.shape, dtype=np.complex64)
    np.cos(angle, out=result.real)
    np.sin(angle, out=result.imag)
    return result


def phasor_exact(turns: NDArray[np.float64]) -> NDArray[np.complex128]:
    """exp(−2πj · turns) in double precision."""
    result: NDArray[np.complex128] = np.exp((turns - np.rint(turns)) * (-2j * np.pi))
    return result


@dataclass(frozen=True, slots=True, eq=False)
class Ray:
    """One ray between an end of the link and all elements.

    Parameters
    ----------
    length_m : ndarray of float64, shape (B or 1, N)
    field : ndarray of complex64 or complex128, shape (B or 1, N)
        Amplitude and carrier phase.
    """

    length_m: NDArray[np.float64]
    field: NDArray[np.complexfloating[Any, Any]]


def ray(panel: Panel, source: Source, hop: Literal["in", "out"], exact: bool = False) -> Ray:
    """Follow a source's wave to every element ("in") or from every element ("out": the same by reciprocity).

    Parameters
    ----------
    panel : Panel
    source : Source
    hop : {"in", "out"}
    exact : bool
        Double precision throughout.
    """
    distance, height = panel.distances(source.position)
    amplitude = panel.amplitude(distance, height, hop)
    length_m = distance + source.detour_m
    turns = length_m / panel.wavelength_m
    if exact:
        return Ray(length_m, source.factor * amplitude * phasor_exact(turns))
    return Ray(length_m, phasor(turns) * (source.factor * amplitude).astype(np.complex64))


class Band:
    """The tones, and how a wave turns over them.

    Parameters
    ----------
    offsets_hz : ndarray, shape (K,)
        Tones over the carrier, Hz.
    zero_m : float
        Path length that counts as delay zero, m.
    """

    def __init__(self, offsets_hz: NDArray[np.float64], zero_m: float = 0.0) -> None:
        self.offsets_hz = offsets_hz
        self.zero_m = zero_m
        self._per_m = offsets_hz / LIGHT_MPS
        self._cache: dict[int, NDArray[np.complex64]] = {}

    def turns(self, length_m: NDArray[np.float64]) -> NDArray[np.float64]:
        """Give the turns on every tone over those of the carrier, shape (..., K), for lengths (...)."""
        result: NDArray[np.float64] = (length_m[..., None] - self.zero_m) * self._per_m
        return result

    def _terms(self, quarter_octave: int) -> NDArray[np.complex64]:
        """Coefficients (terms, K) of T_m for a half-width of 2^(quarter_octave / 4) m."""
        if quarter_octave not in self._cache:
            self._cache[quarter_octave] = self._expand(quarter_octave)
        return self._cache[quarter_octave]

    def _expand(self, quarter_octave: int) -> NDArray[np.complex64]:
        z = 2 * np.pi * self._per_m * 2.0 ** (quarter_octave / 4)
        largest, count = float(np.max(np.abs(z))), 1
        while abs(jv(count, largest)) > TAIL or count < largest:
            count += 1
        orders = np.arange(count)
        terms = np.where(orders == 0, 1, 2) * (-1j) ** (orders % 4)
        expanded: NDArray[np.complex64] = (terms[:, None] * jv(orders[:, None], z)).astype(np.complex64)
        return expanded

    def sum(self, weights: NDArray[np.complex64], length_m: NDArray[np.float64]) -> NDArray[np.complex64]:
        """Σ_n w_n exp(−2πj f_k (L_n − L_zero) / c) for every frame and tone.

        Parameters
        ----------
        weights : ndarray of complex64, shape (B, N)
        length_m : ndarray of float64, shape (B or 1, N)

        Returns
        -------
        ndarray of complex64, shape (B, K)
        """
        low, high = float(length_m.min()), float(length_m.max())
        centre = (low + high) / 2
        # The half-width is rounded up to a quarter octave, so that the Bessel functions come from a cache.
        half = max((high - low) / 2, 1e-6)
        quarter_octave = int(np.ceil(4 * np.log2(half)))
        terms = self._terms(quarter_octave)
        u = ((length_m - centre) * 2.0 ** (-quarter_octave / 4)).astype(np.float32)
        real, imag = np.ascontiguousarray(weights.real), np.ascontiguousarray(weights.imag)
        moments = np.empty((weights.shape[0], terms.shape[0]), dtype=np.complex64)
        twice, older, newer = 2 * u, np.ones_like(u), u
        for order in range(terms.shape[0]):
            np.einsum("bn,bn->b", real, older, out=moments.real[:, order])
            np.einsum("bn,bn->b", imag, older, out=moments.imag[:, order])
            following = twice * newer
            following -= older
            older, newer = newer, following
        result: NDArray[np.complex64] = moments @ (terms * phasor(self.turns(np.asarray(centre))))
        return result


def surface_sum(
    band: Band, reflected: NDArray[np.complex64], rays_in: Sequence[Ray], rays_out: Sequence[Ray]
) -> NDArray[np.complex64]:
    """Response by way of the panel, every ray in with every ray out.

    Parameters
    ----------
    band : Band
    reflected : ndarray of complex64, shape (B, N)
        Γ of every element in every frame.
    rays_in, rays_out : sequence of Ray

    Returns
    -------
    ndarray of complex64, shape (B, K)
    """
    total = np.zeros((reflected.shape[0], band.offsets_hz.size), dtype=np.complex64)
    for leaving in rays_out:
        outgoing = reflected * leaving.field
        for arriving in rays_in:
            total += band.sum(outgoing * arriving.field, arriving.length_m + leaving.length_m)
    return total


def hop_exact(band: Band, rays: Sequence[Ray]) -> NDArray[np.complex128]:
    """Response of one hop to every element on every tone, delay zero not taken off, at one time.

    Parameters
    ----------
    band : Band
    rays : sequence of Ray
        Made with `exact`, for one frame.

    Returns
    -------
    ndarray of complex128, shape (N, K)
    """
    total = np.zeros((rays[0].length_m.shape[1], band.offsets_hz.size), dtype=np.complex128)
    for one in rays:
        total += one.field[0, :, None] * phasor_exact(one.length_m[0, :, None] * (band.offsets_hz / LIGHT_MPS))
    return total
