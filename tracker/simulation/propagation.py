"""From mast to terminals, past the panel and by way of it: exactly at one time, or fast over many frames."""

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from tracker.simulation.channel import Band, Ray, hop_exact, phasor, phasor_exact, ray, surface_sum
from tracker.simulation.config import SceneConfig
from tracker.simulation.geometry import LIGHT_MPS, Panel, Scatterer, sources
from tracker.simulation.reflection import Reflection
from tracker.simulation.schedule import amplitude_left
from tracker.simulation.tdl import Fading


@dataclass(frozen=True, slots=True, eq=False)
class Exact:
    """The channel at one time in double precision: H = direct + fixed + Σ_n s_n surface_n.

    Parameters
    ----------
    direct : ndarray of complex128, shape (R, K)
        Past the panel.
    fixed : ndarray of complex128, shape (R, K)
        Off the panel whatever it shows.
    surface : ndarray of complex128, shape (N, R, K)
    """

    direct: NDArray[np.complex128]
    fixed: NDArray[np.complex128]
    surface: NDArray[np.complex128]


@dataclass(frozen=True, slots=True, eq=False)
class _Rest:
    """The channel while every position stays as it is, in single precision, the direct way unblocked."""

    places: NDArray[np.float64]
    direct: NDArray[np.complex64]  # (R, K)
    fixed: NDArray[np.complex64]  # (R, K)
    surface: NDArray[np.float32]  # (N, R · K · 2): real and imaginary parts, as states are real


class Propagation:
    """Waves of a scene.

    Parameters
    ----------
    config : SceneConfig
    reflection : Reflection
    fading : Fading or None
        In place of the rays of the direct way.
    """

    BLOCK = 32768
    """Frames times elements worked on at once: what fits the cache of one core."""

    def __init__(self, config: SceneConfig, reflection: Reflection, fading: Fading | None) -> None:
        self._config, self._reflection, self._fading = config, reflection, fading
        self._wavelength_m = LIGHT_MPS / config.carrier_hz
        self._panel = Panel(config.panel, self._wavelength_m)
        self._scatterers = [one for one in config.reflectors if isinstance(one, Scatterer)]
        self._half, self._mean = reflection.half.astype(np.complex64), reflection.mean.astype(np.complex64)
        self._rest: _Rest | None = None
        self._arriving: tuple[NDArray[np.float64], list[Ray]] | None = None  # for these places of mast and scatterers
        start = np.zeros(1)
        straight = np.linalg.norm(self._antennas(start)[0] - config.mast.at(start), axis=1)
        lead_m = config.delay_zero_samples * config.tones.sample_s * LIGHT_MPS
        self.band = Band(config.tones.offsets_hz(), float(straight.min()) - lead_m)

    def exact(self, t_s: float, blocked: bool = True) -> Exact:
        """Channel at a time by the direct formula, every element and tone on its own.

        Parameters
        ----------
        t_s : float
        blocked : bool
            With the blocks of the direct way; its lasting loss is always in.
        """
        times = np.array([t_s])
        mast, antennas = self._config.mast.at(times), self._antennas(times)
        # Every path goes through both hops, so that delay zero is taken off once.
        zero = phasor_exact(self.band.turns(np.zeros(())))
        hop_in = hop_exact(self.band, self._rays(mast, times, "in", exact=True)) * zero
        hops = [
            hop_in * hop_exact(self.band, self._rays(antennas[:, receiver], times, "out", exact=True))
            for receiver in range(antennas.shape[1])
        ]
        both = np.stack(hops, axis=1)
        return Exact(
            self._direct(mast, antennas, times, exact=True, blocked=blocked)[0].astype(np.complex128),
            np.tensordot(self._reflection.mean, both, axes=1),
            self._reflection.half[:, None, None] * both,
        )

    def frames(self, t_s: NDArray[np.float64], shown: NDArray[np.float32]) -> NDArray[np.complex64]:
        """Response at times (B,) to states shown (B, N), path lengths exact at each.

        Returns
        -------
        ndarray of complex64, shape (B, R, K)
        """
        response = np.empty((t_s.size, self._config.receivers, self.band.offsets_hz.size), dtype=np.complex64)
        at_once = max(1, self.BLOCK // self._config.elements)
        for start in range(0, t_s.size, at_once):
            part = slice(start, start + at_once)
            response[part] = self._block(t_s[part], shown[part])
        return response

    def _block(self, t_s: NDArray[np.float64], shown: NDArray[np.float32]) -> NDArray[np.complex64]:
        mast, antennas = self._config.mast.at(t_s), self._antennas(t_s)
        surroundings = [one.track.at(t_s)[:, None] for one in self._scatterers]
        sending = np.concatenate([mast[:, None], *surroundings], axis=1)
        if _constant(sending) and _constant(antennas):
            return self._resting(t_s, np.concatenate([sending[0], antennas[0]]), mast, antennas, shown)
        if _constant(sending):
            if self._arriving is None or not np.array_equal(self._arriving[0], sending[0]):
                self._arriving = (sending[0].copy(), self._rays(mast[:1], t_s[:1], "in"))
            arriving = self._arriving[1]
        else:
            arriving = self._rays(mast, t_s, "in")
        reflected = shown * self._half + self._mean
        response = self._direct(mast, antennas, t_s)
        for receiver in range(antennas.shape[1]):
            leaving = self._rays(antennas[:, receiver], t_s, "out")
            response[:, receiver] += surface_sum(self.band, reflected, arriving, leaving)
        return response.astype(np.complex64, copy=False)

    def _resting(
        self,
        t_s: NDArray[np.float64],
        places: NDArray[np.float64],
        mast: NDArray[np.float64],
        antennas: NDArray[np.float64],
        shown: NDArray[np.float32],
    ) -> NDArray[np.complex64]:
        if self._rest is None or not np.array_equal(self._rest.places, places):
            exact = self.exact(float(t_s[0]), blocked=False)
            surface = np.ascontiguousarray(exact.surface.reshape(shown.shape[1], -1), dtype=np.complex64)
            self._rest = _Rest(
                places, exact.direct.astype(np.complex64), exact.fixed.astype(np.complex64), surface.view(np.float32)
            )
        rest = self._rest
        response = (shown @ rest.surface).view(np.complex64).reshape(t_s.size, *rest.fixed.shape)
        response += rest.fixed
        if self._fading is not None:
            response += self._direct(mast, antennas, t_s)
        else:
            left = amplitude_left(self._config.direct.blocks, t_s).astype(np.float32)
            response += left[:, None, None] * rest.direct
        return response

    def _direct(
        self,
        mast: NDArray[np.float64],
        antennas: NDArray[np.float64],
        t_s: NDArray[np.float64],
        exact: bool = False,
        blocked: bool = True,
    ) -> NDArray[np.complexfloating[Any, Any]]:
        """Response (B, R, K) past the panel."""
        turn = phasor_exact if exact else phasor
        direct, spread = self._config.direct, self._wavelength_m / (4 * np.pi)
        shape = (t_s.size, antennas.shape[1], self.band.offsets_hz.size)
        total = np.zeros(shape, dtype=np.complex128 if exact else np.complex64)
        for receiver in range(antennas.shape[1]):
            if self._fading is not None:
                length_m = np.linalg.norm(antennas[:, receiver] - mast, axis=1)
                over_band = turn(self._fading.delays_s[:, None] * self.band.offsets_hz)
                faded = self._fading.taps(t_s)[:, receiver] @ over_band
                total[:, receiver] = (spread / length_m)[:, None] * faded * turn(self.band.turns(length_m))
                continue
            for source in sources(mast, t_s, self._config.reflectors, "direct"):
                distance = np.linalg.norm(antennas[:, receiver] - source.position, axis=1, keepdims=True)
                length_m = distance + source.detour_m
                wave = source.factor * spread / distance * turn(length_m / self._wavelength_m)
                total[:, receiver] += wave.astype(total.dtype) * turn(self.band.turns(length_m[:, 0]))
        left = np.full(t_s.size, 10 ** (-direct.loss_db / 20))
        if blocked:
            left *= amplitude_left(direct.blocks, t_s)
        total *= left.astype(total.real.dtype)[:, None, None]
        return total

    def _rays(
        self, end: NDArray[np.float64], t_s: NDArray[np.float64], hop: Literal["in", "out"], exact: bool = False
    ) -> list[Ray]:
        return [ray(self._panel, source, hop, exact) for source in sources(end, t_s, self._config.reflectors, hop)]

    def _antennas(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Receiver positions, m, shape (B, R, 3)."""
        places = [one.track.at(t_s)[:, None] + np.asarray(one.antennas)[None] for one in self._config.terminals]
        return np.concatenate(places, axis=1)


def _constant(places: NDArray[np.float64]) -> bool:
    return bool(np.all(places == places[:1]))
