"""The optimizer against brute force and a general-purpose solver; its budget; what a real panel cannot do."""

import itertools
from collections.abc import Sequence
from typing import Any, cast

import dimod
import numpy as np
import pytest
from dwave.samplers import SimulatedAnnealingSampler
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from tracker.engine.panel import Limits
from tracker.engine.search.budget import Steps
from tracker.engine.search.channel import Channel
from tracker.engine.search.flips import Climb, Effort, optimize
from tracker.engine.search.one_carrier import one_carrier_optimum, rate_bound
from tracker.engine.search.rate import rate

FREE = Limits()
ENDLESS = Steps(1_000_000)


def _gauss(rng: np.random.Generator, *shape: int) -> NDArray[np.complex128]:
    return np.asarray(rng.standard_normal(shape) + 1j * rng.standard_normal(shape))


def _channel(
    rng: np.random.Generator, elements: int, receivers: int, tones: int, delays: int, level: float = 0.5
) -> Channel:
    basis = np.linalg.qr(_gauss(rng, tones, delays))[0]
    return Channel(basis, level * _gauss(rng, receivers, delays), level * _gauss(rng, elements, receivers, delays))


def _small(seed: int) -> Channel:
    """Draw a channel small enough for brute force, at any level from far below the noise to far above."""
    rng = np.random.default_rng([20, seed])
    delays = int(rng.integers(1, 6))
    return _channel(rng, int(rng.integers(6, 13)), int(rng.integers(1, 4)), 8, delays, 10.0 ** rng.uniform(-1, 1.5))


def _every_pattern(elements: int) -> NDArray[np.float64]:
    return np.array(list(itertools.product([-1.0, 1.0], repeat=elements)))


def _rates(channel: Channel, patterns: NDArray[np.float64]) -> NDArray[np.float64]:
    """Rates of many patterns, from the formula."""
    heard = (channel.direct + np.tensordot(patterns, channel.surface, 1)) @ channel.basis.T
    return np.asarray(np.log2(1.0 + np.abs(heard) ** 2).mean(axis=(1, 2)))


@pytest.mark.parametrize("seed", range(60))
def test_a_thorough_search_equals_brute_force(seed: int) -> None:
    """With up to 12 elements no pattern of all 2^N has a higher rate than the one found."""
    channel = _small(seed)
    found = optimize(channel, None, FREE, ENDLESS, Effort.THOROUGH)
    assert found.rate == pytest.approx(_rates(channel, _every_pattern(channel.elements)).max(), rel=1e-9)


@pytest.mark.parametrize("seed", range(30))
def test_a_thorough_search_equals_brute_force_within_an_allowance(seed: int) -> None:
    """With at most so many changes, no pattern of those within reach has a higher rate than the one found."""
    channel = _small(seed)
    in_use = np.random.default_rng([21, seed]).choice([-1, 1], channel.elements).astype(np.int8)
    patterns = _every_pattern(channel.elements)
    for most in (0, 1, 2, 4):
        within = patterns[(patterns != in_use).sum(axis=1) <= most]
        found = optimize(channel, in_use, Limits(most_changes=most), ENDLESS, Effort.THOROUGH)
        assert np.count_nonzero(found.states != in_use) <= most
        assert found.rate == pytest.approx(_rates(channel, within).max(), rel=1e-9)


def test_a_thorough_search_equals_brute_force_with_stuck_and_tied_elements() -> None:
    """With elements stuck and tied, no pattern that the panel can show has a higher rate than the one found."""
    limits = Limits(stuck={0: 1, 5: -1}, tied=[[1, 2, 9], [5, 6], [3, 10]])
    for seed in range(20):
        channel = _channel(np.random.default_rng([22, seed]), 12, 2, 8, 3)
        patterns = _every_pattern(12)
        held = (patterns[:, 0] == 1) & (patterns[:, 5] == -1) & (patterns[:, 6] == -1)
        same = (patterns[:, 1] == patterns[:, 2]) & (patterns[:, 1] == patterns[:, 9])
        shown = patterns[held & same & (patterns[:, 3] == patterns[:, 10])]
        found = optimize(channel, None, limits, ENDLESS, Effort.THOROUGH)
        assert found.rate == pytest.approx(_rates(channel, shown).max(), rel=1e-9)
        assert (shown == found.states).all(axis=1).any()


def test_far_below_the_noise_a_general_purpose_solver_finds_no_more() -> None:
    """At low level the rate is the received energy over ln 2: annealing of dwave-samplers reaches no higher energy."""
    elements = 48
    for seed in range(3):
        channel = _channel(np.random.default_rng([23, seed]), elements, 2, 12, 6, level=1e-4)
        direct, surface = channel.direct.reshape(-1), channel.surface.reshape(elements, -1)
        gram = (surface @ surface.conj().T).real
        scale = 1.0 / np.trace(gram)
        problem = dimod.BinaryQuadraticModel(
            {n: -2 * scale * (direct.conj() @ surface[n]).real for n in range(elements)},
            {(n, m): -2 * scale * gram[n, m] for n, m in itertools.combinations(range(elements), 2)},
            -scale * float((np.abs(direct) ** 2).sum()) - 1.0,
            dimod.SPIN,
        )
        peer = cast(Any, SimulatedAnnealingSampler)().sample(problem, num_reads=20, num_sweeps=500, seed=seed)
        found = optimize(channel, None, FREE, ENDLESS, Effort.THOROUGH)
        energy = scale * float((np.abs(direct + found.states @ surface) ** 2).sum())
        assert energy >= -peer.first.energy * (1 - 1e-6)
        assert found.rate == pytest.approx(energy / scale / np.log(2) / (2 * 12), rel=1e-4)


def test_one_carrier_is_solved_exactly() -> None:
    """With one tone and one receiver the pattern is the exact optimum, and the bound is met."""
    rng = np.random.default_rng(24)
    for elements in (1, 7, 300):
        channel = Channel(np.ones((1, 1), complex), _gauss(rng, 1, 1), _gauss(rng, elements, 1, 1))
        power = one_carrier_optimum(complex(channel.direct[0, 0]), channel.surface[:, 0, 0])[1]
        for effort in Effort:
            found = optimize(channel, None, FREE, ENDLESS, effort)
            assert found.rate == pytest.approx(np.log2(1 + power), rel=1e-12)
            assert found.rate <= rate_bound(channel) <= found.rate + np.log2(1 + 1e-5 + 3e-7 * elements)


def test_the_search_by_flips_reaches_the_exact_optimum_of_a_flat_channel() -> None:
    """With all tones alike the problem is that of one carrier: the search reaches its exact optimum, N = 256."""
    rng = np.random.default_rng(25)
    for _ in range(3):
        direct, elements = complex(_gauss(rng, 1)[0]), _gauss(rng, 256)
        channel = Channel(np.full((4, 1), 0.5 + 0j), np.array([[2 * direct]]), (2 * elements)[:, None, None])
        found = optimize(channel, None, FREE, ENDLESS, Effort.THOROUGH)
        assert found.rate == pytest.approx(np.log2(1 + one_carrier_optimum(direct, elements)[1]), rel=1e-6)


@pytest.mark.parametrize("effort", Effort)
def test_no_single_flip_improves_the_result(effort: Effort) -> None:
    """Where the search ends by itself, none of the N patterns that differ in one element has a higher rate."""
    for seed in range(4):
        rng = np.random.default_rng([26, seed])
        channel = _channel(rng, 150, 1 + seed % 2, 32, 8, 10.0 ** rng.uniform(-2, 0))
        found = optimize(channel, rng.choice([-1, 1], 150), FREE, ENDLESS, effort)
        turned = found.states.astype(np.float64) * np.where(np.eye(150), -1.0, 1.0)
        assert _rates(channel, turned).max() <= found.rate * (1 + 1e-9)


@given(st.integers(0, 10_000), st.sampled_from(Effort), st.integers(0, 60))
@settings(max_examples=60, deadline=None, derandomize=True)
def test_never_below_the_pattern_in_use_nor_above_the_bound(seed: int, effort: Effort, steps: int) -> None:
    """Whatever the budget, the rate is between that of the pattern in use and the bound, and is that of the states."""
    rng = np.random.default_rng(seed)
    tones = int(rng.integers(1, 12))
    channel = _channel(
        rng,
        int(rng.integers(1, 70)),
        int(rng.integers(1, 4)),
        tones,
        int(rng.integers(1, tones + 1)),
        10.0 ** rng.uniform(-3, 3),
    )
    in_use = rng.choice([-1, 1], channel.elements).astype(np.int8)
    found = optimize(channel, in_use, FREE, Steps(steps), effort)
    assert rate(channel, in_use) <= found.rate <= rate_bound(channel)
    assert found.rate == rate(channel, found.states)
    assert found.steps <= steps
    assert found.states.dtype == np.int8
    assert set(np.unique(found.states)) <= {-1, 1}


def test_without_budget_the_pattern_in_use_stays() -> None:
    """With no step to take, the pattern in use comes back; without one, a good start does."""
    channel = _channel(np.random.default_rng(27), 100, 1, 16, 5)
    in_use = np.random.default_rng(28).choice([-1, 1], 100).astype(np.int8)
    for effort in Effort:
        kept = optimize(channel, in_use, FREE, Steps(0), effort)
        assert np.array_equal(kept.states, in_use)
        assert kept.steps == 0
        begun = optimize(channel, None, FREE, Steps(0), effort)
        assert begun.rate > 1.2 * rate(channel, in_use)


def _same(one: Climb, other: Climb) -> bool:
    return bool(np.array_equal(one.states, other.states) and one.rate == other.rate and one.steps == other.steps)


class _Alarm:
    """A budget like a clock: says no so many times it is asked, then yes; and says how often it was asked."""

    def __init__(self, patience: int) -> None:
        self.patience = patience
        self.asked: list[int] = []

    def spent(self, steps: int) -> bool:
        self.asked.append(steps)
        return len(self.asked) > self.patience


@pytest.mark.parametrize("limits", [FREE, Limits(stuck={3: -1}, tied=[[0, 9], [4, 5, 6]], most_changes=20)])
@pytest.mark.parametrize("effort", Effort)
def test_a_replay_with_the_steps_taken_gives_the_same_bits(limits: Limits, effort: Effort) -> None:
    """Cut off anywhere, by a clock, a search is repeated bit by bit by a budget of the steps that it took."""
    rng = np.random.default_rng(29)
    channel = _channel(rng, 80, 2, 24, 6)
    for in_use in (None, rng.choice([-1, 1], 80).astype(np.int8)):
        whole = optimize(channel, in_use, limits, ENDLESS, effort)
        before = -np.inf
        for patience in range(whole.steps + 2):
            clock = _Alarm(patience)
            live = optimize(channel, in_use, limits, clock, effort)
            assert _same(live, optimize(channel, in_use, limits, Steps(live.steps), effort))
            # Asked once before each step and not again once it has said yes.
            assert clock.asked == list(range(len(clock.asked)))
            assert live.steps == min(patience, whole.steps)
            # The more steps, the better.
            assert live.rate >= before
            before = live.rate
        assert _same(live, whole)


@pytest.mark.parametrize("receivers", [1, 2])
def test_bits_do_not_depend_on_where_memory_lies(receivers: int) -> None:
    """The same channel at other alignments of its arrays, aligned to 8 bytes or 64, gives the same bits."""
    channel = _channel(np.random.default_rng(30), 97, receivers, 33, 7)
    in_use = np.random.default_rng(31).choice([-1, 1], 97).astype(np.int8)
    whole = optimize(channel, in_use, FREE, ENDLESS, Effort.THOROUGH)
    litter = []
    for offset in range(8, 129, 24):
        parts = []
        for part in (channel.basis, channel.direct, channel.surface):
            memory = np.empty(part.nbytes + 256, dtype=np.uint8)
            first = -memory.ctypes.data % 128 + offset
            parts.append(memory[first : first + part.nbytes].view(part.dtype).reshape(part.shape))
            parts[-1][...] = part
        litter.append(np.empty(1000 * offset + 8))  # moves what the search allocates itself
        assert _same(optimize(Channel(*parts), in_use, FREE, ENDLESS, Effort.THOROUGH), whole)


@st.composite
def _panels(draw: st.DrawFn) -> tuple[int, Limits, NDArray[np.int8]]:
    elements = draw(st.integers(2, 40))
    order = draw(st.permutations(range(elements)))
    stuck = {n: draw(st.sampled_from([-1, 1])) for n in order[: draw(st.integers(0, elements // 3))]}
    order = draw(st.permutations(range(elements)))
    tied, at = [], 0
    for size in draw(st.lists(st.integers(2, 4), max_size=5)):
        group = order[at : at + size]
        at += size
        # One line cannot be stuck in both states.
        if len(group) == size and len({stuck[n] for n in group if n in stuck}) <= 1:
            tied.append(list(group))
    in_use = np.array(draw(st.lists(st.sampled_from([-1, 1]), min_size=elements, max_size=elements)), dtype=np.int8)
    return elements, Limits(stuck, tied, draw(st.none() | st.integers(0, 12))), in_use


def _held(limits: Limits) -> dict[int, int]:
    """Elements that cannot change, and the state that they show."""
    held = dict(limits.stuck)
    for group in limits.tied:
        held.update({n: limits.stuck[m] for m in group if m in limits.stuck for n in group})
    return held


def _repairs(group: Sequence[int], in_use: NDArray[np.int8]) -> int:
    """Elements of a tied group that have to change for all to show one state."""
    ones = sum(int(in_use[n]) == 1 for n in group)
    return min(ones, len(group) - ones)


@given(_panels(), st.integers(0, 10_000), st.sampled_from(Effort), st.integers(0, 80))
@settings(max_examples=150, deadline=None, derandomize=True)
def test_no_limit_is_ever_broken(
    panel: tuple[int, Limits, NDArray[np.int8]], seed: int, effort: Effort, steps: int
) -> None:
    """Stuck elements stay, tied ones agree, and no more change than may, whatever the budget and the pattern in use."""
    elements, limits, in_use = panel
    channel = _channel(np.random.default_rng(seed), elements, 1 + seed % 2, 6, 3)
    held = _held(limits)
    for before in (in_use, None):
        found = optimize(channel, before, limits, Steps(steps), effort)
        assert all(found.states[n] == state for n, state in held.items())
        assert all(len({int(found.states[n]) for n in group}) == 1 for group in limits.tied)
        assert found.rate == rate(channel, found.states)
        if before is not None and limits.most_changes is not None:
            changed = sum(found.states[n] != before[n] for n in range(elements) if n not in held)
            needed = sum(_repairs(group, before) for group in limits.tied if group[0] not in held)
            assert changed <= max(limits.most_changes, needed)


@given(_panels(), st.integers(0, 10_000), st.sampled_from(Effort))
@settings(max_examples=60, deadline=None, derandomize=True)
def test_never_below_a_pattern_in_use_that_keeps_the_limits(
    panel: tuple[int, Limits, NDArray[np.int8]], seed: int, effort: Effort
) -> None:
    """From a pattern that the panel can show, the result is at least as good, within the limits too."""
    elements, limits, in_use = panel
    channel = _channel(np.random.default_rng(seed), elements, 1, 6, 3)
    for group in limits.tied:
        in_use[list(group)] = in_use[group[0]]
    for element, state in _held(limits).items():
        in_use[element] = state
    assert optimize(channel, in_use, limits, ENDLESS, effort).rate >= rate(channel, in_use)


def test_a_panel_that_can_change_nothing_keeps_its_pattern() -> None:
    """With every element stuck there is one pattern, and its rate is told."""
    channel = _channel(np.random.default_rng(32), 4, 1, 5, 2)
    stuck = {0: 1, 1: -1, 2: -1, 3: 1}
    found = optimize(channel, None, Limits(stuck=stuck), ENDLESS, Effort.THOROUGH)
    assert found.states.tolist() == [1, -1, -1, 1]
    assert found.rate == rate(channel, found.states)
    assert found.steps == 0


@pytest.mark.parametrize(
    ("limits", "words"),
    [
        (Limits(stuck={9: 1}), "element 9 does not exist"),
        (Limits(stuck={2: 0}), "stuck in state 0"),
        (Limits(tied=[[1, 9]]), "element 9 does not exist"),
        (Limits(tied=[[1, 2], [2, 3]]), "element 2 is tied twice"),
    ],
)
def test_limits_that_make_no_sense_are_refused(limits: Limits, words: str) -> None:
    """Limits that name elements the panel lacks, or contradict themselves, are refused with the element named."""
    channel = _channel(np.random.default_rng(33), 4, 1, 5, 2)
    with pytest.raises(ValueError, match=words):
        optimize(channel, None, limits, ENDLESS, Effort.CLIMB)


def test_a_channel_that_is_not_finite_is_refused() -> None:
    """NaN or infinity in the estimate is refused instead of spoiling the pattern."""
    for poison in (np.nan, np.inf):
        channel = _channel(np.random.default_rng(34), 4, 1, 5, 2)
        channel.surface[2, 0, 1] = poison
        with pytest.raises(ValueError, match="NaN, infinity"):
            optimize(channel, None, FREE, ENDLESS, Effort.CLIMB)
