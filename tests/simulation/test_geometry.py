"""Amplitudes and lengths of rays against formulas of radio engineering."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from tracker.simulation.config import DirectConfig, SceneConfig, Terminal
from tracker.simulation.geometry import LIGHT_MPS, Panel, PanelConfig, Scatterer, Wall
from tracker.simulation.motion import Still
from tracker.simulation.reflection import ReflectionConfig
from tracker.simulation.scene import Scene

Make = Callable[..., SceneConfig]


def test_direct_path_has_free_space_loss(plain: Make, ideal: ReflectionConfig) -> None:
    """ITU-R P.525: basic transmission loss 32.4 + 20 log10(f/MHz) + 20 log10(d/km) dB (32.4 is rounded from 32.45)."""
    for distance_m in (10.0, 100.0, 3000.0):
        terminal = Terminal(Still((0.0, -distance_m, 12.0)))
        scene = Scene(plain(terminals=(terminal,), reflection=ideal, direct=DirectConfig()), 1)
        direct, _ = scene.truth(0.0)
        loss_db = -20 * np.log10(np.abs(direct[0]))
        expected_db = 32.4 + 20 * np.log10(3750.0) + 20 * np.log10(distance_m / 1e3)
        np.testing.assert_allclose(loss_db, expected_db, atol=0.06)


def far_field(plain: Make, ideal: ReflectionConfig, columns: int, rows: int) -> SceneConfig:
    """A panel square on to mast and terminal, both far away and almost in line with its front."""
    return plain(
        panel=PanelConfig(columns, rows, (0.0, 0.0, 0.0), (1.0, 0.0, 0.0), spacing_m=0.03, pattern_exponent=3.0),
        mast=Still((2000.0, 0.0, 0.0)),
        terminals=(Terminal(Still((3000.0, 1.0, 0.0))),),
        reflection=ideal,
    )


def test_whole_panel_in_far_field_has_the_published_path_loss(plain: Make, ideal: ReflectionConfig) -> None:
    """Tang et al., arXiv 1911.05326: PL = 64π³(d1 d2)²/(Gt Gr G M²N² dx dy λ² F F A²) (formula from memory).

    At normal incidence F = 1; cos³ elements have G = 8; mast and terminal antennas are isotropic.
    """
    scene = Scene(far_field(plain, ideal, 12, 10), 1)
    _, surface = scene.truth(0.0)
    loss = 1 / np.abs(surface[:, 0].sum(axis=0)) ** 2
    wavelength_m = LIGHT_MPS / 3.75e9
    d1, d2, gain, spacing_m = 2000.0, np.hypot(3000.0, 1.0), 8.0, 0.03
    expected = 64 * np.pi**3 * (d1 * d2) ** 2 / (gain * 12**2 * 10**2 * spacing_m**2 * wavelength_m**2)
    np.testing.assert_allclose(loss, expected, rtol=2e-3)


def test_power_grows_with_the_square_of_the_elements(plain: Make, ideal: ReflectionConfig) -> None:
    """6.02 dB a doubling of N: Wu & Zhang, arXiv 1906.03165 (in phase, far field)."""
    powers = []
    for columns in (4, 8, 16):
        _, surface = Scene(far_field(plain, ideal, columns, 8), 1).truth(0.0)
        powers.append(np.mean(np.abs(surface[:, 0].sum(axis=0)) ** 2))
    np.testing.assert_allclose(10 * np.log10(np.array(powers[1:]) / powers[:-1]), 6.02, atol=0.02)


def test_element_order_is_columns_then_rows(plain: Make) -> None:
    """Element i is column i // rows, row i % rows: the element right before the terminal is heard loudest."""
    config = plain(panel=PanelConfig(5, 3, (0.0, 0.0, 10.0), (0.0, -1.0, 0.0), spacing_m=1.0))
    positions = Panel(config.panel, 0.08).positions()
    # Facing south with up upwards, columns run east and rows upwards.
    np.testing.assert_allclose(positions[0], [-2.0, 0.0, 9.0], atol=1e-12)
    np.testing.assert_allclose(positions[1], [-2.0, 0.0, 10.0], atol=1e-12)
    np.testing.assert_allclose(positions[3], [-1.0, 0.0, 9.0], atol=1e-12)
    for element in (0, 7, 11):
        x, _, z = positions[element]
        near = replace(config, mast=Still((0.0, -500.0, 10.0)), terminals=(Terminal(Still((x, -0.3, z))),))
        _, surface = Scene(near, 1).truth(0.0)
        assert int(np.argmax(np.abs(surface[:, 0, 0]))) == element


def test_element_pattern_follows_the_power_of_the_cosine(plain: Make, ideal: ReflectionConfig) -> None:
    """Going from 0° to 60° off the front at one distance costs cos^q: q = 2 gives 10 log10(1/4) = −6.02 dB."""
    config = plain(
        panel=PanelConfig(1, 1, (0.0, 0.0, 0.0), (1.0, 0.0, 0.0), pattern_exponent=2.0),
        mast=Still((50.0, 0.0, 0.0)),
        reflection=ideal,
    )
    powers = []
    for angle in (0.0, np.pi / 3):
        terminal = Terminal(Still((40 * np.cos(angle), 40 * np.sin(angle), 0.0)))
        _, surface = Scene(replace(config, terminals=(terminal,)), 1).truth(0.0)
        powers.append(np.abs(surface[0, 0, 0]) ** 2)
    assert 10 * np.log10(powers[1] / powers[0]) == pytest.approx(-6.02, abs=0.01)


def test_panel_reflects_nothing_backwards(plain: Make) -> None:
    """A terminal behind the panel hears no element."""
    config = plain(terminals=(Terminal(Still((20.0, 40.0, 6.0))),))
    _, surface = Scene(config, 1).truth(0.0)
    assert np.all(surface == 0)


def test_ground_makes_two_rays(plain: Make, ideal: ReflectionConfig) -> None:
    """Two-ray model (Rappaport, from memory): e^{−jkr}/r + Γ e^{−jkr'}/r', r' = √(d² + (h1 + h2)²)."""
    ground = Wall((0.0, 0.0, 0.0), (0.0, 0.0, 2.0), loss_db=3.0, phase_rad=np.pi, hops=("direct",))
    config = plain(
        mast=Still((0.0, 0.0, 12.0)),
        terminals=(Terminal(Still((0.0, -40.0, 3.0))),),
        reflectors=(ground,),
        reflection=ideal,
        direct=DirectConfig(),
    )
    direct, _ = Scene(config, 1).truth(0.0)
    straight, bounced = np.hypot(40.0, 9.0), np.hypot(40.0, 15.0)
    frequencies = 3.75e9 + config.tones.offsets_hz()
    k = 2 * np.pi * frequencies / LIGHT_MPS
    both = np.exp(-1j * k * straight) / straight - 10 ** (-3 / 20) * np.exp(-1j * k * bounced) / bounced
    # Amplitudes are those at the carrier: over 20 MHz at 3.75 GHz they change by less than 0.3 %.
    np.testing.assert_allclose(np.abs(direct[0]), LIGHT_MPS / 3.75e9 / (4 * np.pi) * np.abs(both), rtol=1e-6)


def test_scatterer_obeys_the_bistatic_radar_equation(plain: Make, ideal: ReflectionConfig) -> None:
    """Pr/Pt = λ²σ / ((4π)³ d1² d2²) for isotropic antennas (Skolnik, from memory)."""
    config = plain(reflection=ideal, direct=DirectConfig(), terminals=(Terminal(Still((0.0, -50.0, 12.0))),))
    post = Scatterer(Still((30.0, -20.0, 12.0)), cross_section_m2=2.5, hops=("direct",))
    alone, _ = Scene(config, 1).truth(0.0)
    both, _ = Scene(replace(config, reflectors=(post,)), 1).truth(0.0)
    d1, d2 = np.hypot(30.0, 20.0), np.hypot(30.0, 30.0)
    expected = (LIGHT_MPS / 3.75e9) ** 2 * 2.5 / ((4 * np.pi) ** 3 * d1**2 * d2**2)
    np.testing.assert_allclose(np.abs(both - alone) ** 2, expected, rtol=1e-6)


def test_reflectors_act_on_the_hops_they_name(plain: Make, ideal: ReflectionConfig) -> None:
    """A wall on the way from panel to terminal changes the surface and leaves the direct path alone."""
    wall = Wall((0.0, 0.0, 0.0), (0.0, 0.0, 1.0), hops=("out",))
    direct, surface = Scene(plain(reflection=ideal), 1).truth(0.0)
    direct_walled, surface_walled = Scene(plain(reflection=ideal, reflectors=(wall,)), 1).truth(0.0)
    np.testing.assert_allclose(direct_walled, direct, rtol=1e-12)
    assert np.max(np.abs(surface_walled - surface)) > 0.01 * np.max(np.abs(surface))


def test_panel_that_lies_on_its_back_needs_another_up() -> None:
    """Facing along `up` leaves the columns without a direction, and says so."""
    with pytest.raises(ValueError, match="facing lies along up"):
        Panel(PanelConfig(2, 2, (0, 0, 0), (0, 0, 1)), 0.08)
    lying = Panel(PanelConfig(2, 2, (0, 0, 0), (0, 0, 1), up=(0, 1, 0)), 0.08)
    np.testing.assert_allclose(lying.positions()[:, 2], 0.0, atol=1e-12)
