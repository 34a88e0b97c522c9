"""Writes a log: one uncompressed chunk with a CRC a commit, handed to the operating system before it returns.

Chunks are what carries a CRC in MCAP; a library writer closes them by size, but here the burst decides, so the
file is put together from the library's records (MCAP specification, section "Records").
"""

import zlib
from collections.abc import Callable, Mapping
from contextlib import suppress
from pathlib import Path
from types import MappingProxyType, TracebackType
from typing import Self

from mcap.data_stream import RecordBuilder
from mcap.opcode import Opcode
from mcap.records import (
    Attachment,
    AttachmentIndex,
    Channel,
    DataEnd,
    Footer,
    Header,
    McapRecord,
    Statistics,
    SummaryOffset,
)
from mcap.writer import MCAP0_MAGIC

from tracker.logs.errors import LogError
from tracker.logs.packing import chunk_head, chunk_index, message_head, message_index

LIBRARY = "ris-tracker"
MOST_TIME = 2**64 - 1


class LogWriter:
    """A new log.

    Parameters
    ----------
    path : Path
        Must not exist.
    attachments : mapping of str to bytes
        Files that lie in the log, `settings.toml` for one.
    clock_ns : callable
        Returns the time in ns since the Unix epoch.

    Raises
    ------
    LogError
        When the file exists or cannot be made.
    """

    def __init__(
        self,
        path: Path,
        *,
        attachments: Mapping[str, bytes] = MappingProxyType({}),
        clock_ns: Callable[[], int],
    ) -> None:
        self.path = path
        try:
            self._file = path.open("xb", buffering=0)
        except FileExistsError:
            raise LogError(f"{path}: exists already, a log is never overwritten; choose another name") from None
        except OSError as error:
            raise LogError(f"{path}: cannot be made: {error.strerror}") from None
        self._written = 0
        self._channels: dict[str, Channel] = {}
        self._undeclared: list[str] = []  # channels whose record lies in the chunk not yet committed
        self._messages: dict[int, int] = {}
        self._chunk: list[bytes] = []
        self._chunk_size = 0
        self._index: dict[int, list[int]] = {}
        self._span = _Span()
        self._total = _Span()
        self._chunks = 0
        self._chunk_indexes = bytearray()
        self._attachment_indexes = RecordBuilder()
        self._attachments = len(attachments)
        try:
            self._write(MCAP0_MAGIC + _encoded(Header(profile="", library=LIBRARY)))
            for name, data in attachments.items():
                self._attach(name, data, clock_ns())
        except OSError as error:
            self._file.close()
            with suppress(OSError):
                path.unlink()  # a file without its beginning is no log, and only stands in the way
            raise LogError(f"{path}: cannot be written: {error.strerror}") from None

    @property
    def bytes_written(self) -> int:
        """Bytes of the file that the operating system has."""
        return self._written

    def fileno(self) -> int:
        """Return the file descriptor, for a sync to the disk from another thread."""
        return self._file.fileno()

    def add(self, topic: str, body: bytes, log_time_ns: int, publish_time_ns: int) -> None:
        """Buffer a message for the next commit.

        Parameters
        ----------
        topic : str
            `KIND/LINK`.
        body : bytes
            As it went over the wire.
        log_time_ns, publish_time_ns : int
            Arrival or sending, and the time that the message speaks of, ns since the Unix epoch; times before
            it are written as 0, the format has none.
        """
        channel = self._channels.get(topic)
        if channel is None:
            channel = Channel(len(self._channels) + 1, topic, "msgpack", {}, 0)
            self._channels[topic] = channel
            self._undeclared.append(topic)
            self._put(_encoded(channel))
        log_time = min(max(log_time_ns, 0), MOST_TIME)
        publish_time = min(max(publish_time_ns, 0), MOST_TIME)
        self._index.setdefault(channel.id, []).extend((log_time, self._chunk_size))
        self._span.include(log_time, log_time)
        self._put(message_head(channel.id, log_time, publish_time, len(body)))
        self._put(body)

    def commit(self) -> None:
        """Write all buffered messages as one chunk; once it returns, killing the process loses nothing.

        Raises
        ------
        OSError
            The disk is full or gone. The messages of this chunk are lost, the log before stays whole and later
            commits may succeed.
        """
        if not self._index:
            return
        chunk, size = self._chunk, self._chunk_size
        span, index, declared = self._span, self._index, self._undeclared
        self._chunk, self._chunk_size = [], 0
        self._span, self._index, self._undeclared = _Span(), {}, []
        crc = 0
        for part in chunk:
            crc = zlib.crc32(part, crc)
        head = chunk_head(span.first, span.last, crc, size)
        start, length = self._written, len(head) + size
        indexes, offsets, end = [], {}, start + length
        for channel, entries in index.items():
            offsets[channel] = end
            indexes.append(message_index(channel, entries))
            end += len(indexes[-1])
        try:
            self._write(b"".join((head, *chunk, *indexes)))
        except OSError:
            for topic in declared:
                del self._channels[topic]
            raise
        for channel, entries in index.items():
            self._messages[channel] = self._messages.get(channel, 0) + len(entries) // 2
        self._total.include(span.first, span.last)
        self._chunks += 1
        index_length = end - start - length
        self._chunk_indexes += chunk_index(span.first, span.last, start, length, offsets, index_length, size)

    def close(self) -> None:
        """Commit what is buffered, write the index and the end mark, close the file; a second call does nothing.

        Raises
        ------
        OSError
            The disk is full or gone; the file is closed, and every committed message is whole.
        """
        if self._file.closed:
            return
        try:
            self.commit()
            self._write(_encoded(DataEnd(0)))
            self._write(self._summary())
        finally:
            self._file.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _put(self, data: bytes) -> None:
        self._chunk.append(data)
        self._chunk_size += len(data)

    def _attach(self, name: str, data: bytes, now: int) -> None:
        media = "application/toml" if name.endswith(".toml") else "application/octet-stream"
        encoded = _encoded(Attachment(now, now, name, media, data))
        AttachmentIndex(self._written, len(encoded), now, now, len(data), name, media).write(self._attachment_indexes)
        self._write(encoded)

    def _summary(self) -> bytes:
        """Encode the summary section, the footer and the end mark."""
        channels, statistics = RecordBuilder(), RecordBuilder()
        for channel in self._channels.values():
            channel.write(channels)
        Statistics(
            attachment_count=self._attachments,
            channel_count=len(self._channels),
            channel_message_counts=self._messages,
            chunk_count=self._chunks,
            message_count=sum(self._messages.values()),
            message_end_time=self._total.last,
            message_start_time=self._total.first,
            metadata_count=0,
            schema_count=0,
        ).write(statistics)
        start = self._written
        summary, offsets = RecordBuilder(), RecordBuilder()
        for opcode, group in (
            (Opcode.CHANNEL, _taken(channels)),
            (Opcode.STATISTICS, _taken(statistics)),
            (Opcode.CHUNK_INDEX, self._chunk_indexes),
            (Opcode.ATTACHMENT_INDEX, _taken(self._attachment_indexes)),
        ):
            if group:
                SummaryOffset(opcode, start + summary.count, len(group)).write(offsets)
                summary.write(group)
        offsets_start = start + summary.count
        body = _taken(summary) + _taken(offsets)
        footer = _encoded(Footer(start, offsets_start, 0))[:-4]  # its CRC covers the section and the footer so far
        return body + footer + zlib.crc32(footer, zlib.crc32(body)).to_bytes(4, "little") + MCAP0_MAGIC

    def _write(self, data: bytes) -> None:
        """Write all of `data`, or leave the file as it was."""
        rest = memoryview(data)
        try:
            while rest:
                rest = rest[self._file.write(rest) :]
        except OSError:
            self._file.truncate(self._written)
            self._file.seek(self._written)
            raise
        self._written += len(data)


class _Span:
    """The first and the last of the times included; 0 while there is none."""

    __slots__ = ("first", "last")

    def __init__(self) -> None:
        self.first = 0
        self.last = 0

    def include(self, first: int, last: int) -> None:
        self.first = min(self.first or first, first)
        self.last = max(self.last, last)


def _encoded(record: McapRecord) -> bytes:
    builder = RecordBuilder()
    record.write(builder)
    return _taken(builder)


def _taken(builder: RecordBuilder) -> bytes:
    """Take what was built, and leave the builder empty."""
    data: bytes = builder.end()  # type: ignore[no-untyped-call]
    return data
