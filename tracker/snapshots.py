"""Snapshots of an engine as bytes: MessagePack, arrays as raw memory, so that nothing is rounded."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import msgpack
import numpy as np

# Kinds of value that MessagePack has not of itself.
ARRAY, INTEGER = 1, 2
VERSION = 1
# Name under which a start lies in a log.
START = "start.msgpack"


class SnapshotError(Exception):
    """The bytes are not a snapshot of this version; the message is one line for the user."""


@dataclass(frozen=True, slots=True, eq=False)
class Start:
    """How a tracker starts: afresh, or from where another left off.

    Parameters
    ----------
    first_id : int
        Id of the first pattern that it publishes.
    snapshot : dict or None
        State to go on from; None for a fresh start.
    """

    first_id: int
    snapshot: Mapping[str, Any] | None = None


def pack_start(start: Start) -> bytes:
    """Pack a start."""
    body = {"v": VERSION, "first_id": start.first_id, "snapshot": start.snapshot}
    return bytes(msgpack.packb(body, default=_pack_other))


def unpack_start(data: bytes) -> Start:
    """Unpack a start.

    Raises
    ------
    SnapshotError
    """
    try:
        body = msgpack.unpackb(data, ext_hook=_unpack_other, strict_map_key=False)
        if body["v"] != VERSION:
            raise SnapshotError(f"the snapshot is of version {body['v']}, this program reads {VERSION}")
        return Start(int(body["first_id"]), body["snapshot"])
    except SnapshotError:
        raise
    except Exception as error:  # noqa: BLE001 - the bytes come from a file and may hold anything at all
        raise SnapshotError(f"the snapshot cannot be read ({type(error).__name__})") from None


def _pack_other(value: Any) -> msgpack.ExtType:
    if isinstance(value, int):  # a count, or the `seq` after the last that there is: beyond 64 bits
        return msgpack.ExtType(INTEGER, str(value).encode("ascii"))
    if not isinstance(value, np.ndarray):
        raise TypeError(f"a snapshot holds plain values and arrays, not {type(value).__name__}")
    order = "F" if value.flags.f_contiguous and not value.flags.c_contiguous else "C"
    head = msgpack.packb([value.dtype.str, list(value.shape), order])
    return msgpack.ExtType(ARRAY, head + value.tobytes(order="A"))


def _unpack_other(code: int, data: bytes) -> Any:
    if code == INTEGER:
        return int(data)
    if code != ARRAY:
        raise SnapshotError(f"the snapshot holds an unknown kind of value ({code})")
    unpacker = msgpack.Unpacker(max_buffer_size=0)
    unpacker.feed(data)
    dtype, shape, order = unpacker.unpack()
    # A copy: the memory of a message is read-only and may be misaligned.
    flat = np.frombuffer(data, dtype=np.dtype(dtype), offset=unpacker.tell()).copy()
    return flat.reshape(shape, order=order)
