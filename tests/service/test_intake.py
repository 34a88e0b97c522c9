"""What waits at the socket: taken as one block, up to a limit, with what is refused counted and passed over."""

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
import structlog
import zmq

from tests.service.station import bursts, settings_text
from tracker.assembly import configure, shape
from tracker.engine.tracker import Tracker
from tracker.messages import encode_pilots
from tracker.service.intake import MOST_TOGETHER, Intake
from tracker.service.notices import FULL_IN_A_ROW, Notices
from tracker.service.refusals import Refusals
from tracker.settings import parse

TOPIC = b"pilots/yard"


class Door:
    """An intake and the other end of its socket; what is sent waits at once, since both are in this process."""

    def __init__(self) -> None:
        settings = parse(settings_text("tcp://127.0.0.1:1"))
        log = structlog.get_logger()
        self.context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self.outside = self.context.socket(zmq.PAIR)
        inside = self.context.socket(zmq.PAIR)
        for each in (self.outside, inside):
            each.setsockopt(zmq.SNDHWM, 0)
            each.setsockopt(zmq.RCVHWM, 0)
        self.outside.bind("inproc://door")
        inside.connect("inproc://door")
        self.tracker = Tracker(configure(settings, Path()))
        self.refusals = Refusals(log)
        self.notices = Notices(log, required=True)
        self.intake = Intake(inside, "yard", shape(settings), self.tracker, self.refusals, self.notices)

    def send(self, body: bytes, topic: bytes = TOPIC) -> None:
        self.outside.send_multipart([topic, body])


@pytest.fixture
def door() -> Iterator[Door]:
    made = Door()
    yield made
    made.context.destroy(linger=0)


def test_all_that_waits_is_one_block(door: Door) -> None:
    """Five bursts that waited together come together, in order, each with the body it came in."""
    sent = bursts(5)
    bodies = [encode_pilots("yard", burst) for burst in sent]
    for body in bodies:
        door.send(body)
    arrivals = door.intake.take()
    assert [arrival.burst.seq for arrival in arrivals] == [0, 1, 2, 3, 4]
    assert [arrival.body for arrival in arrivals] == bodies
    assert all(
        np.array_equal(arrival.burst.response, burst.response) for arrival, burst in zip(arrivals, sent, strict=True)
    )
    assert door.intake.take() == []


def test_a_block_has_a_limit(door: Door) -> None:
    """Bursts beyond the most frames of a block wait for the next one; none is lost."""
    for burst in bursts(20, frames=MOST_TOGETHER // 8):
        door.send(encode_pilots("yard", burst))
    first, second, third = (door.intake.take() for _ in range(3))
    assert [len(first), len(second), len(third)] == [8, 8, 4]
    assert sum(arrival.burst.frames for arrival in first) == MOST_TOGETHER
    assert [arrival.burst.seq for arrival in first + second + third] == list(range(20))


def test_a_flood_of_refused_messages_does_not_keep_good_bursts_waiting(door: Door) -> None:
    """However many bad messages wait, a block ends after so many, and what was good in it is worked off."""
    good, later = bursts(2)
    door.send(encode_pilots("yard", good))
    for _ in range(3 * MOST_TOGETHER):
        door.send(b"junk")
    door.send(encode_pilots("yard", later))
    taken = [[arrival.burst.seq for arrival in door.intake.take()] for _ in range(4)]
    assert taken == [[0], [], [], [1]]
    assert door.refusals.counts == {"not-a-map": 3 * MOST_TOGETHER}


def test_links_that_begin_alike_are_told_apart(door: Door) -> None:
    """A subscription takes all topics that begin as it does: the others are passed over and not counted."""
    (burst,) = bursts(1)
    door.send(encode_pilots("yard-2", burst), b"pilots/yard-2")
    door.send(b"junk", b"pilots/yards")
    assert door.intake.take() == []
    assert door.refusals.counts == {}
    door.send(encode_pilots("yard", burst))
    assert len(door.intake.take()) == 1


def test_a_message_has_two_parts(door: Door) -> None:
    """Topic alone, or something after the body: refused."""
    body = encode_pilots("yard", bursts(1)[0])
    door.outside.send_multipart([TOPIC])
    door.outside.send_multipart([TOPIC, body, b""])
    assert door.intake.take() == []
    assert door.refusals.counts == {"not-msgpack": 2}


def test_what_has_arrived_is_worked_off_after_closing(door: Door) -> None:
    """Closed, the intake gives out what waited by then, in blocks as ever, and nothing that comes later."""
    sent = bursts(20, frames=MOST_TOGETHER // 8)
    for burst in sent[:18]:
        door.send(encode_pilots("yard", burst))
    door.intake.close(1000)
    for burst in sent[18:]:
        door.send(encode_pilots("yard", burst))
    blocks = []
    while door.intake.waiting:
        blocks.append([arrival.burst.seq for arrival in door.intake.take()])
    assert blocks == [list(range(8)), list(range(8, 16)), [16, 17]]


def test_overload_is_told_when_full_blocks_do_not_end(door: Door) -> None:
    """An alarm when so many blocks in a row were full and more was waiting; once, not with every block."""
    for burst in bursts(8 * (FULL_IN_A_ROW + 3), frames=MOST_TOGETHER // 8):
        door.send(encode_pilots("yard", burst))
    told = []
    for _ in range(FULL_IN_A_ROW + 3):
        door.intake.take()
        told.append([alarm.kind for alarm in door.notices.take(7, 1)])
    assert told[FULL_IN_A_ROW - 1] == ["overload"]
    assert sum(map(len, told)) == 1


def test_bursts_as_large_as_a_block_are_no_overload(door: Door) -> None:
    """One burst a block, and nothing waiting behind it: the service keeps up, however large the bursts are."""
    for burst in bursts(FULL_IN_A_ROW + 3, frames=MOST_TOGETHER):
        door.send(encode_pilots("yard", burst))
        assert len(door.intake.take()) == 1
    assert door.notices.take(7, 1) == []
