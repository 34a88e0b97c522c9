"""The file of faulty elements beside the journal, and the same from recorded logs."""

import os
import tomllib
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from unittest.mock import Mock

import pytest

from tests.service.station import SCENE, Controller, bursts, running
from tracker.cli import entry
from tracker.engine.burst import Burst
from tracker.engine.events import Mode, State
from tracker.faults_file import faults_text
from tracker.service.faults import FaultsFile
from tracker.settings import parse
from tracker.simulation.impairments import Fault, Impairments
from tracker.simulation.testbed import Testbed, TestbedConfig

PANEL = """
[link]
name = "yard"
[panel]
columns = 3
rows = 2
{stuck}
[tones]
fft = 32
first = 8
count = 16
spacing_khz = 1250.0
"""


def state(*faults: tuple[int, str, float]) -> State:
    """A state with faults, and nothing else of interest."""
    return State(
        run=7,
        seq=11,
        t_ns=1_767_225_600_000_000_000,
        mode=Mode.TRACKING,
        bursts=1,
        frames=1,
        lost=0,
        duplicate=0,
        refused=0,
        dropped_frames=0,
        noise=(1.0,),
        innovation=(1.0,),
        rate_measured=None,
        rate_predicted=None,
        offset_hz=0.0,
        phase_rad=(0.0, 0.0),
        time_constant_ms=1.0,
        pattern=None,
        faults=faults,
        together=1,
        statistic=0.0,
        threshold=0.0,
    )


def faulty(count: int) -> list[Burst]:
    """Bursts of a link with 8 × 8 elements, of which 20 and 43 are stuck."""
    stuck = Impairments(faults=(Fault(20, "stuck+"), Fault(43, "stuck-")))
    scene = replace(SCENE, panel=replace(SCENE.panel, columns=8, rows=8), snr_db=3.0, impairments=stuck)
    bed = Testbed(TestbedConfig(scene, frames=16), 1, 7)
    (first,) = bursts(1)
    return [bed.next_burst(first.t_ns + number * bed.burst_ns) for number in range(count)]


def test_the_file_can_take_the_place_of_the_settings() -> None:
    """Its table holds what does not answer, with what the settings held already; weak ones are told in words alone."""
    settings = parse(PANEL.format(stuck="stuck = { minus = [3] }"))
    told = state((0, "unmoved", 0.98), (1, "stuck+", 1.0), (2, "stuck-", 0.97), (4, "weak", 0.96))
    text = faults_text(settings, told)
    assert tomllib.loads(text) == {"panel": {"stuck": {"plus": [0, 1], "minus": [2, 3]}}}
    taken = parse(PANEL.format(stuck=text.replace("# ", "#")))
    assert taken.panel.stuck == {"plus": [0, 1], "minus": [2, 3]}


def test_the_file_tells_of_each_fault_and_draws_a_map() -> None:
    """A line a fault with column and row, and the panel with row 0 on top: element i is column i // 2, row i % 2."""
    text = faults_text(parse(PANEL.format(stuck="")), state((1, "unmoved", 0.98), (4, "weak", 0.96)))
    lines = [line.removeprefix("#").strip() for line in text.splitlines() if line.startswith("#")]
    assert "2026-01-01T00:00:00Z" in lines[0]
    assert [line.split() for line in lines if line.endswith(("0.980", "0.960"))] == [
        ["1", "0", "1", "unmoved", "0.980"],
        ["4", "2", "0", "weak", "0.960"],
    ]
    assert lines[-2:] == ["..w", "0.."]


def test_the_file_is_written_whenever_others_are_found(tmp_path: Path) -> None:
    """Not before anything is found, not when only probabilities change, and again when a fault is gone."""
    path = tmp_path / "yard.faults.toml"
    log = Mock()
    kept = FaultsFile(path, parse(PANEL.format(stuck="")), log)
    kept.take([state()])
    assert not path.exists()
    kept.take([state((1, "unmoved", 0.98))])
    first = path.read_text()
    kept.take([state((1, "unmoved", 0.99))])
    assert path.read_text() == first
    kept.take([state()])
    assert tomllib.loads(path.read_text()) == {"panel": {"stuck": {"plus": [], "minus": []}}}
    assert [each.name for each in tmp_path.iterdir()] == [path.name]
    log.warning.assert_not_called()


def test_a_disk_that_fails_is_told_once_and_tried_again(tmp_path: Path) -> None:
    """The service goes on; the file is there as soon as it can be written."""
    folder, log = tmp_path / "journal", Mock()
    kept = FaultsFile(folder / "yard.faults.toml", parse(PANEL.format(stuck="")), log)
    for _ in range(3):
        kept.take([state((1, "unmoved", 0.98))])
    log.warning.assert_called_once()
    folder.mkdir()
    kept.take([state((1, "unmoved", 0.98))])
    assert os.listdir(folder) == ["yard.faults.toml"]


def test_the_service_lists_faulty_elements_and_so_does_drift(
    make_controller: Callable[..., Controller], capsys: pytest.CaptureFixture[str]
) -> None:
    """In the state, beside the journal, and from the journal by `drift`, in words, in the picture and in a file."""
    controller = make_controller(panel="columns = 8\nrows = 8")
    with running(controller) as this:
        for burst in faulty(40):
            controller.step(burst)
        log = this.journal.path
    found = {element: fault for element, fault, _ in controller.heard.state[-1].faults}
    assert found == {20: "unmoved", 43: "unmoved"}
    assert any(alarm.kind == "elements" for alarm in controller.heard.alarm)
    written = controller.journal / "yard.faults.toml"
    assert tomllib.loads(written.read_text())["panel"]["stuck"] == {"plus": [20, 43], "minus": []}
    assert parse(controller.text + written.read_text()).panel.stuck["plus"] == [20, 43]
    again, picture = controller.journal / "again.toml", controller.journal / "picture.svg"
    arguments = ["drift", str(log), "--quiet", "--faults", str(again), "--svg", str(picture)]
    assert entry(arguments) == 0
    assert tomllib.loads(again.read_text()) == tomllib.loads(written.read_text())
    assert "elements 20 unmoved, 43 unmoved" in capsys.readouterr().out
    assert "×: 2 faulty" in picture.read_text()
