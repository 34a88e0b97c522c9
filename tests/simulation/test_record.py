"""Logs of a scene."""

from pathlib import Path

import pytest

from tracker.engine.burst import Burst
from tracker.engine.events import Pattern
from tracker.logs import LogReader
from tracker.messages import decode_pattern, decode_pilots
from tracker.settings import parse
from tracker.simulation.__main__ import main
from tracker.simulation.closed_loop import EngineInLoop, turns
from tracker.simulation.record import record
from tracker.simulation.testbed import Testbed
from tracker.simulation.yard import scenario

START_NS = 1_700_000_000_000_000_000


def write(path: Path, count: int = 30) -> list[Pattern]:
    scene = scenario("quiet")
    testbed = Testbed(scene.testbed, seed=4, start_ns=START_NS)
    loop = list(turns(testbed, START_NS, 100.0, count, EngineInLoop(parse(scene.settings()))))
    record(loop, path, "yard", scene.settings())
    return [event for turn in loop for event in turn.events if isinstance(event, Pattern)]


def test_log_holds_bursts_patterns_and_settings(tmp_path: Path) -> None:
    """All that passed between testbed and tracker is read back as it was, with simulated times."""
    published = write(tmp_path / "yard.mcap")
    reader = LogReader(tmp_path / "yard.mcap")
    assert parse(reader.attachments["settings.toml"].decode()) == parse(scenario("quiet").settings())
    records = list(reader)
    assert reader.damage is None
    bursts = [decode_pilots(one.body, "yard", None) for one in records if one.topic == "pilots/yard"]
    assert [burst.seq for burst in bursts] == list(range(30))
    assert [burst.t_ns for burst in bursts] == [START_NS + 10_000_000 * number for number in range(30)]
    patterns = [decode_pattern(one.body).event for one in records if one.topic == "pattern/yard"]
    assert published
    assert [(one.id, one.seq, one.states.tolist()) for one in patterns] == [
        (one.id, one.seq, one.states.tolist()) for one in published
    ]
    assert sum(one.topic == "state/yard" for one in records) == 30
    for one in records:
        if one.topic == "pilots/yard":
            burst = decode_pilots(one.body, "yard", None)
            assert one.log_time_ns == burst.t_ns + burst.frames * burst.dt_ns


def test_same_scene_and_seed_write_the_same_file(tmp_path: Path) -> None:
    """No clock and no chance of the machine goes into a log."""
    write(tmp_path / "a.mcap", 12)
    write(tmp_path / "b.mcap", 12)
    assert (tmp_path / "a.mcap").read_bytes() == (tmp_path / "b.mcap").read_bytes()


def test_recording_can_be_interrupted(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Ctrl-C: one line and status 130 (128 + SIGINT, as shells count); the log is whole as far as it goes."""
    out, sounded = tmp_path / "quiet.mcap", Testbed.next_burst

    def interrupted(testbed: Testbed, now_ns: int) -> Burst:
        if out.exists() and any(True for _ in LogReader(out)):
            raise KeyboardInterrupt
        return sounded(testbed, now_ns)

    monkeypatch.setattr(Testbed, "next_burst", interrupted)
    assert main(["record", "quiet", str(out), "--seconds", "1", "--open-loop", "--frames", "16"]) == 130
    assert capsys.readouterr().err.count("\n") == 1
    assert any(record.topic == "pilots/yard" for record in LogReader(out))


def test_record_command_writes_a_log_and_never_over_one(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The command says what it wrote; a second run into the same file is a mistake of one line."""
    out = tmp_path / "blocked.mcap"
    arguments = ["record", "blocked", str(out), "--seconds", "0.1", "--open-loop", "--frames", "16"]
    assert main(arguments) == 0
    assert "10 bursts" in capsys.readouterr().err
    bursts = [decode_pilots(one.body, "yard", None) for one in LogReader(out)]
    assert [burst.frames for burst in bursts] == [16] * 10
    assert main(arguments) == 2
    error = capsys.readouterr().err
    assert "exists already" in error
    assert error.count("\n") == 1
