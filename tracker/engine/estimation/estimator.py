"""From frames to channel estimate: delay basis, noise, prior, least squares, shrinkage, in this order."""

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..config import Config
from ..detection.anchor import ANCHORED
from ..detection.changes import Verdict
from ..detection.drift import Sample
from ..detection.innovation import INNOVATION, Innovations
from ..detection.past import Past
from ..detection.rises import Groups
from ..health.fresh import Posterior
from ..orthogonal.lookout import Lookout
from ..oscillators.following import Lock
from ..search.channel import Channel
from .aperture import ApertureBasis, Columns, Elements
from .bank import Bank, time_constants
from .filter import Filter
from .frames import Fit, Frames
from .noise import energy
from .prior import prior_variances
from .reception import Reception
from .shrinkage import Doubt, Shrinkage
from .sounded import Sounded

# Frames worked off in one step of the block filter; more would only make the B × B part dear.
MOST_FRAMES = 256
# Time over which phases are taken to turn evenly: in it the random walks of `phases` bend them by a tenth of a radian.
STRETCH_NS = 10_000_000
# Elements up to which a basis that no longer fits is given up for them: with more, work and memory would be many times
# what the settings ask for.
MOST_ELEMENTS = 1024
# Power of innovations, in units of the noise, up to which they may count as noise.
WELL_KNOWN = 2.0
# Frames that were left out fit again when their error is at most this many times what it was before.
FITS = 1.5


class Estimator:
    """Channel estimate of one link.

    Parameters
    ----------
    config : Config
    """

    def __init__(self, config: Config) -> None:
        self._config = config
        self._aperture: ApertureBasis = config.aperture  # in which the surface is estimated now
        self.reception = Reception(config)
        self._innovations = Innovations(config.receivers, config.delay.shape[1])
        self._past = Past(config)
        self._shrinkage = Shrinkage()
        self._left_out_most = 0  # frames that may yet be left out because they do not fit
        self._bank: Bank | None = None
        self._end_ns = 0
        self._constants_s = time_constants(config.time_constant_s, config.bank)

    @property
    def watched(self) -> tuple[str, ...]:
        """Names of the statistics under watch."""
        return INNOVATION, *ANCHORED, *self.reception.watched

    @property
    def groups(self) -> dict[str, Groups]:
        """Those that are the powers of many places, with what is watched of them."""
        return self.reception.groups

    @property
    def ready_after(self) -> int:
        """Frames that make one sweep: as many as there are unknowns."""
        return self._aperture.size + 1

    @property
    def surface_variances(self) -> tuple[float, float]:
        """Mean variance of the surface's coefficients before any data, and now, in units of the noise.

        Raises
        ------
        ValueError
            Before the first frame.
        """
        rls = self._learned()
        return float(rls.prior[1:].mean()), rls.surface_variance

    @property
    def time_constant_s(self) -> float:
        """Time constant in use, s."""
        return self._bank.time_constant_s if self._bank is not None else self._config.time_constant_s

    @property
    def posterior(self) -> Posterior | None:
        """What is believed of each coefficient; None before the first frame."""
        if self._bank is None:
            return None
        rls = self._bank.chosen
        noise = self.reception.noise_power
        return Posterior(rls.coefficients, rls.variances, rls.prior, noise, self._bank.time_constant_s)

    def update(self, bursts: Sequence[Frames]) -> Fit:
        """Take in the frames of a block.

        Parameters
        ----------
        bursts : sequence of Frames
            One or more, in order.
        """
        together = Frames.together(bursts)
        self._past.begin()
        self._shrinkage.count_block(together.time_ns.size / self.ready_after)
        if self._bank is None:
            self._end_ns = int(together.time_ns[0])
            self._bank = self._begin(together.patterns, self.reception.first(together))
        if not self.reception.following:
            return self._take(self._bank, together)
        # Over a long time phases do not turn evenly: each stretch is followed by itself.
        fits = [self._take(self._bank, part) for frames in bursts for part in frames.stretches(STRETCH_NS)]
        return Fit.together(fits)

    def readings(self) -> list[Sample]:
        """Give samples of the statistics under watch from the block just taken."""
        return [
            *self._innovations.readings(),
            *self._past.readings(self._learned().coefficients, self.reception.noise_power),
            *self.reception.readings(),
        ]

    def _begin(self, patterns: NDArray[np.uint8], outputs: NDArray[np.complex128]) -> Bank:
        """Start from the first frames, (B, bytes) and (B, R Q): how strong the paths may be."""
        self._shrinkage.forget()
        aperture = self._aperture
        prior = prior_variances(Sounded(patterns, aperture).regressors, outputs, aperture.weights)
        least = self._config.sweeps_from if isinstance(aperture, Elements) else None
        return Bank.begin(
            prior,
            outputs.shape[1],
            self._config.forgetting,
            self._constants_s,
            complex_regressors=aperture.is_complex,
            patterns=patterns,
            lookout=Lookout(aperture.elements, least) if least is not None else None,
        )

    def _take(self, bank: Bank, taken: Frames) -> Fit:
        """Take in frames that one model of the phases serves."""
        self.reception.begin(taken.time_ns)
        outputs, changed = self.reception.take(taken)
        if changed is not None:
            amplitude = np.repeat(np.sqrt(changed), self.reception.directions)
            bank.rescale(amplitude, math.prod(changed.tolist()) ** (1.0 / changed.size))
        sounded = bank.sound(taken.patterns, self._aperture)
        frames, end_ns = outputs.shape[0], int(taken.time_ns[-1])
        elapsed_s = max(end_ns - self._end_ns, 0) / 1e9
        self._end_ns = end_ns
        bank.forget_for(elapsed_s)
        lost = self._follow(bank, sounded, taken, outputs)
        self._past.take(taken, outputs, self.reception.noise_power)
        if self._left_out_most and not self._fits(bank.chosen, sounded, outputs):
            self._left_out_most = max(self._left_out_most - frames, 0)
            degrees = frames * self.reception.directions
            self.reception.listen(None)
            return Fit(np.ones(self._config.receivers), degrees, elapsed_s, 1.0, lost, frames)
        self._left_out_most = 0
        power = np.zeros(self._config.receivers)
        error = 0.0
        innovations = []
        for start in range(0, frames, MOST_FRAMES):
            part = slice(start, start + MOST_FRAMES)
            heard = sounded.part(part)
            surprise = bank.update(heard, outputs[part])
            self._innovations.take(surprise)
            self._past.hold(heard.single_regressors, surprise.innovation)
            innovations.append(surprise.innovation)
            power += energy(surprise.white.reshape(surprise.white.shape[0], self._config.receivers, -1))
            error += float(np.vdot(surprise.innovation, surprise.innovation).real)
        degrees = frames * self.reception.directions
        known = error < WELL_KNOWN * degrees * self._config.receivers
        self.reception.listen(np.concatenate(innovations) if known else None)
        left_out = frames if self.reception.lock is Lock.LOST else 0
        return Fit(power / degrees, degrees, elapsed_s, error / (degrees * self._config.receivers), lost, left_out)

    def channel(self, time_ns: int | None = None) -> Channel:
        """Estimate as the optimizer takes it, in units of each receiver's noise.

        Parameters
        ----------
        time_ns : int or None
            Time for which it is wanted, as far as phases are followed; None for that of the last frame.

        Returns
        -------
        Channel
            The caller's own, to be changed at will.

        Raises
        ------
        ValueError
            Before the first frame.
        """
        receivers, size = self._config.receivers, self.reception.directions
        estimate = self._learned().estimate
        prior, variance = self.surface_variances
        surface = self._aperture.surface(self._shrinkage.apply(estimate[1:], variance, prior))
        if np.may_share_memory(surface, estimate):  # the channel is its taker's, who may write to it
            surface = surface.copy()
        direct = estimate[0].reshape(receivers, size).copy()
        if time_ns is not None:
            for receiver, following in enumerate(self.reception.following):
                direct[receiver] *= np.exp(1j * following.lead(time_ns))
        return Channel(
            basis=self._config.delay,
            direct=direct,
            surface=np.ascontiguousarray(surface.reshape(-1, receivers, size)),
        )

    def variance(self, states: NDArray[np.int8]) -> float:
        """Variance of each delay coefficient of the response under a pattern, in units of the noise."""
        regressor = self._aperture.regressors(states.astype(np.float64)[None, :])
        return self._learned().predicted_variance(regressor[0])

    def doubt(self, states: NDArray[np.int8]) -> Doubt:
        """Say what is left open of the response under a pattern, in the channel last given."""
        prior = float(self._learned().prior[1:].sum())
        return self._shrinkage.doubt(self.variance(states), prior, self._config.receivers * self.reception.directions)

    def loosen(self, share: float) -> None:
        """Let what was known count for less: P goes the given share of the way back to the prior."""
        if self._bank is not None:
            self._bank.forget(1.0 - share, share)

    def renew_direct(self, frames: int) -> None:
        """Learn the direct path anew, and that alone, from the last so many frames: those since it changed.

        The estimate from before comes back first: until the change was seen, it bent the surface's part as well.
        """
        before = self.roll_back()
        if self._bank is None:
            return
        self._bank.renew_direct()
        heard = self._past.latest(frames, self.reception.noise_power)
        if before is not None and heard is not None and frames:
            patterns, outputs = heard
            before[0] += (outputs - self._bank.chosen.predict(Sounded(patterns, self._aperture))).mean(axis=0)
            self._bank.put(before)

    def calm(self) -> None:
        """Take note that nothing is suspected: the estimate is what changes will be held against."""
        # Where phases are followed the estimate stands at the phases of now.
        now = self._bank.chosen.coefficients if self._bank is not None and self.reception.following else None
        current = (now, self.reception.noise_power) if now is not None else None
        self._past.calm(self._innovations.variance, current)

    def keep(self) -> None:
        """Keep the block just taken."""
        self._past.keep()

    def judge(self) -> Verdict | None:
        """Say what changed; None when too little is known of before."""
        if self._bank is None:
            return None
        return self._past.judge(self._bank.chosen, self._aperture, self._innovations.excess)

    def forget_calm(self) -> None:
        """Drop what changes are held against."""
        self._past.forget()

    def mend(self, direct: NDArray[np.complex128], surface: NDArray[np.complex128]) -> None:
        """Multiply the estimate from before the change by factors a receiver, shapes (R,), and go on from it."""
        self.roll_back()
        if self._bank is not None:
            size = self.reception.directions
            self._bank.scale(np.repeat(direct, size), np.repeat(surface, size))

    def renew(self, elements: NDArray[np.intp]) -> bool:
        """Forget how well some elements are known; False where the basis does not tell elements apart."""
        if self._bank is None or not isinstance(self._aperture, Elements):
            return False
        self._bank.renew(1 + elements)
        return True

    def fall_back(self, frames: int) -> bool:
        """Estimate element by element from now on, until `relearn`: the columns do not hold the surface any more.

        Parameters
        ----------
        frames : int
            Heard since the change, with which the new estimate begins; 0 for all that are at hand.

        Returns
        -------
        bool
            False where no columns are in use, or the elements are too many.
        """
        heard = self._past.latest(frames, self.reception.noise_power)
        if heard is None or not isinstance(self._aperture, Columns) or self._aperture.elements > MOST_ELEMENTS:
            return False
        patterns, outputs = heard
        self._aperture = Elements(self._aperture.elements)
        self._bank = self._begin(patterns, outputs)
        self._bank.update(self._bank.sound(patterns, self._aperture), outputs)
        self._innovations = Innovations(self._config.receivers, self._config.delay.shape[1])
        return True

    def roll_back(self) -> NDArray[np.complex128] | None:
        """Go back to the estimate from before the change; return a copy of it, None when none is remembered."""
        before = self._past.before(self.reception.noise_power)
        if self._bank is not None and before is not None:
            self._bank.put(before)
        return before

    def leave_out(self, most: int) -> None:
        """Leave out frames until they fit the estimate again, but no more than so many."""
        self._left_out_most = most

    def relearn(self) -> None:
        """Throw the estimate away, and go back to the basis of the settings; the noise stays known."""
        self._bank, self._aperture = None, self._config.aperture
        self.forget_calm()

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "reception": self.reception.snapshot(),
            "innovations": self._innovations.snapshot(),
            "past": self._past.snapshot(),
            "shrinkage": self._shrinkage.snapshot(),
            "left_out_most": self._left_out_most,
            "fell_back": self._aperture is not self._config.aperture,
            "bank": self._bank.snapshot() if self._bank is not None else None,
            "end_ns": self._end_ns,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self.reception.load(snapshot["reception"])
        self._innovations.load(snapshot["innovations"])
        self._past.load(snapshot["past"])
        self._shrinkage.load(snapshot["shrinkage"])
        self._left_out_most = int(snapshot["left_out_most"])
        self._aperture = Elements(self._config.elements) if snapshot["fell_back"] else self._config.aperture
        bank = snapshot["bank"]
        self._bank = Bank.restore(bank, self._config.forgetting, self._constants_s) if bank is not None else None
        self._end_ns = int(snapshot["end_ns"])

    def _follow(self, bank: Bank, sounded: Sounded, frames: Frames, outputs: NDArray[np.complex128]) -> tuple[int, ...]:
        """Turn the outputs back in place, and the direct path's estimate along; return receivers that lost lock."""
        if not self.reception.following:
            return ()
        chosen, size = bank.chosen, self.reception.directions
        path = chosen.direct.copy()
        surface = chosen.predict(sounded) - path
        weight = 1.0 / (1.0 + float(chosen.variances.sum()))
        turns, gains = np.ones_like(path), np.ones_like(path)
        lost = []
        for receiver, following in enumerate(self.reception.following):
            part = slice(receiver * size, (receiver + 1) * size)
            turned = following.turn(
                frames.patterns, outputs[:, part], path[part], surface[:, part], frames.time_ns, weight
            )
            outputs[:, part] = turned.outputs
            turns[part], gains[part] = turned.turn, turned.gain
            self._past.turn_direct(part, turned.turn)
            if turned.gain != 1.0:
                self._past.amplify(part, turned.gain)
            if turned.lost:
                lost.append(receiver)
        bank.scale(turns * gains, gains)
        return tuple(lost)

    def _learned(self) -> Filter:
        if self._bank is None:
            raise ValueError("there is no estimate before the first frame")
        return self._bank.chosen

    def _fits(self, chosen: Filter, sounded: Sounded, outputs: NDArray[np.complex128]) -> bool:
        error = outputs - chosen.predict(sounded)
        return bool(np.vdot(error, error).real / error.size < FITS * self._innovations.variance)
