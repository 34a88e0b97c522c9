"""From settings to an engine: the one place where keys of the file become terms of the engine."""

import math
from functools import lru_cache
from pathlib import Path

from tracker.basis_file import BasisError, unpack_basis
from tracker.engine.config import Config, PlanConfig
from tracker.engine.estimation.aperture import ApertureBasis, Columns, Elements, Tiles
from tracker.engine.estimation.delay import delay_basis, frequencies
from tracker.engine.estimation.region import Mirror, RegionBasis, Site, Vector, region_basis
from tracker.engine.panel import Limits
from tracker.messages import Shape
from tracker.settings import Settings, SettingsError

LIGHT_M_S = 299_792_458.0
# Name under which the learned basis in force lies in a log.
BASIS = "basis.npz"


def configure(settings: Settings, folder: Path, basis: bytes | None = None) -> Config:
    """Build what the engine is made from.

    Parameters
    ----------
    settings : Settings
    folder : Path
        Where relative paths of the settings start.
    basis : bytes or None
        The learned basis, in place of the file that the settings name; see `learned_basis`.

    Raises
    ------
    SettingsError
        When a key asks for something that cannot be had.
    """
    tones, delay, refresh = settings.tones, settings.delay, settings.refresh
    return Config(
        receivers=settings.link.receivers,
        delay=delay_basis(tones.fft, tones.first, tones.count, delay.taps, delay.before),
        aperture=_aperture(settings, folder, basis),
        forgetting=settings.estimator.forgetting,
        time_constant_s=settings.estimator.time_constant_ms / 1e3,
        bank=settings.estimator.bank,
        false_alarm_s=settings.drift.false_alarm_hours * 3600.0,
        frequency_hz=frequencies(tones.fft, tones.first, tones.count, tones.spacing_khz),
        follow_phase=settings.follow.phase,
        every_bursts=refresh.every_bursts,
        least_gain=refresh.least_gain,
        switching_s=refresh.switching_ms / 1e3,
        clock_skew_ns=round(settings.link.clock_skew_s * 1e9),
        limits=_limits(settings),
        panel=(settings.panel.columns, settings.panel.rows),
        plan=_plan(settings),
    )


def shape(settings: Settings) -> Shape:
    """Sizes that every burst of this link must have."""
    return Shape(settings.panel.elements, settings.link.receivers, settings.tones.count)


def learned_basis(settings: Settings, folder: Path) -> bytes | None:
    """Read the file of the learned basis; None when the settings ask for another basis.

    Raises
    ------
    SettingsError
        When it cannot be read.
    """
    aperture = settings.aperture
    if aperture.basis != "learned" or aperture.file is None:
        return None
    path = folder / aperture.file
    try:
        return path.read_bytes()
    except FileNotFoundError:
        raise SettingsError(
            f"aperture.file: {path}: there is no such file; `ris-tracker learn` writes it from a log"
        ) from None
    except OSError as error:
        raise SettingsError(f"aperture.file: {path}: cannot be read: {error.strerror}") from None


def _aperture(settings: Settings, folder: Path, basis: bytes | None) -> ApertureBasis:
    panel, aperture = settings.panel, settings.aperture
    if aperture.basis == "elements":
        return Elements(panel.elements)
    if aperture.basis == "tiles":
        return Tiles(panel.columns, panel.rows, aperture.tile_columns, aperture.tile_rows)
    if aperture.basis == "region":
        return _region(settings)
    return _learned(settings, basis if basis is not None else learned_basis(settings, folder))


def _learned(settings: Settings, data: bytes | None) -> Columns:
    panel, size, name = settings.panel, settings.aperture.size, settings.aperture.file
    try:
        basis = unpack_basis(data or b"")
    except BasisError as error:
        raise SettingsError(f"aperture.file: {name} {error}; `ris-tracker learn` writes one from a log") from None
    if basis.panel != (panel.columns, panel.rows):
        raise SettingsError(
            f"aperture.file: {name} was learned on a panel of {basis.panel[0]} columns × {basis.panel[1]} rows, "
            f"[panel] has {panel.columns} × {panel.rows}; learn one on this panel"
        )
    held = basis.held_by(size)
    return Columns(basis.columns[:, :size], basis.variances[:size], held if math.isfinite(held) else None)


def _region(settings: Settings) -> Columns:
    site, panel = settings.site, settings.panel
    if site is None or panel.spacing_mm is None:
        raise SettingsError('aperture.basis = "region" needs the table [site] and panel.spacing_mm')
    place = Site(
        columns=panel.columns,
        rows=panel.rows,
        column_spacing=panel.spacing_mm / 1e3,
        row_spacing=(panel.row_spacing_mm or panel.spacing_mm) / 1e3,
        centre=_vector(site.panel_m),
        facing=_vector(site.facing),
        up=_vector(site.up),
        transmitter=_vector(site.transmitter_m),
        corners=(_vector(site.region_m[0]), _vector(site.region_m[1])),
        wavelength=LIGHT_M_S / (site.carrier_ghz * 1e9),
        mirrors=tuple(Mirror(_vector(one.point_m), _vector(one.normal), one.loss_db) for one in site.mirrors),
    )
    try:
        found = _worked_out(place, settings.aperture.size)
    except ValueError as error:
        raise SettingsError(f"site: {error}; correct the table [site]") from None
    return Columns(found.columns, found.variances, found.held)


@lru_cache(maxsize=4)
def _worked_out(site: Site, size: int) -> RegionBasis:
    """Work out the basis of a region once: a large panel takes seconds, and a replay asks anew for every log."""
    return region_basis(site, size)


def _vector(values: list[float]) -> Vector:
    x, y, z = values
    return x, y, z


def _plan(settings: Settings) -> PlanConfig | None:
    sounding = settings.sounding
    if not sounding.plan:
        return None
    return PlanConfig(
        frames_per_s=1e6 / sounding.frame_us,
        most_frames=sounding.most_frames,
        burst_s=sounding.burst_ms / 1e3,
        least_share=sounding.least_share,
        most_share=sounding.most_share,
        in_service=sounding.in_service,
        least_service=sounding.least_service,
    )


def _limits(settings: Settings) -> Limits:
    stuck = dict.fromkeys(settings.panel.stuck.get("plus", []), 1)
    stuck.update(dict.fromkeys(settings.panel.stuck.get("minus", []), -1))
    return Limits(stuck=stuck, tied=settings.panel.tied, most_changes=settings.refresh.most_changes)
