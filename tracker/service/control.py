"""Control verbs: what an operator's program asks, and what it is answered."""

from collections.abc import Callable
from typing import Any

from tracker.decisions import Command
from tracker.messages import Reason, Refused, Request, Verb, decode_request, encode_reply

# Verbs that change the engine, and therefore stand in the journal.
CHANGING = (Verb.HOLD, Verb.RESUME, Verb.REFRESH, Verb.RELEARN, Verb.ADOPT)


class Control:
    """Answers requests.

    Parameters
    ----------
    elements : int
        N.
    change : callable
        Carries out a command that changes the engine and journals it.
    stop : callable
        Ends the service.
    status : callable
        Returns what there is to know.
    settings : str
        Text of the settings in force.
    """

    def __init__(
        self,
        elements: int,
        change: Callable[[Command], None],
        stop: Callable[[], None],
        status: Callable[[], dict[str, Any]],
        settings: str,
    ) -> None:
        self._elements, self._change, self._stop, self._status = elements, change, stop, status
        self._settings = settings

    def answer(self, parts: list[bytes]) -> bytes:
        """Carry out one request and return the reply; a bad request is answered, never fatal."""
        try:
            if len(parts) != 1:
                raise Refused(Reason.NOT_MSGPACK, f"{len(parts)} parts, a request has one: the body")
            request = decode_request(parts[0])
            return encode_reply(**self._carry_out(request))
        except Refused as refused:
            return encode_reply(error=str(refused))

    def _carry_out(self, request: Request) -> dict[str, Any]:
        if request.verb in CHANGING:
            bits = self._bits(request) if request.verb is Verb.ADOPT else b""
            self._change(Command(str(request.verb), bits))
        elif request.verb is Verb.STOP:
            self._stop()
        elif request.verb is Verb.SETTINGS:
            return {"settings": self._settings}
        return self._status()

    def _bits(self, request: Request) -> bytes:
        bits = request.args.get("bits")
        wanted = -(-self._elements // 8)
        if not isinstance(bits, bytes) or len(bits) != wanted:
            raise Refused(
                Reason.SIZES, f"adopt needs `bits`: {wanted} bytes, the packed pattern of {self._elements} elements"
            )
        return bits
