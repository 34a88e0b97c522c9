"""The map of a message, read key by key with exact types and hard limits."""

from collections.abc import Mapping
from enum import StrEnum
from typing import Any, TypeVar

import msgpack
import numpy as np
from numpy.typing import NDArray

from tracker.engine.refusal import Reason, Refused
from tracker.messages.topics import is_link, short

VERSION = 1
MOST_BODY = 64 * 1024 * 1024  # bytes; a socket may refuse larger messages before they reach a decoder
MOST_NESTED = 1024 * 1024  # bytes; containers within the map grow up to 64-fold when unpacked
MOST_KEYS = 256  # of one map
MOST_ITEMS = 65536  # of one list
MOST_ELEMENTS = 16384
MOST_RECEIVERS = 64
UINT64 = 2**64 - 1
INT64 = 2**63 - 1

Member = TypeVar("Member", bound=StrEnum)
Body = bytes | bytearray | memoryview


class Fields:
    """The map of one message; each getter checks one key and raises `Refused` when it is not as it must be.

    Parameters
    ----------
    kind : str
        What the message is, for the error.
    values : mapping
        The map as unpacked.
    """

    __slots__ = ("kind", "values")

    def __init__(self, kind: str, values: Mapping[str, Any]) -> None:
        self.kind = kind
        self.values = values

    def refuse(self, reason: Reason, text: str) -> Refused:
        """Make the error that says `text` about this message."""
        return Refused(reason, f"{self.kind}: {text}")

    def __getitem__(self, key: str) -> Any:
        try:
            return self.values[key]
        except KeyError:
            raise self.refuse(Reason.MISSING_KEY, f"`{key}` is missing, the sender must give it") from None

    def wrong_type(self, key: str, wanted: str) -> Refused:
        """Make the error for a value of another type than `wanted`."""
        value = self.values.get(key)
        return self.refuse(Reason.WRONG_TYPE, f"`{key}` is {short(value)} ({type(value).__name__}), must be {wanted}")

    def integer(self, key: str, least: int, most: int) -> int:
        """Return an integer from `least` to `most`; a bool is none."""
        value = self[key]
        if type(value) is not int:
            raise self.wrong_type(key, "an integer")
        if not least <= value <= most:
            raise self.refuse(Reason.OUT_OF_RANGE, f"`{key}` is {value}, must be {least} to {most}")
        return value

    def optional_integer(self, key: str, least: int, most: int) -> int | None:
        """Return an integer from `least` to `most`, or None when it is missing or nil."""
        return None if self.values.get(key) is None else self.integer(key, least, most)

    def number(self, key: str) -> float:
        """Return a float; senders that write whole floats as integers are understood."""
        value = self[key]
        if type(value) not in (int, float):
            raise self.wrong_type(key, "a number")
        return float(value)

    def optional_number(self, key: str) -> float | None:
        """Return a float, or None when it is missing or nil."""
        return None if self.values.get(key) is None else self.number(key)

    def numbers(self, key: str, most: int) -> tuple[float, ...]:
        """Return a list of at most `most` floats."""
        value = self.items(key, most)
        if any(type(item) not in (int, float) for item in value):
            raise self.wrong_type(key, "a list of numbers")
        return tuple(float(item) for item in value)

    def items(self, key: str, most: int) -> list[Any]:
        """Return a list of at most `most` values, not looked at."""
        value = self[key]
        if type(value) is not list:
            raise self.wrong_type(key, "a list")
        if len(value) > most:
            raise self.refuse(Reason.OUT_OF_RANGE, f"`{key}` has {len(value)} items, at most {most} are taken")
        return value

    def text(self, key: str, most: int = 4096) -> str:
        """Return a string of at most `most` characters."""
        value = self[key]
        if type(value) is not str:
            raise self.wrong_type(key, "a string")
        if len(value) > most:
            raise self.refuse(Reason.OUT_OF_RANGE, f"`{key}` has {len(value)} characters, at most {most} are taken")
        return value

    def binary(self, key: str) -> bytes:
        """Return bytes."""
        value = self[key]
        if type(value) is not bytes:
            raise self.wrong_type(key, "binary")
        return value

    def truth(self, key: str) -> bool:
        """Return a bool."""
        value = self[key]
        if type(value) is not bool:
            raise self.wrong_type(key, "true or false")
        return value

    def member(self, key: str, kind: type[Member]) -> Member:
        """Return the member of an enumeration that the string names."""
        value = self.text(key, 64)
        if value not in tuple(kind):
            raise self.refuse(Reason.OUT_OF_RANGE, f"`{key}` is {value!r}, must be one of {', '.join(kind)}")
        return kind(value)

    def packed(self, key: str, frames: int, elements: int) -> NDArray[np.uint8]:
        """Return packed patterns, shape (frames, ceil(elements/8)); padding bits are cleared."""
        data = self.binary(key)
        stride = (elements + 7) // 8
        self.check_size(key, data, frames * stride, f"{frames} patterns of {elements} elements")
        patterns = np.frombuffer(data, np.uint8).reshape(frames, stride)
        padding = np.uint8(0xFF << elements % 8 & 0xFF if elements % 8 else 0)
        if padding and (patterns[:, -1] & padding).any():
            patterns = patterns.copy()
            patterns[:, -1] &= ~padding
        return patterns

    def check_size(self, key: str, data: bytes, wanted: int, what: str) -> None:
        """Refuse binaries of another size than the counts multiply out to."""
        if len(data) != wanted:
            raise self.refuse(Reason.SIZES, f"`{key}` has {len(data)} bytes, {what} make {wanted}")

    def head(self) -> dict[str, int]:
        """Return `run`, `seq` and `t_ns`, after a look at the version."""
        self.check_version()
        return {
            "run": self.integer("run", 0, UINT64),
            "seq": self.integer("seq", 0, UINT64),
            "t_ns": self.integer("t_ns", -INT64 - 1, INT64),
        }

    def check_version(self) -> None:
        """Refuse every version but 1."""
        version = self["v"]
        if type(version) is not int:
            raise self.wrong_type("v", f"the integer {VERSION}")
        if version != VERSION:
            raise self.refuse(Reason.VERSION, f"version {version} of the format, only {VERSION} is spoken here")

    def check_link(self, link: str | None = None) -> str:
        """Return the link, which must be `link` when that is given."""
        found = self.text("link")
        if link is not None and found != link:
            raise self.refuse(Reason.LINK, f"`link` is {short(found)} but the topic says {link!r}; check the sender")
        if not is_link(found):
            raise self.refuse(Reason.LINK, f"`link` is {short(found)}, must be 1 to 32 of a-z, 0-9 and -")
        return found


def encode(link: str, event: Any, **values: Any) -> bytes:
    """Encode a message about an event that has `run`, `seq` and `t_ns`."""
    head = {"v": VERSION, "link": link, "run": int(event.run), "seq": int(event.seq), "t_ns": int(event.t_ns)}
    return pack(head | values)


def pack(values: Mapping[str, Any]) -> bytes:
    """Pack a map; a count that has grown beyond what the format holds is sent as the largest that it does."""
    body: bytes = msgpack.packb(values, default=_largest)
    return body


def _largest(value: Any) -> int:
    if type(value) is not int:
        raise TypeError(f"a message holds plain values, not {type(value).__name__}")
    return UINT64


def read_flat(kind: str, body: Body, known: frozenset[str]) -> Fields:
    """Unpack a map of scalars, strings and binaries.

    Values of unknown keys are stepped over, and no list or map is ever built, so that a hostile body cannot
    make the decoder allocate more than its own size.

    Parameters
    ----------
    kind : str
        What the message is, for the error.
    body : bytes-like
    known : frozenset of str
        Keys that are unpacked.

    Raises
    ------
    Refused
        `TOO_LARGE`, `NOT_MSGPACK`, `NOT_A_MAP`, or `WRONG_TYPE` for a list, map or extension under a known key.
    """
    size = _size(kind, body, MOST_BODY)
    values: dict[str, Any] = {}
    if not size:
        raise Refused(Reason.NOT_MSGPACK, f"{kind}: the body is empty")
    unpacker = msgpack.Unpacker(read_size=size, max_buffer_size=size, max_array_len=0, max_map_len=0)
    unpacker.feed(body)
    try:
        count = _map_length(kind, body, unpacker)
        for _ in range(count):
            at = unpacker.tell()
            if not _is_string(body[at : at + 1]):
                raise Refused(Reason.NOT_A_MAP, f"{kind}: the key at byte {at} is not a string")
            key = unpacker.unpack()
            if key not in known:
                unpacker.skip()
                continue
            at = unpacker.tell()
            if _is_compound(body[at : at + 1]):
                raise Refused(Reason.WRONG_TYPE, f"{kind}: `{key}` is a list, map or extension, must be a plain value")
            values[key] = unpacker.unpack()
    except (ValueError, msgpack.UnpackException) as error:
        raise _broken(kind, error) from None
    if unpacker.tell() != size:
        raise Refused(Reason.NOT_MSGPACK, f"{kind}: {size - unpacker.tell()} bytes follow the map")
    return Fields(kind, values)


def read_nested(kind: str, body: Body) -> Fields:
    """Unpack a map that may hold lists and maps, of at most `MOST_NESTED` bytes.

    Raises
    ------
    Refused
        `TOO_LARGE`, `NOT_MSGPACK` or `NOT_A_MAP`.
    """
    _size(kind, body, MOST_NESTED)
    try:
        values = msgpack.unpackb(body, max_map_len=MOST_KEYS, max_array_len=MOST_ITEMS)
    except (ValueError, msgpack.UnpackException) as error:
        raise _broken(kind, error) from None
    if type(values) is not dict or any(type(key) is not str for key in values):
        raise Refused(Reason.NOT_A_MAP, f"{kind}: the body is not a map with string keys")
    return Fields(kind, values)


def _size(kind: str, body: Body, most: int) -> int:
    size = body.nbytes if isinstance(body, memoryview) else len(body)
    if size > most:
        raise Refused(Reason.TOO_LARGE, f"{kind}: {size} bytes, at most {most} are taken; send smaller bursts")
    return size


def _map_length(kind: str, body: Body, unpacker: Any) -> int:
    head = body[0]
    if not (0x80 <= head <= 0x8F or head in (0xDE, 0xDF)):
        raise Refused(Reason.NOT_A_MAP, f"{kind}: the body is not a map (its first byte is 0x{head:02x})")
    count: int = unpacker.read_map_header()
    if count > MOST_KEYS:
        raise Refused(Reason.TOO_LARGE, f"{kind}: a map of {count} keys, at most {MOST_KEYS} are taken")
    return count


def _is_string(head: Body) -> bool:
    return not head or 0xA0 <= head[0] <= 0xBF or 0xD9 <= head[0] <= 0xDB


def _is_compound(head: Body) -> bool:
    """Tell lists, maps and extensions by their first byte (MessagePack specification, table of formats)."""
    return bool(head) and (
        0x80 <= head[0] <= 0x9F or 0xDC <= head[0] <= 0xDF or 0xC7 <= head[0] <= 0xC9 or 0xD4 <= head[0] <= 0xD8
    )


def _broken(kind: str, error: Exception) -> Refused:
    nested = isinstance(error, msgpack.StackError)
    why = "nested too deep" if nested else " ".join(str(error).split()) or type(error).__name__
    return Refused(Reason.NOT_MSGPACK, f"{kind}: not one whole MessagePack map: {why}")
