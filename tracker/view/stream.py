"""What a service publishes, from its socket into a `LinkModel`."""

import time
from types import TracebackType

import zmq

from tracker.engine.refusal import Refused
from tracker.messages import decode_alarm, decode_pattern, decode_plan, decode_state, topic
from tracker.messages.fields import UINT64, read_nested
from tracker.view.model import LinkModel, Truth

KINDS = ("pattern", "state", "alarm", "plan", "truth")
# A view that falls behind loses messages rather than memory; a minute at the fastest pace is a few thousand.
MOST_QUEUED = 10_000


class Stream:
    """A subscription to one link; use as a context manager.

    Parameters
    ----------
    endpoints : str
        Where to connect to; more than one when a stand-in testbed publishes beside the service.
    link : str

    Raises
    ------
    ValueError
        When an endpoint or the link's name cannot be used.
    """

    def __init__(self, *endpoints: str, link: str) -> None:
        topics = [topic(kind, link) for kind in KINDS]
        self.endpoints = endpoints
        self.model = LinkModel(link)
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.SUB)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.setsockopt(zmq.RCVHWM, MOST_QUEUED)
        try:
            for name in topics:
                self._socket.subscribe(name)
            for endpoint in endpoints:
                self._socket.connect(endpoint)
        except zmq.ZMQError as error:
            self.close()
            raise ValueError(f"{', '.join(endpoints)}: cannot connect: {error.strerror}") from None
        # A subscription is a prefix: `state/yard` also brings `state/yard-2`.
        self._wanted = dict(zip(topics, KINDS, strict=True))

    def receive(self, seconds: float) -> int:
        """Take in what arrives within `seconds`; gives back how many messages were taken."""
        until = time.monotonic() + seconds
        taken = 0
        while (left := until - time.monotonic()) > 0:
            if not self._socket.poll(max(1, int(left * 1e3))):
                continue
            parts = self._socket.recv_multipart()
            if len(parts) == 2 and (kind := self._wanted.get(parts[0])):
                take(self.model, kind, parts[1], time.monotonic())
                taken += 1
        return taken

    def close(self) -> None:
        """Let go of the socket."""
        self._socket.close()
        self._context.term()

    def __enter__(self) -> "Stream":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def take(model: LinkModel, kind: str, body: bytes, now: float) -> None:
    """Decode one message and take it into a model; one that cannot be read is counted there.

    Parameters
    ----------
    model : LinkModel
    kind : str
        One of `KINDS`.
    body : bytes
    now : float
        Seconds of a steady clock.
    """
    try:
        if kind == "state":
            model.take_state(decode_state(body), now)
        elif kind == "pattern":
            model.take_pattern(decode_pattern(body), now)
        elif kind == "alarm":
            model.take_alarm(decode_alarm(body), now)
        elif kind == "plan":
            model.take_plan(decode_plan(body), now)
        else:
            model.take_truth(decode_truth(body), now)
    except Refused as refused:
        model.take_unreadable(str(refused), now)


def decode_truth(body: bytes) -> Truth:
    """Decode what a stand-in testbed knows about its channel.

    Raises
    ------
    Refused
    """
    fields = read_nested("truth", body)
    return Truth(
        pattern=fields.optional_integer("pattern", 0, UINT64),
        rate=fields.number("rate"),
        best=fields.number("best"),
        event=None if fields.values.get("event") is None else fields.text("event"),
        net=fields.optional_number("net"),
    )
