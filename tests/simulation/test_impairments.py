"""Oscillators, clocks, and panels that do not obey."""

import numpy as np
import pytest

from tracker.simulation.impairments import Clock, Fault, Late, Obedience, Oscillator, Wander
from tracker.simulation.schedule import Block, Step, amplitude_left


def test_free_running_oscillator_turns_by_its_offset() -> None:
    """280 Hz are 280 turns a second."""
    walk = Wander(Oscillator(offset_hz=280.0), (1,))
    np.testing.assert_allclose(walk.turns(np.array([0.0, 0.5, 2.0])), [0.0, 140.0, 560.0])


def test_phase_noise_grows_with_the_linewidth() -> None:
    """A Lorentzian line of full width Δν has phase variance 2π Δν t (Lax 1967, from memory)."""
    linewidth_hz, t_s = 5.0, 0.3
    times = np.array([0.0, t_s / 2, t_s])
    phases = (
        2
        * np.pi
        * np.array([Wander(Oscillator(linewidth_hz=linewidth_hz), (seed,)).turns(times) for seed in range(600)])
    )
    expected = 2 * np.pi * linewidth_hz * times
    np.testing.assert_allclose(phases.var(axis=0), expected, rtol=0.15, atol=1e-12)


def test_offset_wanders_as_configured() -> None:
    """The offset after one second has the standard deviation asked for (random walk of frequency)."""
    changes = []
    for seed in range(200):
        walk = Wander(Oscillator(offset_hz=100.0, wander_hz=3.0), (seed,))
        before, after = walk.turns(np.array([1.0, 1.001]))
        changes.append((after - before) / 1e-3 - 100.0)
    assert np.std(changes) == pytest.approx(3.0, rel=0.15)


def test_oscillator_phase_does_not_depend_on_what_was_asked_before() -> None:
    """Late times first, early times first, many at once: the phase at a time is one number."""
    config = Oscillator(offset_hz=10.0, linewidth_hz=3.0, wander_hz=2.0)
    times = np.array([0.01, 0.9, 1.7, 2.4])
    at_once = Wander(config, (7,)).turns(times)
    walk = Wander(config, (7,))
    backwards = np.array([walk.turns(times[i : i + 1])[0] for i in (3, 2, 1, 0)])[::-1]
    np.testing.assert_array_equal(backwards, at_once)


def test_clock_drifts_in_parts_per_million_and_steps_in_samples() -> None:
    """0.2 ppm gather 0.2 µs a second; a step of 2 samples of 25 ns adds 50 ns."""
    clock = Clock(drift_ppm=0.2, steps=(Step(at_s=3.0, size=2.0),))
    np.testing.assert_allclose(clock.delay_s(np.array([1.0, 4.0]), 25e-9), [0.2e-6, 0.85e-6])


def test_blocks_come_and_go_with_their_ramp() -> None:
    """Loss rises linearly in dB, stays, and falls; overlapping blocks add up in dB."""
    blocks = (Block(1.0, 3.0, loss_db=20.0, ramp_s=0.5), Block(2.0, loss_db=6.0, ramp_s=0.0))
    loss_db = -20 * np.log10(amplitude_left(blocks, np.array([0.5, 1.25, 1.75, 2.5, 3.25, 9.0])))
    np.testing.assert_allclose(loss_db, [0.0, 10.0, 20.0, 26.0, 16.0, 6.0], atol=1e-9)


def test_faulty_elements_show_what_they_can() -> None:
    """From its time on an element is stuck, weak, or follows another's bit; the others obey."""
    faults = (
        Fault(0, "stuck+", from_s=1.0),
        Fault(1, "stuck-"),
        Fault(2, "weak", strength=0.25),
        Fault(3, "swapped", from_s=1.0, other=4),
    )
    told = np.array([[-1, 1, -1, 1, -1, 1], [-1, 1, 1, 1, -1, -1]], dtype=np.float32)
    shown = Obedience(faults, (), 6).show(np.array([0.5, 1.0]), told)
    np.testing.assert_array_equal(shown, [[-1, -1, -0.25, 1, -1, 1], [1, -1, 0.25, -1, 1, -1]])


def test_late_panel_shows_what_it_was_told_before() -> None:
    """Two frames late across bursts, and in time again once the episode is over."""
    obedience = Obedience((), (Late(2, from_s=1.0, until_s=2.0),), 1)
    first = obedience.show(np.array([0.8, 0.9, 1.0]), np.array([[1.0], [2.0], [3.0]], dtype=np.float32))
    second = obedience.show(np.array([1.1, 1.2, 2.0]), np.array([[4.0], [5.0], [6.0]], dtype=np.float32))
    np.testing.assert_array_equal(np.concatenate([first, second])[:, 0], [1, 2, 1, 2, 3, 6])


def test_fault_on_an_element_that_does_not_exist_is_refused() -> None:
    """The message says which elements there are."""
    with pytest.raises(ValueError, match="element 9 does not exist, the panel has 0 to 3"):
        Obedience((Fault(9, "stuck+"),), (), 4)
    with pytest.raises(ValueError, match="one fault only"):
        Obedience((Fault(1, "stuck+"), Fault(2, "swapped", other=1)), (), 4)
