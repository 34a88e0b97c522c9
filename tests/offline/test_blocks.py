"""From records to blocks: followed as journaled, or one burst after another."""

from collections.abc import Sequence

import msgpack
import pytest

from tests.service.station import bursts
from tracker.decisions import Command, encode_command, encode_decision
from tracker.engine.burst import Burst
from tracker.logs import Record
from tracker.messages import Reason, Refused, Shape, encode_pilots
from tracker.offline.blocks import Block, Said, Step, steps
from tracker.offline.errors import OfflineError

SHAPE = Shape(16, 1, 16)


def heard(burst: Burst, time_ns: int) -> Record:
    return Record("pilots/yard", encode_pilots("yard", burst), time_ns, burst.t_ns, 8)


def decided(taken: Sequence[Burst], made: int, time_ns: int, position: int = 8) -> Record:
    body = encode_decision([(burst.run, burst.seq) for burst in taken], made)
    return Record("decision/yard", body, time_ns, time_ns, position)


def walk(records: Sequence[Record], *, follow: bool = True) -> list[Step]:
    return list(steps(records, "yard", SHAPE, follow=follow))


def blocks(found: Sequence[Step]) -> list[tuple[list[int], int | None, int]]:
    """Numbers of the bursts, steps and time of each block; there must be nothing else."""
    assert all(isinstance(step, Block) for step in found)
    return [
        ([taken.burst.seq for taken in step.taken], step.steps, step.time_ns)
        for step in found
        if isinstance(step, Block)
    ]


def test_a_journal_is_followed_block_by_block() -> None:
    """Bursts come together as the service took them, with the steps that there was time for then."""
    a, b, c = bursts(3)
    records = [heard(a, 1), decided([a], 5, 2), heard(b, 3), heard(c, 4), decided([b, c], 0, 5)]
    assert blocks(walk(records)) == [([0], 5, 2), ([1, 2], 0, 5)]


def test_without_following_every_burst_is_a_block_of_its_own() -> None:
    """Decisions and commands are left out, and so is the id of the pattern that another tracker had published."""
    a, b = bursts(2)
    records = [
        heard(a, 1),
        heard(b, 3),
        decided([a, b], 5, 4),
        Record("command/yard", encode_command(Command("hold")), 5, 5, 8),
    ]
    found = walk(records, follow=False)
    assert blocks(found) == [([0], None, 1), ([1], None, 3)]
    assert all(taken.burst.pattern_id is None for step in found if isinstance(step, Block) for taken in step.taken)
    assert [taken.arrival_ns for step in found if isinstance(step, Block) for taken in step.taken] == [1, 3]


def test_commands_and_what_was_said_keep_their_place() -> None:
    """Between the blocks that they stood between."""
    a, b = bursts(2)
    said = Record("state/yard", b"body", 3, 3, 8)
    command = Record("command/yard", encode_command(Command("adopt", b"\x01\x02")), 4, 4, 8)
    records = [heard(a, 1), decided([a], 5, 2), said, command, heard(b, 5), decided([b], 6, 6)]
    found = walk(records)
    assert [type(step) for step in found] == [Block, Said, Command, Block]
    assert found[1:3] == [Said("state", b"body"), Command("adopt", b"\x01\x02")]


def test_other_links_and_other_topics_are_passed_over() -> None:
    """Also those whose name begins alike."""
    (a,) = bursts(1)
    others = [
        Record(topic, encode_pilots("yard", a), 1, 1, 8)
        for topic in ("pilots/yard-2", "pilots/yar", "pilots", "truth/yard", "")
    ]
    assert walk(others) == walk(others, follow=False) == []


@pytest.mark.parametrize("topic", ["pilots/yard", "decision/yard", "command/yard"])
def test_records_that_cannot_be_read_are_refusals(topic: str) -> None:
    """Whatever stands in them: the records before and after are used."""
    a, b = bursts(2)
    bodies = [
        b"",
        b"\xc1",
        msgpack.packb([1]),
        msgpack.packb({"v": 2}),
        msgpack.packb({"v": 1}),
        msgpack.packb("x" * 9),
    ]
    bodies += [msgpack.packb({"v": 1, "bursts": 3, "steps": "x", "verb": 1, "bits": 1.5})]
    bodies += [
        msgpack.packb({"v": 1, "bursts": [], "steps": 0}),
        msgpack.packb({"v": 1, "bursts": [[7, 1]], "steps": -1}),
    ]
    for body in bodies:
        spoilt = Record(topic, body, 3, 3, 8)
        found = walk([heard(a, 1), decided([a], 5, 2), spoilt, heard(b, 4), decided([b], 5, 5)])
        assert [type(step) for step in found] == [Block, Refused, Block]


def test_bursts_of_other_sizes_are_refusals_that_say_so() -> None:
    """The reason tells them from damage."""
    (a,) = bursts(1)
    (refused,) = steps([heard(a, 1)], "yard", Shape(15, 1, 16), follow=False)
    assert isinstance(refused, Refused)
    assert refused.reason is Reason.SETTINGS


def test_a_journal_that_contradicts_itself_says_where() -> None:
    """A block of a burst that the log lacks cannot be followed."""
    a, b = bursts(2)
    with pytest.raises(OfflineError, match=r"byte 4711: the journal says that burst \(7, 1\) was worked off"):
        walk([heard(a, 1), decided([a, b], 5, 2, position=4711)])


def test_bursts_that_no_decision_follows_come_last() -> None:
    """The service met a fault with them and wrote them down: a replay meets them, in one block, at the end."""
    a, b, c = bursts(3)
    records = [heard(a, 1), decided([a], 5, 2), heard(b, 3), heard(c, 4)]
    assert blocks(walk(records)) == [([0], 5, 2), ([1, 2], None, 4)]
