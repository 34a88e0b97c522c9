"""Fading direct path: tables of TR 38.901 and Clarke's autocorrelation."""

from collections.abc import Callable
from typing import Literal

import numpy as np
import pytest
from scipy.special import j0

from tracker.simulation.config import DirectConfig, SceneConfig
from tracker.simulation.reflection import ReflectionConfig
from tracker.simulation.scene import Scene
from tracker.simulation.tdl import PROFILES, Fading, FadingConfig


@pytest.mark.parametrize(
    ("profile", "taps", "power", "spread"),
    [("A", 23, 3.4677, 1.0001), ("B", 23, 7.0930, 1.0000), ("C", 24, 5.8745, 1.0000)],
)
def test_profiles_have_the_published_sums(profile: str, taps: int, power: float, spread: float) -> None:
    """3GPP TR 38.901, tables 7.7.2-1 to 7.7.2-3: taps, linear power sum, RMS delay spread (one by definition)."""
    table = np.asarray(PROFILES[profile])
    powers = 10 ** (table[:, 1] / 10)
    mean = np.sum(powers * table[:, 0]) / powers.sum()
    rms = np.sqrt(np.sum(powers * (table[:, 0] - mean) ** 2) / powers.sum())
    assert len(table) == taps
    assert powers.sum() == pytest.approx(power, abs=1e-4)
    assert rms == pytest.approx(spread, abs=1e-4)


def test_taps_decorrelate_as_clarke_says() -> None:
    """J0(2π f_d τ) = .999013 .975478 .903713 .642512 at f_d τ = .01 .05 .1 .2 (Clarke 1968); power is one in total."""
    doppler_hz = 10.0
    lags_s = np.array([0.0, 0.01, 0.05, 0.1, 0.2]) / doppler_hz
    products = []
    for seed in range(40):
        fading = Fading(FadingConfig("C", 100e-9, doppler_hz), 8, np.random.default_rng(seed))
        taps = fading.taps(lags_s)
        products.append(np.sum(taps * taps[:1].conj(), axis=2).mean(axis=1))
    measured = np.mean(products, axis=0)
    expected = np.array([1.0, 0.999013, 0.975478, 0.903713, 0.642512])
    np.testing.assert_allclose(j0(2 * np.pi * doppler_hz * lags_s[1:]), expected[1:], atol=1e-6)
    # 40 · 8 · 24 taps, some far stronger than others: the mean power is known to about 2 %.
    np.testing.assert_allclose(measured.real, expected, atol=0.05)
    np.testing.assert_allclose(measured.real / measured.real[0], expected, atol=0.01)
    np.testing.assert_allclose(measured.imag, 0.0, atol=0.05)


@pytest.mark.parametrize("profile", ["A", "B", "C"])
def test_direct_path_may_fade_instead(
    plain: Callable[..., SceneConfig], ideal: ReflectionConfig, profile: Literal["A", "B", "C"]
) -> None:
    """A fading direct path keeps the mean power of the geometric one, and frames still equal the truth."""
    fading = FadingConfig(profile, delay_spread_s=200e-9, doppler_hz=30.0)
    straight = Scene(plain(reflection=ideal), 1)
    power = np.mean(np.abs(straight.truth(0.0)[0]) ** 2)
    config = plain(reflection=ideal, direct=DirectConfig(loss_db=40.0, fading=fading), noise_power=1e-40)
    faded = [np.mean(np.abs(Scene(config, seed).truth(0.0)[0]) ** 2) for seed in range(150)]
    # 150 draws of a few strong taps over the band: the mean is known to about 10 %.
    assert np.mean(faded) == pytest.approx(power, rel=0.25)
    assert np.std(faded) > 0.2 * power
    scene = Scene(config, 3)
    times = np.linspace(0.02, 0.021, 16)
    frames = scene.frames(times, np.ones((16, 64), dtype=np.int8))
    expected = scene.response(float(times[9]), np.ones(64))
    assert np.max(np.abs(frames[9] - expected)) < 1e-5 * np.sqrt(np.mean(np.abs(expected) ** 2))
