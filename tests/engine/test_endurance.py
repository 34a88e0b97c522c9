"""A hundred thousand frames on end with phases followed: the estimate forgets its past, its covariance stays one.

The past is forgotten as exp(−t/τ) (Sayed & Kailath, IEEE Signal Processing Magazine 11(3), 1994, for exponentially
weighted least squares), so an engine that has run for long and a fresh one fed the last window alone must agree. That P
stays positive definite is where recursive least squares are known to fail first (Verhaegen, Automatica 25(3), 1989).
"""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine.burst import Burst
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Elements
from tracker.engine.estimation.delay import delay_basis
from tracker.engine.estimation.noise import MEMORY_FRAMES
from tracker.engine.estimation.rls import BlockRls
from tracker.engine.events import Mode
from tracker.engine.panel import pack
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker

ELEMENTS, TONES, FRAMES, FRAME_NS = 16, 24, 256, 35_714
BURSTS, TIME_CONSTANT_S, WINDOW = 391, 0.2, 10.0  # 100 096 frames
BASIS = delay_basis(2 * TONES, TONES // 2, TONES, 6, 1)
SIZE = BASIS.shape[1]


def _burst(number: int) -> Burst:
    """Burst `number` of a link whose direct path turns at 11 Hz, its surface path at −7 Hz."""
    channel = np.random.default_rng(1).standard_normal((ELEMENTS + 1, 2 * SIZE)).view(np.complex128)
    channel[1:] /= math.sqrt(ELEMENTS)
    rng = np.random.default_rng([2, number])
    states = rng.choice([-1.0, 1.0], (FRAMES, ELEMENTS))
    states[::8] = 1.0
    time_s = (number * FRAMES + np.arange(FRAMES))[:, None] * (FRAME_NS / 1e9)
    outputs = np.exp(22j * np.pi * time_s) * channel[0]
    outputs = outputs + np.exp(-14j * np.pi * time_s) * (states @ channel[1:])
    noise = rng.standard_normal((FRAMES, 2 * TONES)).view(np.complex128)
    return Burst(
        run=1,
        seq=number,
        t_ns=number * FRAMES * FRAME_NS,
        dt_ns=FRAME_NS,
        elements=ELEMENTS,
        patterns=pack(states),
        response=(outputs @ BASIS.T + noise * math.sqrt(0.5)).astype(np.complex64)[:, None],
        keep=np.ones(FRAMES, dtype=np.bool_),
    )


def _engine(forgetting: str) -> Tracker:
    return Tracker(
        Config(
            receivers=1,
            delay=BASIS,
            aperture=Elements(ELEMENTS),
            forgetting=forgetting,
            time_constant_s=TIME_CONSTANT_S,
            follow_phase=True,
            every_bursts=1 << 40,
        )
    )


def _feed(tracker: Tracker, burst: Burst) -> None:
    tracker.admit(burst, burst.end_ns)
    tracker.advance([burst], Steps(1))


def _filter(tracker: Tracker) -> BlockRls:
    return BlockRls.restore(tracker.snapshot()["estimator"]["bank"]["filters"][0])


def _apart(one: NDArray[np.complex128], other: NDArray[np.complex128]) -> float:
    """Distance relative to their size, but for a phase common to all, which only the loops' history decides."""
    turn = np.vdot(other, one)
    return float(np.linalg.norm(one - turn / abs(turn) * other) / np.linalg.norm(one))


@pytest.mark.parametrize("forgetting", ["exponential", "resetting"])
def test_a_long_run_ends_where_a_fresh_engine_gets(forgetting: str) -> None:
    """P is positive definite all along, and the estimate that of a fresh engine fed the last ten time constants.

    Apart they may be by exp(−10) for what came before, by what the averages of the noise differ in and have not
    forgotten either, and, where the filter leans on its prior, by p |1/p₀ − 1/p₀'|; all of it to first order.
    """
    tracker, fresh = _engine(forgetting), _engine(forgetting)
    first = BURSTS - round(WINDOW * TIME_CONSTANT_S * 1e9 / (FRAMES * FRAME_NS))
    for number in range(BURSTS):
        burst = _burst(number)
        _feed(tracker, burst)
        if number >= first:
            _feed(fresh, burst)
        if number % 16 == 0:
            held = _filter(tracker)
            unit = 1.0 / np.sqrt(held.prior)
            shares = np.linalg.eigvalsh(unit[:, None] * held.covariance * unit)
            assert shares[0] > 0.0
            assert shares[-1] <= 1.0 + 1e-12
    assert tracker.mode is Mode.TRACKING
    old, new = _filter(tracker), _filter(fresh)
    averaged = (BURSTS - first) * FRAMES / MEMORY_FRAMES
    expected = math.exp(-WINDOW) + math.exp(-averaged) / math.sqrt(MEMORY_FRAMES * (TONES - SIZE))
    if forgetting == "resetting":
        expected += float((old.variances * np.abs(1.0 / old.prior - 1.0 / new.prior)).max())
    assert _apart(old.coefficients, new.coefficients) <= 3.0 * expected
