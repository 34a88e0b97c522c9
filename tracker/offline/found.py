"""What there was in a log for a link, and the complaint when there was nothing."""

from collections.abc import Iterable, Iterator, Sequence

from tracker.engine.burst import Burst
from tracker.engine.refusal import Refused
from tracker.logs import Record

from .errors import OfflineError


class Found:
    """What there was in one log for a link.

    Parameters
    ----------
    link : str
    """

    def __init__(self, link: str) -> None:
        self._link = link
        self._links: set[str] = set()
        self._first_ns: int | None = None
        self._last_ns = 0
        self.refusal: Refused | None = None

    def noting(self, records: Iterable[Record]) -> Iterator[Record]:
        """Pass records on, and note the links that bursts are of."""
        for record in records:
            if record.topic.startswith("pilots/"):
                self._links.add(record.topic.removeprefix("pilots/"))
            yield record

    def use(self, bursts: Sequence[Burst]) -> None:
        """Note bursts that are used."""
        if self._first_ns is None:
            self._first_ns = bursts[0].t_ns
        self._last_ns = bursts[-1].end_ns

    @property
    def used(self) -> bool:
        """Whether a burst was used."""
        return self._first_ns is not None

    @property
    def span_s(self) -> float:
        """Time from the first frame used to the last, s."""
        return (self._last_ns - self._first_ns) / 1e9 if self._first_ns is not None else 0.0

    def check(self) -> None:
        """Complain about a log of which no burst could be used; one that holds none at all is as it should be.

        Raises
        ------
        OfflineError
        """
        if self.used or not self._links:
            return
        if self._link not in self._links:
            raise OfflineError(
                f"holds no bursts of link {self._link!r}, but of {', '.join(sorted(self._links))}; "
                "name one of them in link.name of the settings"
            )
        if self.refusal is not None:
            raise OfflineError(f"none of its bursts can be used; the first refusal: {self.refusal.detail}")
