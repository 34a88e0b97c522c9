"""Logs: what is committed survives a kill, what is damaged is never handed on, and other MCAP tools agree."""

import os
import random
import subprocess
import sys
import tracemalloc
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from mcap.reader import make_reader
from mcap.records import Chunk, ChunkIndex, DataEnd
from mcap.stream_reader import StreamReader
from mcap.writer import CompressionType, IndexType, Writer

from tracker.logs import LogError, LogReader, LogWriter, Record

START = 1_700_000_000_000_000_000
SETTINGS = b'[link]\nname = "yard"\n'

Entry = tuple[str, bytes, int, int]


def entries(count: int, size: int, seed: int) -> list[Entry]:
    rng = random.Random(seed)
    topics = ("pilots/yard", "pattern/yard", "state/yard")
    return [
        (topics[index % 3], rng.randbytes(rng.randint(0, size)), START + index * 1000, START + index * 1000 - 7)
        for index in range(count)
    ]


def write(path: Path, messages: list[Entry], together: int = 3) -> None:
    with LogWriter(path, attachments={"settings.toml": SETTINGS}, clock_ns=lambda: START) as log:
        for index, message in enumerate(messages, 1):
            log.add(*message)
            if index % together == 0:
                log.commit()


def plain(records: Iterator[Record] | LogReader) -> list[Entry]:
    return [(record.topic, record.body, record.log_time_ns, record.publish_time_ns) for record in records]


def flip(path: Path, bit: int) -> None:
    """Flip one bit in place (to write the whole file anew would wait for the disk each time)."""
    with path.open("r+b", buffering=0) as file:
        file.seek(bit // 8)
        byte = file.read(1)[0]
        file.seek(bit // 8)
        file.write(bytes([byte ^ 1 << bit % 8]))


def chunk_ends(path: Path) -> list[int]:
    """Where the library's own index says that the chunks end."""
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    return [index.chunk_start_offset + index.chunk_length for index in summary.chunk_indexes]


def test_a_log_gives_back_what_was_written_in_order(tmp_path: Path) -> None:
    """Topics, bodies and both times come back as they went in, and so do the attachments."""
    messages = entries(40, 300, seed=1)
    write(tmp_path / "a.mcap", messages)
    reader = LogReader(tmp_path / "a.mcap")
    assert reader.attachments == {"settings.toml": SETTINGS}
    assert plain(reader) == messages
    assert reader.damage is None
    assert plain(reader) == messages, "a log can be read twice"


def test_the_library_reads_the_log_as_its_own(tmp_path: Path) -> None:
    """The indexed reader of the mcap package finds the same messages, attachments and counts."""
    messages = entries(40, 300, seed=2)
    path = tmp_path / "a.mcap"
    write(path, messages)
    with path.open("rb") as file:
        reader = make_reader(file, validate_crcs=True)
        found = [(c.topic, m.data, m.log_time, m.publish_time) for _, c, m in reader.iter_messages()]
        encodings = {channel.message_encoding for _, channel, _ in reader.iter_messages()}
        only = [m.data for _, _, m in reader.iter_messages(topics=["state/yard"])]
        attachments = [(a.name, a.data) for a in reader.iter_attachments()]
        summary = reader.get_summary()
    assert found == messages
    assert encodings == {"msgpack"}
    assert only == [body for name, body, _, _ in messages if name == "state/yard"]
    assert attachments == [("settings.toml", SETTINGS)]
    assert summary is not None
    assert summary.statistics is not None
    assert summary.statistics.message_count == 40
    assert summary.statistics.message_start_time == messages[0][2]
    assert summary.statistics.message_end_time == messages[-1][2]
    assert sorted(summary.statistics.channel_message_counts.values()) == [13, 13, 14]


def test_a_commit_is_one_uncompressed_chunk_with_a_crc(tmp_path: Path) -> None:
    """The stream reader of the mcap package sees a chunk a commit, and its CRC check accepts them all."""
    path = tmp_path / "a.mcap"
    write(path, entries(12, 100, seed=3), together=4)
    with path.open("rb") as file:
        records = list(StreamReader(file, emit_chunks=True, validate_crcs=True).records)
    chunks = [record for record in records if isinstance(record, Chunk)]
    assert len(chunks) == 3
    assert all(chunk.compression == "" and chunk.uncompressed_crc != 0 for chunk in chunks)
    assert sum(isinstance(record, ChunkIndex) for record in records) == 3
    assert sum(isinstance(record, DataEnd) for record in records) == 1


@pytest.mark.parametrize("chunked", [True, False], ids=["chunked", "unchunked"])
@pytest.mark.parametrize("compression", [CompressionType.NONE, CompressionType.LZ4, CompressionType.ZSTD])
@pytest.mark.parametrize("index", [IndexType.ALL, IndexType.NONE])
def test_logs_by_the_library_are_read(
    tmp_path: Path, chunked: bool, compression: CompressionType, index: IndexType
) -> None:
    """Logs by the mcap package's writer are read, chunked or not, compressed or not, with index or without."""
    messages = entries(50, 300, seed=4)
    path = tmp_path / "a.mcap"
    with path.open("wb") as file:
        writer = Writer(
            file,
            chunk_size=2000,
            compression=compression,
            use_chunking=chunked,
            index_types=index,
            use_statistics=index == IndexType.ALL,
            enable_data_crcs=True,
        )
        library_log(writer, messages)
        writer.finish()  # type: ignore[no-untyped-call]
    reader = LogReader(path)
    assert plain(reader) == messages
    assert reader.damage is None
    assert reader.attachments == {"settings.toml": SETTINGS}, "it lies at the end of this log"


def library_log(writer: Writer, messages: list[Entry]) -> None:
    writer.start()
    schema = writer.register_schema("anything", "jsonschema", b"{}")
    ids: dict[str, int] = {}
    for name, body, log_time, publish_time in messages:
        if name not in ids:
            ids[name] = writer.register_channel(name, "msgpack", schema, {"made": "by the library"})
        writer.add_message(ids[name], log_time, body, publish_time)
    writer.add_metadata("place", {"yard": "north"})
    writer.add_attachment(0, 0, "settings.toml", "application/toml", SETTINGS)


@pytest.mark.parametrize("chunked", [True, False], ids=["chunked", "unchunked"])
def test_a_library_log_that_was_never_finished_is_read(tmp_path: Path, chunked: bool) -> None:
    """Without index and end mark the messages in the file are read, and the missing end is told."""
    messages = entries(50, 300, seed=5)
    path = tmp_path / "a.mcap"
    with path.open("wb") as file:
        library_log(Writer(file, chunk_size=200, compression=CompressionType.NONE, use_chunking=chunked), messages)
    reader = LogReader(path)
    found = plain(reader)
    assert found == messages[: len(found)]
    assert len(found) >= 48
    assert reader.damage is not None
    assert "no end mark" in reader.damage


@pytest.mark.parametrize("compression", [None, CompressionType.NONE, CompressionType.LZ4, CompressionType.ZSTD])
def test_flipped_bits_in_logs_by_the_library_are_told(tmp_path: Path, compression: CompressionType | None) -> None:
    """Chunked logs give no damaged record; unchunked ones (None) tell of it afterwards, by the CRC of the whole."""
    messages = entries(12, 100, seed=15)
    path = tmp_path / "a.mcap"
    with path.open("wb") as file:
        writer = Writer(
            file,
            chunk_size=300,
            compression=compression or CompressionType.NONE,
            use_chunking=compression is not None,
            enable_data_crcs=True,
        )
        library_log(writer, messages)
        writer.finish()  # type: ignore[no-untyped-call]
    for bit in random.Random(15).sample(range(8 * path.stat().st_size), 2000):
        flip(path, bit)
        reader = LogReader(path)
        found = plain(reader)
        flip(path, bit)
        assert reader.damage or found == messages, f"bit {bit}"
        if compression is not None:
            assert found == messages[: len(found)], f"bit {bit}"


def test_a_cut_anywhere_leaves_every_whole_chunk(tmp_path: Path) -> None:
    """Cut at every byte: all messages of the chunks that are whole come, no others, and the cut is told."""
    messages = entries(9, 60, seed=6)
    path = tmp_path / "a.mcap"
    write(path, messages)
    ends = chunk_ends(path)
    for size in range(path.stat().st_size - 1, 0, -1):
        os.truncate(path, size)
        reader = LogReader(path)
        whole = 3 * sum(end <= size for end in ends)
        assert plain(reader) == messages[:whole], f"cut to {size} bytes"
        assert reader.damage is not None
        assert "\n" not in reader.damage


def test_a_flipped_bit_anywhere_never_gives_a_damaged_record(tmp_path: Path) -> None:
    """Flip every bit of a log, one at a time: what comes are the first records, unchanged; what is lost is told."""
    messages = entries(6, 40, seed=7)
    path = tmp_path / "a.mcap"
    write(path, messages)
    ends = chunk_ends(path)
    for bit in range(8 * path.stat().st_size):
        flip(path, bit)
        reader = LogReader(path)
        found = plain(reader)
        attachments = reader.attachments
        flip(path, bit)
        assert found == messages[: len(found)], f"bit {bit}"
        assert len(found) >= 3 * sum(end <= bit // 8 for end in ends), f"bit {bit}"
        assert len(found) == len(messages) or reader.damage, f"bit {bit}: loss not told"
        if attachments != {"settings.toml": SETTINGS}:
            assert attachments == {}, f"bit {bit}: damaged attachment"
            assert reader.damage, f"bit {bit}: lost attachment not told"


@pytest.mark.parametrize("seed", range(100))
def test_random_damage_to_a_long_log(tmp_path: Path, seed: int) -> None:
    """One cut and one flip at random in a log of bursts: every record before comes, none comes damaged."""
    rng = random.Random(seed)
    messages = entries(60, 4000, seed=8)
    path = tmp_path / "a.mcap"
    write(path, messages)
    ends, size = chunk_ends(path), path.stat().st_size
    bit = rng.randrange(8 * size)
    flip(path, bit)
    size = rng.randrange(1, size)
    os.truncate(path, size)
    found = plain(LogReader(path))
    assert found == messages[: len(found)]
    assert len(found) >= 3 * sum(end <= min(bit // 8, size) for end in ends)


def test_a_tail_of_zeros_is_damage(tmp_path: Path) -> None:
    """Zeros, as a file system may leave them after a power cut, are told and not taken for records."""
    messages = entries(9, 60, seed=9)
    path = tmp_path / "a.mcap"
    write(path, messages)
    ends, data = chunk_ends(path), path.read_bytes()
    path.write_bytes(data[: ends[1]] + bytes(5000))
    reader = LogReader(path)
    assert plain(reader) == messages[:6]
    assert reader.damage is not None
    assert f"byte {ends[1]} of" in reader.damage


@pytest.mark.parametrize("offset", [4, 8], ids=["gigabytes", "exabytes"])
def test_an_absurd_length_costs_no_memory(tmp_path: Path, offset: int) -> None:
    """A damaged length is held against the size of the file before anything of that length is made."""
    messages = entries(9, 60, seed=10)
    path = tmp_path / "a.mcap"
    write(path, messages)
    data = bytearray(path.read_bytes())
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    data[summary.chunk_indexes[1].chunk_start_offset + offset] ^= 0x40
    path.write_bytes(data)
    tracemalloc.start()
    found = plain(LogReader(path))
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert found == messages[:3]
    assert peak < 1_000_000


def test_a_damaged_attachment_costs_no_record(tmp_path: Path) -> None:
    """An attachment that does not match its CRC is left out and told; all records are read."""
    messages = entries(9, 60, seed=11)
    path = tmp_path / "a.mcap"
    write(path, messages)
    data = bytearray(path.read_bytes())
    data[data.index(SETTINGS) + 3] ^= 2
    path.write_bytes(data)
    reader = LogReader(path)
    assert reader.attachments == {}
    assert plain(reader) == messages
    assert reader.damage is not None
    assert "attachment" in reader.damage


KILLED = """
import random, sys
from pathlib import Path
from tracker.logs import LogWriter

log = LogWriter(Path(sys.argv[1]), clock_ns=lambda: 0)
rng = random.Random(int(sys.argv[2]))
for seq in range(10_000):
    log.add("pilots/yard", rng.randbytes(66_000), seq, seq)
    log.add("state/yard", rng.randbytes(300), seq, seq)
    log.commit()
    sys.stdout.write(".")
    sys.stdout.flush()
"""


@pytest.mark.parametrize("seed", range(5))
def test_a_kill_right_after_a_commit_loses_nothing(tmp_path: Path, seed: int) -> None:
    """A writer killed without warning leaves every message whose commit had returned."""
    path = tmp_path / "a.mcap"
    with subprocess.Popen([sys.executable, "-c", KILLED, str(path), str(seed)], stdout=subprocess.PIPE) as child:
        assert child.stdout is not None
        told = len(child.stdout.read(3 + 2 * seed))
        child.kill()
        told += len(child.stdout.read())
    rng = random.Random(seed)
    wanted = [("pilots/yard", rng.randbytes(66_000), 0, 0), ("state/yard", rng.randbytes(300), 0, 0)]
    for seq in range(1, told):
        wanted += [("pilots/yard", rng.randbytes(66_000), seq, seq), ("state/yard", rng.randbytes(300), seq, seq)]
    reader = LogReader(path)
    assert plain(reader)[: 2 * told] == wanted
    assert reader.damage is not None


FULL = """
import resource, signal, sys
from pathlib import Path
from tracker.logs import LogWriter

signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
hard = resource.getrlimit(resource.RLIMIT_FSIZE)[1]
resource.setrlimit(resource.RLIMIT_FSIZE, (10_000, hard))
log = LogWriter(Path(sys.argv[1]), clock_ns=lambda: 0)
for seq in range(20):
    if seq == 15:
        resource.setrlimit(resource.RLIMIT_FSIZE, (hard, hard))
    log.add(f"pilots/link-{seq}", bytes([seq]) * 1000, seq, seq)
    try:
        log.commit()
    except OSError as error:
        print(seq, type(error).__name__)
log.close()
"""


def test_a_full_disk_costs_only_what_did_not_fit(tmp_path: Path) -> None:
    """A commit that fails half-way is undone; the log goes on when there is room again, and is whole."""
    path = tmp_path / "a.mcap"
    done = subprocess.run(
        [sys.executable, "-c", FULL, str(path)], stdout=subprocess.PIPE, check=True, timeout=60, text=True
    )
    failed = [int(line.split()[0]) for line in done.stdout.splitlines()]
    assert failed
    assert failed == list(range(failed[0], 15))
    reader = LogReader(path)
    found = [record.log_time_ns for record in reader]
    assert found == [seq for seq in range(20) if seq not in failed]
    assert reader.damage is None
    with path.open("rb") as file:
        assert [m.log_time for _, _, m in make_reader(file, validate_crcs=True).iter_messages()] == found


def test_messages_come_with_the_commit_even_while_the_log_is_written(tmp_path: Path) -> None:
    """A second program sees the committed messages of an open log, and that the log is still open."""
    path = tmp_path / "a.mcap"
    with LogWriter(path, clock_ns=lambda: START) as log:
        log.add("pilots/yard", b"1", 1, 1)
        assert plain(LogReader(path)) == []
        before = log.bytes_written
        log.commit()
        assert log.bytes_written == path.stat().st_size > before
        log.commit()
        assert log.bytes_written == path.stat().st_size, "a commit of nothing writes nothing"
        log.add("pilots/yard", b"2", 2, 2)
        reader = LogReader(path)
        assert plain(reader) == [("pilots/yard", b"1", 1, 1)]
        assert reader.damage is not None
        assert "has not closed it yet" in reader.damage
    assert [body for _, body, _, _ in plain(LogReader(path))] == [b"1", b"2"], "closing commits"
    log.close()


def test_reading_tells_how_far_it_is(tmp_path: Path) -> None:
    """The bytes read grow from message to message and end at the size of the file, for a progress bar."""
    path = tmp_path / "a.mcap"
    write(path, entries(30, 500, seed=12))
    reader = LogReader(path)
    assert reader.size == path.stat().st_size
    places = [(record.position, reader.tell()) for record in reader]
    assert places == sorted(places)
    assert all(start < told for start, told in places)
    assert reader.tell() == reader.size


def test_times_before_the_epoch_are_written_as_zero(tmp_path: Path) -> None:
    """A controller whose clock stands before 1970 does not stop the journal."""
    path = tmp_path / "a.mcap"
    with LogWriter(path, clock_ns=lambda: 0) as log:
        log.add("pilots/yard", b"x", 5, -(2**63))
    assert plain(LogReader(path)) == [("pilots/yard", b"x", 5, 0)]


@pytest.mark.parametrize(
    ("content", "words"),
    [(None, "there is no such file"), (b"", "is empty"), (b"[link]\nname = 'yard'\n", "not a log")],
    ids=["missing", "empty", "text"],
)
def test_what_is_no_log_is_one_line(tmp_path: Path, content: bytes | None, words: str) -> None:
    """A missing, empty or foreign file is the user's mistake: one line that names the file and says what is wrong."""
    path = tmp_path / "a.mcap"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(LogError, match=words) as caught:
        LogReader(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_folder_is_no_log(tmp_path: Path) -> None:
    """A folder given for a log is told in one line."""
    with pytest.raises(LogError, match="cannot be read"):
        LogReader(tmp_path)


def test_a_log_is_never_overwritten(tmp_path: Path) -> None:
    """Writing to a file that exists, or into a folder that does not, is refused in one line."""
    path = tmp_path / "a.mcap"
    write(path, entries(3, 10, seed=13))
    before = path.read_bytes()
    with pytest.raises(LogError, match="exists already"):
        LogWriter(path, clock_ns=lambda: 0)
    assert path.read_bytes() == before
    with pytest.raises(LogError, match="cannot be made"):
        LogWriter(tmp_path / "nowhere" / "a.mcap", clock_ns=lambda: 0)


def test_foreign_records_are_stepped_over(tmp_path: Path) -> None:
    """Records of application types (opcodes from 0x80, MCAP specification) do not stop the reading."""
    path = tmp_path / "a.mcap"
    messages = entries(6, 50, seed=14)
    write(path, messages)
    data, end = path.read_bytes(), chunk_ends(path)[0]
    with path.open("rb") as file:
        summary: Any = make_reader(file).get_summary()
    end += summary.chunk_indexes[0].message_index_length
    path.write_bytes(data[:end] + b"\x90" + (5).to_bytes(8, "little") + b"hello" + data[end:])
    assert plain(LogReader(path)) == messages
