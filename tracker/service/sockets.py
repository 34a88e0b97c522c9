"""The three sockets of a link: bursts in, patterns out, control."""

from collections.abc import Callable
from types import TracebackType

import zmq

from tracker.messages import MOST_BODY
from tracker.settings import Settings

from .errors import ServiceError

# Frames taken for a typical burst when the receive queue is sized in messages.
TYPICAL_FRAMES = 64
# Messages that may always wait, however large.
LEAST_QUEUE = 64
# Bytes of a control request, at most.
MOST_REQUEST = 1 << 20
# Time that closing waits for what is still in the send queue, ms.
LINGER_MS = 500
# A controller that vanishes without a word (power, cable) is noticed after about this long, and connected to again, s.
ALIVE_IDLE_S, ALIVE_EVERY_S, ALIVE_TRIES = 10, 5, 3


class Sockets:
    """Opens the sockets that the settings name.

    Parameters
    ----------
    settings : Settings

    Raises
    ------
    ServiceError
        When an endpoint cannot be used.
    """

    def __init__(self, settings: Settings) -> None:
        self.context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        try:
            self.pilots = self._socket(zmq.SUB)
            self.pilots.setsockopt(zmq.RCVHWM, receive_queue(settings))
            self.pilots.setsockopt(zmq.MAXMSGSIZE, MOST_BODY)
            self.pilots.setsockopt(zmq.SUBSCRIBE, f"pilots/{settings.link.name}".encode())
            _use(self.pilots.connect, "sockets.pilots", settings.sockets.pilots)
            self.publish = self._socket(zmq.PUB)
            _use(self.publish.bind, "sockets.publish", settings.sockets.publish)
            self.control = self._socket(zmq.REP)
            self.control.setsockopt(zmq.MAXMSGSIZE, MOST_REQUEST)
            _use(self.control.bind, "sockets.control", settings.sockets.control)
        except ServiceError:
            self.close()
            raise

    def _socket(self, kind: int) -> "zmq.Socket[bytes]":
        socket = self.context.socket(kind)
        socket.setsockopt(zmq.TCP_KEEPALIVE, 1)
        socket.setsockopt(zmq.TCP_KEEPALIVE_IDLE, ALIVE_IDLE_S)
        socket.setsockopt(zmq.TCP_KEEPALIVE_INTVL, ALIVE_EVERY_S)
        socket.setsockopt(zmq.TCP_KEEPALIVE_CNT, ALIVE_TRIES)
        return socket

    def close(self) -> None:
        """Close all, giving what was sent a moment to leave."""
        self.context.destroy(linger=LINGER_MS)

    def __enter__(self) -> "Sockets":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def receive_queue(settings: Settings) -> int:
    """Messages that may wait to be received, from the memory allowed for them."""
    burst_bytes = 8 * settings.link.receivers * settings.tones.count * TYPICAL_FRAMES
    return max(LEAST_QUEUE, int(settings.sockets.queue_mb * 1e6 / burst_bytes))


def _use(action: Callable[[str], object], key: str, endpoint: str) -> None:
    try:
        action(endpoint)
    except zmq.ZMQError as error:
        hint = "is another tracker running there?" if error.errno == zmq.EADDRINUSE else "check the endpoint"
        raise ServiceError(f"{key}: {endpoint} cannot be used: {error.strerror}; {hint}") from None
