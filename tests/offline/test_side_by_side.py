"""Files of a journal replayed side by side, a process each."""

import json
import os
from pathlib import Path
from typing import Any

import pytest

from tests.service.station import Controller, bursts, running
from tracker.cli import entry
from tracker.logs import LogReader
from tracker.offline import side_by_side
from tracker.snapshots import START


@pytest.fixture(scope="module")
def files(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """A journal of the live service in several files."""
    controller = Controller(tmp_path_factory.mktemp("link"), journal="rotate_mb = 0.05")
    with running(controller) as this:
        for burst in bursts(40):
            controller.step(burst)
    controller.close()
    assert this.journal.path is not None
    return sorted(this.journal.path.parent.glob("*.mcap"))


@pytest.fixture
def cores(monkeypatch: pytest.MonkeyPatch) -> None:
    """Two cores, whatever this machine has, and processes for logs of any size."""
    monkeypatch.setattr(os, "sched_getaffinity", lambda process: {0, 1})
    monkeypatch.setattr(side_by_side, "WORTH", 0)


def replayed(files: list[Path], out: Path) -> dict[str, Any]:
    told = out.with_suffix(".json")
    assert entry(["replay", *map(str, files), "--quiet", "--out", str(out), "--json", str(told)]) == 0
    summary: dict[str, Any] = json.loads(told.read_text())
    return summary


def test_side_by_side_gives_what_one_after_the_other_does(
    files: list[Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The same log of what would have been published, byte by byte, and the same summary."""
    assert len(files) >= 3
    assert side_by_side.processes_for(files) == 1
    in_turn = replayed(files, tmp_path / "turn.mcap")
    monkeypatch.setattr(os, "sched_getaffinity", lambda process: {0, 1})
    monkeypatch.setattr(side_by_side, "WORTH", 0)
    assert side_by_side.processes_for(files) == 2
    beside = replayed(files, tmp_path / "beside.mcap")
    assert (tmp_path / "beside.mcap").read_bytes() == (tmp_path / "turn.mcap").read_bytes()
    timed = ("took_s", "times_real_time")
    for summary in (in_turn, beside):
        assert summary["patterns_same"] == summary["logged"]["patterns"] > 0
        for key in timed:
            del summary[key]
    for side, key in (("logged", "innovation"), ("replayed", "innovation"), ("replayed", "prediction_error")):
        assert beside[side].pop(key) == pytest.approx(in_turn[side].pop(key), rel=1e-12)  # summed in another order
    for side in ("logged", "replayed"):
        assert beside[side].pop("rate_predicted") == pytest.approx(in_turn[side].pop("rate_predicted"), rel=1e-12)
    assert beside == in_turn


@pytest.mark.usefixtures("cores")
def test_logs_that_need_one_another_are_taken_in_turn(files: list[Path], tmp_path: Path) -> None:
    """A log that does not say how the tracker stood continues the one before it."""
    bare = tmp_path / "bare.mcap"
    assert START in LogReader(files[0]).first_attachments
    bare.write_bytes(files[1].read_bytes().replace(START.encode(), b"x" * len(START)))
    assert START not in LogReader(bare).first_attachments
    assert side_by_side.processes_for([files[0], bare]) == 1


@pytest.mark.parametrize("beside", [False, True])
def test_logs_of_two_links_are_not_mixed(
    files: list[Path],
    tmp_path: Path,
    beside: bool,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """Journals of two links give no figures of both: one line names the log of the other, however they are replayed."""
    if beside:
        monkeypatch.setattr(os, "sched_getaffinity", lambda process: {0, 1})
        monkeypatch.setattr(side_by_side, "WORTH", 0)
    controller = Controller(tmp_path, "quay")
    with running(controller) as this:
        for burst in bursts(3):
            controller.step(burst)
    controller.close()
    assert this.journal.path is not None
    logs = [files[0], this.journal.path]
    assert side_by_side.processes_for(logs) == 1 + beside
    for arguments in (["replay", *map(str, logs)], ["replay", *map(str, reversed(logs))]):
        assert entry([*arguments, "--quiet"]) == 2
        said = capsys.readouterr().err
        assert said.startswith(f"ris-tracker replay: {arguments[2]}: is of link ")
        assert said.count("\n") == 1


@pytest.mark.usefixtures("cores")
def test_a_log_that_cannot_be_replayed_is_told_in_one_line(
    files: list[Path], tmp_path: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    """What goes wrong in a process is said as it would be without, with no traceback."""
    other = tmp_path / "other.mcap"
    data = files[1].read_bytes()
    at = data.index(b"[panel]")
    other.write_bytes(data[:at] + b"[pamel]" + data[at + 7 :])
    status = entry(["replay", str(files[0]), str(other), "--quiet"])
    said = capfd.readouterr().err
    assert status != 0
    assert "Traceback" not in said
    assert "other.mcap" in said.splitlines()[-1]
