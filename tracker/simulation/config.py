"""What a scene is made of: tones, terminals, the direct way, and the whole."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tracker.simulation.geometry import PanelConfig, Reflector
from tracker.simulation.impairments import Clock, Impairments, Oscillator
from tracker.simulation.motion import Track, Vector
from tracker.simulation.reflection import ReflectionConfig
from tracker.simulation.schedule import Block, Episode
from tracker.simulation.tdl import FadingConfig


@dataclass(frozen=True, slots=True)
class ToneGrid:
    """The pilot tones: `count` neighbours from index `first`; fft // 2 is the carrier."""

    fft: int = 256
    first: int = 28
    count: int = 200
    spacing_hz: float = 156_250.0

    def offsets_hz(self) -> NDArray[np.float64]:
        """Tones over the carrier, Hz, shape (K,)."""
        indices = np.arange(self.first, self.first + self.count, dtype=np.float64)
        return (indices - self.fft // 2) * self.spacing_hz

    @property
    def sample_s(self) -> float:
        """Duration of a sample, s."""
        return 1.0 / (self.fft * self.spacing_hz)


@dataclass(frozen=True, slots=True)
class Terminal:
    """A terminal: one or more receiving antennas on one oscillator and one clock.

    Parameters
    ----------
    track : Track
    antennas : tuple of 3-tuples
        Offsets of its antennas from the track, m; one receiver each.
    oscillator : Oscillator
    clock : Clock
    """

    track: Track
    antennas: tuple[Vector, ...] = ((0.0, 0.0, 0.0),)
    oscillator: Oscillator = field(default_factory=Oscillator)
    clock: Clock = field(default_factory=Clock)


@dataclass(frozen=True, slots=True)
class DirectConfig:
    """The way from mast to terminal that does not touch the panel.

    Parameters
    ----------
    loss_db : float
        Loss over free space that is always there: obstacles in between.
    blocks : tuple of Block
        Losses that come and go.
    fading : FadingConfig or None
        Taps with Clarke fading in place of the rays, with the mean power of free space less the losses.
    """

    loss_db: float = 0.0
    blocks: tuple[Block, ...] = ()
    fading: FadingConfig | None = None


@dataclass(frozen=True, slots=True)
class SceneConfig:
    """All there is to know of a scene but the seed.

    Parameters
    ----------
    carrier_hz : float
    tones : ToneGrid
    panel : PanelConfig
    mast : Track
        The transmitting antenna.
    terminals : tuple of Terminal
        Receivers are their antennas, in order.
    reflection : ReflectionConfig
    reflectors : tuple of Wall or Scatterer
    direct : DirectConfig
    snr_db : float
        Signal-to-noise ratio on a tone under random patterns at `snr_at_s`, mean over tones and receivers.
    snr_at_s : float
        s.
    noise_power : float or None
        Noise power on a tone in the units of |response|²; overrides `snr_db` when given.
    delay_zero_samples : float
        Delay of the earliest path at time zero, samples.
    impairments : Impairments
    episodes : tuple of Episode
        What happens, in words.
    """

    carrier_hz: float
    tones: ToneGrid
    panel: PanelConfig
    mast: Track
    terminals: tuple[Terminal, ...]
    reflection: ReflectionConfig = field(default_factory=ReflectionConfig)
    reflectors: tuple[Reflector, ...] = ()
    direct: DirectConfig = field(default_factory=DirectConfig)
    snr_db: float = -8.0
    snr_at_s: float = 0.0
    noise_power: float | None = None
    delay_zero_samples: float = 1.0
    impairments: Impairments = field(default_factory=Impairments)
    episodes: tuple[Episode, ...] = ()

    @property
    def receivers(self) -> int:
        """R."""
        return sum(len(terminal.antennas) for terminal in self.terminals)

    @property
    def elements(self) -> int:
        """N."""
        return self.panel.elements
