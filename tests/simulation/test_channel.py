"""Sums over elements and rays against the plain formula, and the phases of things that move."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.simulation.channel import Band
from tracker.simulation.config import DirectConfig, SceneConfig, Terminal
from tracker.simulation.geometry import LIGHT_MPS, Panel, PanelConfig, Scatterer, Wall
from tracker.simulation.motion import Still, Straight, Sway
from tracker.simulation.reflection import ReflectionConfig
from tracker.simulation.scene import Scene
from tracker.simulation.schedule import Block

Make = Callable[..., SceneConfig]
FRAME_S = 1 / 28_000


def every(step_s: float, frames: int, start_s: float = 0.0) -> NDArray[np.float64]:
    """Times of frames, s."""
    times: NDArray[np.float64] = start_s + step_s * np.arange(frames, dtype=np.float64)
    return times


@pytest.mark.parametrize("span_m", [0.0, 0.3, 5.0, 200.0])
def test_sum_over_the_band_equals_the_plain_sum(span_m: float) -> None:
    """Σ w exp(−2πj f L / c), evaluated term by term in double precision, is met to 1e-5 of its size, wide or narrow."""
    rng = np.random.default_rng(3)
    offsets_hz = np.linspace(-20e6, 20e6, 37)
    weights = (rng.standard_normal((5, 90)) + 1j * rng.standard_normal((5, 90))).astype(np.complex64)
    lengths = 80.0 + span_m * rng.random((5, 90))
    zero_m = 70.0
    plain = np.einsum(
        "bn,bnk->bk", weights, np.exp(-2j * np.pi * (lengths - zero_m)[:, :, None] * offsets_hz / LIGHT_MPS)
    )
    fast = Band(offsets_hz, zero_m).sum(weights, lengths)
    assert np.max(np.abs(fast - plain)) < 1e-5 * np.sqrt(np.mean(np.abs(plain) ** 2))


def written_out(config: SceneConfig, t_s: float, states: np.ndarray) -> np.ndarray:
    """Response (R, K) of a scene with ideal elements, a ground and a scatterer, written out ray by ray."""
    wavelength_m = LIGHT_MPS / config.carrier_hz
    elements = Panel(config.panel, wavelength_m).positions()
    normal = np.asarray(config.panel.facing) / np.linalg.norm(config.panel.facing)
    spacing_m = config.panel.spacing_wavelengths * wavelength_m
    at = np.array([t_s])
    mast = config.mast.at(at)[0]
    post = next(one for one in config.reflectors if isinstance(one, Scatterer))
    place = post.track.at(at)[0]
    frequencies = config.carrier_hz + config.tones.offsets_hz()

    def hop(end: np.ndarray, scale: float) -> list[tuple[np.ndarray, np.ndarray]]:
        """Lengths and amplitudes over the straight way, off the ground, and by way of the scatterer."""
        rays = []
        detour = float(np.linalg.norm(place - end))
        for source, before_m, factor in (
            (end, 0.0, 1.0),
            (end * [1, 1, -1], 0.0, -(10 ** (-6 / 20))),
            (place, detour, np.sqrt(post.cross_section_m2 / (4 * np.pi)) / detour),
        ):
            distance = np.linalg.norm(elements - source, axis=1)
            cosine = (source - elements) @ normal / distance
            rays.append(
                (distance + before_m, factor * scale * cosine ** (config.panel.pattern_exponent / 2) / distance)
            )
        return rays

    gain = 2 * (config.panel.pattern_exponent + 1)
    rays_in = hop(mast, spacing_m / np.sqrt(4 * np.pi))
    rows = []
    for terminal in config.terminals:
        antenna = terminal.track.at(at)[0]
        straight = np.linalg.norm(antenna - mast)
        row = wavelength_m / (4 * np.pi) / straight * np.exp(-2j * np.pi * frequencies * straight / LIGHT_MPS)
        row = row * 10 ** (-config.direct.loss_db / 20)
        for length_in, amplitude_in in rays_in:
            for length_out, amplitude_out in hop(antenna, np.sqrt(gain) * wavelength_m / (4 * np.pi)):
                lengths = length_in + length_out
                phases = np.exp(-2j * np.pi * np.outer(lengths, frequencies) / LIGHT_MPS)
                row = row + (states * amplitude_in * amplitude_out) @ phases
        rows.append(row)
    return np.array(rows)


@pytest.fixture
def busy(plain: Make, ideal: ReflectionConfig) -> SceneConfig:
    """Two terminals, one at 3 m/s, a ground and a scatterer, no noise to speak of."""
    return plain(
        reflection=ideal,
        terminals=(
            Terminal(Straight((30.0, -5.0, 3.0), (1.8, 2.4, 0.0))),
            Terminal(Straight((24.0, -9.0, 2.0), (-0.5, 0.1, 0.0))),
        ),
        reflectors=(
            Wall((0.0, 0.0, 0.0), (0.0, 0.0, 1.0), loss_db=6.0, hops=("in", "out")),
            Scatterer(Still((12.0, 2.0, 5.0)), cross_section_m2=30.0, hops=("in", "out")),
        ),
        noise_power=1e-40,
    )


@pytest.mark.parametrize("start_s", [0.0, 2.3])
def test_moving_frames_equal_the_formula_at_every_frame_time(busy: SceneConfig, start_s: float) -> None:
    """exp(−2πj (f_c + f) τ(t)) summed ray by ray, at the time of each frame within the burst; the error is < 1e-4."""
    rng = np.random.default_rng(4)
    states = rng.choice(np.array([-1, 1], dtype=np.int8), (20, 64))
    times = every(FRAME_S, 20, start_s)
    frames = Scene(busy, 1).frames(times, states)
    zero_s = None
    for frame in (0, 7, 19):
        expected = written_out(busy, float(times[frame]), states[frame])
        # Delay zero of the scene is free to choose: take it from the first frame, the same for all.
        turned = frames[frame] / expected
        if zero_s is None:
            zero_s = turned[0]
        np.testing.assert_allclose(turned, np.broadcast_to(zero_s, turned.shape), atol=2e-5)
    assert zero_s is not None
    np.testing.assert_allclose(np.abs(zero_s), 1.0, atol=1e-5)
    slope = np.diff(np.unwrap(np.angle(zero_s)))
    np.testing.assert_allclose(slope, slope.mean(), atol=1e-4)


def test_frames_do_not_depend_on_how_they_are_cut_into_bursts(busy: SceneConfig) -> None:
    """Asked at once or one by one, frames are the same but for rounding in single precision."""
    rng = np.random.default_rng(5)
    states = rng.choice(np.array([-1, 1], dtype=np.int8), (12, 64))
    times = every(FRAME_S, 12, 1.0)
    at_once = Scene(busy, 1).frames(times, states)
    scene = Scene(busy, 1)
    single = np.concatenate([scene.frames(times[i : i + 1], states[i : i + 1]) for i in range(12)])
    assert np.max(np.abs(at_once - single)) < 1e-5 * np.sqrt(np.mean(np.abs(at_once) ** 2))


@pytest.mark.parametrize("moves", [False, True])
def test_frames_equal_the_truth(plain: Make, busy: SceneConfig, moves: bool) -> None:
    """Without noise a frame is direct + Σ states · surface of its own time, whether things rest or move."""
    config = busy if moves else plain(noise_power=1e-40, reflectors=busy.reflectors)
    config = replace(config, direct=replace(config.direct, blocks=(Block(0.0, 1.0, 12.0, ramp_s=0.01),)))
    rng = np.random.default_rng(6)
    states = rng.choice(np.array([-1, 1], dtype=np.int8), (40, 64))
    times = every(FRAME_S, 40, 0.005)
    scene = Scene(config, 9)
    frames = scene.frames(times, states)
    for frame in (0, 17, 39):
        expected = scene.response(float(times[frame]), states[frame])
        assert np.max(np.abs(frames[frame] - expected)) < 1e-5 * np.sqrt(np.mean(np.abs(expected) ** 2))


@pytest.mark.parametrize("swaying", ["mast", "scatterer"])
def test_a_mast_or_scatterer_that_moves_is_followed(busy: SceneConfig, swaying: str) -> None:
    """Paths into the panel change as well when the mast sways or a scatterer drives by."""
    if swaying == "mast":
        config = replace(busy, mast=Sway(busy.mast, (0.02, 0.02, 0.0)))
    else:
        moving = Scatterer(Straight((12.0, 2.0, 5.0), (2.0, 0.0, 0.0)), cross_section_m2=30.0)
        config = replace(busy, reflectors=(moving,))
    states = np.ones((30, 64), dtype=np.int8)
    times = every(FRAME_S, 30, 2.0)
    scene = Scene(config, 1)
    frames = scene.frames(times, states)
    expected = np.stack([scene.response(float(t), states[0]) for t in times])
    assert np.max(np.abs(frames - expected)) < 1e-5 * np.sqrt(np.mean(np.abs(expected) ** 2))


def test_terminal_that_drives_off_shows_the_doppler_shift(plain: Make, ideal: ReflectionConfig) -> None:
    """Driving straight away from the mast at v shifts the carrier by −v/λ (Doppler)."""
    terminal = Terminal(Straight((0.0, -30.0, 12.0), (0.0, -3.0, 0.0)))
    panel = PanelConfig(1, 1, (0.0, 50.0, 0.0), (0.0, 1.0, 0.0))  # looks away
    config = plain(terminals=(terminal,), panel=panel, reflection=ideal, direct=DirectConfig(), noise_power=1e-40)
    times = every(FRAME_S, 280)
    frames = Scene(config, 1).frames(times, np.ones((280, 1), dtype=np.int8))
    carrier = frames[:, 0, config.tones.fft // 2 - config.tones.first]
    shift_hz = np.polyfit(times, np.unwrap(np.angle(carrier)) / (2 * np.pi), 1)[0]
    assert shift_hz == pytest.approx(-3.0 / (LIGHT_MPS / 3.75e9), rel=1e-4)


def test_surface_path_shows_its_own_doppler_shift(plain: Make, ideal: ReflectionConfig) -> None:
    """By way of the panel the shift is that of the distance from panel to terminal alone."""
    # Drives around the mast, so that the direct path keeps its length, and towards a panel of one element.
    panel = PanelConfig(1, 1, (-40.0, -20.0, 3.0), (1.0, 0.0, 0.0))
    terminal = Terminal(Straight((0.0, -20.0, 3.0), (-2.0, 0.0, 0.0)))
    config = plain(terminals=(terminal,), panel=panel, mast=Still((0.0, 0.0, 3.0)), reflection=ideal, noise_power=1e-40)
    times = every(FRAME_S, 140)
    scene, other = Scene(config, 1), Scene(config, 1)
    plus = scene.frames(times, np.ones((140, 1), dtype=np.int8))
    minus = other.frames(times, -np.ones((140, 1), dtype=np.int8))
    carrier = (plus - minus)[:, 0, config.tones.fft // 2 - config.tones.first]
    shift_hz = np.polyfit(times, np.unwrap(np.angle(carrier)) / (2 * np.pi), 1)[0]
    assert shift_hz == pytest.approx(2.0 / (LIGHT_MPS / 3.75e9), rel=1e-3)


def test_large_moving_scene_stays_exact(plain: Make) -> None:
    """1 024 elements and a terminal at 3 m/s: frames equal the exact channel of their own time to 1e-5."""
    config = plain(
        panel=PanelConfig(32, 32, (20.0, 15.0, 6.0), (-0.2, -1.0, 0.0)),
        terminals=(Terminal(Straight((30.0, -5.0, 3.0), (1.8, 2.4, 0.0))),),
        reflectors=(Wall((0.0, 0.0, 0.0), (0.0, 0.0, 1.0)),),
        noise_power=1e-40,
    )
    states = np.random.default_rng(7).choice(np.array([-1, 1], dtype=np.int8), (64, 1024))
    times = every(FRAME_S, 64, 3.0)
    scene = Scene(config, 2)
    frames = scene.frames(times, states)
    expected = scene.response(float(times[63]), states[63])
    assert np.max(np.abs(frames[63] - expected)) < 1e-5 * np.sqrt(np.mean(np.abs(expected) ** 2))
