"""What hangs on the clock of the machine, journaled so that a replay can take it from there.

Two records stand in a log between the bursts, under topics of their own that are never sent to anyone:

* ``decision/LINK`` after each block: which bursts were taken together, and how many optimizer steps there was time for;
* ``command/LINK`` where an operator's verb changed the engine.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import msgpack
import numpy as np

from tracker.engine import panel
from tracker.engine.tracker import Tracker
from tracker.messages import VERSION, Reason, Refused, Verb

DECISION = "decision"
COMMAND = "command"


@dataclass(frozen=True, slots=True)
class Decision:
    """How a block was worked off.

    Parameters
    ----------
    bursts : tuple of (int, int)
        run and seq of each burst of the block, in order.
    steps : int
        Optimizer steps taken.
    """

    bursts: tuple[tuple[int, int], ...]
    steps: int


@dataclass(frozen=True, slots=True)
class Command:
    """A verb that changed the engine.

    Parameters
    ----------
    verb : str
    bits : bytes
        Packed pattern, for ``adopt``; else empty.
    """

    verb: str
    bits: bytes = b""


def encode_decision(bursts: Sequence[tuple[int, int]], steps: int) -> bytes:
    """Encode a decision."""
    return bytes(msgpack.packb({"v": VERSION, "bursts": [list(burst) for burst in bursts], "steps": steps}))


def decode_decision(body: bytes) -> Decision:
    """Decode a decision.

    Raises
    ------
    Refused
    """
    fields = _fields(body)
    bursts, steps = fields.get("bursts"), fields.get("steps")
    if type(steps) is not int or type(bursts) is not list or not all(map(_is_burst, bursts)):
        raise Refused(Reason.WRONG_TYPE, "decision record: bursts must be a list of [run, seq], steps an integer")
    if not bursts or steps < 0:
        raise Refused(Reason.OUT_OF_RANGE, "decision record: of no burst, or less than no step")
    return Decision(tuple((run, seq) for run, seq in bursts), steps)


def _is_burst(value: Any) -> bool:
    return type(value) is list and len(value) == 2 and all(type(number) is int for number in value)


def encode_command(command: Command) -> bytes:
    """Encode a command."""
    return bytes(msgpack.packb({"v": VERSION, "verb": command.verb, "bits": command.bits}))


def decode_command(body: bytes) -> Command:
    """Decode a command.

    Raises
    ------
    Refused
    """
    fields = _fields(body)
    verb, bits = fields.get("verb"), fields.get("bits")
    if type(verb) is not str or type(bits) is not bytes:
        raise Refused(Reason.WRONG_TYPE, "command record: verb must be a string, bits binary")
    return Command(verb, bits)


def _fields(body: bytes) -> dict[str, Any]:
    try:
        fields = msgpack.unpackb(body)
    except Exception as error:  # noqa: BLE001 - the bytes come from a file and may hold anything at all
        raise Refused(Reason.NOT_MSGPACK, f"journal record: {type(error).__name__}") from None
    if not isinstance(fields, dict) or fields.get("v") != VERSION:
        raise Refused(Reason.VERSION, "journal record is not of a version that is read here")
    return fields


def carry_out(command: Command, tracker: Tracker, elements: int) -> None:
    """Apply a command to the engine.

    Raises
    ------
    Refused
        For a verb that changes no engine.
    """
    if command.verb == Verb.ADOPT:
        tracker.adopt(panel.unpack(np.frombuffer(command.bits, dtype=np.uint8), elements).astype(np.int8))
        return
    plain = {
        Verb.HOLD: tracker.hold,
        Verb.RESUME: tracker.resume,
        Verb.REFRESH: tracker.refresh,
        Verb.RELEARN: tracker.relearn,
    }
    for verb, action in plain.items():
        if command.verb == verb:
            action()
            return
    raise Refused(Reason.OUT_OF_RANGE, f"command record: {command.verb!r} is no verb that changes the tracker")
