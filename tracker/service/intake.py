"""The way in: what waits at the socket is received, decoded and admitted, up to one block's worth.

What is waiting when a block is done is taken together as the next, larger block: a larger block costs less a frame,
so falling behind is what catches up again. Nothing is dropped here; what the queue in front of the socket cannot hold
shows as a gap in `seq`.
"""

import time
from collections import deque
from dataclasses import dataclass
from typing import cast

import zmq

from tracker.engine.burst import Burst
from tracker.engine.tracker import Tracker
from tracker.messages import Reason, Refused, Shape, decode_pilots

from .notices import Notices
from .refusals import Refusals

# Frames of a block after which no further burst is added; and messages, so that a flood of messages that are refused
# cannot keep the good ones waiting.
MOST_TOGETHER = 1024


@dataclass(frozen=True, slots=True, eq=False)
class Arrival:
    """A burst that was let in.

    Parameters
    ----------
    burst : Burst
    body : bytes
        As it came over the wire.
    wall_ns, monotonic_ns : int
        When it was received, on both clocks, ns.
    """

    burst: Burst
    body: bytes
    wall_ns: int
    monotonic_ns: int


class Intake:
    """Takes bursts of one link from the socket.

    Parameters
    ----------
    socket : zmq.Socket
        Subscribed to the link.
    link : str
    shape : Shape
        Sizes that every burst must have.
    tracker : Tracker
        Admits bursts, and counts those that are refused.
    refusals : Refusals
    notices : Notices
        Told of overload and of clocks that cannot be right.
    """

    def __init__(
        self,
        socket: "zmq.Socket[bytes]",
        link: str,
        shape: Shape,
        tracker: Tracker,
        refusals: Refusals,
        notices: Notices,
    ) -> None:
        self._socket, self._link, self._shape = socket, link, shape
        self._tracker, self._refusals, self._notices = tracker, refusals, notices
        self._topic = f"pilots/{link}".encode()
        self._last: deque[tuple[list[bytes], int, int]] | None = None

    def take(self) -> list[Arrival]:
        """Take what is waiting, up to one block's worth; empty when nothing that can be used was waiting."""
        arrivals: list[Arrival] = []
        frames = 0
        for _ in range(MOST_TOGETHER):
            received = self._receive()
            if received is None:
                break
            arrival = self._admit(*received)
            if arrival is None:
                continue
            arrivals.append(arrival)
            frames += arrival.burst.frames
            if frames >= MOST_TOGETHER:
                break
        self._notices.load(full=frames >= MOST_TOGETHER and self.waiting)
        return arrivals

    @property
    def waiting(self) -> bool:
        """Whether something is waiting to be taken."""
        if self._last is not None:
            return bool(self._last)
        # Asking costs a tenth of the exception that receiving from an empty socket raises.
        return bool(cast(int, self._socket.getsockopt(zmq.EVENTS)) & zmq.POLLIN)

    def close(self, most: int) -> None:
        """Receive what has arrived by now, at most so many messages, for `take` to give out; nothing comes in later."""
        last: deque[tuple[list[bytes], int, int]] = deque()
        while len(last) < most and (received := self._receive()) is not None:
            last.append(received)
        self._last = last

    def _receive(self) -> tuple[list[bytes], int, int] | None:
        if self._last is not None:
            return self._last.popleft() if self._last else None
        if not self.waiting:
            return None
        parts = self._socket.recv_multipart(zmq.NOBLOCK)
        return parts, time.time_ns(), time.monotonic_ns()

    def _admit(self, parts: list[bytes], wall_ns: int, monotonic_ns: int) -> Arrival | None:
        if parts[0] != self._topic:
            return None  # another link whose name begins like ours
        try:
            if len(parts) != 2:
                raise Refused(Reason.NOT_MSGPACK, f"a message has two parts, topic and body, and this one {len(parts)}")
            burst = decode_pilots(parts[1], self._link, self._shape)
            self._tracker.admit(burst, wall_ns)
        except Refused as refused:
            self._tracker.refuse(refused.reason)
            self._refusals.take(refused)
            if refused.reason in (Reason.FAR_FUTURE, Reason.FAR_PAST):
                self._notices.clock(refused.detail)
            return None
        return Arrival(burst, parts[1], wall_ns, monotonic_ns)
