"""From the records of a log to the blocks that the engine works off, in the order of things.

A journal of the service says which bursts were taken together and how many optimizer steps there was time for; with
its own settings a replay follows that. Any other log, or other settings, gives one burst a block and a fixed number
of steps. Either way no clock is asked.
"""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace

from tracker.decisions import COMMAND, DECISION, Command, Decision, decode_command, decode_decision
from tracker.engine.burst import Burst
from tracker.engine.refusal import Refused
from tracker.logs import Record
from tracker.messages import Shape, decode_pilots

from .errors import OfflineError


@dataclass(frozen=True, slots=True, eq=False)
class Taken:
    """A burst and when it arrived, ns since the Unix epoch."""

    burst: Burst
    arrival_ns: int


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Bursts to work off together.

    Parameters
    ----------
    taken : list of Taken
    steps : int or None
        Optimizer steps to take; None leaves it to the settings.
    time_ns : int
        Log time of the last record of the block.
    """

    taken: list[Taken]
    steps: int | None
    time_ns: int


@dataclass(frozen=True, slots=True)
class Said:
    """Something that the tracker had published, as it stands in the log."""

    kind: str
    body: bytes


Step = Block | Command | Said | Refused


def steps(records: Iterable[Record], link: str, shape: Shape, *, follow: bool) -> Iterator[Step]:
    """Yield what happened, one thing after another.

    Parameters
    ----------
    records : iterable of Record
    link : str
    shape : Shape
        Sizes that every burst must have.
    follow : bool
        Whether to take blocks, steps and operator's commands as journaled.

    Raises
    ------
    OfflineError
        When a journal contradicts itself.
    """
    waiting: dict[tuple[int, int], Taken] = {}
    time_ns = 0
    for record in records:
        kind, name = _topic(record)
        if name != link:
            continue
        time_ns = record.log_time_ns
        try:
            if kind == "pilots":
                burst = decode_pilots(record.body, link, shape)
                if follow:
                    waiting[burst.run, burst.seq] = Taken(burst, time_ns)
                else:
                    # The pattern in use was one of another tracker's: its id says nothing to this one.
                    yield Block([Taken(replace(burst, pattern_id=None), time_ns)], None, time_ns)
            elif kind == DECISION and follow:
                yield _block(decode_decision(record.body), waiting, record)
            elif kind == COMMAND and follow:
                yield decode_command(record.body)
            elif kind in ("pattern", "state", "alarm"):
                yield Said(kind, record.body)
        except Refused as refused:
            yield refused
    if waiting:
        # The service met a fault with these, and wrote them down for a replay to meet it too.
        yield Block(list(waiting.values()), None, time_ns)


def _topic(record: Record) -> tuple[str, str]:
    kind, _, name = record.topic.partition("/")
    return kind, name


def _block(decision: Decision, waiting: dict[tuple[int, int], Taken], record: Record) -> Block:
    try:
        taken = [waiting.pop(burst) for burst in decision.bursts]
    except KeyError as missing:
        raise OfflineError(
            f"byte {record.position}: the journal says that burst {missing.args[0]} was worked off, but lacks it"
        ) from None
    return Block(taken, decision.steps, record.log_time_ns)
