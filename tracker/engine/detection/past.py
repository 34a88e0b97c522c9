"""What a change is held against: the estimate from before it, the frames since, and how far the estimate moved."""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .. import panel
from ..config import Config
from ..estimation.aperture import ApertureBasis
from ..estimation.filter import Filter
from ..estimation.frames import Frames
from ..estimation.shrinkage import shrink
from .anchor import Anchor
from .changes import Verdict, judge
from .drift import Reading
from .evidence import Evidence, Heard, Memory
from .standing import Standing

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


class Past:
    """Remembers estimates and frames of one link.

    Parameters
    ----------
    config : Config
    """

    def __init__(self, config: Config) -> None:
        self._config = config
        self._directions = int(config.delay.shape[1])
        # Where phases are followed each block stands at phases of its own.
        self._memory = Memory(blocks=1 if config.follow_phase else None)
        self._standing = Standing()
        self._anchor = Anchor(config.delay)
        self._taken: list[Heard] = []

    def begin(self) -> None:
        """Begin a block."""
        self._taken = []

    def take(self, frames: Frames, outputs: Complex, noise: Real) -> None:
        """Take frames of the block, outputs (B, R Q) in units of the noise power (R,)."""
        heard = outputs.reshape(outputs.shape[0], self._config.receivers, -1)
        self._taken.append(Heard(frames.patterns, frames.response, heard, frames.time_ns, noise))

    def hold(self, regressors: NDArray[Any], innovation: Complex) -> None:
        """Hold frames against the slow average of the estimate: regressors (B, n), innovations (B, R Q)."""
        self._anchor.take(regressors, innovation)

    def readings(self, coefficients: Complex, noise: Real) -> list[Reading]:
        """Say what frames and estimate show against the slow average, and remember the estimate."""
        self._standing.remember(coefficients, noise)
        return self._anchor.readings(coefficients, noise)

    def calm(self, variance: float, current: tuple[Complex, Real] | None = None) -> None:
        """Take note that nothing is suspected: the estimate is what changes will be held against.

        Parameters
        ----------
        variance : float
            Of an innovation.
        current : (ndarray, ndarray) or None
            Coefficients and the noise that they are in units of, in place of those of some blocks ago.
        """
        self.keep()
        oldest = self._standing.oldest
        if oldest is None:
            return
        coefficients, noise, blocks = (*current, 0) if current is not None else oldest
        self._memory.calm(coefficients, noise, variance, blocks)

    def keep(self) -> None:
        """Keep the block just taken."""
        for heard in self._taken:
            self._memory.keep(heard)
        self._taken = []

    def forget(self) -> None:
        """Drop what changes are held against."""
        self._memory.forget()
        self._standing.forget()
        self._anchor.forget()

    def turn_direct(self, columns: slice, turn: complex) -> None:
        """Turn the direct path along."""
        self._memory.turn_direct(columns, turn)
        self._standing.turn_direct(columns, turn)
        self._anchor.turn_direct(columns, turn)

    def amplify(self, columns: slice, gain: float) -> None:
        """Make the estimate from before stronger."""
        self._memory.amplify(columns, gain)
        self._anchor.amplify(columns, gain)

    def before(self, noise: Real) -> Complex | None:
        """Estimate from before the change, shape (n, R Q), in units of the noise power now, (R,)."""
        memory = self._memory
        if memory.before is None:
            return None
        return np.asarray(memory.before * np.repeat(np.sqrt(memory.noise / noise), self._directions))

    def latest(self, frames: int, noise: Real) -> tuple[NDArray[np.uint8], Complex] | None:
        """Give the latest frames kept: patterns (B, bytes) and outputs (B, R Q), in units of the noise power (R,).

        Parameters
        ----------
        frames : int
            How many at most; 0 for all.
        noise : ndarray, shape (R,)
        """
        if not self._memory.heard:
            return None
        heard = self._memory.heard
        patterns = np.concatenate([one.patterns for one in heard])[-frames:]
        outputs = np.concatenate([one.outputs * np.sqrt(one.noise / noise)[:, None] for one in heard])[-frames:]
        return patterns, outputs.reshape(outputs.shape[0], -1)

    def judge(self, now: Filter, aperture: ApertureBasis, excess: float) -> Verdict | None:
        """Say what changed; None when too little is known of before.

        Parameters
        ----------
        now : Filter
            Whose variances are those of the estimate from before as well.
        aperture : ApertureBasis
            Of both.
        excess : float
            Share of the variances that really occurs, see `innovation`.
        """
        memory, config = self._memory, self._config
        if memory.before is None or not memory.heard:
            return None
        blocks = memory.heard
        frames = Frames(*(np.concatenate([getattr(one, name) for one in blocks]) for name in Frames.__slots__))
        unit = np.sqrt(memory.noise)[:, None]
        outputs = [one.outputs * (np.sqrt(one.noise)[:, None] / unit) for one in blocks]
        tones = frames.response.astype(np.complex128) / unit
        prior = now.prior
        model = memory.before.copy()
        model[1:] = shrink(model[1:], float(now.variances[1:].mean()), float(prior[1:].mean()))
        elements = aperture.surface(model[1:])
        model = model.reshape(-1, config.receivers, self._directions)
        states = panel.unpack(frames.patterns, config.elements)
        regressors = aperture.regressors(states)
        # How wrong the surface's part of the frames may be: what P promises, and what really comes of it.
        surface = regressors.copy()
        surface[:, 0] = 0.0
        evidence = Evidence(
            outputs=np.concatenate(outputs),
            regressors=regressors,
            states=states,
            model=model,
            elements=elements.reshape(-1, *model.shape[1:]),
            prior=prior,
            outside=tones - (tones @ config.delay.conj()) @ config.delay.T,
            basis=config.delay,
            doubt=np.asarray(excess * now.predicted_covariance(surface)),
            time_s=(frames.time_ns - frames.time_ns[0]) / 1e9,
        )
        return judge(evidence)

    def snapshot(self) -> dict[str, Any]:
        """All state, between blocks."""
        return {
            "memory": self._memory.snapshot(),
            "standing": self._standing.snapshot(),
            "anchor": self._anchor.snapshot(),
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        self._memory.load(snapshot["memory"])
        self._standing.load(snapshot["standing"])
        self._anchor.load(snapshot["anchor"])
