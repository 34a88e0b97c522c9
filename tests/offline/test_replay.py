"""Replay: a journal gives its patterns again bit by bit, and after any damage as far as it is whole."""

import itertools
import json
import random
from dataclasses import replace
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
from mcap.reader import make_reader

from tests.service.station import RESTLESS, SCENE, Controller, bursts, running, settings_text, without
from tracker.assembly import configure
from tracker.cli import entry
from tracker.engine.burst import Burst
from tracker.engine.events import Pattern
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.logs import LogError, LogReader, LogWriter
from tracker.messages import decode_pattern, decode_pilots, encode_pilots
from tracker.offline.errors import OfflineError
from tracker.offline.rerun import Replay
from tracker.settings import parse
from tracker.simulation.closed_loop import EngineInLoop, turns
from tracker.simulation.config import SceneConfig, Terminal, ToneGrid
from tracker.simulation.motion import Still
from tracker.simulation.record import record
from tracker.simulation.sounding import SoundingConfig
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.snapshots import Start, pack_start

START = 1_700_000_000_000_000_000
SETTINGS = settings_text("tcp://127.0.0.1:1", estimator=RESTLESS)


@pytest.fixture(scope="module")
def journal(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A journal of the live service with all that can happen: verbs, losses, NaN, refusals, larger blocks."""
    folder = tmp_path_factory.mktemp("link")
    controller = Controller(folder, estimator=RESTLESS)
    played = bursts(64)
    verbs: dict[int, tuple[str, dict[str, Any]]] = {
        12: ("hold", {}),
        17: ("resume", {}),
        30: ("refresh", {}),
        36: ("adopt", {"bits": b"\x0f\xaa"}),
        44: ("relearn", {}),
    }
    with running(controller) as this:
        for number, burst in enumerate(played):
            if number in verbs:
                verb, args = verbs[number]
                assert controller.ask(verb, **args).ok
            if number in (20, 21):
                continue  # lost
            if number in (25, 26, 50, 51, 52):
                controller.send(burst)  # not waited for: taken together with what follows, or not
                continue
            controller.step(without(burst, [1, 6]) if number % 7 == 0 else burst)
            controller.send(burst)  # refused as a duplicate
        controller.listen(lambda heard: len(heard.state) == len(played) - 2)
    assert this.journal.path is not None
    controller.close()
    return this.journal.path


def used_in(path: Path) -> list[Burst]:
    """Bursts in a log."""
    return [decode_pilots(each.body, "yard", None) for each in LogReader(path) if each.topic == "pilots/yard"]


def patterns_in(path: Path) -> list[Pattern]:
    """Patterns in a log."""
    return [decode_pattern(each.body).event for each in LogReader(path) if each.topic == "pattern/yard"]


def bits(patterns: list[Pattern]) -> list[tuple[object, ...]]:
    """All that a pattern says, floats to the last bit."""
    return [
        (
            *(
                pattern.id,
                pattern.run,
                pattern.seq,
                pattern.t_ns,
                pattern.states.tobytes(),
                pattern.cause,
                pattern.steps,
            ),
            *(rate.hex() for rate in (pattern.rate, pattern.rate_low, pattern.rate_before, pattern.rate_bound)),
        )
        for pattern in patterns
    ]


def replayed(*arguments: str | Path) -> dict[str, Any]:
    """Run the command quietly and give its summary."""
    out = Path(arguments[0]).parent / "summary.json"
    assert entry(["replay", *map(str, arguments), "--quiet", "--json", str(out)]) == 0
    summary: dict[str, Any] = json.loads(out.read_text())
    return summary


def test_a_journal_gives_its_patterns_again(journal: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Every pattern that the live service had published, with every number in it, to the last bit."""
    summary = replayed(journal, "--out", tmp_path / "out.mcap")
    published = patterns_in(journal)
    assert len(published) >= 8  # how many exactly hangs on how many bursts had to wait together
    assert bits(patterns_in(tmp_path / "out.mcap")) == bits(published)
    assert summary["patterns_same"] == summary["logged"]["patterns"] == len(published)
    assert (summary["patterns_only_in_log"], summary["patterns_only_in_replay"]) == (0, 0)
    assert (summary["first_difference"], summary["damage"], summary["own_settings"]) == (None, [], True)
    assert f"All {len(published)} patterns came out bit by bit as published." in capsys.readouterr().out


def test_a_replay_counts_as_the_service_did(journal: Path) -> None:
    """Bursts, frames, losses; what was refused at the door is in no journal."""
    counts = replayed(journal)["counts"]
    dropped = 2 * sum(number % 7 == 0 and number != 21 for number in range(64))
    assert counts == {
        "bursts": 62,
        "frames": 62 * 8 - dropped,
        "lost": 2,
        "duplicate": 0,
        "refused": 0,
        "dropped_frames": dropped,
    }


def test_the_summary_has_a_fixed_form(journal: Path) -> None:
    """Names and kinds of all keys: other programs read it."""
    account: dict[str, Any] = {
        "patterns": int,
        "alarms": dict,
        "rate_predicted": float,
        "rate_measured": (float, type(None)),
        "innovation": float,
        "prediction_error": (float, type(None)),
    }
    wanted: dict[str, Any] = {
        "logs": list,
        "own_settings": bool,
        "span_s": float,
        "took_s": float,
        "times_real_time": float,
        "counts": dict,
        "logged": dict,
        "replayed": dict,
        "patterns_same": int,
        "patterns_only_in_log": int,
        "patterns_only_in_replay": int,
        "first_difference": (str, type(None)),
        "damage": list,
    }
    summary = replayed(journal)
    for found, form in ((summary, wanted), (summary["logged"], account), (summary["replayed"], account)):
        assert found.keys() == form.keys()
        for key, kind in form.items():
            assert isinstance(found[key], kind), key
    assert summary["logs"] == [str(journal)]
    assert summary["times_real_time"] == pytest.approx(summary["span_s"] / summary["took_s"])
    # What the log says of itself and what the replay finds is the same, though computed from messages and from events.
    for key in ("alarms", "rate_predicted", "rate_measured", "innovation"):
        assert summary["logged"][key] == pytest.approx(summary["replayed"][key], rel=1e-12)


def test_the_same_replay_writes_the_same_file(journal: Path, tmp_path: Path) -> None:
    """Byte by byte: no clock, no chance, no place in memory goes into it."""
    outs = []
    for turn in range(2):
        outs.append(tmp_path / f"{turn}.mcap")
        replayed(journal, "--out", outs[-1])
    assert outs[0].read_bytes() == outs[1].read_bytes()


def test_other_settings_show_what_they_would_have_done(
    journal: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """All bursts are used one by one, the summary says that settings differ, and patterns are not held against."""
    settings = tmp_path / "other.toml"
    settings.write_text(SETTINGS.replace("least_gain = 0.0", "least_gain = 50.0"))
    summary = replayed(journal, "--settings", settings, "--out", tmp_path / "out.mcap")
    assert summary["own_settings"] is False
    assert summary["counts"]["bursts"] == 62
    assert (summary["replayed"]["patterns"], summary["first_difference"]) == (1, None)
    assert summary["logged"]["patterns"] == len(patterns_in(journal))
    assert "Other settings than the log's own" in capsys.readouterr().out
    attachments = LogReader(tmp_path / "out.mcap").attachments
    assert attachments["settings.toml"].decode() == settings.read_text()


def test_its_own_settings_given_again_are_its_own(journal: Path, tmp_path: Path) -> None:
    """A comment more changes nothing: the journal is followed."""
    settings = tmp_path / "same.toml"
    settings.write_text("# as recorded\n" + LogReader(journal).attachments["settings.toml"].decode())
    summary = replayed(journal, "--settings", settings)
    assert summary["own_settings"] is True
    assert summary["patterns_same"] == len(patterns_in(journal))


@pytest.fixture(scope="module")
def recorded(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A log of a testbed with the engine in its loop: no decisions, no start."""
    path = tmp_path_factory.mktemp("recorded") / "recorded.mcap"
    bed = Testbed(TestbedConfig(SCENE, SoundingConfig(kind="random"), frames=8), seed=3, start_ns=START)
    record(turns(bed, START, 2000.0, 50, EngineInLoop(parse(SETTINGS))), path, "yard", SETTINGS)
    return path


def test_a_log_without_the_services_records_gives_its_patterns_too(recorded: Path) -> None:
    """One burst a block, and as many steps as the settings allow: as whoever recorded it must have done."""
    summary = replayed(recorded)
    assert summary["patterns_same"] == summary["logged"]["patterns"] == len(patterns_in(recorded))
    assert summary["patterns_same"] > 15
    assert summary["counts"]["bursts"] == 50


def write_log(path: Path, taken: list[Burst], attachments: dict[str, bytes] | None = None, link: str = "yard") -> Path:
    """A log as a controller could write it: bursts alone."""
    with LogWriter(path, attachments=attachments or {}, clock_ns=lambda: START) as writer:
        for burst in taken:
            writer.add(f"pilots/{link}", encode_pilots(link, burst), burst.end_ns, burst.t_ns)
            writer.commit()
    return path


def test_a_log_of_bursts_alone_is_enough(recorded: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """With settings given; there is nothing to compare with, and the summary says so."""
    settings = tmp_path / "yard.toml"
    settings.write_text(SETTINGS)
    log = write_log(tmp_path / "bare.mcap", used_in(recorded))
    summary = replayed(log, "--settings", settings, "--out", tmp_path / "out.mcap")
    assert bits(patterns_in(tmp_path / "out.mcap")) == bits(patterns_in(recorded))
    assert summary["logged"]["patterns"] == 0
    assert "holds no published patterns" in capsys.readouterr().out


def test_logs_continue_one_another(recorded: Path, tmp_path: Path) -> None:
    """Cut into three between bursts, a log gives what it gives as one."""
    settings = tmp_path / "yard.toml"
    settings.write_text(SETTINGS)
    taken = used_in(recorded)
    parts = [
        write_log(tmp_path / f"{number}.mcap", taken[start:end])
        for number, (start, end) in enumerate(((0, 17), (17, 18), (18, 50)))
    ]
    summary = replayed(*parts, "--settings", settings, "--out", tmp_path / "out.mcap")
    assert bits(patterns_in(tmp_path / "out.mcap")) == bits(patterns_in(recorded))
    assert summary["counts"]["bursts"] == 50
    assert summary["counts"]["lost"] == 0


ODD = replace(
    SCENE,
    tones=ToneGrid(fft=64, first=9, count=37, spacing_hz=625e3),
    panel=replace(SCENE.panel, columns=9, rows=7),
    terminals=(*SCENE.terminals, Terminal(Still((28.0, 4.0, 2.0)))),
)
ODD_SETTINGS = (
    SETTINGS.replace("columns = 4\nrows = 4", "columns = 9\nrows = 7")
    .replace(
        "fft = 32\nfirst = 8\ncount = 16\nspacing_khz = 1250.0", "fft = 64\nfirst = 9\ncount = 37\nspacing_khz = 625.0"
    )
    .replace('name = "yard"', 'name = "yard"\nreceivers = 2')
    .replace(RESTLESS, "time_constant_ms = 20.0")
)


@pytest.mark.parametrize("follow", ["", "[follow]\nphase = true\n"], ids=["plain", "following"])
@pytest.mark.parametrize(("scene", "settings"), [(SCENE, SETTINGS), (ODD, ODD_SETTINGS)], ids=["small", "odd sizes"])
def test_place_in_memory_changes_no_bit(scene: SceneConfig, settings: str, follow: str) -> None:
    """Arrays at odd addresses, among other allocations: the same patterns and the same estimate to the last bit."""
    rng = random.Random(23)
    bed = Testbed(TestbedConfig(scene, SoundingConfig(kind="random"), frames=24), seed=3, start_ns=START)
    taken = [bed.next_burst(START + number * bed.burst_ns) for number in range(20)]
    config = configure(parse(settings + follow), Path())
    kept, found = [], []
    for turn in range(5):
        tracker, patterns = Tracker(config), []
        for burst in taken:
            kept.append(np.empty(rng.randrange(1, 4000), np.uint8))
            moved = replace(burst, response=moved_by(burst.response, turn), patterns=moved_by(burst.patterns, turn))
            tracker.admit(moved, moved.end_ns)
            patterns += [e for e in tracker.advance([moved], Steps(12)).events if isinstance(e, Pattern)]
        found.append((bits(patterns), pack_start(Start(1, tracker.snapshot()))))
    assert len(found[0][0]) > 2
    assert all(each == found[0] for each in found)


def moved_by(values: np.ndarray[Any, Any], offset: int) -> np.ndarray[Any, Any]:
    """The same array, so many bytes off its usual alignment."""
    room = np.zeros(values.nbytes + offset, np.uint8)
    moved = room[offset:].view(np.uint8)[: values.nbytes]
    moved[:] = np.frombuffer(values.tobytes(), np.uint8)
    return np.frombuffer(moved.data, values.dtype).reshape(values.shape)


def complaint(work: Replay, path: Path) -> str | None:
    """Replay a log; the one line where it cannot be, None where it can."""
    line = None
    try:
        work.run(path)
    except (LogError, OfflineError) as error:
        line = str(error)
    assert line is None or (line.startswith(str(path)) and "\n" not in line)
    return line


class Copy:
    """A copy of a log that is spoilt time and again, and what a replay of it used."""

    def __init__(self, log: Path, path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        self.path, self.data = path, log.read_bytes()
        self.used: list[tuple[int, bytes]] = []
        advance = Tracker.advance

        def noting(tracker: Tracker, taken: list[Burst], budget: Any) -> Any:
            self.used += [(burst.seq, burst.response.tobytes()) for burst in taken]
            return advance(tracker, taken, budget)

        monkeypatch.setattr(Tracker, "advance", noting)
        with log.open("rb") as file:
            summary = make_reader(file).get_summary()
        assert summary is not None
        # The library's own index says where each chunk begins and ends.
        self.chunks = [
            (chunk.chunk_start_offset, chunk.chunk_start_offset + chunk.chunk_length) for chunk in summary.chunk_indexes
        ]
        self.all = [(burst.seq, burst.response.tobytes()) for burst in used_in(log)]
        self.by_chunk = self._by_chunk(log)

    def _by_chunk(self, log: Path) -> list[int]:
        """How many bursts lie in the chunks up to each."""
        counts = dict.fromkeys((start for start, _ in self.chunks), 0)
        for each in LogReader(log):
            counts[each.position] += each.topic == "pilots/yard"
        return list(itertools.accumulate(counts.values()))

    def before(self, at: int) -> int:
        """Bursts in the chunks that end before a byte."""
        whole = sum(end <= at for _, end in self.chunks)
        return self.by_chunk[whole - 1] if whole else 0

    def replay(self, data: bytes) -> Replay | str:
        """Replay the copy; the one line where it cannot be."""
        self.path.write_bytes(data)
        self.used.clear()
        work = Replay(None, self.path.parent)
        line = complaint(work, self.path)
        return work if line is None else line


@pytest.fixture
def copy(journal: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Copy:
    return Copy(journal, tmp_path / "copy.mcap", monkeypatch)


def test_a_log_cut_anywhere_is_used_up_to_there(copy: Copy) -> None:
    """At a hundred random bytes: all whole bursts are used, no other, the same patterns, and it is told where."""
    rng = random.Random(29)
    for _ in range(100):
        at = rng.randrange(len(copy.data))
        work = copy.replay(copy.data[:at])
        if isinstance(work, str):
            assert at < copy.chunks[0][0]
            continue
        assert copy.used == copy.all[: copy.before(at)]
        assert work.comparison.first_difference is None
        assert work.comparison.unmatched == (0, 0)
        (damage,) = work.damage
        assert f"of {at}: " in damage


def test_a_log_with_a_wrong_bit_is_used_up_to_there(copy: Copy) -> None:
    """A hundred random bits flipped, one at a time: no damaged burst is used, and every whole one before is."""
    rng = random.Random(31)
    told = 0
    for _ in range(100):
        data = bytearray(copy.data)
        at = rng.randrange(len(data))
        data[at] ^= 1 << rng.randrange(8)
        work = copy.replay(bytes(data))
        if isinstance(work, str):
            assert at < copy.chunks[0][0], "the settings are damaged, or the log is none"
            continue
        assert copy.used == copy.all[: len(copy.used)]
        # All are used when the bit lies in an index, or in the times of a chunk, which nobody needs.
        assert len(copy.used) in (copy.before(at), len(copy.all))
        if len(copy.used) < len(copy.all):
            (damage,) = work.damage
            assert f"of {len(data)}: " in damage
            told += 1
    assert told > 50


def mistakes(journal: Path, folder: Path) -> dict[str, tuple[list[str | Path], str]]:
    """What a user may get wrong, the command for it, and what the line must say."""
    taken = used_in(journal)
    other, link = folder / "other.toml", folder / "link.toml"
    other.write_text(SETTINGS.replace("rows = 4", "rows = 5"))
    link.write_text(SETTINGS.replace('name = "yard"', 'name = "field"'))
    bare = write_log(folder / "bare.mcap", taken)
    empty = folder / "empty.mcap"
    empty.write_bytes(b"")
    wrong = write_log(folder / "wrong.mcap", taken[:3], {"settings.toml": b"[link]\nname = 3\n"})
    start = write_log(
        folder / "start.mcap",
        taken,
        {"settings.toml": SETTINGS.encode(), "start.msgpack": pack_start(Start(1, {"a": 1}))},
    )
    old = write_log(
        folder / "old.mcap", taken, {"settings.toml": SETTINGS.encode(), "start.msgpack": msgpack.packb({"v": 0})}
    )
    return {
        "no settings": ([bare], "bare.mcap: holds no settings; give them with --settings"),
        "empty": ([empty], "empty.mcap: the file is empty"),
        "other sizes": (
            [journal, "--settings", other],
            "elements = 16, receivers = 1, tones = 16, but the settings say 20, 1",
        ),
        "other link": ([journal, "--settings", link], "holds no bursts of link 'field', but of yard"),
        "settings in the log": ([wrong], "wrong.mcap: settings.toml: link.name"),
        "start of another kind": ([start], "start.mcap: start.msgpack was written by another version"),
        "start of another version": ([old], "old.mcap: the snapshot is of version 0"),
        "nowhere to write": ([journal, "--json", folder / "nowhere" / "a.json"], "there is no folder"),
        "exists": ([journal, "--out", journal], "exists already"),
    }


@pytest.mark.parametrize(
    "name",
    [
        "no settings",
        "empty",
        "other sizes",
        "other link",
        "settings in the log",
        "start of another kind",
        "start of another version",
        "nowhere to write",
        "exists",
    ],
)
def test_mistakes_are_one_line(name: str, journal: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Exit status 2, one line that says which file and why; nothing is left behind that stands in the way next time."""
    arguments, wanted = mistakes(journal, tmp_path)[name]
    out = [] if "--out" in arguments else ["--out", tmp_path / "out.mcap"]
    assert entry(["replay", *map(str, [*arguments, *out]), "--quiet"]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert said.err.count("\n") == 1
    assert wanted in said.err
    assert not (tmp_path / "out.mcap").exists()


def test_an_idle_journal_is_no_mistake(tmp_path: Path) -> None:
    """A service that heard nothing leaves a journal of nothing: it must not spoil the replay of a folder."""
    log = write_log(tmp_path / "idle.mcap", [], {"settings.toml": SETTINGS.encode()})
    summary = replayed(log)
    assert summary["counts"]["bursts"] == 0
    assert summary["replayed"]["rate_predicted"] is None


def test_counts_are_those_of_the_logs_given(tmp_path: Path) -> None:
    """A journal that goes on from another one carries its counts; a replay counts only what it was given."""
    taken = bursts(30, start_ns=START)
    tracker = Tracker(configure(parse(SETTINGS), tmp_path))
    logs = []
    for number, part in enumerate((taken[:20], taken[20:])):
        attachments = {
            "settings.toml": SETTINGS.encode(),
            "start.msgpack": pack_start(Start(tracker.next_id, tracker.snapshot())),
        }
        logs.append(write_log(tmp_path / f"{number}.mcap", part, attachments))
        for burst in part:
            tracker.admit(burst, burst.end_ns)
            tracker.advance([burst], Steps(12))
    assert replayed(logs[1])["counts"]["bursts"] == 10
    assert replayed(*logs)["counts"]["bursts"] == 30


def test_hostile_records_end_no_replay(journal: Path, tmp_path: Path) -> None:
    """Decisions, commands and messages with values exchanged, under sound checksums: one line, or used all the same."""
    rng = random.Random(37)
    attachments = LogReader(journal).attachments
    records = list(LogReader(journal))
    kinds = ("decision/yard", "command/yard", "pattern/yard", "state/yard", "alarm/yard")
    values: list[Any] = [None, -1, 2**64 - 1, 1.5, "", b"", [], [[1]], [[7, 3], [7, 3]], {}, b"\x00" * 100]
    refused = 0
    for turn in range(60):
        path = tmp_path / f"{turn}.mcap"
        with LogWriter(path, attachments=attachments, clock_ns=lambda: START) as writer:
            for each in records:
                body = each.body
                if each.topic in kinds and rng.random() < 0.02:
                    fields = msgpack.unpackb(body)
                    fields[rng.choice(list(fields))] = rng.choice(values)
                    body = msgpack.packb(fields)
                writer.add(each.topic, body, each.log_time_ns, each.publish_time_ns)
                writer.commit()
        refused += complaint(Replay(None, tmp_path), path) is not None
    assert refused < 60
