"""Gains in log likelihood, nats, of what errors over frames may hide; the errors are white with unit variance.

A model that explains the errors in part gains what power it takes away. Where numbers are free they are fitted, or, if
they are as many as the channel has, averaged over (a Gaussian of covariance κ G over frames, with κ fitted)::

    gain = −Σ_j D ln(1 + κ λ_j) + Σ_j κ λ_j / (1 + κ λ_j) |u_jᴴ E|²,    G = Σ_j λ_j u_j u_jᴴ over frames
"""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Variances κ that are tried, relative to what would make the change as strong as the noise.
KAPPAS = np.geomspace(1e-2, 1e4, 31)
# Terms of a random walk: the rest is a hundredth of its power.
WALK_TERMS = 20


def free(power: Any, outputs: int) -> Any:
    """Gain of outputs that may take any value, when they take this power in units of their noise."""
    over = np.maximum(power / outputs, 1.0)
    return outputs * (over - 1.0 - np.log(over))


def along(column: NDArray[Any], errors: Complex) -> float:
    """Gain when any D numbers times one column of frames are added to the errors, shape (B, D)."""
    power = float(np.vdot(column, column).real)
    return float(free(power_of(column.conj() @ errors) / power, errors.shape[1]))


def averaged(covariance: NDArray[Any], errors: Complex, column: NDArray[Any] | None) -> float:
    """Gain when the errors have an additional covariance over frames, of the best scale, and a column is free."""
    values, vectors = np.linalg.eigh(covariance)
    values, outputs = np.maximum(values, 0.0), errors.shape[1]
    projected = times(vectors.conj().T, errors)
    scaled = KAPPAS[:, None] * (values / max(float(values.mean()), 1e-12))
    gains = _gains(scaled, projected, outputs)
    if column is not None:
        shares = vectors.conj().T @ column
        weight = 1.0 / (1.0 + scaled)
        shown = (weight * shares.conj()) @ projected
        lengths = weight @ (np.abs(shares) ** 2)
        gains = gains + free((np.abs(shown) ** 2).sum(axis=1) / lengths, outputs)
    return max(float(gains.max()), 0.0)


def walked(time: Real, whitener: NDArray[Any], errors: Complex) -> float:
    """Gain when any D numbers walk at random from zero on, at times (B,) from 0 to 1 (Karhunen and Loève's sines)."""
    rates = math.pi * (np.arange(WALK_TERMS) + 0.5)
    terms = whitener @ (np.sin(np.outer(time, rates)) / rates)
    values, vectors = np.linalg.eigh(terms.conj().T @ terms)
    values = np.maximum(values, 1e-12 * values[-1])
    projected = times((terms @ (vectors / np.sqrt(values))).conj().T, errors)
    scaled = KAPPAS[:, None] * (values * (time.size / float(values.sum())))
    return max(float(_gains(scaled, projected, errors.shape[1]).max()), 0.0)


def _gains(scaled: Real, projected: Complex, outputs: int) -> Real:
    power = power_rows(projected)
    return np.asarray((scaled / (1.0 + scaled)) @ power - outputs * np.log1p(scaled).sum(axis=1))


def whitener_of(covariance: NDArray[Any]) -> NDArray[Any]:
    """L⁻¹ of a positive definite covariance L Lᴴ."""
    is_complex = np.iscomplexobj(covariance)
    factor, invert = (lapack.zpotrf, lapack.ztrtri) if is_complex else (lapack.dpotrf, lapack.dtrtri)
    lower, info = factor(covariance, lower=1, clean=1)
    if info:
        raise FloatingPointError(f"covariance over frames is not positive definite (pivot {info})")
    return np.asarray(invert(lower, lower=1)[0])


def times(matrix: NDArray[Any], values: Complex) -> Complex:
    """Multiply the first axis of values by a matrix, at real cost when that is real."""
    flat = np.ascontiguousarray(values).reshape(values.shape[0], -1)
    product = matrix @ flat if np.iscomplexobj(matrix) else (matrix @ flat.view(np.float64)).view(np.complex128)
    return np.asarray(product).reshape(-1, *values.shape[1:])


def turns(rates: Real, times_of: Real) -> Complex:
    """exp(2πi rate · time), shape (rates, times), for evenly spaced rates: few exponentials, the rest are products."""
    stride = max(round(math.sqrt(rates.size)), 1)
    coarse = np.exp(2j * np.pi * np.outer(rates[::stride], times_of))
    fine = np.exp(2j * np.pi * np.outer(rates[:stride] - rates[0], times_of))
    return np.asarray((coarse[:, None] * fine[None]).reshape(-1, times_of.size)[: rates.size])


def power_of(values: Complex) -> float:
    """Sum of |value|²."""
    return float(np.vdot(values, values).real)


def powers(values: Complex) -> Real:
    """Power of each receiver, the middle axis."""
    return np.asarray((values.real**2 + values.imag**2).sum(axis=(0, 2)))


def power_rows(values: NDArray[Any]) -> Real:
    """Power of each row."""
    return np.asarray((values.real**2 + values.imag**2).sum(axis=1))
