"""Reads a log front to back as far as it is whole: with or without chunks, index and end mark, cut anywhere."""

import os
import struct
import zlib
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from mcap.opcode import Opcode
from mcap.records import Attachment, Channel, DataEnd, Footer, Statistics
from mcap.writer import MCAP0_MAGIC

from tracker.logs.errors import LogError
from tracker.logs.frames import DATA, HEAD, PRIVATE, SUMMARY, Damaged, Frame, frames, next_frame, unpack_chunk
from tracker.logs.packing import unpack_message

_READ = DATA - {Opcode.SCHEMA, Opcode.METADATA} | {Opcode.DATA_END}
_INDEX = struct.Struct("<HI")
_BLOCK = 1024 * 1024


@dataclass(frozen=True, slots=True)
class Record:
    """One message as it went over the wire.

    Parameters
    ----------
    topic : str
    body : bytes
    log_time_ns, publish_time_ns : int
        Arrival or sending, and the time that the message speaks of, ns since the Unix epoch.
    position : int
        Byte of the file at which the record, or the chunk it lies in, begins.
    """

    topic: str
    body: bytes
    log_time_ns: int
    publish_time_ns: int
    position: int


class LogReader:
    """A log, read in the order of the file.

    Parameters
    ----------
    path : Path

    Raises
    ------
    LogError
        When there is no such file, it is empty, or it is no MCAP file.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        try:
            with path.open("rb") as file:
                self._size = os.fstat(file.fileno()).st_size
                head = file.read(len(MCAP0_MAGIC))
        except FileNotFoundError:
            raise LogError(f"{path}: there is no such file") from None
        except OSError as error:
            raise LogError(f"{path}: cannot be read: {error.strerror}") from None
        if not head:
            raise LogError(f"{path}: the file is empty, a log was expected")
        wrong = sum(a != b for a, b in zip(head, MCAP0_MAGIC, strict=False))
        if wrong > 1:  # one wrong byte may be damage, which is told like any other
            raise LogError(f"{path}: not a log: MCAP files begin with other bytes")
        self._position = 0
        self._damage: str | None = None
        self._attachments: dict[str, bytes] | None = None

    @property
    def size(self) -> int:
        """Bytes in the file when it was last opened."""
        return self._size

    def tell(self) -> int:
        """Return the bytes read so far by the iteration."""
        return self._position

    @property
    def damage(self) -> str | None:
        """Where and why reading stopped short, in one line; None for a whole log, or before it is read."""
        return self._damage

    @property
    def attachments(self) -> dict[str, bytes]:
        """The whole attachments by name, wherever in the log they lie."""
        if self._attachments is None:
            self._attachments = self._find_attachments(before=())
        return self._attachments

    @property
    def first_attachments(self) -> dict[str, bytes]:
        """The whole attachments that come before all messages, by name: found without reading on."""
        return self._find_attachments(before=(Opcode.CHUNK, Opcode.MESSAGE))

    def _find_attachments(self, before: tuple[Opcode, ...]) -> dict[str, bytes]:
        """Look for attachments up to the first record of certain kinds; damage is told when the records are read."""
        found = {}
        with suppress(Damaged, OSError), self._open() as file:
            for frame in frames(file, self._size, frozenset((Opcode.ATTACHMENT,))):
                if frame.opcode in before:
                    break
                if frame.opcode == Opcode.ATTACHMENT and (attachment := _attachment(frame)):
                    found[attachment.name] = attachment.data
        return found

    def __iter__(self) -> Iterator[Record]:
        self._position, self._damage = 0, None
        noted: list[str] = []
        try:
            with self._open() as file:
                yield from self._records(file, noted)
        except Damaged as error:
            noted.append(str(error))
        except OSError as error:
            noted.append(f"byte {self._position} of {self._size}: cannot be read: {error.strerror}")
        self._damage = "; ".join(noted) or None

    def _open(self) -> BinaryIO:
        file = self.path.open("rb")
        self._size = os.fstat(file.fileno()).st_size
        return file

    def _records(self, file: BinaryIO, noted: list[str]) -> Iterator[Record]:
        channels: dict[int, str] = {}
        messages = attachments = 0
        before = 0
        for frame in frames(file, self._size, _READ):
            self._position = frame.end
            if frame.opcode == Opcode.CHUNK:
                for inner in unpack_chunk(frame):
                    if record := _record(inner, channels):
                        messages += 1
                        yield record
            elif frame.opcode in (Opcode.MESSAGE, Opcode.CHANNEL):
                if frame.opcode == Opcode.MESSAGE and before in (Opcode.CHUNK, Opcode.MESSAGE_INDEX):
                    raise frame.damaged("a message outside of the chunks, the head of a record must be damaged")
                if record := _record(frame, channels):
                    messages += 1
                    yield record
            elif frame.opcode == Opcode.MESSAGE_INDEX:
                _check_index(frame, before)
            elif frame.opcode == Opcode.ATTACHMENT:
                attachments += 1
                if _attachment(frame) is None:
                    noted.append(str(frame.damaged("the attachment does not match its CRC, it was left out")))
            elif frame.opcode == Opcode.DATA_END:
                _check_end(file, frame, messages, attachments, noted)
                self._position = self._size
                return
            before = frame.opcode
        raise Damaged(
            f"byte {self._size} of {self._size}: the log has no end mark: it was cut off, or its writer was killed or "
            "has not closed it yet; every record up to here is whole"
        )


def _record(frame: Frame, channels: dict[int, str]) -> Record | None:
    """Turn a message into a `Record`; note the channel that a channel record declares; leave others."""
    if frame.opcode == Opcode.CHANNEL:
        channel = frame.parse(Channel.read)
        if channels.setdefault(channel.id, channel.topic) != channel.topic:
            raise frame.damaged(f"channel {channel.id} is declared with two topics")
        return None
    if frame.opcode != Opcode.MESSAGE:
        return None
    try:
        channel_id, log_time, publish_time, body = unpack_message(frame.content)
    except struct.error:
        raise frame.damaged("the message record is damaged") from None
    topic = channels.get(channel_id)
    if topic is None:
        raise frame.damaged(f"a message on channel {channel_id}, which was not declared")
    return Record(topic, body, log_time, publish_time, frame.start)


def _check_index(frame: Frame, before: int) -> None:
    """Check that an index of messages is one, and follows a chunk: else it is a chunk whose head is damaged."""
    room = len(frame.content) - _INDEX.size
    if room < 0 or _INDEX.unpack_from(frame.content)[1] != room:
        raise frame.damaged("the message index record is damaged")
    if before not in (Opcode.CHUNK, Opcode.MESSAGE_INDEX):
        raise frame.damaged("an index of messages with no chunk before it, whose head must be damaged")


def _attachment(frame: Frame) -> Attachment | None:
    """Parse an attachment; None when it does not match its CRC (0 stands for none)."""
    attachment = frame.parse(Attachment.read)
    crc = int.from_bytes(frame.content[-4:], "little")
    return attachment if crc in (0, zlib.crc32(frame.content[:-4])) else None


def _check_end(file: BinaryIO, end: Frame, messages: int, attachments: int, noted: list[str]) -> None:
    """Check what follows the messages: index, footer and end mark; nothing in it loses a message."""
    size = end.size
    data_crc = end.parse(DataEnd.read).data_section_crc
    frame = end
    while frame.opcode != Opcode.FOOTER:
        if frame.end >= size:
            raise Damaged(f"byte {size} of {size}: cut off in the index; every message is whole")
        frame = next_frame(file, size, frame.end, frozenset((Opcode.STATISTICS, Opcode.FOOTER)))
        if frame.opcode not in SUMMARY and frame.opcode != Opcode.FOOTER and frame.opcode < PRIVATE:
            raise frame.damaged(f"a record of type {frame.name} in the index, whose head must be damaged")
        if frame.opcode == Opcode.STATISTICS:
            told = frame.parse(Statistics.read)
            if told.message_count != messages or told.attachment_count != attachments:
                noted.append(
                    f"byte {frame.start} of {size}: the index tells of {told.message_count} messages and "
                    f"{told.attachment_count} attachments, {messages} and {attachments} were found"
                )
    footer = frame.parse(Footer.read)
    if file.read(len(MCAP0_MAGIC) + 1) != MCAP0_MAGIC:
        raise Damaged(f"byte {frame.end} of {size}: the end mark is damaged or cut off; every message is whole")
    covered = frame.start + HEAD.size + 16  # both offsets of the footer, its CRC follows
    if footer.summary_crc and footer.summary_crc != _crc(file, end.end, covered):
        noted.append(f"byte {end.end} of {size}: the index does not match its CRC; every message is whole")
    if data_crc and data_crc != _crc(file, 0, end.start):
        noted.append(f"byte {end.start} of {size}: the log does not match its CRC: a message may be damaged")


def _crc(file: BinaryIO, start: int, end: int) -> int:
    file.seek(start)
    crc = 0
    while start < end:
        block = file.read(min(_BLOCK, end - start))
        if not block:
            break
        crc = zlib.crc32(block, crc)
        start += len(block)
    return crc
