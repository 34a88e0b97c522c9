"""What a scene measures, noise and impairments included, against what it says is true."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from tracker.simulation.config import DirectConfig, SceneConfig, Terminal
from tracker.simulation.impairments import Clock, Fault, Impairments, Interference, Oscillator
from tracker.simulation.motion import Still
from tracker.simulation.reflection import ReflectionConfig
from tracker.simulation.scene import Scene
from tracker.simulation.schedule import Block, Episode, Step

Make = Callable[..., SceneConfig]


def every(step_s: float, frames: int, start_s: float = 0.0) -> NDArray[np.float64]:
    """Times of frames, s."""
    times: NDArray[np.float64] = start_s + step_s * np.arange(frames, dtype=np.float64)
    return times


def random_states(frames: int, seed: int = 0, elements: int = 64) -> np.ndarray:
    return np.random.default_rng(seed).choice(np.array([-1, 1], dtype=np.int8), (frames, elements))


@pytest.mark.parametrize("snr_db", [-8.0, 12.0])
def test_measured_signal_to_noise_ratio_is_the_configured_one(plain: Make, snr_db: float) -> None:
    """Under random patterns signal power over noise power on a tone, over tones and receivers, is `snr_db`."""
    two = (Terminal(Still((30.0, -5.0, 3.0))), Terminal(Still((26.0, -9.0, 2.0)), antennas=((0, 0, 0), (0.2, 0, 0))))
    config = plain(snr_db=snr_db, terminals=two)
    times, states = every(1e-4, 1500), random_states(1500)
    scene = Scene(config, 5)
    noisy = scene.frames(times, states)
    clean = Scene(replace(config, noise_power=1e-40), 5).frames(times, states)
    signal, noise = np.mean(np.abs(clean) ** 2), np.mean(np.abs(noisy - clean) ** 2)
    assert noisy.shape == (1500, 3, 32)
    assert 10 * np.log10(signal / noise) == pytest.approx(snr_db, abs=0.1)
    np.testing.assert_allclose(noise, scene.noise_power, rtol=0.02)


def test_noise_is_white_and_gaussian(plain: Make) -> None:
    """Real and imaginary parts pass the Kolmogorov-Smirnov test (scipy) and do not correlate over tones or frames."""
    scene = Scene(plain(snr_db=0.0), 6)
    states = np.repeat(random_states(1), 600, axis=0)
    frames = scene.frames(every(1e-4, 600), states)[:, 0]
    noise = (frames - scene.response(0.0, states[0])[0]) / np.sqrt(scene.noise_power[0] / 2)
    for part in (noise.real, noise.imag):
        assert stats.kstest(part.ravel(), "norm").pvalue > 1e-3
    size = noise.size
    bound = 5 * 2 / np.sqrt(size)
    assert abs(np.mean(noise[1:] * noise[:-1].conj())) < bound
    assert abs(np.mean(noise[:, 1:] * noise[:, :-1].conj())) < bound
    assert abs(np.mean(noise**2)) < bound


def test_same_seed_repeats_bit_by_bit_and_another_does_not(plain: Make) -> None:
    """Frames are a function of configuration, seed and calls."""
    config = plain(terminals=(Terminal(Still((30.0, -5.0, 3.0)), oscillator=Oscillator(5.0, 1.0, 1.0)),))
    times, states = every(1e-4, 40), random_states(40)
    frames = [Scene(config, seed).frames(times, states) for seed in (3, 3, 4)]
    np.testing.assert_array_equal(frames[0].view(np.uint32), frames[1].view(np.uint32))
    assert np.any(frames[0] != frames[2])


def test_rate_is_shannons_of_the_true_response(plain: Make) -> None:
    """Mean over tones and receivers of log2(1 + |H|²/σ²) (Shannon)."""
    scene = Scene(plain(), 1)
    states = random_states(1)[0]
    direct, surface = scene.truth(0.0)
    response = direct + np.einsum("n,nrk->rk", states.astype(float), surface)
    assert scene.rate(0.0, states) == pytest.approx(
        np.log2(1 + np.abs(response) ** 2 / scene.noise_power[:, None]).mean()
    )


def test_two_states_of_unequal_loss_fit_mean_and_half_difference(plain: Make, ideal: ReflectionConfig) -> None:
    """One element of states Γ₊ = 1, Γ₋ = 0.5 e^{jπ/2}: the mean adds to the direct path."""
    uneven = replace(ideal, minus_loss_db=20 * np.log10(2.0), phase_difference_rad=np.pi / 2)
    direct_even, surface_even = Scene(plain(reflection=ideal), 1).truth(0.0)
    direct, surface = Scene(plain(reflection=uneven), 1).truth(0.0)
    path = surface_even  # with Γ = ±1 half the difference is the path itself
    np.testing.assert_allclose(surface, (1 - 0.5j) / 2 * path, rtol=1e-9)
    np.testing.assert_allclose(direct - direct_even, (1 + 0.5j) / 2 * path.sum(axis=0), rtol=1e-6, atol=1e-18)


def test_elements_spread_in_gain_and_phase_as_configured(plain: Make, ideal: ReflectionConfig) -> None:
    """Over 64 elements the ratio to an even panel has the standard deviations asked for."""
    spread = replace(ideal, gain_spread_db=1.0, phase_spread_rad=0.2)
    _, even = Scene(plain(reflection=ideal), 1).truth(0.0)
    ratios = np.concatenate([(Scene(plain(reflection=spread), s).truth(0.0)[1] / even)[:, 0, 0] for s in range(20)])
    assert np.std(20 * np.log10(np.abs(ratios))) == pytest.approx(1.0, rel=0.1)
    assert np.std(np.angle(ratios)) == pytest.approx(0.2, rel=0.1)


def test_blocked_direct_path_loses_what_was_scheduled_and_the_surface_nothing(
    plain: Make, ideal: ReflectionConfig
) -> None:
    """25 dB in the middle of the block, none before and after."""
    blocked = DirectConfig(blocks=(Block(1.0, 2.0, 25.0, ramp_s=0.2),))
    scene = Scene(plain(reflection=ideal, direct=blocked), 1)
    direct, surface = scene.truth(0.0)
    direct_blocked, surface_blocked = scene.truth(1.5)
    np.testing.assert_allclose(20 * np.log10(np.abs(direct / direct_blocked)), 25.0, atol=1e-6)
    np.testing.assert_array_equal(surface, surface_blocked)
    np.testing.assert_allclose(scene.truth(2.5)[0], direct, rtol=1e-12)


def test_earliest_path_arrives_where_delay_zero_was_put(plain: Make, ideal: ReflectionConfig) -> None:
    """The direct path alone turns by −2π · delay per tone: a delay of the configured samples."""
    config = plain(reflection=ideal, direct=DirectConfig(loss_db=-60.0), delay_zero_samples=1.5)
    direct, _ = Scene(config, 1).truth(0.0)
    slope = np.polyfit(config.tones.offsets_hz(), np.unwrap(np.angle(direct[0])), 1)[0]
    assert -slope / (2 * np.pi) / config.tones.sample_s == pytest.approx(1.5, abs=1e-3)


def test_oscillator_offset_turns_the_frames_of_its_terminal_alone(plain: Make) -> None:
    """280 Hz at one of two terminals: its frames turn 280 times a second, the other's not at all."""
    still = Still((30.0, -5.0, 3.0))
    config = plain(terminals=(Terminal(still, oscillator=Oscillator(280.0)), Terminal(still)), noise_power=1e-40)
    times = every(1 / 28e3, 100)
    frames = Scene(config, 1).frames(times, np.ones((100, 64), dtype=np.int8))
    turns = np.unwrap(np.angle(frames[:, :, 7]), axis=0) / (2 * np.pi)
    np.testing.assert_allclose(np.polyfit(times, turns, 1)[0], [280.0, 0.0], atol=0.01)


def test_clock_drift_delays_all_tones_alike(plain: Make) -> None:
    """A step of one sample turns tone f by −2π f T (shift theorem of the Fourier transform)."""
    terminal = Terminal(Still((30.0, -5.0, 3.0)), clock=Clock(steps=(Step(1.0, 1.0),)))
    config = plain(terminals=(terminal,), noise_power=1e-40)
    frames = Scene(config, 1).frames(np.array([0.5, 1.5]), np.ones((2, 64), dtype=np.int8))
    expected = np.exp(-2j * np.pi * config.tones.offsets_hz() * config.tones.sample_s)
    np.testing.assert_allclose(frames[1, 0] / frames[0, 0], expected, atol=1e-5)


def test_gain_and_power_and_noise_step_what_they_should(plain: Make) -> None:
    """Receiver gain lifts signal and noise but no rate; power lifts signal and rate; noise lowers the rate."""
    states = random_states(1)[0]
    steps = {
        "gain": Impairments(receiver_gain_db=(Step(1.0, 6.0),)),
        "power": Impairments(transmit_power_db=(Step(1.0, 6.0),)),
        "noise": Impairments(noise_db=(Step(1.0, 6.0),)),
    }
    times = np.concatenate([np.linspace(0, 0.9, 400), np.linspace(1.0, 1.9, 400)])
    change = {}
    for name, impairments in steps.items():
        scene = Scene(plain(snr_db=0.0, impairments=impairments), 2)
        frames = scene.frames(times, np.repeat(states[None], 800, axis=0))
        before, after = frames[:400], frames[400:]
        signal_db = 20 * np.log10(np.abs(after.mean(axis=0) / before.mean(axis=0)).mean())
        noise_db = 10 * np.log10(after.var(axis=0).mean() / before.var(axis=0).mean())
        change[name] = (signal_db, noise_db, scene.rate(1.5, states) - scene.rate(0.5, states))
    assert change["gain"][:2] == pytest.approx((6.0, 6.0), abs=0.5)
    assert change["gain"][2] == 0.0
    assert change["power"][:2] == pytest.approx((6.0, 0.0), abs=0.5)
    assert change["power"][2] > 0.1
    assert change["noise"][:2] == pytest.approx((0.0, 6.0), abs=0.5)
    assert change["noise"][2] < -0.1


def test_interference_hits_its_tones_from_its_time_on(plain: Make) -> None:
    """10 dB over the noise makes the noise on those tones eleven times as strong, and leaves the rest."""
    hit = Impairments(interference=(Interference(first=5, count=3, over_noise_db=10.0, from_s=1.0),))
    scene = Scene(plain(snr_db=0.0, impairments=hit), 2)
    states = np.repeat(random_states(1), 1000, axis=0)
    times = np.concatenate([np.linspace(0, 0.9, 500), np.linspace(1.0, 1.9, 500)])
    noise = np.abs(scene.frames(times, states)[:, 0] - scene.response(0.0, states[0])[0]) ** 2 / scene.noise_power[0]
    np.testing.assert_allclose(noise[:500].mean(axis=0), 1.0, atol=0.25)
    np.testing.assert_allclose(noise[500:, 5:8].mean(axis=0), 11.0, atol=2.5)
    np.testing.assert_allclose(np.delete(noise[500:], [5, 6, 7], axis=1).mean(axis=0), 1.0, atol=0.25)


def test_truth_knows_of_faulty_elements(plain: Make) -> None:
    """Frames of a panel with stuck, weak and swapped elements equal the truth in terms of what it was told."""
    faults = (
        Fault(0, "stuck+"),
        Fault(9, "stuck-", from_s=0.1),
        Fault(20, "weak", strength=0.4),
        Fault(30, "swapped", other=31),
    )
    config = plain(impairments=Impairments(faults=faults), noise_power=1e-40)
    states = random_states(2, seed=8)
    scene = Scene(config, 4)
    times = np.array([0.05, 0.15])
    frames = scene.frames(times, states)
    for frame in (0, 1):
        np.testing.assert_allclose(
            frames[frame], scene.response(float(times[frame]), states[frame]), rtol=2e-4, atol=1e-12
        )
    _, surface = scene.truth(0.15)
    np.testing.assert_array_equal(surface[[0, 9]], 0.0)


def test_scene_says_what_happens(plain: Make) -> None:
    """The episode that began last wins; outside of all there is nothing to say."""
    scene = Scene(plain(episodes=(Episode(1.0, 9.0, "rain"), Episode(2.0, 3.0, "hail"))), 1)
    assert [scene.happening(t) for t in (0.5, 1.5, 2.5, 3.5, 9.5)] == [None, "rain", "hail", "rain", None]


def test_scene_that_makes_no_sense_is_refused(plain: Make) -> None:
    """No terminal, or interference beyond the tones: the message says which."""
    with pytest.raises(ValueError, match="at least one terminal"):
        Scene(plain(terminals=()), 1)
    with pytest.raises(ValueError, match="pilot tones 0 to 31"):
        Scene(plain(impairments=Impairments(interference=(Interference(30, 3),))), 1)
