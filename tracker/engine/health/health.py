"""Element health while in service: does each element follow its bit.

The evidence comes from `appraisal`; here faults are named. Elements whose answers fit each other's place are swapped
(`swaps`); on which side an element is stuck shows in the direct path, if anywhere (`sides`).

Elements that the settings name as stuck or tied, and such as the patterns hardly sound, are not judged. Where elements
are not estimated one by one (`aperture`: tiles, columns), nothing can be said of any.
"""

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..panel import Limits
from . import hypotheses
from .appraisal import Appraisal
from .faults import FAULTS, FINE, NOT_JUDGED, SILENT, STUCK_MINUS, STUCK_PLUS, SURE, SWAPPED, UNMOVED, WEAK, Finding
from .fresh import Posterior
from .hypotheses import FOLLOWS
from .sides import KEPT, Sides
from .swaps import swapped
from .windows import Shown, Windows

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

# Probability of not following below which a fault is taken back.
TAKEN_BACK = 0.5
# Probability from which a pair is called swapped: of many pairs, one may fit by chance.
SURELY_SWAPPED = 0.999
# Probability from which a side is named.
SIDE_SURE = 0.998
# Probability that an element does not answer from which the optimizer leaves it out.
LEFT_OUT = 0.9
# Probability of following from which a response counts as good to be remembered.
GOOD = 0.99
# Windows without another element that fell silent after which those that did count as all; and windows within which
# they must have done so to be told apart together.
SETTLED, TOGETHER = 3, 4

# Probability from which an element in doubt is called silent rather than weak, if not half as likely as that: the one
# shows at once, the other only in time.
LIKELY_SILENT = 0.3
# Sweeps for which an element must have been in doubt before it is called weak: paths that cancel at an element make it
# weak for as long as a slow terminal takes to leave the place, and no longer.
WEAK_SWEEPS = 100.0


class Health:
    """Judges the elements of a panel.

    Parameters
    ----------
    panel : (int, int)
        Columns and rows; element i is column i // rows, row i % rows.
    forgetting_kind : str
        Of the filter whose estimates are judged, see `rls.forgetting`.
    known : Limits
        What the panel is known not to do.

    Attributes
    ----------
    faults : tuple of (int, str, float)
        Element, fault and confidence of all that do not follow, in the order of the elements.
    silent : ndarray of int
        Elements that surely do not answer to their bits.
    limits : Limits
        What the panel cannot do: what was known, and those.
    """

    def __init__(self, panel: tuple[int, int], forgetting_kind: str, known: Limits) -> None:
        self._known = known
        columns, rows = self._shape = panel
        self._kind = forgetting_kind
        self._judged = np.ones(columns * rows, dtype=np.bool_)
        self._judged[[*known.stuck, *(element for group in known.tied for element in group)]] = False
        self.forget()

    def forget(self) -> None:
        """Throw all evidence away, and with it the faults found."""
        elements = self._judged.size
        self._windows = Windows(elements, self._kind)
        self._appraisal = Appraisal(*self._shape, self._judged)
        self._codes = np.where(self._judged, FINE, NOT_JUDGED).astype(np.int8)
        self._confidence = np.zeros(elements)
        self._stood = np.zeros(elements)  # sweeps for which an element has been in doubt without a break
        self._unlooked = 0.0  # sweeps since elements were last named
        self._partner = np.full(elements, -1, dtype=np.int64)
        self._last: Complex = np.zeros((elements, 0), dtype=np.complex128)  # good response
        self._last_good = np.full(elements, -1, dtype=np.int64)  # window of it
        self._unchanged = 0  # windows without another element that fell silent
        self._sides = Sides(0)
        self._tell()

    def begin(self, now: Posterior | None) -> None:
        """Begin a window: the estimate starts, was loosened, or is not to be trusted.

        Parameters
        ----------
        now : Posterior or None
            From which the next frames go on; None to wait for the next block.
        """
        self._windows.begin(now)

    def due(self, frames: int, elapsed_s: float) -> bool:
        """Count a block; say whether the estimate is to be read now, with `update`.

        Parameters
        ----------
        frames : int
        elapsed_s : float
            Time forgotten with it, s.
        """
        return self._windows.due(frames, elapsed_s)

    def update(self, now: Posterior) -> tuple[Finding, ...]:
        """Read the estimate; return the faults that are newly found.

        Parameters
        ----------
        now : Posterior
            After the blocks counted since the last time.
        """
        shown = self._windows.take(now)
        if shown is None:
            return ()
        self._unlooked += shown.sweeps
        self._appraisal.take(now, shown, self._partner < 0)
        before, beliefs = self._codes.copy(), self._appraisal.beliefs.probabilities
        if self._appraisal.looked:
            self._name(beliefs, self._unlooked)
            self._unlooked = 0.0
            self._pair_up()
        self._remember(now, shown, beliefs[FOLLOWS], before)
        if self._appraisal.looked or np.any(self._codes != before):
            self._tell()
        faulty, was_faulty = self._codes > FINE, before > FINE
        if self._appraisal.unsettled or np.any(faulty != was_faulty):
            self._windows.attend()
        new = np.flatnonzero(faulty & ~was_faulty)
        doubt = np.maximum(1.0 - beliefs[FOLLOWS], self._confidence)
        return tuple(Finding(int(n), FAULTS[self._codes[n]], float(self._confidence[n]), float(doubt[n])) for n in new)

    def _name(self, beliefs: Real, sweeps: float) -> None:
        """Name what each element does by itself, so many sweeps after it was last done."""
        before, known = self._codes, self._appraisal.known
        doubt = 1.0 - beliefs[FOLLOWS]
        called = known & (doubt >= np.where((before > FINE) | (self._stood > 0.0), TAKEN_BACK, SURE))
        silent = called & (beliefs[hypotheses.UNMOVED] >= np.maximum(0.5 * beliefs[hypotheses.WEAK], LIKELY_SILENT))
        weak = called & (beliefs[hypotheses.WEAK] >= 0.5) & ~silent
        self._stood = np.where(silent | weak, self._stood + sweeps, np.where(known, 0.0, self._stood))
        named = before > FINE
        weak &= named | (self._stood > WEAK_SWEEPS)
        codes = np.where(self._judged, FINE, NOT_JUDGED).astype(np.int8)
        codes[silent] = np.where((before == STUCK_PLUS) | (before == STUCK_MINUS), before, UNMOVED)[silent]
        codes[weak] = WEAK
        confidence = np.where(silent, beliefs[hypotheses.UNMOVED], np.where(weak, beliefs[hypotheses.WEAK], 0.0))
        unheard = ~known & self._judged  # what was known stays
        codes[unheard], confidence[unheard] = before[unheard], self._confidence[unheard]
        self._codes, self._confidence = codes, confidence

    def _pair_up(self) -> None:
        """Name pairs that are swapped; one that was stays so while it is more likely than not."""
        appraisal, before = self._appraisal, self._partner
        self._partner = np.full(before.size, -1, dtype=np.int64)
        pairs = swapped(appraisal.beliefs, appraisal.answers, appraisal.predicted, appraisal.residual, TAKEN_BACK)
        for one, other, likely in pairs:
            if likely >= SURELY_SWAPPED or before[one] == other:
                self._partner[one], self._partner[other] = other, one
                self._codes[[one, other]] = SWAPPED
                self._confidence[[one, other]] = likely

    def _remember(self, now: Posterior, shown: Shown, follows: Real, before: NDArray[np.int8]) -> None:
        """Keep good responses and the direct path, and see on which side elements are stuck."""
        appraisal, outputs = self._appraisal, now.coefficients.shape[1]
        if self._last.shape[1] != outputs:
            self._sides = Sides(outputs)
            self._last = np.zeros((follows.size, outputs), dtype=np.complex128)
            self._last_good[:] = -1
        if np.any(appraisal.amplitude != 1.0):
            self._last *= appraisal.amplitude
            self._sides.rescale(appraisal.amplitude)
        silent = _silent(self._codes) & (self._last_good >= 0)
        age = appraisal.windows - self._last_good
        self._sides.take(shown.direct, shown.sweeps, quiet=not np.any(silent & (age < KEPT)))
        self._unchanged = 0 if np.any(silent & ~_silent(before)) else self._unchanged + 1
        lately = np.flatnonzero(silent & (age < KEPT))
        if np.any(self._codes[lately] == UNMOVED) and self._unchanged >= SETTLED:
            # All that fell silent at about the same time moved the direct path together, and none may be missing.
            first, last = int(age[lately].max()), int(age[lately].min())
            sides = self._sides.decide(self._last[lately], first, last, SIDE_SURE) if first - last <= TOGETHER else []
            for n, (side, sure) in zip(lately.tolist(), sides, strict=bool(sides)):
                if side:
                    self._codes[n] = STUCK_PLUS if side > 0 else STUCK_MINUS
                    self._confidence[n] = min(float(self._confidence[n]), sure)
        good = (follows >= GOOD) & (self._codes == FINE)
        np.copyto(self._last, now.coefficients[1:], where=good[:, None])
        self._last_good[good] = appraisal.windows

    def _tell(self) -> None:
        """Put what was found in words and limits."""
        codes, confidence = self._codes, self._confidence
        faulty = np.flatnonzero(codes > FINE)
        self.faults = tuple((int(n), FAULTS[codes[n]], float(confidence[n])) for n in faulty)
        self.silent = faulty[_silent(codes[faulty]) & (confidence[faulty] >= LEFT_OUT)]
        stuck = {int(n): -1 if codes[n] == STUCK_MINUS else 1 for n in self.silent}
        self.limits = replace(self._known, stuck=stuck | self._known.stuck)

    def snapshot(self) -> dict[str, Any]:
        """All state as plain values and arrays; `load` goes on from it bit by bit."""
        return {
            "windows": self._windows.snapshot(),
            "appraisal": self._appraisal.snapshot(),
            "codes": self._codes.copy(),
            "confidence": self._confidence.copy(),
            "stood": self._stood.copy(),
            "unlooked": self._unlooked,
            "partner": self._partner.copy(),
            "last": self._last.copy(),
            "last_good": self._last_good.copy(),
            "unchanged": self._unchanged,
            "sides": self._sides.snapshot(),
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot made with the same arguments."""
        self._windows.load(snapshot["windows"])
        self._appraisal.load(snapshot["appraisal"])
        self._codes = np.array(snapshot["codes"], dtype=np.int8)
        self._confidence = np.array(snapshot["confidence"], dtype=np.float64)
        self._stood = np.array(snapshot["stood"], dtype=np.float64)
        self._unlooked = float(snapshot["unlooked"])
        self._partner = np.array(snapshot["partner"], dtype=np.int64)
        self._last = np.array(snapshot["last"], dtype=np.complex128)
        self._last_good = np.array(snapshot["last_good"], dtype=np.int64)
        self._unchanged = int(snapshot["unchanged"])
        self._sides = Sides(self._last.shape[1])
        self._sides.load(snapshot["sides"])
        self._tell()


def _silent(codes: NDArray[np.int8]) -> NDArray[np.bool_]:
    return np.asarray((codes >= SILENT[0]) & (codes <= SILENT[-1]))
