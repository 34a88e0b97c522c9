"""Time constants side by side."""

import numpy as np
import pytest

from tracker.engine.estimation.aperture import Elements
from tracker.engine.estimation.bank import Bank, time_constants
from tracker.engine.estimation.dense import Dense
from tracker.engine.estimation.rls import BlockRls, forgetting
from tracker.engine.estimation.sounded import Sounded
from tracker.engine.panel import pack

SIZE, BURST_S = 8, 0.01


def _bank(count: int) -> Bank:
    constants_s = time_constants(0.4, count)
    return Bank([Dense(BlockRls(np.full(SIZE, 0.5), 1)) for _ in constants_s], "resetting", constants_s)


def _sounded(rng: np.random.Generator, frames: int) -> Sounded:
    return Sounded(pack(rng.choice([-1.0, 1.0], (frames, SIZE - 1))), Elements(SIZE - 1))


def _run(bank: Bank, rng: np.random.Generator, step: float, bursts: int) -> None:
    """Feed a Gauss-Markov channel that changes by `step` of its strength a burst."""
    truth = np.sqrt(0.25) * (rng.normal(size=(SIZE, 1)) + 1j * rng.normal(size=(SIZE, 1)))
    for _ in range(bursts):
        fresh = np.sqrt(0.25) * (rng.normal(size=(SIZE, 1)) + 1j * rng.normal(size=(SIZE, 1)))
        truth = np.sqrt(1 - step) * truth + np.sqrt(step) * fresh
        sounded = _sounded(rng, 16)
        noise = (rng.normal(size=(16, 1)) + 1j * rng.normal(size=(16, 1))) / np.sqrt(2)
        bank.forget_for(BURST_S)
        bank.update(sounded, sounded.regressors @ truth + noise)


def test_constants_are_spread_about_the_middle() -> None:
    """One is the middle itself, three are a factor of four apart."""
    assert time_constants(0.4, 1) == (0.4,)
    np.testing.assert_allclose(time_constants(0.4, 3), (0.1, 0.4, 1.6))


@pytest.mark.parametrize("wanted_s", time_constants(0.4, 5))
def test_the_true_time_constant_wins(wanted_s: float) -> None:
    """A channel made with one of the time constants, 1 − λ of its power new each burst, is given it or a neighbour."""
    _, share, _ = forgetting("resetting", BURST_S, wanted_s)
    bank = _bank(5)
    _run(bank, np.random.default_rng(1), share, 1200)
    assert wanted_s / 4 - 1e-9 <= bank.time_constant_s <= wanted_s * 4 + 1e-9


def test_it_changes_over_when_the_channel_does() -> None:
    """A channel that begins to move brings a faster filter in some hundred bursts, a slower one when at rest."""
    rng = np.random.default_rng(2)
    bank = _bank(3)
    _run(bank, rng, 0.0, 400)
    assert bank.time_constant_s == pytest.approx(1.6)
    _run(bank, rng, 0.3, 400)
    assert bank.time_constant_s == pytest.approx(0.1)
    _run(bank, rng, 0.0, 400)
    assert bank.time_constant_s == pytest.approx(1.6)


def test_a_bank_of_one_is_the_filter_itself() -> None:
    """One time constant gives the same bits as the filter by itself."""
    rng = np.random.default_rng(3)
    bank, alone = _bank(1), BlockRls(np.full(SIZE, 0.5), 1)
    for _ in range(10):
        sounded, y = _sounded(rng, 4), rng.normal(size=(4, 1)).astype(np.complex128)
        bank.forget_for(BURST_S)
        bank.update(sounded, y)
        alone.forget(*forgetting("resetting", BURST_S, 0.4))
        alone.update(sounded.regressors, y)
    assert np.array_equal(bank.chosen.coefficients, alone.coefficients)


def test_snapshot_goes_on_bit_by_bit() -> None:
    """A restored bank chooses and estimates the same."""
    bank = _bank(3)
    _run(bank, np.random.default_rng(4), 0.1, 50)
    copy = Bank.restore(bank.snapshot(), "resetting", time_constants(0.4, 3))
    for one in (bank, copy):
        _run(one, np.random.default_rng(5), 0.1, 50)
    assert copy.time_constant_s == bank.time_constant_s
    assert np.array_equal(copy.chosen.coefficients, bank.chosen.coefficients)
