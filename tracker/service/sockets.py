"""The three sockets of a link: bursts in, patterns out, control."""

from types import TracebackType

import zmq

from tracker.messages import MOST_BODY
from tracker.settings import Settings

from .errors import ServiceError

# Frames taken for a typical burst when the receive queue is sized in messages.
TYPICAL_FRAMES = 64
# Time that closing waits for what is still in the send queue, ms.
LINGER_MS = 500


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
            self.pilots = self.context.socket(zmq.SUB)
            self.pilots.setsockopt(zmq.RCVHWM, receive_queue(settings))
            self.pilots.setsockopt(zmq.MAXMSGSIZE, MOST_BODY)
            self.pilots.setsockopt(zmq.SUBSCRIBE, f"pilots/{settings.link.name}".encode())
            self._use(self.pilots.connect, "sockets.pilots", settings.sockets.pilots)
            self.publish = self.context.socket(zmq.PUB)
            self._use(self.publish.bind, "sockets.publish", settings.sockets.publish)
            self.control = self.context.socket(zmq.REP)
            self.control.setsockopt(zmq.MAXMSGSIZE, 1 << 20)
            self._use(self.control.bind, "sockets.control", settings.sockets.control)
        except ServiceError:
            self.close()
            raise

    @staticmethod
    def _use(action: "object", key: str, endpoint: str) -> None:
        try:
            action(endpoint)  # type: ignore[operator]
        except zmq.ZMQError as error:
            hint = "is another tracker running there?" if error.errno == zmq.EADDRINUSE else "check the endpoint"
            raise ServiceError(f"{key}: {endpoint} cannot be used: {error.strerror}; {hint}") from None

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
    return max(1000, int(settings.sockets.queue_mb * 1e6 / burst_bytes))
