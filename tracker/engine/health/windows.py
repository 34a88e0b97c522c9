"""Cuts the stream of blocks into windows: when the estimate is read, and when what it shows is looked at.

Reading costs a little, looking costs much more. So the estimate is read a few times a window; and a window is about a
sweep while the estimate is young, after a change and after something was found, and several sweeps later on.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .fresh import Posterior, View, Window

Complex = NDArray[np.complex128]

# Share of the frames of a sweep that make a window; more when nothing at all is known yet, because elements can then
# only be told apart once there are more patterns than elements.
WINDOW_SHARE, FIRST_SHARE = 0.75, 1.2
# The same once nothing was found for so many windows: judging costs time, and there is little left to find.
LATER_SHARE, LATER = 5.0, 6
# Times that the estimate is read within a window.
READS = 4
# Noise of a window, over that of as many frames of orthogonal patterns, above which elements are not told apart.
MOST_NOISE = 16.0


@dataclass(frozen=True, slots=True, eq=False)
class Shown:
    """What a window showed.

    Parameters
    ----------
    view : View
        Of the elements.
    direct : ndarray of complex, shape (D,)
        Mean of the direct path's estimates, in units of the noise.
    sweeps : float
        Length of the window.
    closely : bool
        Whether it is to be looked at closely.
    """

    view: View
    direct: Complex
    sweeps: float
    closely: bool


class Windows:
    """Follows the estimate window after window.

    Parameters
    ----------
    elements : int
        N.
    forgetting_kind : str
        Of the filter, see `rls.forgetting`.
    """

    def __init__(self, elements: int, forgetting_kind: str) -> None:
        self._kind = forgetting_kind
        self._sweep = elements + 1
        self._started = self._shown = False
        self._unread = (0, 0.0)  # frames and seconds since the estimate was last read
        self._since = 0  # windows since the last beginning or finding
        self._window: Window | None = None
        self._direct: Complex | None = None  # sum over the reads of the window
        self._reads = 0

    def begin(self, now: Posterior | None) -> None:
        """Begin a window: the estimate starts, was loosened, or is not to be trusted.

        Parameters
        ----------
        now : Posterior or None
            From which the next frames go on; None to wait for the next block.
        """
        self._since = 0
        self._restart(now)

    def attend(self) -> None:
        """Look closely at the next windows: something was found."""
        self._since = 0

    def due(self, frames: int, elapsed_s: float) -> bool:
        """Count a block; say whether the estimate is to be read now, with `take`.

        Parameters
        ----------
        frames : int
        elapsed_s : float
            Time forgotten with it, s.
        """
        self._unread = (self._unread[0] + frames, self._unread[1] + elapsed_s)
        return self._window is None or READS * self._unread[0] >= self._least_frames

    def take(self, now: Posterior) -> Shown | None:
        """Read the estimate; return what a window showed that this completes.

        Parameters
        ----------
        now : Posterior
            After the blocks counted since the last time.
        """
        unread = self._unread
        if not self._started:
            self._restart(now.unlearned)
        if self._window is None or not self._window.follows(now):
            self._restart(now)
            return None
        self._window.add(now, *unread)
        self._unread = (0, 0.0)
        self._direct = now.coefficients[0].copy() if self._direct is None else self._direct + now.coefficients[0]
        self._reads += 1
        if self._window.frames < self._least_frames:
            return None
        view, frames, direct = self._window.view(now), self._window.frames, self._direct / self._reads
        self._restart(now)
        if view is None or np.median(view.noise) * frames > MOST_NOISE:
            return None
        self._shown = True
        self._since += 1
        return Shown(view, direct, frames / self._sweep, closely=self._since <= LATER)

    @property
    def _least_frames(self) -> int:
        """Frames that make a window."""
        if not self._shown:
            return max(int(FIRST_SHARE * self._sweep), 2)
        return max(int((LATER_SHARE if self._since >= LATER else WINDOW_SHARE) * self._sweep), 1)

    def _restart(self, now: Posterior | None) -> None:
        self._started = True
        self._unread = (0, 0.0)
        self._window = Window(self._kind, now) if now is not None else None
        self._direct, self._reads = None, 0

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "started": self._started,
            "shown": self._shown,
            "unread": list(self._unread),
            "since": self._since,
            "window": self._window.snapshot() if self._window is not None else None,
            "direct": self._direct.copy() if self._direct is not None else None,
            "reads": self._reads,
        }

    def load(self, snapshot: Mapping[str, Any]) -> None:
        """Take over a snapshot."""
        window, direct = snapshot["window"], snapshot["direct"]
        self._started, self._shown = bool(snapshot["started"]), bool(snapshot["shown"])
        self._unread = (int(snapshot["unread"][0]), float(snapshot["unread"][1]))
        self._since, self._reads = int(snapshot["since"]), int(snapshot["reads"])
        self._window = Window.restore(window, self._kind) if window is not None else None
        self._direct = np.array(direct, dtype=np.complex128) if direct is not None else None
