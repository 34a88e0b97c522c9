"""What happened, one entry each, and how entries are folded so that a table stays short."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from .effect import Effect

# So many of one kind in a row become one.
LONG_RUN = 6
# Entries kept; when there are more, those of one kind that lie close together become one.
MOST_ENTRIES = 120
CLOSE_NS = 1_000_000_000


@dataclass(slots=True)
class Happening:
    """One thing that happened, or several of a kind.

    Parameters
    ----------
    what : str
        ``alarm``, ``mode``, ``pattern``, ``fault``, ``silence``, ``controller`` or ``tracker`` (started anew).
    kind : str
        Of the alarm; the mode entered; cause of the pattern; the fault.
    t_ns, since_ns : int
        When it was told, and when it began as estimated.
    last_ns : int
        When the last of several was told.
    receiver : int or None
    statistic, threshold : float or None
        Evidence of an alarm; of several, that of the largest ratio.
    next_kind, action : str
        What else it may be, and what the tracker said that it does.
    detail : str
        What there is to say in words.
    mode : str
        Mode entered because of it, empty when none was.
    mode_ns : int or None
        How long that mode lasted; None when it had not ended.
    pattern : int or None
        Id of the pattern published because of it.
    amount : float
        Bursts lost, or seconds of silence, of all together.
    effect : Effect or None
        On the measured rate; of several, the one that cost most.
    count : int
    """

    what: str
    kind: str
    t_ns: int
    since_ns: int
    last_ns: int
    receiver: int | None = None
    statistic: float | None = None
    threshold: float | None = None
    next_kind: str = ""
    action: str = ""
    detail: str = ""
    mode: str = ""
    mode_ns: int | None = None
    pattern: int | None = None
    amount: float = 0.0
    effect: Effect | None = None
    count: int = 1

    @property
    def key(self) -> tuple[str, str, int | None]:
        """What makes two of them of one kind."""
        return self.what, self.kind, self.receiver

    @property
    def settled(self) -> bool:
        """Whether nothing about it can change any more."""
        return (self.effect is None or not self.effect.open) and (not self.mode or self.mode_ns is not None)

    @property
    def ratio(self) -> float:
        """Statistic over threshold."""
        return self.statistic / self.threshold if self.statistic is not None and self.threshold else 0.0

    def absorb(self, later: "Happening") -> None:
        """Take in a later one of the same kind."""
        self.count += later.count
        self.last_ns = max(self.last_ns, later.last_ns)
        self.amount += later.amount
        if later.ratio > self.ratio:
            self.statistic, self.threshold = later.statistic, later.threshold
        if self.mode == later.mode and self.mode_ns is not None and later.mode_ns is not None:
            self.mode_ns += later.mode_ns
        elif later.mode:
            self.mode, self.mode_ns = later.mode, later.mode_ns
        self.pattern = later.pattern if later.pattern is not None else self.pattern
        if later.effect is not None and (self.effect is None or later.effect.depth > self.effect.depth):
            self.effect = later.effect

    def as_dict(self, start_ns: int) -> dict[str, Any]:
        """Give everything as plain values; times also in seconds from the start."""
        effect = self.effect
        return {
            "what": self.what,
            "kind": self.kind,
            "count": self.count,
            "t_ns": self.t_ns,
            "t_s": (self.t_ns - start_ns) / 1e9,
            "last_s": (self.last_ns - start_ns) / 1e9,
            "since_ns": self.since_ns,
            "since_s": (self.since_ns - start_ns) / 1e9,
            "receiver": self.receiver,
            "statistic": self.statistic,
            "threshold": self.threshold,
            "next_kind": self.next_kind,
            "action": self.action,
            "detail": self.detail,
            "mode": self.mode or None,
            "mode_s": None if self.mode_ns is None else self.mode_ns / 1e9,
            "pattern": self.pattern,
            "amount": self.amount,
            "rate_before": effect.before if effect else None,
            "rate_lowest": effect.lowest if effect else None,
            "fell": effect.fell if effect else None,
            "back_s": effect.back_after_s if effect else None,
        }


def fold_runs(entries: Sequence[Happening]) -> list[Happening]:
    """Make one of each long run of entries of a kind that nothing else interrupts."""
    folded: list[Happening] = []
    start = 0
    for at in range(1, len(entries) + 1):
        if at < len(entries) and entries[at].key == entries[start].key:
            continue
        run = entries[start:at]
        if len(run) >= LONG_RUN or any(each.count > 1 for each in run):
            for each in run[1:]:
                run[0].absorb(each)
            run = run[:1]
        folded += run
        start = at
    return folded


def fold_close(entries: list[Happening], most: int) -> list[Happening]:
    """Make one of entries of a kind that lie close together, the further apart the more there are.

    Entries that can still change stay as they are.
    """
    apart_ns = CLOSE_NS
    span_ns = max((each.last_ns for each in entries), default=0) - min((each.t_ns for each in entries), default=0)
    while len(entries) > most and apart_ns <= 2 * span_ns + CLOSE_NS:
        entries = _close(entries, apart_ns)
        apart_ns *= 2
    return entries


def _close(entries: Sequence[Happening], apart_ns: int) -> list[Happening]:
    kept: list[Happening] = []
    latest: dict[tuple[str, str, int | None], Happening] = {}
    for each in entries:
        known = latest.get(each.key)
        if known is not None and each.settled and known.settled and each.t_ns - known.last_ns <= apart_ns:
            known.absorb(each)
            continue
        kept.append(each)
        latest[each.key] = each
    return kept
