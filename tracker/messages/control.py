"""Control, REQ → REP: what an operator's tools ask of the tracker, and its answers."""

from dataclasses import dataclass
from enum import StrEnum
from typing import Any

import msgpack

from tracker.engine.refusal import Reason
from tracker.messages.fields import VERSION, Body, pack, read_nested


class Verb(StrEnum):
    """What can be asked of the tracker."""

    STATUS = "status"
    HOLD = "hold"
    RESUME = "resume"
    REFRESH = "refresh"
    RELEARN = "relearn"
    ADOPT = "adopt"
    SETTINGS = "settings"
    STOP = "stop"


@dataclass(frozen=True, slots=True)
class Request:
    """A verb and its arguments; the arguments are checked by whoever carries it out."""

    verb: Verb
    args: dict[str, Any]


@dataclass(frozen=True, slots=True)
class Reply:
    """The answer: whether it was done, why not when it was not, and what was asked for."""

    ok: bool
    error: str | None
    values: dict[str, Any]


def encode_request(verb: str, **args: Any) -> bytes:
    """Encode a request."""
    body: bytes = msgpack.packb({**args, "v": VERSION, "do": str(Verb(verb))})
    return body


def decode_request(body: Body) -> Request:
    """Decode a request.

    Raises
    ------
    Refused
        `OUT_OF_RANGE` for an unknown verb, else as the map demands.
    """
    fields = read_nested("request", body)
    fields.check_version()
    verb = fields.text("do", 64)
    if verb not in tuple(Verb):
        raise fields.refuse(Reason.OUT_OF_RANGE, f"`do` is {verb!r}, must be one of {', '.join(Verb)}")
    return Request(Verb(verb), {key: value for key, value in fields.values.items() if key not in ("v", "do")})


def encode_reply(error: str | None = None, **values: Any) -> bytes:
    """Encode an answer; with an `error` it says that nothing was done."""
    result = {**values, "v": VERSION, "ok": error is None}
    if error is not None:
        result["error"] = error
    return pack(result)


def decode_reply(body: Body) -> Reply:
    """Decode an answer.

    Raises
    ------
    Refused
        When it is not one.
    """
    fields = read_nested("reply", body)
    fields.check_version()
    ok = fields.truth("ok")
    error = None if ok else fields.text("error", 65536)
    return Reply(ok, error, {key: value for key, value in fields.values.items() if key not in ("v", "ok", "error")})
