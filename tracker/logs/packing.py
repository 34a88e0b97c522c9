"""The four records of which a log holds thousands, packed at once; the two that are read also unpacked.

The others are left to the library.

Layouts are those of the MCAP specification, section "Records": opcode, length of the content, content, little-endian.
"""

import struct
from collections.abc import Mapping, Sequence

from mcap.opcode import Opcode

_MESSAGE = struct.Struct("<BQHIQQ")
_CHUNK = struct.Struct("<BQQQQIIQ")
_MESSAGE_INDEX = struct.Struct("<BQHI")
_CHUNK_INDEX = struct.Struct("<BQQQQQI")
_OFFSET = struct.Struct("<HQ")
_CHUNK_INDEX_END = struct.Struct("<QIQQ")
_HEAD = 9  # opcode and length, not counted in the length
# The same without opcode and length, which the reader has taken off.
_MESSAGE_CONTENT = struct.Struct("<HIQQ")
_CHUNK_CONTENT = struct.Struct("<QQQII")
_LENGTH = struct.Struct("<Q")


def message_head(channel: int, log_time: int, publish_time: int, size: int) -> bytes:
    """Pack a message up to its body of `size` bytes; the sequence number is not used and 0."""
    return _MESSAGE.pack(Opcode.MESSAGE, _MESSAGE.size - _HEAD + size, channel, 0, log_time, publish_time)


def chunk_head(first_time: int, last_time: int, crc: int, size: int) -> bytes:
    """Pack an uncompressed chunk up to its `size` bytes of records."""
    return _CHUNK.pack(Opcode.CHUNK, _CHUNK.size - _HEAD + size, first_time, last_time, size, crc, 0, size)


def message_index(channel: int, entries: Sequence[int]) -> bytes:
    """Pack the index of one channel's messages in a chunk: log time and place in the chunk, in turn."""
    size = 8 * len(entries)
    head = _MESSAGE_INDEX.pack(Opcode.MESSAGE_INDEX, _MESSAGE_INDEX.size - _HEAD + size, channel, size)
    return head + struct.pack(f"<{len(entries)}Q", *entries)


def chunk_index(
    first_time: int, last_time: int, start: int, length: int, offsets: Mapping[int, int], index_length: int, size: int
) -> bytes:
    """Pack what the log's index says of a chunk.

    Parameters
    ----------
    first_time, last_time : int
        Of its messages.
    start, length : int
        Where its record begins in the file, and how long it is.
    offsets : mapping of int to int
        Where the message index of each channel begins in the file.
    index_length : int
        Length of these indexes together.
    size : int
        Length of the records in the chunk.
    """
    listed = b"".join(_OFFSET.pack(channel, offset) for channel, offset in offsets.items())
    whole = _CHUNK_INDEX.size + len(listed) + _CHUNK_INDEX_END.size
    return (
        _CHUNK_INDEX.pack(Opcode.CHUNK_INDEX, whole - _HEAD, first_time, last_time, start, length, len(listed))
        + listed
        + _CHUNK_INDEX_END.pack(index_length, 0, size, size)
    )


def unpack_message(content: bytes | memoryview) -> tuple[int, int, int, bytes]:
    """Unpack a message: channel, log time, publish time, body.

    Raises
    ------
    struct.error
        When it is too short to be one.
    """
    channel, _, log_time, publish_time = _MESSAGE_CONTENT.unpack_from(content)
    return channel, log_time, publish_time, bytes(content[_MESSAGE_CONTENT.size :])


def unpack_plain_chunk(content: bytes | memoryview) -> tuple[int, int, memoryview] | None:
    """Unpack a chunk: size and CRC as it tells them, and its records; None when it is compressed.

    Raises
    ------
    struct.error
        When its lengths contradict each other.
    """
    _, _, size, crc, compression = _CHUNK_CONTENT.unpack_from(content)
    if compression:
        return None
    at = _CHUNK_CONTENT.size + _LENGTH.size
    (length,) = _LENGTH.unpack_from(content, _CHUNK_CONTENT.size)
    if length != len(content) - at:
        raise struct.error
    return size, crc, memoryview(content)[at:]
