"""From settings to an engine: the one place where keys of the file become terms of the engine."""

from pathlib import Path

from tracker.engine.aperture import ApertureBasis, Elements, Tiles
from tracker.engine.config import Config
from tracker.engine.delay import delay_basis, frequencies
from tracker.engine.panel import Limits
from tracker.messages import Shape
from tracker.settings import Settings, SettingsError


def configure(settings: Settings, folder: Path) -> Config:
    """Build what the engine is made from.

    Parameters
    ----------
    settings : Settings
    folder : Path
        Where relative paths of the settings start.

    Raises
    ------
    SettingsError
        When a key asks for something that cannot be had.
    """
    del folder  # no file is needed by the bases of this version
    tones, delay, refresh = settings.tones, settings.delay, settings.refresh
    return Config(
        receivers=settings.link.receivers,
        delay=delay_basis(tones.fft, tones.first, tones.count, delay.taps, delay.before),
        aperture=_aperture(settings),
        forgetting=settings.estimator.forgetting,
        time_constant_s=settings.estimator.time_constant_ms / 1e3,
        bank=settings.estimator.bank,
        false_alarm_s=settings.drift.false_alarm_hours * 3600.0,
        frequency_hz=frequencies(tones.fft, tones.first, tones.count, tones.spacing_khz),
        follow_phase=settings.follow.phase,
        every_bursts=refresh.every_bursts,
        least_gain=refresh.least_gain,
        clock_skew_ns=round(settings.link.clock_skew_s * 1e9),
        limits=_limits(settings),
    )


def shape(settings: Settings) -> Shape:
    """Sizes that every burst of this link must have."""
    return Shape(settings.panel.elements, settings.link.receivers, settings.tones.count)


def _aperture(settings: Settings) -> ApertureBasis:
    panel, aperture = settings.panel, settings.aperture
    if aperture.basis == "elements":
        return Elements(panel.elements)
    if aperture.basis == "tiles":
        return Tiles(panel.columns, panel.rows, aperture.tile_columns, aperture.tile_rows)
    raise SettingsError(
        f'aperture.basis: found {aperture.basis!r}, this version estimates in "elements" or "tiles"; choose one of them'
    )


def _limits(settings: Settings) -> Limits:
    stuck = dict.fromkeys(settings.panel.stuck.get("plus", []), 1)
    stuck.update(dict.fromkeys(settings.panel.stuck.get("minus", []), -1))
    return Limits(stuck=stuck, tied=settings.panel.tied, most_changes=settings.refresh.most_changes)
