"""From settings to the engine's terms: every key that the engine knows arrives there, in its unit."""

from dataclasses import fields
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.service.station import settings_text
from tracker.assembly import configure, shape
from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Elements, Tiles
from tracker.messages import Shape
from tracker.settings import SettingsError, parse


def made(**changes: str) -> Config:
    """The configuration of the small link with settings changed."""
    return configure(parse(settings_text("tcp://127.0.0.1:1", **changes)), Path())


@pytest.mark.parametrize(
    ("table", "line", "name", "wanted"),
    [
        ("link", "receivers = 3", "receivers", 3),
        ("link", "clock_skew_s = 0.5", "clock_skew_ns", 500_000_000),
        ("estimator", 'forgetting = "exponential"', "forgetting", "exponential"),
        ("estimator", "time_constant_ms = 125.0", "time_constant_s", 0.125),
        ("drift", "false_alarm_hours = 0.5", "false_alarm_s", 1800.0),
        ("refresh", "every_bursts = 4", "every_bursts", 4),
        ("refresh", "least_gain = 0.25", "least_gain", 0.25),
        ("refresh", "switching_ms = 3.0", "switching_s", 0.003),
        ("follow", "phase = true", "follow_phase", True),
    ],
)
def test_a_key_arrives_in_the_engines_unit(table: str, line: str, name: str, wanted: object) -> None:
    """Changed in the file, changed there; and nothing else is."""
    plain, changed = made(), made(**{table: line})
    assert getattr(plain, name) != wanted
    assert getattr(changed, name) == wanted
    others = [field.name for field in fields(Config) if field.name not in (name, "delay", "aperture", "frequency_hz")]
    assert all(getattr(plain, other) == getattr(changed, other) for other in others)


def test_limits_of_the_panel_arrive() -> None:
    """Stuck in either state, tied, and how many may change."""
    limits = made(
        **{
            "panel": "tied = [[4, 5], [8, 9, 10]]\nstuck = { plus = [1, 2], minus = [3] }",
            "refresh": "most_changes = 7",
        }
    ).limits
    assert limits.stuck == {1: 1, 2: 1, 3: -1}
    assert [list(group) for group in limits.tied] == [[4, 5], [8, 9, 10]]
    assert limits.most_changes == 7


def span(fft: int, first: int, count: int, taps: int, before: int) -> np.ndarray[Any, Any]:
    """Responses on the pilot tones of channels of one tap each, by the definition of the discrete Fourier transform."""
    impulses = np.fft.fftshift(np.fft.fft(np.eye(fft), axis=0), axes=0)
    return np.roll(impulses, before, axis=1)[first : first + count, :taps]


@pytest.mark.parametrize("tones", [(32, 8, 16), (32, 0, 32), (64, 9, 50)])
def test_the_delay_basis_spans_channels_of_the_length_given(tones: tuple[int, int, int]) -> None:
    """Every channel of so many taps, from `before` samples ahead of time zero (NumPy's FFT), lies in the basis."""
    fft, first, count = tones
    lines = f"fft = {fft}\nfirst = {first}\ncount = {count}"
    basis = made(tones=lines, delay="taps = 6\nbefore = 2").delay
    responses = span(fft, first, count, 6, 2)
    assert basis.shape[0] == count
    # Delays between the taps are spanned too, which takes a few directions more.
    assert basis.shape[1] <= min(6 + 4, count)
    assert np.allclose(basis.conj().T @ basis, np.eye(basis.shape[1]), atol=1e-10)
    left = responses - basis @ (basis.conj().T @ responses)
    # Directions whose singular value does not count are left out: what they hold is far below any noise.
    assert np.abs(left).max() < 1e-2 * np.abs(responses).max()


def test_the_aperture_basis_is_the_one_chosen() -> None:
    """Elements one by one, or tiles: 2 × 2 on a panel of 4 × 4 leaves 4 unknowns."""
    assert isinstance(made().aperture, Elements)
    tiles = made(aperture='basis = "tiles"').aperture
    assert isinstance(tiles, Tiles)
    assert (made().aperture.size, tiles.size, tiles.elements) == (16, 4, 16)


def test_a_basis_that_cannot_be_had_is_the_users_mistake(tmp_path: Path) -> None:
    """The file of a learned basis is missing, or something else: one line with the key and the file."""
    text = settings_text("tcp://127.0.0.1:1", aperture='basis = "learned"\nfile = "basis.npz"')
    with pytest.raises(SettingsError, match=r"aperture.file: .*basis.npz: there is no such file") as caught:
        configure(parse(text), tmp_path)
    assert "\n" not in str(caught.value)
    (tmp_path / "basis.npz").write_bytes(b"not a basis")
    with pytest.raises(SettingsError, match=r"aperture.file: basis.npz is not a basis"):
        configure(parse(text), tmp_path)


def test_the_shape_of_bursts_is_that_of_the_settings() -> None:
    """Elements, receivers and tones."""
    assert shape(parse(settings_text("tcp://127.0.0.1:1", link="receivers = 2"))) == Shape(16, 2, 16)
