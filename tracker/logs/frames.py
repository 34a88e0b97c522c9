"""The records of a log as they lie in the file, each with its place, and what is damaged about them.

Record heads carry no CRC, so each length is held against the size of the file before anything is read, and the
order of the records against the MCAP specification: that shows a damaged head even where no CRC does.
"""

import struct
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from io import BytesIO
from typing import BinaryIO, TypeVar

from mcap.data_stream import ReadDataStream
from mcap.exceptions import EndOfFile
from mcap.opcode import Opcode
from mcap.records import Chunk
from mcap.stream_reader import get_chunk_data_stream
from mcap.writer import MCAP0_MAGIC

from tracker.logs.packing import unpack_plain_chunk

MOST_RECORD = 256 * 1024 * 1024  # bytes of one record, and of one chunk unpacked
PRIVATE = 0x80  # from here on opcodes belong to applications, and readers step over them
HEAD = struct.Struct("<BQ")

DATA = frozenset({Opcode.SCHEMA, Opcode.CHANNEL, Opcode.MESSAGE, Opcode.CHUNK, Opcode.MESSAGE_INDEX}) | {
    Opcode.ATTACHMENT,
    Opcode.METADATA,
}
SUMMARY = frozenset({Opcode.SCHEMA, Opcode.CHANNEL, Opcode.STATISTICS, Opcode.CHUNK_INDEX}) | {
    Opcode.ATTACHMENT_INDEX,
    Opcode.METADATA_INDEX,
    Opcode.SUMMARY_OFFSET,
}

_T = TypeVar("_T")


class Damaged(Exception):
    """Reading cannot go on; the message is one line that says where and why."""


@dataclass(frozen=True, slots=True)
class Frame:
    """A record not yet parsed.

    Parameters
    ----------
    opcode : int
    content : bytes or memoryview
        Empty when it was stepped over.
    start, end : int
        Bytes of the file between which it lies; those of the chunk for a record inside one.
    size : int
        Bytes of the file.
    """

    opcode: int
    content: bytes | memoryview
    start: int
    end: int
    size: int

    @property
    def name(self) -> str:
        """What kind of record it is, in words."""
        return _name(self.opcode)

    def damaged(self, why: str) -> Damaged:
        """Make the error that says where and why."""
        return Damaged(f"byte {self.start} of {self.size}: {why}")

    def parse(self, read: Callable[[ReadDataStream], _T]) -> _T:
        """Parse the content by a record class of the library; any failure is damage."""
        try:
            return read(_Exact(self.content))
        except (EndOfFile, ValueError, struct.error, OverflowError, MemoryError):
            raise self.damaged(f"the {self.name} record is damaged") from None


class _Exact(ReadDataStream):
    """A stream that never returns less than was asked for, as the library's does at the end."""

    def __init__(self, data: bytes | memoryview) -> None:
        super().__init__(BytesIO(data))

    def read(self, length: int) -> bytes:
        data = super().read(length)
        if len(data) != length:
            raise EndOfFile
        return data


def frames(file: BinaryIO, size: int, wanted: frozenset[int]) -> Iterator[Frame]:
    """Yield the records of the data section, the one that ends it included.

    Parameters
    ----------
    file : binary file
        At its beginning.
    size : int
        Bytes in it.
    wanted : frozenset of int
        Opcodes whose content is read; the others are stepped over.

    Raises
    ------
    Damaged
    """
    if file.read(len(MCAP0_MAGIC)) != MCAP0_MAGIC:
        raise Damaged(f"byte 0 of {size}: the first bytes are damaged or cut off")
    at = len(MCAP0_MAGIC)
    if at < size:
        frame = next_frame(file, size, at, wanted)
        if frame.opcode != Opcode.HEADER:
            raise frame.damaged(f"a log begins with a header, here is a record of type {frame.name}")
        at = frame.end
    while at < size:
        frame = next_frame(file, size, at, wanted)
        if frame.opcode not in DATA and frame.opcode != Opcode.DATA_END and frame.opcode < PRIVATE:
            raise frame.damaged(f"a record of type {frame.name} cannot stand here, its head must be damaged")
        yield frame
        if frame.opcode == Opcode.DATA_END:
            return
        at = frame.end


def next_frame(file: BinaryIO, size: int, at: int, wanted: frozenset[int]) -> Frame:
    """Read the record at byte `at`, where the file stands, and leave the file at its end.

    Raises
    ------
    Damaged
        When it is not whole.
    """
    head = file.read(HEAD.size)
    if len(head) < HEAD.size:
        raise Damaged(f"byte {at} of {size}: cut off in the head of a record")
    opcode, length = HEAD.unpack(head)
    end = at + HEAD.size + length
    if end > size:
        left = size - at - HEAD.size
        raise Damaged(f"byte {at} of {size}: cut off or damaged: {_name(opcode)} of {length} bytes, {left} are left")
    if opcode not in wanted:
        file.seek(end)
        return Frame(opcode, b"", at, end, size)
    if length > MOST_RECORD:
        raise Damaged(f"byte {at} of {size}: {_name(opcode)} of {length} bytes, at most {MOST_RECORD} are read")
    content = file.read(length)
    if len(content) < length:
        raise Damaged(f"byte {at} of {size}: the file became shorter while it was read")
    return Frame(opcode, content, at, end, size)


def unpack_chunk(frame: Frame) -> Iterator[Frame]:
    """Unpack a chunk, check its CRC, and yield the records in it.

    Raises
    ------
    Damaged
        Before any record, when the CRC does not match.
    """
    data, told = _records_of(frame)
    length = len(data)
    if length != told:
        raise frame.damaged(f"the chunk holds {length} bytes, its head says {told}")
    at = 0
    while at < length:
        opcode, size = HEAD.unpack_from(data, at) if length - at >= HEAD.size else (0, length)
        end = at + HEAD.size + size
        if end > length:
            raise frame.damaged(f"the chunk is damaged at its byte {at}")
        yield Frame(opcode, data[at + HEAD.size : end], frame.start, frame.end, frame.size)
        at = end


def _records_of(frame: Frame) -> tuple[bytes | memoryview, int]:
    """Give the records in a chunk, checked against its CRC, and their size as its head tells it."""
    try:
        plain = unpack_plain_chunk(frame.content)
    except struct.error:
        raise frame.damaged("the chunk record is damaged") from None
    if plain is not None:
        told, crc, data = plain
        if crc and crc != zlib.crc32(data):  # 0 stands for none
            raise frame.damaged("the chunk is damaged: its records do not match their CRC")
        return data, told
    chunk = frame.parse(Chunk.read)
    told = chunk.uncompressed_size
    if told > MOST_RECORD:
        raise frame.damaged(f"the chunk says that it unpacks to {told} bytes, at most {MOST_RECORD} are read")
    try:
        stream, length = get_chunk_data_stream(chunk, validate_crc=True)
        return stream.read(length), told
    except Exception as error:  # noqa: BLE001 - the decompressors raise errors of their own kinds on damaged data
        raise frame.damaged(f"the chunk is damaged: {' '.join(str(error).split())}") from None


def _name(opcode: int) -> str:
    try:
        return Opcode(opcode).name.lower().replace("_", " ")
    except ValueError:
        return f"unknown (0x{opcode:02x})"
