"""What comes in is spoilt in ten thousand ways, and who listens is too slow: the link goes on as if nothing were."""

import random
import time
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import zmq

from tests.service.station import RESTLESS, Controller, Nursery, bursts
from tracker.assembly import shape
from tracker.engine.admission import Admission
from tracker.engine.burst import Burst
from tracker.engine.events import Pattern
from tracker.messages import Reason, Refused, decode_pilots, encode_pilots
from tracker.snapshots import unpack_start

SPOILT = 10_000


def mutations(rng: random.Random, sound: list[bytes]) -> Iterator[bytes]:
    """Yield bodies that were sound once: bits flipped, cut, grown, spliced, keys and values exchanged."""
    values: list[Any] = [
        None,
        True,
        -1,
        0,
        2**63,
        2**64 - 1,
        1.5,
        float("nan"),
        "",
        "yard-2",
        b"",
        b"\x00" * 64,
        [],
        {},
    ]
    while True:
        body = bytearray(rng.choice(sound))
        turn = rng.randrange(7)
        if turn == 0:
            for _ in range(rng.randint(1, 8)):
                body[rng.randrange(len(body))] ^= 1 << rng.randrange(8)
        elif turn == 1:
            del body[rng.randrange(len(body)) :]
        elif turn == 2:
            at = rng.randrange(len(body))
            body[at:at] = rng.randbytes(rng.randint(1, 16))
        elif turn == 3:
            other = rng.choice(sound)
            at = rng.randrange(min(len(body), 200))
            body[at:] = other[rng.randrange(200) :]
        elif turn == 4:
            at = rng.randrange(120)  # the head, where most of the keys lie
            body[at] = rng.randrange(256)
        else:
            fields = msgpack.unpackb(bytes(body))
            key = rng.choice(list(fields))
            if turn == 5:
                fields[key] = rng.choice(values)
            else:
                del fields[key]
            body = bytearray(msgpack.packb(fields))
        yield bytes(body)


class Door:
    """What the service should say of each message, worked out beforehand."""

    def __init__(self, controller: Controller) -> None:
        self._link, self._shape = controller.link, shape(controller.settings)
        self._admission = Admission(round(controller.settings.link.clock_skew_s * 1e9))
        self.refused: Counter[str] = Counter()

    def refuses(self, body: bytes) -> bool:
        """Whether a message is refused; counted if so, and forgotten if not."""
        before = self._admission.snapshot()
        try:
            self._admission.admit(decode_pilots(body, self._link, self._shape), time.time_ns())
        except Refused as refused:
            self.refused[str(refused.reason)] += 1
            return True
        self._admission.load(before)
        return False

    def takes(self, burst: Burst) -> None:
        self._admission.admit(burst, time.time_ns())


def estimate(controller: Controller) -> dict[str, Any]:
    """What the service knew when it ended, from its checkpoint, but for the counts of what was refused."""
    _, start = msgpack.unpackb((controller.journal / "yard.checkpoint").read_bytes())
    snapshot = unpack_start(start).snapshot
    assert snapshot is not None
    return {key: value for key, value in snapshot.items() if key != "counts"}


def same(a: Any, b: Any) -> bool:
    """Whether two trees of plain values and arrays are the same bit by bit."""
    if isinstance(a, dict):
        return isinstance(b, dict) and a.keys() == b.keys() and all(same(a[key], b[key]) for key in a)
    if isinstance(a, list):
        return isinstance(b, list) and len(a) == len(b) and all(map(same, a, b))
    if isinstance(a, np.ndarray):
        return isinstance(b, np.ndarray) and a.dtype == b.dtype and a.tobytes() == b.tobytes()
    return bool(a == b)


def published(patterns: list[Pattern]) -> list[tuple[int, int, bytes, float]]:
    return [(pattern.id, pattern.seq, pattern.states.tobytes(), pattern.rate) for pattern in patterns]


def test_ten_thousand_spoilt_messages_change_nothing(nursery: Nursery, tmp_path: Path) -> None:
    """Each is refused for the reason that the format gives, and the estimate is what it is without them, bit by bit."""
    rng = random.Random(17)
    played = bursts(40)
    sound = [encode_pilots("yard", burst) for burst in played]
    found = []
    for spoilt in (SPOILT, 0):
        folder = tmp_path / str(spoilt)
        folder.mkdir()
        controller = Controller(folder, link="clock_skew_s = 600.0", estimator=RESTLESS)
        door = Door(controller)
        service = nursery.start("serve", controller.path)
        controller.meet()
        junk = mutations(rng, sound)
        for burst in played:
            sent = 0
            while sent < spoilt // len(played):
                body = next(junk)
                if door.refuses(body):
                    controller.send_body(body)
                    sent += 1
            door.takes(burst)
            controller.step(burst)
        status = controller.ask("status").values
        assert status["refused"] == door.refused
        assert (status["bursts"], status["lost"]) == (40, 0)
        assert controller.ask("stop").ok
        assert nursery.wait(service) == 0
        found.append((estimate(controller), published(controller.heard.pattern)))
        if spoilt:
            assert sum(door.refused.values()) == SPOILT
            assert len(door.refused) >= len(Reason) - 4, "the mutations reach most of the reasons"
        controller.close()
    assert found[0][1] == found[1][1]
    assert len(found[0][1]) > 10
    assert same(found[0][0], found[1][0])


def test_the_last_seq_that_there_is_ends_nothing(make_controller: Callable[..., Controller], nursery: Nursery) -> None:
    """Stray bursts far ahead make more losses than 64 bits count: bursts are taken on, and the estimate is kept."""
    controller = make_controller(link="clock_skew_s = 600.0")
    service = nursery.start("serve", controller.path)
    controller.meet()
    played = bursts(6)
    last = 2**64 - 1
    for number, burst in enumerate(played):
        seq = last if number % 2 else 0
        state = controller.step(replace(burst, run=number // 2, seq=seq))
    assert state.bursts == len(played)
    assert state.lost == last, "the largest number that the format has"
    assert controller.ask("status").values["lost"] == last
    assert controller.ask("stop").ok
    assert nursery.wait(service) == 0
    _, start = msgpack.unpackb((controller.journal / "yard.checkpoint").read_bytes())
    snapshot = unpack_start(start).snapshot
    assert snapshot is not None
    assert 3 * (last - 1) in snapshot["counts"]


def test_a_listener_that_does_not_read_stalls_nobody(
    make_controller: Callable[..., Controller], nursery: Nursery
) -> None:
    """Its messages are dropped once its queue is full; everyone else hears all states, and the service ends in time."""
    controller = make_controller(refresh="every_bursts = 100000")
    service = nursery.start("serve", controller.path)
    controller.meet()
    deaf = controller.context.socket(zmq.SUB)
    deaf.setsockopt(zmq.RCVHWM, 1)
    deaf.setsockopt(zmq.RCVBUF, 4096)
    deaf.setsockopt(zmq.SUBSCRIBE, b"")
    deaf.connect(controller.settings.sockets.publish)
    assert deaf.poll(1) == 0
    count = 6000
    for number, burst in enumerate(bursts(count, frames=1)):
        controller.send(burst)
        if number >= 100:
            controller.listen(lambda heard, number=number: len(heard.state) > number - 100)  # type: ignore[misc]
    heard = controller.listen(lambda heard: len(heard.state) == count)
    assert [state.seq for state in heard.state] == list(range(count))
    assert controller.ask("stop").ok
    assert nursery.wait(service) == 0
    got = 0
    while deaf.poll(100):
        deaf.recv_multipart()
        got += 1
    assert got < count
