"""Tapped delay lines of TR 38.901 with Clarke fading: a direct path that no geometry describes.

Tables 7.7.2-1 to 7.7.2-3 of 3GPP TR 38.901 (TDL-A, TDL-B, TDL-C: no line of sight, every tap Rayleigh).
Each tap is a sum of sinusoids whose angles of arrival are spread evenly over the circle, so that its
autocorrelation is J0(2π f_d τ) (Clarke 1968).
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

# (delay over the RMS delay spread, power in dB), as in the tables
PROFILES: dict[str, tuple[tuple[float, float], ...]] = {
    "A": (
        (0.0000, -13.4),
        (0.3819, 0.0),
        (0.4025, -2.2),
        (0.5868, -4.0),
        (0.4610, -6.0),
        (0.5375, -8.2),
        (0.6708, -9.9),
        (0.5750, -10.5),
        (0.7618, -7.5),
        (1.5375, -15.9),
        (1.8978, -6.6),
        (2.2242, -16.7),
        (2.1718, -12.4),
        (2.4942, -15.2),
        (2.5119, -10.8),
        (3.0582, -11.3),
        (4.0810, -12.7),
        (4.4579, -16.2),
        (4.5695, -18.3),
        (4.7966, -18.9),
        (5.0066, -16.6),
        (5.3043, -19.9),
        (9.6586, -29.7),
    ),
    "B": (
        (0.0000, 0.0),
        (0.1072, -2.2),
        (0.2155, -4.0),
        (0.2095, -3.2),
        (0.2870, -9.8),
        (0.2986, -1.2),
        (0.3752, -3.4),
        (0.5055, -5.2),
        (0.3681, -7.6),
        (0.3697, -3.0),
        (0.5700, -8.9),
        (0.5283, -9.0),
        (1.1021, -4.8),
        (1.2756, -5.7),
        (1.5474, -7.5),
        (1.7842, -1.9),
        (2.0169, -7.6),
        (2.8294, -12.2),
        (3.0219, -9.8),
        (3.6187, -11.4),
        (4.1067, -14.9),
        (4.2790, -9.2),
        (4.7834, -11.3),
    ),
    "C": (
        (0.0000, -4.4),
        (0.2099, -1.2),
        (0.2219, -3.5),
        (0.2329, -5.2),
        (0.2176, -2.5),
        (0.6366, 0.0),
        (0.6448, -2.2),
        (0.6560, -3.9),
        (0.6584, -7.4),
        (0.7935, -7.1),
        (0.8213, -10.7),
        (0.9336, -11.1),
        (1.2285, -5.1),
        (1.3083, -6.8),
        (2.1704, -8.7),
        (2.7105, -13.2),
        (4.2589, -13.9),
        (4.6003, -13.9),
        (5.4902, -15.8),
        (5.6077, -17.1),
        (6.3065, -16.0),
        (6.6374, -15.7),
        (7.0427, -21.6),
        (8.6523, -22.8),
    ),
}


@dataclass(frozen=True, slots=True)
class FadingConfig:
    """A fading direct path in place of the geometric one.

    Parameters
    ----------
    profile : {"A", "B", "C"}
        TDL-A, TDL-B or TDL-C.
    delay_spread_s : float
        RMS delay spread that the normalised delays are scaled by, s.
    doppler_hz : float
        Largest Doppler shift f_d = v / λ, Hz.
    sinusoids : int
        Sinusoids a tap.
    """

    profile: Literal["A", "B", "C"]
    delay_spread_s: float
    doppler_hz: float
    sinusoids: int = 32


class Fading:
    """Taps of unit total power, one independent set a receiver.

    Parameters
    ----------
    config : FadingConfig
    receivers : int
        R.
    rng : numpy.random.Generator
    """

    def __init__(self, config: FadingConfig, receivers: int, rng: np.random.Generator) -> None:
        table = np.asarray(PROFILES[config.profile])
        self.delays_s = table[:, 0] * config.delay_spread_s
        powers = 10 ** (table[:, 1] / 10)
        self.amplitudes = np.sqrt(powers / powers.sum())
        shape = (receivers, table.shape[0], config.sinusoids)
        evenly = np.arange(config.sinusoids) + rng.uniform(0, 1, shape[:2])[..., None]
        self._rates_hz = config.doppler_hz * np.cos(2 * np.pi * evenly / config.sinusoids)
        self._phases = rng.uniform(0, 1, shape)

    def taps(self, t_s: NDArray[np.float64]) -> NDArray[np.complex128]:
        """Tap weights at times (B,), s.

        Returns
        -------
        ndarray of complex128, shape (B, R, taps)
        """
        turns = t_s[:, None, None, None] * self._rates_hz + self._phases
        waves = np.exp(2j * np.pi * (turns - np.rint(turns)))
        taps: NDArray[np.complex128] = self.amplitudes * waves.sum(axis=-1) / np.sqrt(waves.shape[-1])
        return taps
