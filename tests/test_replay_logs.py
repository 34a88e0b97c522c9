"""The page on the replay logs says what a replay of them shows."""

import json
import re
from pathlib import Path

import pytest

from tracker.cli import entry
from tracker.logs import LogReader
from tracker.messages import decode_alarm

FOLDER = Path(__file__).resolve().parent.parent / "replay_logs"
PAGE = (FOLDER / "README.md").read_text()
# When the scene changes, s, as the page's column on what happens says.
CHANGES = {"quiet-start": [], "slow-carrier": [5.0], "blocked-path": [8.0, 14.0]}


def row(first: str) -> list[str]:
    """Cells of the row that begins so."""
    return next(
        [cell.strip() for cell in line.strip("|").split("|")]
        for line in PAGE.splitlines()
        if line.startswith(f"| {first} |")
    )


@pytest.mark.parametrize("name", CHANGES)
def test_a_replay_shows_what_the_page_says(name: str, tmp_path: Path) -> None:
    """Alarms by kind, when they come and what they date the change to; prediction error and innovation ratio."""
    out, summary = tmp_path / "out.mcap", tmp_path / "out.json"
    log = FOLDER / f"{name}.mcap"
    assert entry(["replay", str(log), "--out", str(out), "--json", str(summary), "--quiet"]) == 0
    begin_ns = next(record.publish_time_ns for record in LogReader(log) if record.topic == "pilots/yard")
    alarms = [decode_alarm(record.body).event for record in LogReader(out) if record.topic == "alarm/yard"]
    _, happens, shows = row(f"`{name}.mcap`")
    if not CHANGES[name]:
        assert "no alarm" in shows
        assert not alarms
    else:
        assert {alarm.kind for alarm in alarms} == set(re.findall(r"`([\w-]+)` alarm", shows))
        told = [float(time) for time in re.findall(r"([\d.]+) s\b", shows)]
        found = [(alarm.t_ns - begin_ns) / 1e9 for alarm in alarms] + [
            (alarm.since_ns - begin_ns) / 1e9 for alarm in alarms
        ]
        assert found == pytest.approx(told, abs=0.1)
        # The scene says when it changes: the alarms date it to the third of a second that the change takes.
        assert all(f"{change:.0f} s" in happens for change in CHANGES[name])
        assert found[len(alarms) :] == pytest.approx(CHANGES[name], abs=0.3)
    replayed = json.loads(summary.read_text())["replayed"]
    place = row("`aperture.basis`").index(name)
    assert replayed["prediction_error"] == pytest.approx(float(row('`"elements"`')[place]), abs=0.02)
    if name == "slow-carrier":
        place = row("`time_constant_ms`").index("300")
        assert replayed["prediction_error"] == pytest.approx(float(row("prediction error")[place]), abs=0.02)
        assert replayed["innovation"] == pytest.approx(float(row("innovation ratio")[place]), abs=0.02)
