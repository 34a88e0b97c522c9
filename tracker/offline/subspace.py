"""The columns that explain recorded frames best: maximum likelihood by expectation and maximisation.

Frames of a pattern s show y = sᵀ U c(t) + unit noise, with a few coefficients c(t) that move and columns U that stay.
Taken in turns (Dempster, Laird & Rubin, 1977; for a model of this kind Shumway & Stoffer, 1982):

- given U, the smoother says what c(t) was, and how uncertain;
- given c(t), the columns W that suit all frames of the log at once solve the normal equations

      Σ_b s_b s_bᵀ W M_b  =  Σ_b s_b E[y_b c_bᴴ],      M = E[c cᴴ] summed over the outputs,

  by conjugate gradients; patterns are nearly white, so that Σ s sᵀ ≈ frames · I makes a good preconditioner.

All frames speak for the columns, however fast c(t) moves: estimates of every element on its own, which only the frames
of a short time speak for, leave far more noise in their singular vectors. Those serve to start from.

The columns found are rotated so that their coefficients are uncorrelated. Noise in W adds the same power to each
eigenvalue, elements over frames times outputs, which is taken off: the variances are free of that bias.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .smoothing import Seen, Track, smooth
from .turned import Stretch

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Turns; after the first the columns hardly move.
TURNS = 3
# Steps of conjugate gradients a turn.
STEPS = 4
# Variance that a column is granted at least, relative to the strongest.
LEAST_VARIANCE = 1e-5


@dataclass(frozen=True, slots=True, eq=False)
class Subspace:
    """Columns and how strong each is.

    Parameters
    ----------
    columns : ndarray of complex, shape (N, r)
        Orthonormal, the strongest first.
    eigenvalues : ndarray, shape (r,)
        Mean power of each coefficient on an output, in units of the noise, as the frames show it.
    noise : float
        What noise adds to each eigenvalue.
    rest : float
        Mean power of what the direct path left.
    """

    columns: Complex
    eigenvalues: Real
    noise: float
    rest: float

    @property
    def variances(self) -> Real:
        """Eigenvalues without what noise adds, with a floor."""
        return np.maximum(self.eigenvalues - self.noise, LEAST_VARIANCE * float(self.eigenvalues[0]))

    def cut(self, size: int) -> "Subspace":
        """Keep the strongest columns."""
        return Subspace(self.columns[:, :size], self.eigenvalues[:size], self.noise, self.rest)


def begin(estimates: NDArray[np.complex64], size: int, rest: float) -> Subspace:
    """Take the leading singular vectors of estimated responses (N, n)."""
    values = estimates.astype(np.complex128)
    wide = values.shape[1] > values.shape[0]
    gram = values @ values.conj().T if wide else values.conj().T @ values
    energies, vectors = np.linalg.eigh(gram)
    energies, vectors = np.maximum(energies[::-1][:size], 0.0), vectors[:, ::-1][:, :size]
    columns = np.linalg.qr(vectors if wide else values @ vectors)[0]
    eigenvalues = np.maximum(energies / values.shape[1], LEAST_VARIANCE * energies[0] / values.shape[1])
    return Subspace(np.asarray(columns), eigenvalues, 0.0, rest)


def track(
    stretches: Sequence[Stretch],
    used: Sequence[bool],
    space: Subspace,
    time_constant_s: float,
    *,
    backward: bool = True,
) -> Track:
    """Say what the coefficients were; the first of each stretch is what the direct path left."""
    seen = [
        Seen(stretch.time_s, regressors(stretch, space.columns), stretch.outputs, use)
        for stretch, use in zip(stretches, used, strict=True)
    ]
    variances = np.concatenate(([space.rest], np.maximum(space.eigenvalues, 1e-12)))
    return smooth(seen, variances, time_constant_s, backward=backward)


def regressors(stretch: Stretch, columns: Complex) -> Complex:
    """Compute [1, Uᵀs] of each frame, shape (B, r + 1)."""
    states = stretch.states(columns.shape[0])
    z = np.empty((states.shape[0], columns.shape[1] + 1), dtype=np.complex128)
    z[:, 0] = 1.0
    z[:, 1:] = (states @ np.ascontiguousarray(columns).view(np.float64)).view(np.complex128)
    return z


def refine(
    stretches: Sequence[Stretch],
    used: Sequence[bool],
    space: Subspace,
    time_constant_s: float,
    advanced: Callable[[int, int], None] = lambda done, size: None,
) -> Subspace:
    """Take both steps in turns.

    Parameters
    ----------
    stretches : sequence of Stretch
    used : sequence of bool
        Which of them to learn from.
    space : Subspace
        To start from.
    time_constant_s : float
        Of the coefficients.
    advanced : callable
        Told how many turns of how many are done.
    """
    learned = [stretch for stretch, use in zip(stretches, used, strict=True) if use]
    for turn in range(TURNS):
        found = track(learned, [True] * len(learned), space, time_constant_s)
        space = _maximise(learned, found, space)
        advanced(turn + 1, TURNS)
    return space


def _maximise(stretches: Sequence[Stretch], found: Track, space: Subspace) -> Subspace:
    """Solve for the columns, and rotate them so that their coefficients are uncorrelated."""
    outputs, frames = stretches[0].outputs.shape[1], sum(stretch.outputs.shape[0] for stretch in stretches)
    moments = [
        mean @ mean.conj().T + outputs * covariance
        for mean, covariance in zip(found.means, found.covariances, strict=True)
    ]
    columns = _solve(stretches, found, moments, space.columns)
    moment = np.asarray(sum(moments)) / (len(moments) * outputs)
    orthonormal, triangle = np.linalg.qr(columns)
    spread = triangle @ moment[1:, 1:] @ triangle.conj().T
    eigenvalues, rotation = np.linalg.eigh(0.5 * (spread + spread.conj().T))
    return Subspace(
        np.ascontiguousarray(orthonormal @ rotation[:, ::-1]),
        np.maximum(eigenvalues[::-1], 1e-12),
        columns.shape[0] / (frames * outputs),
        float(moment[0, 0].real),
    )


def _solve(stretches: Sequence[Stretch], found: Track, moments: Sequence[Complex], columns: Complex) -> Complex:
    """Solve the normal equations by conjugate gradients from the columns there are."""
    elements, size = columns.shape
    wanted = np.zeros((elements, size), dtype=np.complex128)
    weight = np.zeros((size, size), dtype=np.complex128)
    for stretch, mean, moment in zip(stretches, found.means, moments, strict=True):
        # E[y cᴴ], less what the direct path left, whose coefficient goes with c: row 0 of the moment.
        product = stretch.outputs @ mean[1:].conj().T - moment[0, 1:]
        wanted += _real_times(_states(stretch, elements).T, product)
        weight += product.shape[0] * moment[1:, 1:]
    precondition = np.linalg.inv(weight)

    def normal(values: Complex) -> Complex:
        total = np.zeros_like(wanted)
        for stretch, moment in zip(stretches, moments, strict=True):
            states = _states(stretch, elements)  # unpacked anew each time: they would fill the memory
            total += _real_times(states.T, _real_times(states, values) @ moment[1:, 1:])
        return total

    residual = wanted - normal(columns)
    scaled = residual @ precondition
    direction = scaled
    length = _inner(residual, scaled)
    for _ in range(STEPS):
        image = normal(direction)
        step = length / max(_inner(direction, image), 1e-300)
        columns = columns + step * direction
        residual = residual - step * image
        scaled = residual @ precondition
        length, before = _inner(residual, scaled), length
        direction = scaled + (length / max(before, 1e-300)) * direction
    return columns


def _states(stretch: Stretch, elements: int) -> NDArray[np.float32]:
    return stretch.states(elements).astype(np.float32)


def _real_times(left: NDArray[np.float32], right: Complex) -> Complex:
    """Multiply a real matrix by a complex one, in single precision."""
    single = np.ascontiguousarray(right, dtype=np.complex64)
    return np.asarray((left @ single.view(np.float32)).view(np.complex64), dtype=np.complex128)


def _inner(left: Complex, right: Complex) -> float:
    return float(np.vdot(left, right).real)
