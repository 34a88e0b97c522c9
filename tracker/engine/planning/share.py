"""How many of the frames to sound, and with what: the choice that leaves the best net rate.

Of F frames a second one in e is sounded. It tells the pattern's response and, as a rule, carries no payload; a frame
*in service*, one under a pattern near that in use whose rate is still good, carries payload at its own rate::

    net = (1 − 1/e) R + (1/e) Σ rates of the frames in service / frames sounded

More sounding means a better pattern, and a higher R, out of what is left. How much better follows from the variance p
of the estimated responses. The G directions in which patterns may differ are sounded in turn, f frames a second. From
one time to the next, 2 G/(f τ) = −ln λ later, a direction loses memory with the time constant τ of the filter, and when
it is sounded again it gains the information G w (Riccati equation of the Kalman filter, one direction at a time, which
is exact for orthogonal patterns)::

    p⁻ = p₀ (1 − λ) + λ p⁺          1/p⁺ = 1/p⁻ + G w

p is the mean over the time between. Of an element's response the estimate then has x = p₀/p − 1 times as much power as
it has error. Of the error the part h = 1/(2 − p/p₀) is change that the filter lags behind, the rest noise that it let
in: these are the shares of 2 p₀/τ and f p², which feed the error when many directions are sounded in a short time. A
channel that changes ρ times as fast as the filter expects divides x by 1 − h + hρ.

Elements are alike in strength and differ in phase; a pattern sets each by the sign of its response along a common
phase, and sets those wrongly whose error is larger. The amplitude that is left of what a flawless estimate gives is

    E[cos θ · sign(cos θ + error)] / E|cos θ|  =  (√(πx)/2) exp(−x/2) (I₀(x/2) + I₁(x/2))

for θ uniform and the error Gaussian of variance 1/(2x): the mean of cos θ erf(√x cos θ), by the integrals of the
modified Bessel functions (DLMF 10.32.3). Amplitudes add up over the elements, so that many errors show as their mean
(Badiu and Coon, IEEE Wireless Communications Letters 9(2), 2020, from memory).

Time spent on learning against what is learned: this is the trade-off of Hassibi and Hochwald, IEEE Trans. Information
Theory 49(4), 2003, "How much training is needed in multiple-antenna wireless links?" (from memory).
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import i0e, i1e

# Shares of groups turned in a near pattern that are weighed against each other; more would not be near.
NEAR_SHARES = (1 / 64, 1 / 32, 1 / 16, 1 / 8, 3 / 16)
# Ratio of neighbouring values of e that are weighed: the optimum is flat.
FINENESS = 1.15
# Amplitudes by way of the surface, over that estimated, at which rates are worked out; between them they are
# interpolated. Of many responses some are left out, at even distances.
AMPLITUDES = np.linspace(0.0, 2.0, 33)
MOST_RESPONSES = 256
# Gain in net rate, as a share of it, below which a choice stays: estimates wobble, and the optimum is flat.
MARGIN = 0.005
# Frames that a plan has at least: a burst has its costs.
LEAST_FRAMES = 8
# Part of the responses' power that may stay unknown, where the surface could be worth more than a hundredth of what
# comes without it. An estimate that knows less thinks little of the surface, and would have it sounded ever less.
MOST_UNKNOWN, WORTH = 0.5, 0.01
# Power over error that an estimate is taken to have at least, while next to nothing is known.
LEAST_KNOWN = 1e-3


@dataclass(frozen=True, slots=True)
class Choice:
    """How to sound.

    Parameters
    ----------
    every : int
        e, one frame in so many is sounded.
    block : int
        Groups turned in a near pattern; 0 for rows of a sweep.
    """

    every: int
    block: int


@dataclass(frozen=True, slots=True, eq=False)
class Standing:
    """What the choice rests on.

    Parameters
    ----------
    rates : ndarray, shape of `AMPLITUDES`
        Rates of the pattern in use, by `rate_curve`.
    amplitude : float
        What errors of the estimate left of its amplitude, by `amplitude_left`.
    least_surface : float
        Power that a pattern could bring by the surface, whatever the estimate says now, over direct path and noise.
    prior : float
        p₀, variance of an element's response before any data, in units of the noise.
    information : float
        w of a row of a sweep: mean square of a coefficient's regressor.
    time_constant_s : float
        τ of the filter.
    pace : float
        ρ, how fast the channel changes over what the filter expects.
    """

    rates: NDArray[np.float64]
    amplitude: float
    least_surface: float
    prior: float
    information: float
    time_constant_s: float
    pace: float = 1.0


@dataclass(frozen=True, slots=True)
class Bounds:
    """What may be chosen.

    Parameters
    ----------
    frames_per_s : float
        F.
    least_every, most_every : int
        Of e.
    most_frames : int
        Frames of a plan.
    burst_s : float
        Time that a plan is to last.
    groups : int
        G, groups of elements that a pattern sets.
    least_service : float
        Part of the rate in use that a frame in service must keep.
    """

    frames_per_s: float
    least_every: int
    most_every: int
    most_frames: int
    burst_s: float
    groups: int
    least_service: float

    def values(self) -> list[int]:
        """Values of e to weigh."""
        values = [self.least_every]
        while (following := max(math.ceil(values[-1] * FINENESS), values[-1] + 1)) <= self.most_every:
            values.append(following)
        return values

    def frames(self, every: int) -> int:
        """Frames of a plan: as many as fit into its time."""
        fit = int(self.burst_s * self.frames_per_s / every)
        return max(min(fit, self.most_frames), min(LEAST_FRAMES, self.most_frames))


def near_blocks(groups: int) -> list[int]:
    """Sizes of near patterns' blocks worth weighing."""
    return sorted({size for share in NEAR_SHARES if 0 < 2 * (size := round(share * groups)) < groups})


def rate_curve(direct: NDArray[np.complex128], surface: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Rates of a pattern when the amplitude by way of the surface is `AMPLITUDES` times that of the estimate.

    Parameters
    ----------
    direct, surface : ndarray of complex, shape (R, K)
        Response by either way, as estimated, in units of the noise amplitude.
    """
    stride = -(-direct.size // MOST_RESPONSES)
    fixed, changing = direct.reshape(-1)[::stride], surface.reshape(-1)[::stride]
    return np.asarray(np.log2(1.0 + np.abs(fixed + AMPLITUDES[:, None] * changing) ** 2).mean(axis=1))


def steady_variance(prior: float, directions: int, information: float, frames_per_s: float, tau_s: float) -> float:
    """Mean variance of an estimate whose directions are sounded in turn, once it has settled.

    Parameters
    ----------
    prior : float
        p₀.
    directions : int
        G, each is sounded once in so many frames.
    information : float
        w, mean over the directions that a frame tells, in inverse units of p₀.
    frames_per_s : float
        f.
    tau_s : float
        τ.
    """
    elapsed = 2.0 * directions / frames_per_s / tau_s
    decay = math.exp(-elapsed)
    gained, told = -prior * math.expm1(-elapsed), directions * information
    # p⁺ = p⁻ / (1 + G w p⁻) with p⁻ = p₀ (1 − λ) + λ p⁺ is quadratic in p⁺; this form of its root loses no digits.
    half = 0.5 * (1.0 + told * gained - decay)
    after = gained / (half + math.sqrt(half * half + told * decay * gained))
    return prior + (prior - after) * math.expm1(-elapsed) / elapsed


def lag(unknown: float) -> float:
    """Part h of the error that is change which the filter lags behind, for p / p₀."""
    return 1.0 / (2.0 - unknown)


def known(unknown: float, pace: float) -> float:
    """Power of an element's response in the estimate over that of its error, x.

    Parameters
    ----------
    unknown : float
        p / p₀, as the filter has it.
    pace : float
        ρ.
    """
    lagging = lag(unknown)
    return max((1.0 / unknown - 1.0) / (1.0 - lagging + lagging * pace), LEAST_KNOWN)


def amplitude_left(x: float) -> float:
    """Amplitude of a pattern chosen by an estimate, over that of one chosen by the truth.

    Parameters
    ----------
    x : float
        Power of the responses in the estimate over that of its error.
    """
    # i0e and i1e have the factor exp(−x/2) in them already.
    return 0.5 * math.sqrt(math.pi * x) * float(i0e(0.5 * x) + i1e(0.5 * x))


def told_by(groups: int, block: int) -> float:
    """Information of a near pattern's frame over that of a sweep's: 4 φ (1 − φ), and 1 for a sweep itself."""
    share = block / groups
    return 4.0 * share * (1.0 - share) if block else 1.0


def net_rate(rate: float, every: int, in_service: float = 0.0) -> float:
    """Rate that payload has.

    Parameters
    ----------
    rate : float
        Under the pattern in use.
    every : int
        One frame in so many is sounded.
    in_service : float
        Mean over the frames sounded of the rate of their payload, 0 for those without.
    """
    return (1.0 - 1.0 / every) * rate + in_service / every


def predict(standing: Standing, bounds: Bounds, choice: Choice, references: int) -> float:
    """Predict the net rate of a choice.

    Parameters
    ----------
    standing : Standing
    bounds : Bounds
    choice : Choice
    references : int
        Frames of a plan that sound the pattern in use; they tell about one direction alone.
    """
    unknown, frames = settles_at(standing, bounds, choice, references), bounds.frames(choice.every)
    # While a pattern waits for its successor, it ages by about a burst.
    aged = math.exp(-standing.pace * frames * choice.every / bounds.frames_per_s / standing.time_constant_s)
    amplitude = aged * amplitude_left(known(unknown, standing.pace)) / standing.amplitude
    rate = _rate(standing, amplitude)
    if not choice.block:
        return net_rate(rate, choice.every)
    turned = 2.0 * choice.block / bounds.groups
    # Some blocks weigh more than others: nearly all of them are to keep up service.
    least = _rate(standing, amplitude * (1.0 - turned * (1.0 + 1.0 / math.sqrt(choice.block))))
    near = _rate(standing, amplitude * (1.0 - turned)) if least >= bounds.least_service * rate else 0.0
    return net_rate(rate, choice.every, near * (1.0 - references / frames))


def settles_at(standing: Standing, bounds: Bounds, choice: Choice, references: int) -> float:
    """Part p / p₀ of the responses' power that stays unknown with a choice; see `predict`."""
    useful = (1.0 - references / bounds.frames(choice.every)) * bounds.frames_per_s / choice.every
    information = standing.information * told_by(bounds.groups, choice.block)
    prior, tau_s = standing.prior, standing.time_constant_s
    return steady_variance(prior, bounds.groups, information, useful, tau_s) / prior


def choose(standing: Standing, bounds: Bounds, references: int, blocks: Sequence[int], before: Choice | None) -> Choice:
    """Choose how to sound.

    Parameters
    ----------
    standing : Standing
    bounds : Bounds
    references : int
        Of a plan.
    blocks : sequence of int
        Sizes of blocks to weigh, 0 for a sweep.
    before : Choice or None
        What is in force; while it may be chosen, it stays unless another is clearly better.
    """
    offers = [Choice(every, block) for block in blocks for every in bounds.values()]
    if standing.least_surface > WORTH:
        informed = [offer for offer in offers if settles_at(standing, bounds, offer, references) < MOST_UNKNOWN]
        offers = informed or offers
    nets = {offer: predict(standing, bounds, offer, references) for offer in offers}
    best = max(offers, key=lambda offer: nets[offer])
    if before is not None and before in nets and nets[before] >= nets[best] * (1.0 - MARGIN):
        return before
    return best


def _rate(standing: Standing, amplitude: float) -> float:
    return float(np.interp(amplitude, AMPLITUDES, standing.rates))
