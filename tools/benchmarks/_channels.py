"""Channels to try the optimizer on: a container yard by rays, and Rayleigh fading.

Levels are those of a link that needs its surface: about −8 to −10 dB a tone under random patterns, and a direct path
from as strong as that to far weaker or stronger.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.engine.estimation.delay import delay_basis, frequencies
from tracker.engine.search.channel import Channel

LIGHT = 299_792_458.0
CARRIER_HZ = 3.7e9
TAPS = 16
LEVEL_DB = (-8.0, -9.0, -10.0)
DIRECT = (1.0, 0.3, 3.0, 0.1)
"""Amplitude of the direct path over that of the surface under random patterns."""

Complex = NDArray[np.complex128]
Points = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Band:
    """K pilot tones in the middle of an OFDM band with guard bands."""

    tones: int
    width_hz: float

    @property
    def spacing_hz(self) -> float:
        """Tone spacing, Hz."""
        return self.width_hz / self.tones

    @property
    def fft(self) -> int:
        """Length of the transform."""
        return 5 * self.tones // 4

    @property
    def first(self) -> int:
        """Index of the first pilot tone."""
        return (self.fft - self.tones) // 2

    def basis(self) -> Complex:
        """Delay basis, shape (K, Q)."""
        return delay_basis(self.fft, self.first, self.tones, TAPS, 1)

    def frequencies_hz(self) -> NDArray[np.float64]:
        """Frequencies of the tones against the carrier, shape (K,)."""
        return frequencies(self.fft, self.first, self.tones, self.spacing_hz / 1e3)


def channel(number: int, elements: int, tones: int, receivers: int) -> Channel:
    """Draw channel `number`: even ones by rays in a yard, odd ones Rayleigh; levels and bands go round."""
    rng = np.random.default_rng([11, number, elements, tones, receivers])
    band = Band(tones, (40e6, 100e6, 80e6)[number // 2 % 3])
    draw = _yard if number % 2 == 0 else _rayleigh
    direct, surface = draw(rng, band, elements, receivers, number)
    level = 10.0 ** (LEVEL_DB[number % 3] / 20.0)
    direct *= DIRECT[number // 2 % 4] * level / np.sqrt((np.abs(direct) ** 2).mean())
    surface *= level / np.sqrt((np.abs(surface) ** 2).mean() * elements)
    basis = band.basis()
    return Channel(basis, direct @ basis.conj(), np.ascontiguousarray(surface @ basis.conj()))


def _rayleigh(
    rng: np.random.Generator, band: Band, elements: int, receivers: int, number: int
) -> tuple[Complex, Complex]:
    """Independent taps at whole samples, their power falling exponentially."""
    power = np.exp(-np.arange(TAPS - 1) / (2.0, 4.0, 8.0)[number // 2 % 3])
    delays = np.arange(TAPS - 1) / (band.fft * band.spacing_hz)
    tones = np.sqrt(power)[:, None] * np.exp(-2j * np.pi * np.outer(delays, band.frequencies_hz()))
    return _gauss(rng, receivers, TAPS - 1) @ tones, _gauss(rng, elements, receivers, TAPS - 1) @ tones


def _yard(rng: np.random.Generator, band: Band, elements: int, receivers: int, number: int) -> tuple[Complex, Complex]:
    """Rays from a mast by way of the surface to the receivers on a straddle carrier, containers as scatterers."""
    side = round(np.sqrt(elements))
    half_wave = LIGHT / CARRIER_HZ / 2
    place = np.arange(elements)
    panel = np.zeros((elements, 3))
    panel[:, 1] = (place // side - (side - 1) / 2) * half_wave
    panel[:, 2] = (place % side - (side - 1) / 2) * half_wave
    mast = rng.uniform((20, -40, 0), (60, 40, 10))
    carrier = rng.uniform((4, -25, -8), (40, 25, -3))
    wave = 2 * np.pi * (CARRIER_HZ + band.frequencies_hz()) / LIGHT
    scatterers = (4, 8, 12)[number // 4 % 3]

    near_mast, near_carrier = (rng.uniform((2, -40, -8), (60, 40, 8), (scatterers, 3)) for _ in range(2))
    strength = [_strength(rng, scatterers) for _ in range(2)]
    incoming = _rays(mast, near_mast, strength[0], panel, wave)
    surface = np.empty((elements, receivers, band.tones), dtype=np.complex128)
    direct = np.empty((receivers, band.tones), dtype=np.complex128)
    for receiver in range(receivers):
        antenna = carrier + (receiver > 0) * rng.normal(scale=4 * half_wave, size=3)
        surface[:, receiver] = incoming * _rays(antenna, near_carrier, strength[1], panel, wave)
        delays = np.append(0.0, rng.exponential(60e-9, scatterers))
        direct[receiver] = _strength(rng, scatterers) @ np.exp(-2j * np.pi * np.outer(delays, band.frequencies_hz()))
    return direct, surface


def _rays(source: Points, scatterers: Points, strength: Complex, panel: Points, wave: Points) -> Complex:
    """Spherical waves from a source to every element, straight and by way of scatterers; shape (N, K).

    Phases count from the straight way to the middle of the panel, so that all delays are those beyond it.
    """
    straight = float(np.linalg.norm(source))
    field = np.zeros((len(panel), len(wave)), dtype=np.complex128)
    for number, gain in enumerate(strength):
        if number == 0:
            way = np.linalg.norm(source - panel, axis=1)
        else:
            bounce = scatterers[number - 1]
            way = np.linalg.norm(source - bounce) + np.linalg.norm(bounce - panel, axis=1)
        field += (gain * straight / way)[:, None] * np.exp(-1j * np.outer(way - straight, wave))
    return field


def _strength(rng: np.random.Generator, scatterers: int) -> Complex:
    """Gain of the straight way, 1, and of the scattered ones, at random phases."""
    size = np.append(1.0, rng.uniform(0.1, 0.5, scatterers))
    return np.asarray(size * np.exp(2j * np.pi * rng.random(scatterers + 1)))


def _gauss(rng: np.random.Generator, *shape: int) -> Complex:
    return np.asarray(rng.standard_normal(shape) + 1j * rng.standard_normal(shape))
