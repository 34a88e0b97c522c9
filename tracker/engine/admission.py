"""Which bursts are let in: order within a run, duplicates, losses, and clocks that cannot be right.

One stray burst, of another controller or with a `seq` far ahead, must not lock the real controller out. So bursts
that are refused for their order alone, but are newer than all before and come one after the other with none that is
in order between them, are let in after a few: they are what is being sent.
"""

from collections import deque
from typing import Any

from .burst import Burst
from .refusal import Reason, Refused

# Bursts remembered to tell a repeat from one that is merely late.
REMEMBERED = 1024
# Runs remembered, so that a straggler of a run that has ended does not pass for a new controller.
RUNS_REMEMBERED = 16
# Bursts in a row, refused for their order alone, after which the next is let in.
INSISTED = 8


class Admission:
    """The door to the engine; bursts in `seq` order go through, all else is refused with its reason.

    Parameters
    ----------
    clock_skew_ns : int
        Largest difference allowed between a burst's own time and its arrival, ns.
    """

    def __init__(self, clock_skew_ns: int) -> None:
        self._clock_skew_ns = clock_skew_ns
        self._run: int | None = None
        self._next_seq = 0
        self._end_ns = 0
        self._recent: deque[int] = deque(maxlen=REMEMBERED)
        self._ended: deque[int] = deque(maxlen=RUNS_REMEMBERED)
        self._insisting: tuple[int, int, int] | None = None  # run and seq of the last refused, and how many in a row

    def admit(self, burst: Burst, arrival_ns: int, *, vouched: bool = False) -> int:
        """Let a burst in.

        Parameters
        ----------
        burst : Burst
        arrival_ns : int
            When it arrived, ns since the Unix epoch.
        vouched : bool
            It was let in once already, as a journal tells: `seq` and run are not looked at again.

        Returns
        -------
        int
            Bursts lost just before it, by `seq`.

        Raises
        ------
        Refused
            Out of order, a duplicate, or from the far future or past; nothing is changed then.
        """
        self._check_clock(burst, arrival_ns)
        if burst.run != self._run:
            return self._begin(burst, vouched=vouched)
        if burst.seq < self._next_seq and not vouched:
            if burst.seq in self._recent:
                raise Refused(Reason.DUPLICATE, f"burst {burst.seq} was taken already; send every seq once")
            if not self._insists(burst):
                raise Refused(
                    Reason.OUT_OF_ORDER, f"burst {burst.seq} comes after {self._next_seq - 1}; send bursts in seq order"
                )
        if burst.t_ns <= self._end_ns:
            raise Refused(
                Reason.OUT_OF_ORDER,
                f"burst {burst.seq} starts {(self._end_ns - burst.t_ns) / 1e6:.3f} ms before the last frame of the one "
                "before it; t_ns must rise within a run",
            )
        lost = max(burst.seq - self._next_seq, 0)
        self._accept(burst)
        return lost

    def _check_clock(self, burst: Burst, arrival_ns: int) -> None:
        ahead = burst.end_ns - arrival_ns
        if ahead > self._clock_skew_ns:
            raise Refused(
                Reason.FAR_FUTURE,
                f"t_ns lies {ahead / 1e9:.1f} s after arrival, {self._clock_skew_ns / 1e9:g} s is allowed; set the "
                "controller's clock, or link.clock_skew_s",
            )
        if -ahead > self._clock_skew_ns:
            raise Refused(
                Reason.FAR_PAST,
                f"t_ns lies {-ahead / 1e9:.1f} s before arrival, {self._clock_skew_ns / 1e9:g} s is allowed; set the "
                "controller's clock, or link.clock_skew_s",
            )

    def _insists(self, burst: Burst) -> bool:
        """Count a burst refused for its order alone; whether enough of them came in a row."""
        if burst.t_ns <= self._end_ns:
            return False
        run, seq, count = self._insisting or (burst.run, burst.seq - 1, 0)
        goes_on = (run, seq) == (burst.run, burst.seq - 1)
        self._insisting = burst.run, burst.seq, count + 1 if goes_on else 1
        return self._insisting[2] > INSISTED

    def _begin(self, burst: Burst, *, vouched: bool) -> int:
        """Take a new run from its first burst heard; what came before that burst was not ours to hear."""
        if burst.run in self._ended and not vouched and not self._insists(burst):
            raise Refused(Reason.OUT_OF_ORDER, f"run {burst.run} has ended, another has begun; restart with a new run")
        if self._run is not None:
            self._ended.append(self._run)
        self._run = burst.run
        self._recent.clear()
        self._accept(burst)
        return 0

    def _accept(self, burst: Burst) -> None:
        self._next_seq = burst.seq + 1
        self._end_ns = burst.end_ns
        self._recent.append(burst.seq)
        self._insisting = None

    def snapshot(self) -> dict[str, Any]:
        """All state."""
        return {
            "run": self._run,
            "next_seq": self._next_seq,
            "end_ns": self._end_ns,
            "recent": list(self._recent),
            "ended": list(self._ended),
            "insisting": list(self._insisting) if self._insisting else None,
        }

    def load(self, snapshot: dict[str, Any]) -> None:
        """Take over a snapshot."""
        self._run = snapshot["run"]
        self._next_seq = int(snapshot["next_seq"])
        self._end_ns = int(snapshot["end_ns"])
        self._recent = deque(snapshot["recent"], maxlen=REMEMBERED)
        self._ended = deque(snapshot["ended"], maxlen=RUNS_REMEMBERED)
        insisting = snapshot["insisting"]
        self._insisting = (int(insisting[0]), int(insisting[1]), int(insisting[2])) if insisting else None
