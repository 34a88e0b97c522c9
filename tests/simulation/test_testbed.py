"""Bursts of a testbed, what it knows, and the engine wired to it."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from tracker.engine.events import Pattern, State
from tracker.engine.panel import unpack
from tracker.engine.search.rate import rate
from tracker.messages import decode_pilots, encode_pilots
from tracker.settings import parse
from tracker.simulation.best import best_pattern
from tracker.simulation.closed_loop import EngineInLoop, turns
from tracker.simulation.config import DirectConfig, SceneConfig, Terminal, ToneGrid
from tracker.simulation.geometry import PanelConfig
from tracker.simulation.motion import Straight
from tracker.simulation.reflection import ReflectionConfig
from tracker.simulation.sounding import SoundingConfig
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import SCENARIOS, scenario

Make = Callable[..., SceneConfig]
START_NS = 1_700_000_000_000_000_000


def test_burst_carries_what_was_sounded_and_when(plain: Make) -> None:
    """Number, times, patterns and responses fit together and survive the wire format."""
    config = plain(terminals=(Terminal(Straight((30.0, -5.0, 3.0), (1.0, 2.0, 0.0))),), noise_power=1e-40)
    testbed = Testbed(TestbedConfig(config, frames=24), seed=1, run=77, start_ns=START_NS)
    bursts = [testbed.next_burst(START_NS + at) for at in (0, 5_000_000)]
    assert [(burst.run, burst.seq) for burst in bursts] == [(77, 0), (77, 1)]
    burst = bursts[1]
    assert (burst.frames, burst.elements, burst.response.shape) == (24, 64, (24, 1, 32))
    states = unpack(burst.patterns, 64)
    for frame in (0, 23):
        at_s = (burst.t_ns + frame * burst.dt_ns - START_NS) / 1e9
        expected = testbed.scene.response(at_s, states[frame])
        assert np.max(np.abs(burst.response[frame] - expected)) < 1e-5 * np.sqrt(np.mean(np.abs(expected) ** 2))
    decoded = decode_pilots(encode_pilots("yard", burst), "yard", None)
    np.testing.assert_array_equal(decoded.response, burst.response)
    np.testing.assert_array_equal(decoded.patterns, burst.patterns)


def test_applied_pattern_is_in_force_from_the_next_burst_on(plain: Make) -> None:
    """Its id and its states show in the references of the bursts that follow, not before."""
    testbed = Testbed(TestbedConfig(plain(), SoundingConfig(reference_every=8), frames=16), seed=1)
    states = np.where(np.arange(64) % 3 == 0, 1, -1).astype(np.int8)
    before = testbed.next_burst(0)
    testbed.apply(5, states)
    after = testbed.next_burst(10_000_000)
    assert (before.pattern_id, after.pattern_id) == (None, 5)
    np.testing.assert_array_equal(unpack(before.patterns, 64)[[0, 8]], 1.0)
    np.testing.assert_array_equal(unpack(after.patterns, 64)[[0, 8]], [states, states])
    with pytest.raises(ValueError, match="64 elements"):
        testbed.apply(6, states[:10])


def test_skipped_bursts_leave_a_gap_in_the_numbers(plain: Make) -> None:
    """A lost burst's number is never used again."""
    testbed = Testbed(TestbedConfig(plain(), frames=4), seed=1)
    first = testbed.next_burst(0).seq
    testbed.skip(3)
    assert testbed.next_burst(1_000_000).seq == first + 4


def test_report_knows_the_rate_of_the_pattern_in_force_and_a_better_one(plain: Make) -> None:
    """Both rates are those of the scene itself; the optimizer's terms hold the whole channel."""
    testbed = Testbed(TestbedConfig(plain(snr_db=-5.0)), seed=3)
    rng = np.random.default_rng(1)
    testbed.apply(9, rng.choice(np.array([-1, 1], dtype=np.int8), 64))
    report = testbed.report(2_000_000_000)
    assert report.pattern_id == 9
    assert report.rate == pytest.approx(testbed.scene.rate(2.0, testbed.states), rel=1e-12)
    assert rate(report.channel, testbed.states) == pytest.approx(report.rate, rel=1e-6)
    states, best = best_pattern(report.channel, testbed.states, 500)
    assert best == pytest.approx(testbed.scene.rate(2.0, states), rel=1e-6)
    assert best > 1.5 * report.rate


def test_best_rate_is_the_exhaustive_one_on_a_small_panel(plain: Make, ideal: ReflectionConfig) -> None:
    """All 2^10 patterns tried one by one: none is better than what the search finds (brute force)."""
    config = plain(panel=PanelConfig(5, 2, (20.0, 15.0, 6.0), (-0.2, -1.0, 0.0)), reflection=ideal)
    config = replace(config, direct=DirectConfig(loss_db=55.0))
    testbed = Testbed(TestbedConfig(config), seed=3)
    direct, surface = testbed.scene.truth(0.0)
    patterns = 2.0 * ((np.arange(1024)[:, None] >> np.arange(10)) & 1) - 1
    responses = direct + np.einsum("pn,nrk->prk", patterns, surface)
    rates = np.log2(1 + np.abs(responses) ** 2 / testbed.scene.noise_power[:, None]).mean(axis=(1, 2))
    _, best = best_pattern(testbed.report(0).channel, None, 1000)
    assert best == pytest.approx(rates.max(), rel=1e-6)


@pytest.mark.parametrize("name", list(SCENARIOS))
def test_every_scene_of_the_yard_fits_its_settings(name: str) -> None:
    """The settings text parses, and sizes and tones are those of the bursts."""
    scene = scenario(name)
    settings = parse(scene.settings("north-gate"))
    tones = ToneGrid(settings.tones.fft, settings.tones.first, settings.tones.count, settings.tones.spacing_khz * 1e3)
    assert tones == scene.config.tones
    assert settings.link.name == "north-gate"
    burst = Testbed(scene.testbed, seed=1).next_burst(0)
    assert burst.response.shape[1:] == (settings.link.receivers, settings.tones.count)
    assert burst.elements == settings.panel.elements
    assert len(encode_pilots("north-gate", burst)) < 512 * 1024


def test_every_path_of_the_yard_lies_within_the_delays_of_its_settings() -> None:
    """The response over the tones has nearly all its power in the taps that the settings allow (Fourier transform)."""
    for name in SCENARIOS:
        scene = scenario(name)
        settings = parse(scene.settings())
        testbed = Testbed(scene.testbed, seed=1)
        for t_s in (0.0, 14.0, 60.0):
            direct, surface = testbed.scene.truth(t_s)
            channels = np.concatenate([direct[None], surface]).reshape(-1, settings.tones.count)
            # A window keeps the leakage of the missing tones out of the taps far away.
            taps = np.fft.ifft(channels * np.hanning(settings.tones.count), n=settings.tones.fft, axis=1)
            powers = np.abs(taps) ** 2
            allowed = (np.arange(settings.delay.taps) - settings.delay.before) % settings.tones.fft
            inside = powers[:, allowed].sum(axis=1) / powers.sum(axis=1)
            assert inside[1:].mean() > 0.995
            assert inside[0] > 0.9  # the direct path starts one tap from the edge, and the window widens it


def test_engine_in_the_loop_gets_close_to_the_best_rate_in_a_still_yard() -> None:
    """After 1.5 s of the quiet scene the pattern in force has more than nine tenths of the best rate found."""
    scene = scenario("quiet")
    testbed = Testbed(scene.testbed, seed=1)
    engine = EngineInLoop(parse(scene.settings()))
    start = testbed.report(0)
    published, last = 0, None
    for turn in turns(testbed, 0, scene.bursts_per_s, 150, engine):
        published += sum(isinstance(event, Pattern) for event in turn.events)
        last = next(event for event in turn.events if isinstance(event, State))
    report = testbed.report(1_500_000_000)
    _, best = best_pattern(report.channel, report.states, 400)
    assert published > 0
    assert last is not None
    assert last.bursts == 150
    assert start.rate < 0.2 * best
    assert report.rate > 0.9 * best


def test_loop_without_engine_sounds_at_its_pace(plain: Make) -> None:
    """Bursts come at even times; faster than a burst lasts they follow one another."""
    config = TestbedConfig(plain(), frames=10, frame_ns=1_000_000)
    at_pace = [turn.burst.t_ns for turn in turns(Testbed(config, 1), 50, 20.0, 3)]
    too_fast = [turn.burst.t_ns for turn in turns(Testbed(config, 1), 50, 1e6, 3)]
    assert at_pace == [50, 50_000_050, 100_000_050]
    assert too_fast == [50, 10_000_050, 20_000_050]
