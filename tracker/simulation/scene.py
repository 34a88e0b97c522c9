"""A scene: what is true of a link at a time, and what frames would measure.

The noise floor is flat. It is given outright or chosen so that a tone has the wanted signal-to-noise ratio under
random patterns, at one time of the scene, on average over tones and receivers.
"""

import numpy as np
from numpy.typing import NDArray

from tracker.simulation.channel import phasor
from tracker.simulation.config import SceneConfig
from tracker.simulation.impairments import Clock, Obedience, Wander
from tracker.simulation.propagation import Propagation
from tracker.simulation.reflection import draw
from tracker.simulation.schedule import stepped, text_at
from tracker.simulation.tdl import Fading


class Scene:
    """Computes what a testbed would measure.

    Parameters
    ----------
    config : SceneConfig
    seed : int
        All chance comes from it; the same calls in the same order give the same bits.

    Attributes
    ----------
    noise_power : ndarray, shape (R,)
        Noise power on a tone before any step of it, in the units of |response|².

    Raises
    ------
    ValueError
        When the configuration makes no sense; the message says where.
    """

    def __init__(self, config: SceneConfig, seed: int) -> None:
        if not config.receivers:
            raise ValueError("scene: at least one terminal with one antenna is needed")
        for one in config.impairments.interference:
            if one.first < 0 or one.first + one.count > config.tones.count:
                raise ValueError(f"interference: the scene has pilot tones 0 to {config.tones.count - 1}")
        self.config = config
        self._noise = np.random.default_rng([seed, 1])
        self._walks = [Wander(one.oscillator, (seed, 2, index)) for index, one in enumerate(config.terminals)]
        self._obedience = Obedience(config.impairments.faults, config.impairments.late, config.elements)
        reflection = draw(config.reflection, config.elements, np.random.default_rng([seed, 0]))
        fading = config.direct.fading
        taps = Fading(fading, config.receivers, np.random.default_rng([seed, 3])) if fading is not None else None
        self._propagation = Propagation(config, reflection, taps)
        noise_power = self._noise_for_snr() if config.noise_power is None else config.noise_power
        self.noise_power = np.full(config.receivers, noise_power)

    def truth(self, t_s: float) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        """Exact channel at a time, in double precision, by the direct formula.

        Faults of elements and steps of the transmitted power are in it; oscillators, clocks and receiver gain,
        which change no rate, are not (see `distortion`).

        Returns
        -------
        direct : ndarray of complex128, shape (R, K)
            What is received with every state at zero: past the panel, and off its mean reflection.
        surface : ndarray of complex128, shape (N, R, K)
            What the states add: H = direct + Σ_n s_n surface_n.
        """
        exact = self._propagation.exact(t_s)
        sent = self._sent(np.array([t_s]))[0]
        return self._obedience.seen_as_told(t_s, (exact.direct + exact.fixed) * sent, exact.surface * sent)

    def response(self, t_s: float, states: NDArray[np.generic]) -> NDArray[np.complex128]:
        """Exact noiseless response (R, K) at a time to states (N,) told, as `truth` has it."""
        direct, surface = self.truth(t_s)
        response: NDArray[np.complex128] = direct + np.tensordot(np.asarray(states, np.float64), surface, axes=1)
        return response

    def rate(self, t_s: float, states: NDArray[np.generic]) -> float:
        """Rate of a pattern with the channel known exactly: mean over tones and receivers of log2(1 + |H|²/σ²).

        Interference is not counted as noise.
        """
        snr = np.abs(self.response(t_s, states)) ** 2 / self.noise_at(t_s)[:, None]
        return float(np.mean(np.log2(1 + snr)))

    def noise_at(self, t_s: float) -> NDArray[np.float64]:
        """Noise power on a tone (R,) at a time, referred to before the receiver's gain, as `truth` is."""
        noise_db = stepped(self.config.impairments.noise_db, np.array([t_s]))[0]
        result: NDArray[np.float64] = self.noise_power * 10 ** (noise_db / 10)
        return result

    def distortion(self, t_s: NDArray[np.float64]) -> NDArray[np.complex64]:
        """Factor that the receivers put on signal and noise at times (B,): gain, oscillator, clock.

        Returns
        -------
        ndarray of complex64, shape (B, R, K), or (B, R, 1) when no clock drifts
        """
        gain = 10 ** (stepped(self.config.impairments.receiver_gain_db, t_s) / 20)
        drifting = any(one.clock != Clock() for one in self.config.terminals)
        columns = []
        for terminal, walk in zip(self.config.terminals, self._walks, strict=True):
            turned = phasor(-walk.turns(t_s))[:, None] * gain[:, None].astype(np.float32)
            if drifting:
                delay_s = terminal.clock.delay_s(t_s, self.config.tones.sample_s)
                turned = turned * phasor(delay_s[:, None] * self.config.tones.offsets_hz())
            columns += [turned] * len(terminal.antennas)
        return np.stack(columns, axis=1)

    def happening(self, t_s: float) -> str | None:
        """Say in words what the scene does at a time; None when nothing is to be said."""
        return text_at(self.config.episodes, t_s)

    def frames(self, t_s: NDArray[np.float64], states: NDArray[np.generic]) -> NDArray[np.complex64]:
        """Measure frames, one after another, noise and impairments included.

        Parameters
        ----------
        t_s : ndarray of float64, shape (B,)
            Times of the frames, ascending, s.
        states : ndarray, shape (B, N)
            States +1 and −1 that the panel is told.

        Returns
        -------
        ndarray of complex64, shape (B, R, K)
        """
        shown = self._obedience.show(t_s, np.ascontiguousarray(states, dtype=np.float32))
        response = self._propagation.frames(t_s, shown)
        response *= self._sent(t_s).astype(np.float32)[:, None, None]
        self._add_noise(t_s, response)
        response *= self.distortion(t_s)
        return response

    def _sent(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Amplitude of the transmitter at times (B,) over nominal."""
        result: NDArray[np.float64] = 10 ** (stepped(self.config.impairments.transmit_power_db, t_s) / 20)
        return result

    def _add_noise(self, t_s: NDArray[np.float64], response: NDArray[np.complex64]) -> None:
        """Add receiver noise and interference to frames (B, R, K) in place."""
        impairments = self.config.impairments
        scale = np.sqrt(self.noise_power / 2 * 10 ** (stepped(impairments.noise_db, t_s) / 10)[:, None])
        response += self._gaussian(response.shape) * scale.astype(np.float32)[..., None]
        for one in impairments.interference:
            rows = np.flatnonzero((t_s >= one.from_s) & (t_s < one.until_s))
            if rows.size:
                scale = np.sqrt(self.noise_power / 2 * 10 ** (one.over_noise_db / 10)).astype(np.float32)
                extra = self._gaussian((rows.size, response.shape[1], one.count)) * scale[:, None]
                response[rows, :, one.first : one.first + one.count] += extra

    def _gaussian(self, shape: tuple[int, ...]) -> NDArray[np.complex64]:
        """Circular Gaussian of power 2."""
        parts = self._noise.standard_normal((*shape[:-1], 2 * shape[-1]), dtype=np.float32)
        result: NDArray[np.complex64] = parts.view(np.complex64)
        return result

    def _noise_for_snr(self) -> float:
        """Noise power that gives `snr_db`: random patterns give |direct|² + Σ|surface|² on average."""
        direct, surface = self.truth(self.config.snr_at_s)
        power = np.mean(np.abs(direct) ** 2 + np.sum(np.abs(surface) ** 2, axis=0))
        return float(power / 10 ** (self.config.snr_db / 10))
