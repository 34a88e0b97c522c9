"""A plain scene that tests change in one respect at a time."""

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from tracker.simulation.config import DirectConfig, SceneConfig, Terminal, ToneGrid
from tracker.simulation.geometry import PanelConfig
from tracker.simulation.motion import Still
from tracker.simulation.reflection import ReflectionConfig

IDEAL = ReflectionConfig(
    plus_loss_db=0.0,
    minus_loss_db=0.0,
    phase_difference_rad=np.pi,
    gain_spread_db=0.0,
    phase_spread_rad=0.0,
    difference_spread_rad=0.0,
)

PLAIN = SceneConfig(
    carrier_hz=3.75e9,
    tones=ToneGrid(fft=64, first=16, count=32, spacing_hz=625e3),
    panel=PanelConfig(columns=8, rows=8, centre=(20.0, 15.0, 6.0), facing=(-0.2, -1.0, 0.0)),
    mast=Still((0.0, 0.0, 12.0)),
    terminals=(Terminal(Still((30.0, -5.0, 3.0))),),
    reflection=ReflectionConfig(),
    direct=DirectConfig(loss_db=40.0),
    snr_db=10.0,
)


@pytest.fixture
def plain() -> Callable[..., SceneConfig]:
    """Give a function that makes the plain scene with some fields replaced."""

    def make(**changes: Any) -> SceneConfig:
        return replace(PLAIN, **changes)

    return make


@pytest.fixture
def ideal() -> ReflectionConfig:
    """Elements without loss or spread whose states differ by half a turn."""
    return IDEAL
