"""Inspect: what is said about a log is what was put into it."""

import json
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest

from tracker.engine import events
from tracker.engine.burst import Burst
from tracker.logs import LogError, LogWriter
from tracker.messages import encode_alarm, encode_pattern, encode_pilots
from tracker.offline.errors import OfflineError
from tracker.offline.inspect import examine, inspect

START = 1_780_000_000_000_000_000
ELEMENTS, RECEIVERS, TONES, FFT, FRAMES = 24, 2, 64, 128, 16
NOISE = (1e-3, 4e-3)
DT, INTERVAL = 100_000, 5_000_000

SETTINGS = f"""
[link]
name = "yard"
receivers = {RECEIVERS}
[panel]
columns = 6
rows = 4
[tones]
fft = {FFT}
first = 32
count = {TONES}
spacing_khz = 30.0
[delay]
taps = 8
before = 1
"""


@dataclass
class Yard:
    """A channel that stands still, with paths at 0 to 5 samples, and a recorder of bursts through it."""

    rng: np.random.Generator = field(default_factory=lambda: np.random.default_rng(5))

    def __post_init__(self) -> None:
        delays = self.rng.uniform(0, 5, (ELEMENTS + 1, RECEIVERS))
        gains = self.rng.normal(size=(ELEMENTS + 1, RECEIVERS, 2)) @ np.array([1, 1j]) / 50
        tone = (np.arange(32, 32 + TONES) - FFT // 2) / FFT
        self.channel = gains[..., None] * np.exp(-2j * np.pi * delays[..., None] * tone)
        self.reference = self.states(1)[0]
        self.signal = np.zeros(RECEIVERS)
        self.count = 0

    def states(self, frames: int) -> Any:
        return self.rng.choice([-1, 1], (frames, ELEMENTS))

    def burst(self, seq: int, run: int = 7, every: int = 8) -> Burst:
        states = self.states(FRAMES)
        if every:
            states[::every] = self.reference
        clean = np.einsum("bn,nrk->brk", np.hstack([np.ones((FRAMES, 1)), states]), self.channel)
        self.signal += np.mean(np.abs(clean) ** 2, axis=(0, 2))
        self.count += 1
        noise = self.rng.normal(size=(*clean.shape, 2)) @ np.array([1, 1j]) * np.sqrt(np.array(NOISE) / 2)[:, None]
        return Burst(
            run=run,
            seq=seq,
            t_ns=START + seq * INTERVAL,
            dt_ns=DT,
            elements=ELEMENTS,
            patterns=np.packbits(states > 0, axis=1, bitorder="little"),
            response=(clean + noise).astype(np.complex64),
            keep=np.ones(FRAMES, np.bool_),
        )


def record(path: Path, bursts: list[Burst], *, settings: str | None = SETTINGS, link: str = "yard") -> Path:
    attachments = {} if settings is None else {"settings.toml": settings.encode()}
    with LogWriter(path, attachments=attachments, clock_ns=lambda: START) as log:
        for burst in bursts:
            log.add(f"pilots/{link}", encode_pilots(link, burst), burst.end_ns + 2_000_000, burst.t_ns)
            log.commit()
    return path


def found(*paths: Path, link: str = "yard") -> dict[str, Any]:
    told: dict[str, Any] = examine(paths).as_dict()["links"][link]
    return told


def test_counts_and_times_are_those_of_the_log(tmp_path: Path) -> None:
    """Bursts, frames, span, sizes, spacing, volume and arrival are told as they were recorded."""
    yard = Yard()
    bursts = [yard.burst(seq) for seq in range(30)]
    path = record(tmp_path / "a.mcap", bursts)
    link = found(path)
    assert (link["bursts"], link["frames"], link["runs"]) == (30, 480, 1)
    assert (link["lost"], link["gaps"], link["duplicates"], link["late"], link["frames_left_out"]) == (0, 0, 0, 0, 0)
    assert link["first_ns"] == START
    assert link["last_ns"] == START + 29 * INTERVAL + 15 * DT
    assert link["span_s"] == pytest.approx(0.1465)
    assert link["sizes"] == [{"frames": 16, "elements": 24, "receivers": 2, "tones": 64, "bursts": 30}]
    assert link["frame_spacing_ns"] == {"100000": 30}
    assert link["burst_interval_s"] == pytest.approx({"least": 5e-3, "median": 5e-3, "p99": 5e-3, "most": 5e-3})
    assert link["arrival_s"]["median"] == pytest.approx(2e-3)
    assert link["bytes"] == sum(len(encode_pilots("yard", burst)) for burst in bursts)
    assert link["messages"] == {"pilots": 30}
    assert link["repeated_share"] == pytest.approx(1 / 16)
    assert link["commonest_pattern"] == pytest.approx({"frames": 1 / 8, "bursts": 1.0})


@pytest.mark.parametrize(
    ("settings", "every", "method", "tolerance"),
    [(SETTINGS, 8, "outside", 0.03), (None, 8, "repeats", 0.1), (None, 0, "delays", 0.1)],
)
def test_noise_and_signal_are_found_at_each_receiver(
    tmp_path: Path, settings: str | None, every: int, method: str, tolerance: float
) -> None:
    """By whichever means the log allows, the noise that was added and the signal that was sent come out."""
    yard = Yard()
    path = record(tmp_path / "a.mcap", [yard.burst(seq, every=every) for seq in range(60)], settings=settings)
    for number, level in enumerate(found(path)["receivers"]):
        signal = yard.signal[number] / yard.count
        assert level["method"] == method
        assert level["noise"] == pytest.approx(NOISE[number], rel=tolerance)
        assert level["signal"] == pytest.approx(signal, rel=0.02)
        assert level["ratio_db"] == pytest.approx(10 * np.log10(signal / NOISE[number]), abs=0.5)


def test_a_few_tones_without_settings_and_repeats_tell_no_noise(tmp_path: Path) -> None:
    """Where nothing tells noise from signal, none is claimed."""
    yard = Yard()
    bursts = [replace(b, response=b.response[:, :, :4].copy()) for b in (yard.burst(seq, every=0) for seq in range(9))]
    levels = found(record(tmp_path / "a.mcap", bursts, settings=None))["receivers"]
    assert [level["method"] for level in levels] == ["none", "none"]
    assert levels[0]["noise"] is None
    assert levels[0]["signal"] > 0


def test_gaps_duplicates_late_bursts_and_new_runs_are_told_apart(tmp_path: Path) -> None:
    """Lost bursts are counted by `seq`, repeats and stragglers by themselves, and a new run is no gap."""
    yard = Yard()
    order = [0, 1, 2, 5, 6, 7, 7, 9, 4, 10, 20]
    bursts = [yard.burst(seq) for seq in order] + [yard.burst(seq, run=8) for seq in (3, 4)]
    link = found(record(tmp_path / "a.mcap", bursts))
    assert link["runs"] == 2
    assert (link["gaps"], link["lost"], link["longest_gap"]) == (3, 2 + 1 + 9, 9)
    assert (link["duplicates"], link["late"]) == (1, 1)


def test_logs_are_read_on_end_to_end(tmp_path: Path) -> None:
    """A gap between two logs of one journal is a gap."""
    yard = Yard()
    first = record(tmp_path / "a.mcap", [yard.burst(seq) for seq in range(5)])
    second = record(tmp_path / "b.mcap", [yard.burst(seq) for seq in range(7, 10)])
    assert found(first, second)["lost"] == 2
    assert found(first, second)["bursts"] == 8


def test_frames_that_cannot_be_used_and_refused_bursts_are_counted(tmp_path: Path) -> None:
    """NaN frames are left out of the levels, and what is no burst is counted by reason."""
    yard = Yard()
    bursts = [yard.burst(seq) for seq in range(40)]
    bursts[3].response[2, 0, 5] = np.nan
    bursts[3].response[9] = np.inf
    path = tmp_path / "a.mcap"
    with LogWriter(path, attachments={"settings.toml": SETTINGS.encode()}, clock_ns=lambda: START) as log:
        for burst in bursts:
            log.add("pilots/yard", encode_pilots("yard", burst), START, START)
        log.add("pilots/yard", b"\xc0", START, START)
        log.add("pilots/yard", msgpack.packb({"v": 2}), START, START)
        log.add("pilots/yard", encode_pilots("dock", bursts[0]), START, START)
        log.add("camera", b"", START, START)
    result = examine([path]).as_dict()
    link = result["links"]["yard"]
    assert link["frames_left_out"] == 2
    assert link["refused"] == {"not-a-map": 1, "version": 1, "link": 1}
    assert link["receivers"][0]["noise"] == pytest.approx(NOISE[0], rel=0.05)
    assert result["strange_topics"] == {"camera": 1}


def test_bursts_unlike_the_settings_are_told(tmp_path: Path) -> None:
    """Sizes that differ from the settings in the log are counted, and the levels rest on the others."""
    yard = Yard()
    bursts = [yard.burst(seq) for seq in range(10)]
    bursts[4] = replace(bursts[4], response=bursts[4].response[:, :1].copy())
    link = found(record(tmp_path / "a.mcap", bursts))
    assert link["unlike_settings"] == 1
    assert len(link["sizes"]) == 2
    assert link["receivers"][0]["method"] == "outside"


def published_log(path: Path) -> Path:
    states = np.ones(ELEMENTS, np.int8)
    with LogWriter(path, clock_ns=lambda: START) as log:
        for number, cause in enumerate((events.Cause.FIRST, events.Cause.REFRESH, events.Cause.REFRESH), 1):
            event = events.Pattern(number, 1, number, START, states, 5.0 + number, 4.0, 3.0, 9.0, cause, 10)
            log.add("pattern/yard", encode_pattern("yard", event, 10), START, START)
        for kind, at in (("motion", 1), ("motion", 2), ("noise", 3)):
            alarm = events.Alarm(1, 1, START + at * 10**9, START, kind, None, 5.0, 4.0, "", "none")
            log.add("alarm/yard", encode_alarm("yard", alarm), START, START)
    return path


def test_published_patterns_and_alarms_are_summed_up(tmp_path: Path) -> None:
    """Patterns are counted by cause with their mean rate, alarms by kind with when each was first raised."""
    link = found(published_log(tmp_path / "a.mcap"))
    assert link["published"] == {"first": 1, "refresh": 2}
    assert link["rate_predicted"] == pytest.approx(7.0)
    assert link["alarms"] == {
        "motion": {"count": 2, "first_ns": START + 10**9},
        "noise": {"count": 1, "first_ns": START + 3 * 10**9},
    }
    assert link["bursts"] == 0


def test_the_text_says_it_for_a_person(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Standard output names each log and link and the figures that matter, and the JSON file says the same."""
    yard = Yard()
    path = record(tmp_path / "a.mcap", [yard.burst(seq) for seq in (0, 1, 2, 5, 5)])
    other = published_log(tmp_path / "b.mcap")
    assert inspect([path, other], tmp_path / "out.json", progress=False) == 0
    text = capsys.readouterr().out
    for words in (
        f"{path}: ",
        "5 messages, with settings.toml",
        "link yard",
        "2026-05-28 20:26:40.000 UTC to 2026-05-28 20:26:40.026 UTC, 0.026 s",  # by `date -u -d @1780000000`
        "5 in 1 run, 80 frames, 2 lost in 1 gap (longest 2), 1 duplicate",
        "24 elements, 2 receivers, 64 tones, 16 frames a burst",
        "frames 100.000 µs apart, bursts 5.000 ms, at most 5.000 ms",
        "receiver 1  signal",
        "outside the delay basis",
        "3 patterns: first 1, refresh 2, predicted rate 7.00 bit/s/Hz",
        "motion 2 (first 20:26:41.000), noise 1 (first 20:26:43.000)",
    ):
        assert words in text
    assert json.loads((tmp_path / "out.json").read_text()) == examine([path, other]).as_dict()


def test_damage_is_told_and_the_rest_is_read(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A cut log is inspected up to the cut, and the cut is named."""
    yard = Yard()
    path = record(tmp_path / "a.mcap", [yard.burst(seq) for seq in range(10)])
    path.write_bytes(path.read_bytes()[:-40_000])
    assert inspect([path], progress=False) == 0
    text = capsys.readouterr().out
    assert "damage: byte " in text
    assert 0 < found(path)["bursts"] < 10


def test_settings_that_cannot_be_used_are_told(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Wrong settings in a log are named, and the log is read without them."""
    yard = Yard()
    wrong = SETTINGS.replace("rows = 4", "rows = 0")
    path = record(tmp_path / "a.mcap", [yard.burst(seq) for seq in range(10)], settings=wrong)
    inspect([path], progress=False)
    assert "settings.toml: panel.rows: found 0" in capsys.readouterr().out
    assert found(path)["receivers"][0]["method"] == "repeats"


def test_what_cannot_be_done_is_one_line(tmp_path: Path) -> None:
    """A file that is no log, and a JSON file that cannot be written, are the user's mistakes."""
    with pytest.raises(LogError, match="there is no such file"):
        examine([tmp_path / "nowhere.mcap"])
    path = record(tmp_path / "a.mcap", [Yard().burst(0)])
    with pytest.raises(OfflineError, match="cannot be written"):
        inspect([path], tmp_path / "nowhere" / "out.json", progress=False)
