"""The search for columns, on frames of a model that is known."""

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.linalg import subspace_angles

from tracker.engine.panel import pack
from tracker.offline.choice import Blocks, share_held
from tracker.offline.subspace import Subspace, begin, refine
from tracker.offline.turned import Stretch

ELEMENTS, SIZE, OUTPUTS, FRAMES = 48, 3, 4, 32
VARIANCES = np.array([1.0, 0.3, 0.1])
CONSTANT_S = 0.05
Complex = NDArray[np.complex128]


def gaussian(rng: np.random.Generator, *shape: int) -> Complex:
    """Circular values of unit power."""
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2.0))


def made(count: int, noise: float, seed: int) -> tuple[Complex, list[Stretch]]:
    """Columns, and stretches in which their coefficients move as first-order Gauss-Markov processes."""
    rng = np.random.default_rng(seed)
    columns = np.linalg.qr(gaussian(rng, ELEMENTS, SIZE))[0]
    coefficients = np.sqrt(VARIANCES)[:, None] * gaussian(rng, SIZE, OUTPUTS)
    kept = np.exp(-0.002 / CONSTANT_S)
    stretches = []
    for number in range(count):
        fresh = np.sqrt(VARIANCES)[:, None] * gaussian(rng, SIZE, OUTPUTS)
        coefficients = kept * coefficients + np.sqrt(1.0 - kept**2) * fresh
        states = rng.choice([-1.0, 1.0], (FRAMES, ELEMENTS))
        outputs = states @ columns @ coefficients + noise * gaussian(rng, FRAMES, OUTPUTS)
        stretches.append(Stretch(number, 0.002 * number, pack(states), outputs.astype(np.complex64), 1.0))
    return columns, stretches


def rough(columns: Complex, seed: int) -> Subspace:
    """Columns to start from: the true ones under as much noise again, and more of them than there are."""
    rng = np.random.default_rng(seed)
    noise = gaussian(rng, ELEMENTS, 12) / np.sqrt(ELEMENTS)
    noise[:, :SIZE] += columns
    return begin(noise.astype(np.complex64), 6, 0.01)


def test_without_noise_the_columns_are_found() -> None:
    """Frames with hardly any noise give the very columns: principal angles below a quarter of a degree."""
    columns, stretches = made(80, 1e-4, 1)
    stretches = [
        Stretch(one.number, one.time_s, one.patterns, (one.outputs * 1e4).astype(np.complex64), 1.0)
        for one in stretches
    ]
    found = refine(stretches, [True] * len(stretches), rough(columns, 2), CONSTANT_S)
    assert np.degrees(subspace_angles(found.columns[:, :SIZE], columns)).max() < 0.25


def test_noise_is_taken_off_the_variances() -> None:
    """In noise as strong as all columns together the variances come out right, and columns of noise as nothing."""
    columns, stretches = made(1000, 1.0, 3)
    found = refine(stretches, [True] * len(stretches), rough(columns, 4), CONSTANT_S)
    # Some 40 independent draws of each coefficient and output: an eighth of a standard deviation.
    assert found.variances[:SIZE] == pytest.approx(VARIANCES, rel=0.35)
    assert (found.variances[SIZE:] < 0.02 * VARIANCES[-1]).all()
    assert found.noise == pytest.approx(ELEMENTS / (1000 * FRAMES * OUTPUTS))
    # The angle of a column to its estimate: noise a column over its power (standard perturbation theory).
    sines = np.sin(subspace_angles(found.columns[:, :SIZE], columns))
    assert float((sines**2).sum()) < 3.0 * (found.noise / VARIANCES).sum()


@pytest.mark.parametrize("size", [1, 2, 3])
def test_the_share_held_is_told_right(size: int) -> None:
    """Of the true columns' first ones, the estimate says what they hold, to within its own deviation."""
    columns, stretches = made(1000, 1.0, 5)
    space = Subspace(columns[:, :size], VARIANCES[:size], 0.0, 0.01)
    blocks = Blocks.of(FRAMES, 6)
    held = share_held(stretches, space, blocks)
    assert held is not None
    out = [one for one in stretches if blocks.held_out(one.number) is not None]
    assert len(out) == pytest.approx(100, abs=2)
    # The truth in the same frames: responses free of noise are not to be had, their powers are.
    share = VARIANCES[:size].sum() / VARIANCES.sum()
    drawn = 0.12 * (1.0 - share)  # the coefficients' own spread over the log
    assert abs(held.share - share) < 4.0 * held.deviation + 2.0 * drawn
    assert 0.001 < held.deviation < 0.05


def test_blocks_hold_frames_enough() -> None:
    """Pieces of few frames are held out in runs, one run in ten, long enough to tell the columns from what is left."""
    blocks = Blocks.of(4.0, 16)
    held = [number for number in range(800) if blocks.held_out(number) is not None]
    assert len(held) == 80
    runs = np.split(np.array(held), np.flatnonzero(np.diff(held) > 1) + 1)
    assert {len(run) for run in runs} == {8}
