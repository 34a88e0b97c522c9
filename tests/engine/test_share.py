"""How many frames to sound: the formulas against general-purpose solvers, and the choice they lead to."""

from dataclasses import replace

import numpy as np
import pytest
import scipy.linalg
from scipy.integrate import quad
from scipy.linalg import solve_continuous_are, solve_discrete_are
from scipy.special import erf

from tracker.engine.estimation.rls import BlockRls, forgetting
from tracker.engine.planning.share import (
    Bounds,
    Choice,
    Standing,
    amplitude_left,
    choose,
    known,
    near_blocks,
    net_rate,
    predict,
    rate_curve,
    steady_variance,
)

BOUNDS = Bounds(
    frames_per_s=28_000.0,
    least_every=2,
    most_every=200,
    most_frames=64,
    burst_s=0.01,
    groups=256,
    least_service=0.8,
)


def standing(snr_db: float = 15.0, time_constant_s: float = 0.5, direct: float = 0.0, surface: float = 1.0) -> Standing:
    """A flat link by the surface with this signal-to-noise ratio, of which a pattern can bring `surface` for sure."""
    amplitude = np.full((1, 128), 10 ** (snr_db / 20), dtype=np.complex128)
    return Standing(
        rates=rate_curve(np.full((1, 128), direct, dtype=np.complex128), amplitude),
        amplitude=amplitude_left(known(0.1, 1.0)),
        least_surface=surface,
        prior=0.01,
        information=1.0,
        time_constant_s=time_constant_s,
    )


@pytest.mark.parametrize(("prior", "information", "tau_s"), [(0.04, 1.0, 0.5), (1e-3, 0.2, 0.02), (3.0, 4.0, 10.0)])
def test_variance_settles_where_the_riccati_equation_says(prior: float, information: float, tau_s: float) -> None:
    """Few directions, sounded fast: the continuous algebraic Riccati equation of Kalman-Bucy, solved by SciPy."""
    frames_per_s = 1e7
    rate = information * frames_per_s
    solved = solve_continuous_are([[-1 / tau_s]], [[1.0]], [[2 * prior / tau_s]], [[1 / rate]])[0, 0]
    assert steady_variance(prior, 1, information, frames_per_s, tau_s) == pytest.approx(solved, rel=1e-3)


@pytest.mark.parametrize("frames_per_s", [50.0, 500.0, 5000.0])
def test_variance_of_directions_sounded_in_turn_is_that_of_the_discrete_equation(frames_per_s: float) -> None:
    """One direction, once in 64 frames: SciPy's discrete Riccati equation, and the mean over the time between."""
    prior, tau_s, directions = 0.05, 0.4, 64
    period_s = directions / frames_per_s
    decay = np.exp(-2 * period_s / tau_s)
    before = solve_discrete_are([[np.sqrt(decay)]], [[1.0]], [[prior * (1 - decay)]], [[1 / directions]])[0, 0]
    after = before / (1 + directions * before)
    mean = quad(lambda t: prior - (prior - after) * np.exp(-2 * t / tau_s), 0, period_s)[0] / period_s
    assert steady_variance(prior, directions, 1.0, frames_per_s, tau_s) == pytest.approx(mean, rel=1e-6)


def test_the_filter_itself_settles_there() -> None:
    """Block least squares with resetting forgetting, fed the rows of a Hadamard matrix in turn (SciPy's)."""
    size, prior, tau_s, frames, spacing_s = 32, 0.05, 0.05, 4, 1e-3
    rows = scipy.linalg.hadamard(size).astype(np.float64)
    rls = BlockRls(np.full(size, prior), 1)
    found = []
    for block in range(100):
        rls.forget(*forgetting("resetting", frames * spacing_s, tau_s))
        found.append(rls.variances.mean())
        rls.update(rows[np.arange(frames * block, frames * (block + 1)) % size], np.zeros((frames, 1), complex))
        found.append(rls.variances.mean())
    assert np.mean(found[100:]) == pytest.approx(steady_variance(prior, size, 1.0, 1 / spacing_s, tau_s), rel=0.02)


@pytest.mark.parametrize("x", [0.1, 1.0, 10.0, 100.0])
def test_amplitude_left_is_the_mean_over_phases(x: float) -> None:
    """∫ cos θ erf(√x cos θ) dθ by SciPy's quadrature over ∫ |cos θ| dθ = 4."""
    mean = quad(lambda angle: np.cos(angle) * erf(np.sqrt(x) * np.cos(angle)), 0, 2 * np.pi)[0]
    assert amplitude_left(x) == pytest.approx(mean / 4, rel=1e-7)


def test_amplitude_left_is_what_signs_by_a_noisy_estimate_give() -> None:
    """Elements of equal strength and random phase, estimated with 0.4 of their power as error: drawn by NumPy."""
    rng = np.random.default_rng(2)
    elements = 400_000
    response = np.exp(2j * np.pi * rng.random(elements))
    error = np.sqrt(0.4 / 2) * (rng.standard_normal(elements) + 1j * rng.standard_normal(elements))
    by_estimate = np.abs(np.sum(np.sign((response + error).real) * response))
    assert amplitude_left(1 / 0.4) == pytest.approx(by_estimate / np.sum(np.abs(response.real)), rel=5e-3)


def test_amplitude_left_has_its_limits() -> None:
    """All is left of what is known, next to nothing of what is not."""
    assert amplitude_left(1e9) == pytest.approx(1.0, abs=1e-6)
    assert amplitude_left(1e-3) < 0.04


def test_a_slower_channel_is_known_better_by_the_same_filter() -> None:
    """At the pace that the filter expects, x is p₀/p − 1; a channel that stands still is known up to twice as well.

    Twice: of the variance (f p² + 2 p₀/τ) / (2 (1/τ + f p)) of a Kalman-Bucy filter the second term falls away, and
    for many frames the two are equal.
    """
    assert known(0.2, 1.0) == pytest.approx(4.0)
    assert known(1e-4, 1e-9) == pytest.approx(2 * known(1e-4, 1.0), rel=1e-3)
    assert known(0.2, 4.0) < 4.0


def test_net_rate_is_what_the_frames_carry_added_up() -> None:
    """28 000 frames, one in 4 sounded: 21 000 carry 3 bit/s/Hz; of 7 000, 48 of 64 are in service and carry 2.5."""
    assert net_rate(3.0, 4) == pytest.approx(21_000 * 3.0 / 28_000)
    in_service = 48 * 2.5 / 64
    assert net_rate(3.0, 4, in_service) == pytest.approx((21_000 * 3.0 + 7_000 * 48 / 64 * 2.5) / 28_000)
    assert net_rate(3.0, 1) == 0.0


def test_a_sweep_is_chosen_where_the_net_rate_is_best() -> None:
    """Every e tried with the formula written out here: the choice is within half a percent of the best of them."""
    now = standing(time_constant_s=0.3)
    nets = []
    for every in range(BOUNDS.least_every, BOUNDS.most_every + 1):
        sounded = 28_000.0 / every
        frames = min(max(int(0.01 * sounded), 8), 64)
        unknown = steady_variance(0.01, 256, 1.0, sounded * (1 - 1 / frames), 0.3) / 0.01
        ratio = np.exp(-frames / sounded / 0.3) * amplitude_left(1 / unknown - 1) / amplitude_left(9.0)
        nets.append((1 - 1 / every) * np.log2(1 + 10**1.5 * ratio**2))
    found = choose(now, BOUNDS, 1, [0], None)
    assert predict(now, BOUNDS, found, 1) >= 0.995 * max(nets)
    assert predict(now, BOUNDS, found, 1) == pytest.approx(nets[found.every - BOUNDS.least_every], rel=2e-3)


def test_a_faster_channel_is_sounded_more() -> None:
    """The share grows as the time constant shrinks."""
    chosen = [choose(standing(time_constant_s=tau_s), BOUNDS, 1, [0], None).every for tau_s in (10.0, 1.0, 0.1)]
    assert chosen[0] > chosen[1] > chosen[2]


def test_sounding_in_service_pays_when_payload_is_fast() -> None:
    """A sweep's frame costs more the faster payload is, a near one hardly: at 20 dB near, at −10 dB a sweep."""
    blocks = [0, *near_blocks(256)]
    fast, slow = (choose(standing(snr_db), BOUNDS, 1, blocks, None) for snr_db in (20.0, -10.0))
    assert fast.block > 0
    assert slow.block == 0


def test_frames_that_would_lose_service_do_not_count() -> None:
    """Where no near pattern keeps the rate that is asked for, sweeps tell more at the same cost."""
    strict = replace(BOUNDS, least_service=0.999)
    assert choose(standing(20.0), strict, 1, [0, *near_blocks(256)], None).block == 0


def test_a_choice_stays_until_another_is_clearly_better() -> None:
    """A neighbour of the best is kept, one far off is not."""
    now = standing()
    best = choose(now, BOUNDS, 1, [0], None)
    values = BOUNDS.values()
    beside = Choice(values[values.index(best.every) + 1], 0)
    assert choose(now, BOUNDS, 1, [0], beside) == beside
    assert choose(now, BOUNDS, 1, [0], Choice(2, 0)) == best


def test_a_link_that_the_surface_hardly_serves_is_hardly_sounded() -> None:
    """With a direct path of 30 dB above it there is nothing to gain by knowing the surface."""
    assert choose(standing(0.0, direct=30.0, surface=0.002), BOUNDS, 1, [0], None).every > 100


def test_an_estimate_that_thinks_little_of_the_surface_is_not_believed() -> None:
    """Where the surface could bring a lot, at least half of it stays known, though the estimate sees nothing in it."""
    lost = choose(standing(-60.0, direct=1.0), BOUNDS, 1, [0], None)
    variance = steady_variance(0.01, 256, 1.0, 28_000 / lost.every * (1 - 1 / BOUNDS.frames(lost.every)), 0.5)
    assert variance < 0.5 * 0.01
    assert choose(standing(-60.0, direct=1.0, surface=0.0), BOUNDS, 1, [0], None).every > 150 > lost.every
