"""How fast a channel changes, and the time constant of forgetting that suits it.

A recursive least-squares estimate errs twice: it is noisy, the more the shorter its memory, and it is old, the more
the longer. With exponential weights of memory w over frames Δt apart, M unknowns and noise σ², the two come to

    F(w) = σ² M Δt / (2w)  +  ½ ∫ S(s) e^(−s/w) ds / w,      S(s) = E|h(t + s) − h(t)|²,

in power on each delay (the weights of two past moments differ in age by as much as one of them is old, which halves
the second term). For a random walk S is a line and the best memory is Δt √(M σ² / tr Q), the known optimum of the
forgetting factor, λ = 1 − √(tr(Q R) / (M σ²)) (Haykin, Adaptive Filter Theory; from memory).
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import trapezoid

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]

# Candidates of the memory and points of the integral, a decade.
POINTS = 40
# The integral ends where the weights have fallen to e^(−20).
REACH = 20.0
# Pairs of moments count for a lag when they are no further from it than this share.
LAG_SPREAD = 0.2
# A lag with fewer pairs tells nothing.
LEAST_PAIRS = 8
# A channel that seems to stand still is taken to do so for this many times the longest lag seen.
STILL = 10.0


@dataclass(frozen=True, slots=True, eq=False)
class Change:
    """The structure function S of a channel, as measured.

    Parameters
    ----------
    lag_s : ndarray, shape (L,)
        Ascending, s.
    change : ndarray, shape (L,)
        Mean squared change over the lag, summed over delays, in units of the noise on a delay; not below zero.
    power : float
        Mean squared channel, summed and scaled alike.
    """

    lag_s: Floats
    change: Floats
    power: float

    def at(self, lag_s: Floats) -> Floats:
        """Interpolate from zero change at no lag; beyond the longest lag the change stays as it is there."""
        return np.asarray(np.interp(lag_s, np.append(0.0, self.lag_s), np.append(0.0, self.change)))


def measure_change(time_s: Floats, response: Complex, noise: Floats, turned: bool) -> Change | None:
    """Measure how much a response under one pattern changes, over lags that double.

    Parameters
    ----------
    time_s : ndarray, shape (T,)
        Ascending, s.
    response : ndarray of complex128, shape (T, R, Q)
        In units of each receiver's noise amplitude on a delay.
    noise : ndarray, shape (T,)
        Noise power of each response on a delay: 1 / (frames averaged).
    turned : bool
        Whether a phase common to a response is taken out, as following the phase would.

    Returns
    -------
    Change or None
        None when there are too few moments, or no signal.
    """
    receivers, delays = response.shape[1:]
    flat = response.reshape(len(response), -1)
    powers = np.sum(flat.real**2 + flat.imag**2, axis=1)
    power = float(np.mean(powers - receivers * delays * noise)) / receivers
    lags, changes = [], []
    step = 1
    while step < len(flat):
        lag = time_s[step:] - time_s[:-step]
        middle = float(np.median(lag))
        near = np.flatnonzero(np.abs(lag - middle) <= LAG_SPREAD * middle)
        if len(near) < LEAST_PAIRS:
            break
        product = np.sum(flat[near].conj() * flat[near + step], axis=1)
        common = np.abs(product) if turned else product.real
        by_noise = receivers * delays * (noise[near] + noise[near + step])
        lags.append(middle)
        changes.append(float(np.mean(powers[near] + powers[near + step] - 2.0 * common - by_noise)) / receivers)
        step *= 2
    if not lags or power <= 0.0:
        return None
    order = np.argsort(lags, kind="stable")
    return Change(np.asarray(lags)[order], np.maximum(np.asarray(changes)[order], 0.0), power)


def best_memory(change: Change, delays: int, unknowns: int, frame_s: float) -> tuple[float, float]:
    """Find the memory w that errs least.

    Parameters
    ----------
    change : Change
    delays : int
        Q, over which `change` is summed.
    unknowns : int
        M = N + 1.
    frame_s : float
        Δt, mean distance of the frames, s, pauses included.

    Returns
    -------
    memory_s, error : float
        The memory is no shorter than it takes to sound as many patterns as there are unknowns, where least squares
        begins, and no longer than the longest lag; the error is summed over delays, in units of the noise.
    """
    longest = float(change.lag_s[-1])
    shortest = min(unknowns * frame_s, longest)
    count = 2 + int(POINTS * math.log10(longest / shortest))
    candidates = np.geomspace(shortest, longest, count)
    errors = [delays * unknowns * frame_s / (2.0 * w) + 0.5 * _mean_change(change, float(w)) for w in candidates]
    best = int(np.argmin(errors))
    return float(candidates[best]), float(errors[best])


def coherence_time(change: Change, memory_s: float) -> float:
    """Find the time constant τ of the Gauss-Markov channel that changes as much over the memory as was measured.

    Its autocorrelation is e^(−s/τ), so S(s) = 2 P (1 − e^(−s/τ)): the channel that `resetting` forgetting is the
    Kalman filter for.

    Parameters
    ----------
    change : Change
    memory_s : float

    Returns
    -------
    float
        τ, s; at most `STILL` times the longest lag.
    """
    share = float(change.at(np.array([memory_s]))[0]) / (2.0 * change.power)
    most = STILL * float(change.lag_s[-1])
    if share <= 0.0:
        return most
    if share >= 1.0:
        return memory_s
    return min(-memory_s / math.log1p(-share), most)


def _mean_change(change: Change, memory_s: float) -> float:
    """Average S over exponential weights: ∫ S(s) e^(−s/w) ds / w."""
    ages = np.append(0.0, np.geomspace(1e-3, REACH, 4 * POINTS))
    return float(trapezoid(change.at(ages * memory_s) * np.exp(-ages), ages))
