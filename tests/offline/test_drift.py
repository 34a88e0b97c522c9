"""Drift: the table, the figures and the picture say what was put into the logs."""

import json
import re
from collections.abc import Iterable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, NoReturn
from xml.etree import ElementTree

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tracker.cli import entry
from tracker.engine.events import Alarm, Cause, Event, Mode, Pattern, State
from tracker.logs import LogReader, LogWriter
from tracker.offline import svg
from tracker.offline.axes import time_marks, value_limits
from tracker.offline.bins import MOST_BINS, Bins
from tracker.offline.happenings import MOST_ENTRIES
from tracker.offline.rerun import Replay
from tracker.offline.spread import Spread
from tracker.outgoing import encode
from tracker.settings import load
from tracker.view import palette

ROOT = Path(__file__).resolve().parent.parent.parent
START = 1_780_000_000_000_000_000  # 2026-05-28 20:26:40 UTC, by `date -u -d @1780000000`
RUN = 7
SVG = "{http://www.w3.org/2000/svg}"
SETTINGS = """
[link]
name = "yard"
receivers = 2
[panel]
columns = 4
rows = 3
[tones]
fft = 64
first = 8
count = 48
spacing_khz = 30.0
"""


def at(seconds: float) -> int:
    """A time of the log, ns."""
    return START + round(seconds * 1e9)


def state(seq: int, seconds: float, rate: float | None = 8.0, mode: Mode = Mode.TRACKING, **changes: Any) -> State:
    """A state after a burst, all well unless told otherwise."""
    usual = State(
        run=RUN,
        seq=seq,
        t_ns=at(seconds),
        mode=mode,
        bursts=seq + 1,
        frames=64 * (seq + 1),
        lost=0,
        duplicate=0,
        refused=0,
        dropped_frames=0,
        noise=(1e-11, 1e-10),
        innovation=(0.8, 0.9),
        rate_measured=rate,
        rate_predicted=rate,
        offset_hz=0.0,
        phase_rad=(0.0, 0.0),
        time_constant_ms=500.0,
        pattern=1,
        faults=(),
        together=1,
        statistic=2.5,
        threshold=10.0,
        promise_kept=0.95,
    )
    return replace(usual, **changes)


def alarm(seq: int, seconds: float, kind: str, since: float | None = None, **changes: Any) -> Alarm:
    """An alarm decided at a burst."""
    began = at(seconds if since is None else since)
    usual = Alarm(RUN, seq, at(seconds), began, kind, None, 12.5, 10.0, "gain", "reacquire")
    return replace(usual, **changes)


def pattern(seq: int, seconds: float, number: int, cause: Cause, states: Sequence[int] = (1,) * 12) -> Pattern:
    """A published pattern."""
    return Pattern(number, RUN, seq, at(seconds), np.array(states, np.int8), 8.0, 7.0, 6.0, 9.0, cause, 10)


def write(path: Path, events: Iterable[Event], settings: str | None = SETTINGS, link: str = "yard") -> Path:
    """A log in which a tracker said this, one chunk every twenty messages."""
    attachments = {} if settings is None else {"settings.toml": settings.encode()}
    with LogWriter(path, attachments=attachments, clock_ns=lambda: START) as log:
        for number, event in enumerate(events):
            kind, body, t_ns = encode(link, event, 0, {})
            log.add(f"{kind}/{link}", body, t_ns, t_ns)
            if number % 20 == 0:
                log.commit()
    return path


def steady(first: float, last: float, step: float = 0.05, **changes: Any) -> list[Event]:
    """States at an even pace from one time up to, not including, another."""
    numbers = range(round(first / step), round(last / step))
    return [state(number, number * step, **changes) for number in numbers]


def not_json(name: str) -> NoReturn:
    raise AssertionError(f"{name} is no JSON")


def drift(*arguments: str | Path) -> dict[str, Any]:
    """Run the command and give what it writes as JSON, which must be JSON in the strict sense."""
    first = next(Path(each) for each in arguments if str(each).endswith(".mcap"))
    out = first.with_suffix(".json")
    assert entry(["drift", *map(str, arguments), "--quiet", "--json", str(out)]) == 0
    told: dict[str, Any] = json.loads(out.read_text(), parse_constant=not_json)
    return told


def drawn(told: dict[str, Any]) -> ElementTree.Element:
    """The picture, read back."""
    return ElementTree.fromstring(Path(told["picture"]).read_text(encoding="utf-8"))


def words(picture: ElementTree.Element) -> dict[str, float]:
    """Text of the picture, with where it stands across."""
    return {text.text or "": float(text.get("x", "nan")) for text in picture.iter(f"{SVG}text")}


def blocked() -> list[Event]:
    """Thirty seconds at 20 states a second: acquired in one, and blocked from 9.5 s to 13 s, which is told at 10 s."""
    events: list[Event] = [*steady(0, 1, mode=Mode.ACQUIRING), *steady(1, 9.5), *steady(9.5, 10, rate=2.0)]
    events += [
        alarm(200, 10.0, "direct-path", 9.5, action="renew direct path"),
        pattern(200, 10.0, 42, Cause.DRIFT),
        *steady(10, 10.5, rate=2.0, mode=Mode.REACQUIRING),
        *steady(10.5, 13, rate=2.0),
        *steady(13, 30),
    ]
    return events


@pytest.fixture
def blocked_log(tmp_path: Path) -> Path:
    return write(tmp_path / "blocked.mcap", blocked())


# What happened


def test_an_alarm_is_told_with_evidence_action_and_effect(
    blocked_log: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """When told and since when, statistic and threshold, runner-up, mode and pattern it led to, and the rate."""
    first, second = drift(blocked_log)["happenings"]
    assert (first["what"], first["kind"], first["t_s"], first["mode_s"]) == ("mode", "acquiring", 0.0, 1.0)
    assert (second["what"], second["kind"], second["receiver"], second["count"]) == ("alarm", "direct-path", None, 1)
    assert (second["t_ns"], second["since_ns"]) == (at(10), at(9.5))
    assert (second["t_s"], second["since_s"]) == (10.0, 9.5)
    assert (second["statistic"], second["threshold"], second["next_kind"]) == (12.5, 10.0, "gain")
    assert (second["action"], second["mode"], second["mode_s"]) == ("renew direct path", "reacquiring", 0.5)
    assert second["pattern"] == 42
    assert (second["rate_before"], second["rate_lowest"], second["fell"]) == (8.0, 2.0, True)
    assert second["back_s"] == pytest.approx(3.5)
    out = capsys.readouterr().out
    row = next(line for line in out.splitlines() if "direct-path" in line)
    cells = re.split(r" {2,}", row)
    assert cells == [
        "20:26:50.000",
        "10.00",
        "alarm direct-path",
        "9.50",
        "12.5 against 10, else gain",
        "renew direct path, reacquiring for 0.50 s, pattern 42",
        "8.00, fell to 2.00, back after 3.50 s",
    ]


def test_figures_of_the_whole(blocked_log: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Shares of the modes, alarms an hour, rates, innovation, noise and promises, worked out by hand."""
    told = drift(blocked_log)
    assert (told["source"], told["own_settings"], told["link"], told["panel"]) == ("published", None, "yard", [4, 3])
    assert (told["states"], told["span_s"], told["start_ns"]) == (600, 29.95, START)
    assert told["modes"] == pytest.approx(
        {"acquiring": 1 / 29.95, "tracking": 28.45 / 29.95, "reacquiring": 0.5 / 29.95}
    )
    assert told["alarms"] == {"direct-path": 1}
    assert told["alarms_per_hour"] == pytest.approx(3600 / 29.95)
    assert told["patterns"] == {"drift": 1}
    assert told["promise_kept"] == 0.95
    assert told["rate_measured"] == pytest.approx({"least": 2, "q05": 2, "median": 8, "q95": 8, "most": 8}, rel=3e-3)
    assert told["innovation"]["least"] == 0.8
    assert told["innovation"]["most"] == 0.9
    assert [each["median"] for each in told["noise_db"]] == pytest.approx([-110, -100], abs=0.02)
    out = capsys.readouterr().out
    for line in (
        "link yard, 2026-05-28 20:26:40.000 to 2026-05-28 20:27:09.950 UTC, 29.95 s",
        "as the tracker said it at the time",
        "modes       acquiring 3.3 %, tracking 95.0 %, reacquiring 1.7 %",
        "alarms      direct-path 1; 120 an hour",
        "promises    95.0 % kept of the last 200",
        "noise 1     −100.0 to −100.0 dB",
        f"picture     {told['picture']}",
    ):
        assert line in out.splitlines()


@pytest.mark.parametrize(
    ("after", "lowest", "fell", "back"),
    [
        ([8.0] * 100, 8.0, False, None),
        ([7.7] * 100, 7.7, False, None),
        ([7.0, *[8.0] * 99], 7.0, True, 0.1),  # the first of the three that is back by itself
        ([3.0] * 20 + [6.0] * 20 + [7.9] * 60, 3.0, True, 4.0),
        ([3.0] * 10 + [8.0, 3.0] * 10 + [8.0] * 70, 3.0, True, 3.0),
        ([5.0] * 50 + [1.0] * 50, 1.0, True, None),
    ],
    ids=["none", "within 5 %", "a blink", "by steps", "in and out", "for good"],
)
def test_the_effect_is_lowest_and_back(
    after: list[float], lowest: float, fell: bool, back: float | None, tmp_path: Path
) -> None:
    """Lowest measured rate until three in a row are back at 95 % of the second before; alarm told at once."""
    events: list[Event] = [*steady(0, 5, 0.1), alarm(50, 5.0, "channel")]
    events += [state(50 + number, 5.0 + 0.1 * number, rate) for number, rate in enumerate(after)]
    (told,) = drift(write(tmp_path / "a.mcap", events))["happenings"]
    assert told["rate_before"] == pytest.approx(8.0)
    assert (told["rate_lowest"], told["fell"]) == (lowest, fell)
    assert told["back_s"] == (None if back is None else pytest.approx(back))


def test_the_rate_before_is_that_of_the_second_before_it_began(tmp_path: Path) -> None:
    """Not of the time between the beginning and the alarm, and not of long ago; without rates nothing is claimed."""
    events: list[Event] = [*steady(0, 5, rate=4.0), *steady(5, 6, rate=6.0), *steady(6, 7, rate=1.0)]
    events += [alarm(140, 7.0, "channel", 6.0), *steady(7, 12, rate=1.0)]
    (told,) = drift(write(tmp_path / "a.mcap", events))["happenings"]
    assert (told["rate_before"], told["rate_lowest"], told["back_s"]) == (pytest.approx(6.0), 1.0, None)
    silent: list[Event] = [*steady(0, 7, rate=None), alarm(140, 7.0, "channel", 6.0), *steady(7, 8, rate=None)]
    (told,) = drift(write(tmp_path / "b.mcap", silent))["happenings"]
    assert (told["rate_before"], told["fell"]) == (None, None)


def test_a_slow_link_is_waited_for(tmp_path: Path) -> None:
    """With a burst every ten seconds, twenty minutes are not long: the rate is back after them."""
    events: list[Event] = [*steady(0, 100, 10.0), alarm(10, 100.0, "channel"), *steady(100, 1300, 10.0, rate=2.0)]
    (told,) = drift(write(tmp_path / "a.mcap", [*events, *steady(1300, 1400, 10.0)]))["happenings"]
    assert (told["rate_before"], told["rate_lowest"], told["back_s"]) == (8.0, 2.0, 1200.0)


def test_what_is_no_alarm_is_told_too(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Hold, operator's patterns, faults when new, silence, a new run, a tracker that counts anew."""
    faults = ((5, "stuck+", 0.9), (7, "weak", 0.8))
    events: list[Event] = [
        *steady(0, 2),
        *steady(2, 3, mode=Mode.HELD),
        pattern(60, 3.0, 9, Cause.OPERATOR),
        pattern(60, 3.0, 10, Cause.REFRESH),
        *steady(3, 4, faults=faults[:1]),
        *steady(4, 5, faults=faults),
        *steady(17, 18, faults=faults),  # nothing for twelve seconds
        *[state(number, 18 + 0.05 * number, run=8, bursts=360 + number) for number in range(20)],
        *[state(20 + number, 19 + 0.05 * number, run=8, bursts=number + 1, lost=3) for number in range(20)],
    ]
    told = drift(write(tmp_path / "a.mcap", events))
    found = [(each["what"], each["kind"], round(each["t_s"], 3)) for each in told["happenings"]]
    assert found == [
        ("mode", "held", 2.0),
        ("pattern", "operator", 3.0),
        ("fault", "stuck+", 3.0),
        ("fault", "weak", 4.0),
        ("silence", "", 17.0),
        ("controller", "", 18.0),
        ("tracker", "", 19.0),
    ]
    held, published, stuck, _, silence, *_ = told["happenings"]
    assert (held["mode_s"], published["pattern"], stuck["detail"]) == (1.0, 9, "element 5 (0.90)")
    assert (silence["amount"], told["silent_s"]) == (pytest.approx(12.05), pytest.approx(12.05))
    assert told["modes"]["held"] == pytest.approx(1 / (19.95 - 12.05))
    assert (told["lost"], told["faults"]) == (3, [])
    out = capsys.readouterr().out
    for text in ("12.05 s without a state", "controller restarted", "tracker restarted", "pattern, cause operator"):
        assert text in out


def test_a_mode_without_end_is_told_so(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A log that ends while the pattern is held."""
    (told,) = drift(write(tmp_path / "a.mcap", [*steady(0, 2), *steady(2, 3, mode=Mode.HELD)]))["happenings"]
    assert (told["kind"], told["mode_s"]) == ("held", None)
    assert "to the end" in capsys.readouterr().out


def test_an_alarm_of_the_service_is_not_blamed_for_what_comes_later(tmp_path: Path) -> None:
    """It names the last burst worked off; a mode entered at the next one has another cause."""
    events: list[Event] = [*steady(0, 2), alarm(39, 2.01, "overload", action="larger blocks")]
    events += [*steady(2.05, 3, mode=Mode.HELD), *steady(3, 4)]
    overload, held = drift(write(tmp_path / "a.mcap", events))["happenings"]
    assert (overload["kind"], overload["mode"]) == ("overload", None)
    assert (held["what"], held["kind"], held["mode_s"]) == ("mode", "held", pytest.approx(0.95))


# Folding


def lossy(losses: int, every: float = 2.0) -> list[Event]:
    """A log that loses two bursts time and again."""
    events: list[Event] = []
    for number in range(losses):
        events += steady(number * every, (number + 1) * every)
        seq = round((number + 1) * every / 0.05)
        events.append(
            alarm(seq, (number + 1) * every, "gap", statistic=2.0, threshold=1.0, next_kind="", action="none")
        )
    return [*events, *steady(losses * every, (losses + 1) * every)]


def test_a_long_run_of_a_kind_is_one_row(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Ten gaps in a row are one row that says how many, until when, and what was lost in all; three stay three."""
    (told,) = drift(write(tmp_path / "a.mcap", lossy(10)))["happenings"]
    assert (told["kind"], told["count"], told["amount"]) == ("gap", 10, 20)
    assert (told["t_s"], told["last_s"]) == (2.0, 20.0)
    out = capsys.readouterr().out
    assert "alarm gap, 10 times until 20.00 s" in out
    assert "20 bursts lost" in out
    assert [each["count"] for each in drift(write(tmp_path / "b.mcap", lossy(3)))["happenings"]] == [1, 1, 1]


def test_of_a_folded_run_the_worst_is_told(tmp_path: Path) -> None:
    """The largest evidence and the deepest fall, whichever of them it was."""
    events: list[Event] = []
    for number in range(8):
        low = 2.0 if number == 5 else 6.0
        seq, begin = number * 100 + 60, number * 5.0
        events += [*steady(begin, begin + 3), alarm(seq, begin + 3, "channel", statistic=10.0 + number % 4)]
        events += [*steady(begin + 3, begin + 4, rate=low), *steady(begin + 4, begin + 5)]
    (told,) = drift(write(tmp_path / "a.mcap", events))["happenings"]
    assert (told["count"], told["statistic"]) == (8, 13.0)
    assert (told["rate_before"], told["rate_lowest"], told["back_s"]) == (8.0, 2.0, pytest.approx(1.0))


def test_ten_hours_stay_within_bounds_and_lose_nothing(tmp_path: Path) -> None:
    """Bins and rows are bounded; every alarm is in some row, every extreme in some bin, in table and picture."""
    rng = np.random.default_rng(11)
    step, count = 4.0, 9000
    rates = 8.0 + rng.normal(0, 0.1, count)
    rates[[1234, 5678]] = 0.5, 19.0
    kinds = ("channel", "unclear", "direct-path", "gain")
    events: list[Event] = []
    for number in range(count):
        if number % 9 == 5:
            events.append(alarm(number, number * step, kinds[number // 9 % 4]))
        events.append(state(number, number * step, float(rates[number])))
    told = drift(write(tmp_path / "long.mcap", events))
    assert len(told["happenings"]) <= MOST_ENTRIES
    assert sum(each["count"] for each in told["happenings"]) == sum(told["alarms"].values()) == 1000
    bins = told["bins"]
    assert MOST_BINS / 2 < len(bins["t_s"]) <= MOST_BINS
    width = bins["width_s"]
    # NumPy's least, mean and most of the same values in the same bins.
    found = np.array([bins["measured"][name] for name in ("least", "mean", "most")]).T
    edges = np.floor((START / 1e9 + np.arange(count) * step) / width)
    wanted = np.array(
        [[part.min(), part.mean(), part.max()] for part in np.split(rates, np.flatnonzero(np.diff(edges)) + 1)]
    )
    assert found == pytest.approx(wanted)
    assert (min(bins["measured"]["least"]), max(bins["measured"]["most"])) == (0.5, 19.0)
    texts = words(drawn(told))
    assert {"0 h", "1 h", "9 h"} <= set(texts)
    assert sum(1 for text in texts if text.endswith(" h")) == 10


@given(
    st.lists(st.tuples(st.integers(-(2**62), 2**62), st.floats(-1e6, 1e6)), min_size=1, max_size=200),
    st.integers(2, 20),
)
def test_bins_keep_every_value_whatever_the_times(values: list[tuple[int, float]], most: int) -> None:
    """In any order and over any span: never more bins than allowed, none twice, counts, sums and extremes kept."""
    bins = Bins(most)
    for t_ns, value in values:
        bins.at(t_ns).add("x", value)
    items = bins.items()
    assert len(items) <= most
    assert (items[-1][0] - items[0][0]) // bins.width_ns < most
    extents = [each.values["x"] for _, each in items]
    assert sum(each.count for each in extents) == len(values)
    assert sum(each.total for each in extents) == pytest.approx(sum(value for _, value in values), abs=1e-3)
    assert min(each.least for each in extents) == min(value for _, value in values)
    assert max(each.most for each in extents) == max(value for _, value in values)
    for middle, each in items:
        inside = [value for t_ns, value in values if t_ns // bins.width_ns == middle // bins.width_ns]
        assert (min(inside), max(inside)) == (each.values["x"].least, each.values["x"].most)


@pytest.mark.parametrize("scale", [1e-12, 1.0, 1e6])
def test_quantiles_are_right_to_half_a_percent(scale: float) -> None:
    """Against NumPy's `percentile` over a log-normal sample, over twelve decades of level."""
    values = scale * np.random.default_rng(3).lognormal(0.0, 1.5, 20_000)
    spread = Spread()
    for value in values:
        spread.add(float(value))
    told = spread.as_dict()
    assert told is not None
    wanted = np.percentile(values, [0, 5, 50, 95, 100], method="inverted_cdf")
    assert list(told.values()) == pytest.approx(wanted.tolist(), rel=0.005)


# The picture


def marks_of(picture: ElementTree.Element) -> list[tuple[str, float]]:
    """Alarms on the picture: what they are, and where they stand across."""
    found = []
    for path in picture.iter(f"{SVG}path"):
        if path.get("class") == "alarm":
            place = re.match(r"M([\d.]+) ", path.get("d", ""))
            assert place
            found.append((path.findtext(f"{SVG}title") or "", float(place[1])))
    return found


def test_marks_stand_where_the_axis_says(tmp_path: Path) -> None:
    """An alarm at 15 s stands midway between the labels 10 s and 20 s, one at 28 s a tenth before 30 s; both named."""
    events: list[Event] = [*steady(0, 15), alarm(300, 15.0, "motion", 14.0), *steady(15, 28)]
    events += [alarm(560, 28.0, "interference", receiver=1), *steady(28, 35)]
    picture = drawn(drift(write(tmp_path / "a.mcap", events)))
    texts = words(picture)
    (motion, x_motion), (interference, x_interference) = marks_of(picture)
    assert (motion, interference) == ("motion", "interference r1")
    assert {motion, interference} <= set(texts)
    assert x_motion == pytest.approx((texts["10 s"] + texts["20 s"]) / 2, abs=0.2)
    assert x_interference == pytest.approx(texts["30 s"] - 0.2 * (texts["30 s"] - texts["20 s"]), abs=0.2)


def test_lines_go_through_the_values_that_the_axis_says(tmp_path: Path) -> None:
    """A rate of 8 for 15 s, then 2: the measured line runs at the heights of the labels 8 and 2 of its axis."""
    picture = drawn(
        drift(write(tmp_path / "a.mcap", [*steady(0, 15), *steady(15, 30, rate=2.0), *steady(30, 31, rate=2.0)]))
    )
    heights: dict[str, float] = {}
    for text in picture.iter(f"{SVG}text"):
        heights.setdefault(text.text or "", float(text.get("y", "nan")) - 3.5)  # the uppermost panel's come first
    line = next(
        path.get("d", "")
        for path in picture.iter(f"{SVG}path")
        if path.get("stroke") == svg.FILL and path.get("fill") == "none"
    )
    points = [tuple(map(float, point.split())) for point in line[1:].split("L")]
    texts = words(picture)
    assert heights["2"] - heights["8"] > 50
    sooner, later = ([y for x, y in points if early == (x < texts["15 s"])] for early in (True, False))
    assert min(len(sooner), len(later)) > 50
    assert sooner[:-1] == pytest.approx([heights["8"]] * (len(sooner) - 1), abs=0.11)
    assert later[1:] == pytest.approx([heights["2"]] * (len(later) - 1), abs=0.11)


def test_many_alarms_stay_readable(tmp_path: Path) -> None:
    """Those that lie on one spot are one mark that counts them; words never overlap, and it is said what lacks them."""
    events: list[Event] = []
    for number in range(400):
        events += [
            *steady(number, number + 1, 0.25),
            alarm(4 * number + 4, number + 1, ("motion", "noise")[number % 2]),
        ]
    picture = drawn(drift(write(tmp_path / "a.mcap", events)))
    counts = [int(words.partition("×")[2] or 1) for words, _ in marks_of(picture)]
    assert sum(counts) == 400
    named = [text for text in picture.iter(f"{SVG}text") if re.match(r"(motion|noise)( ×|$)", text.text or "")]
    rows: dict[str, list[tuple[float, int]]] = {}
    for text in named:
        if text.get("text-anchor") is None:
            rows.setdefault(text.get("y", ""), []).append((float(text.get("x", "nan")), len(text.text or "")))
    assert sum(len(row) for row in rows.values()) > 20
    for row in rows.values():
        for (x, length), (following, _) in zip(sorted(row)[:-1], sorted(row)[1:], strict=True):
            assert x + 5.0 * length < following
    wordless = len(counts) - len(named)
    assert f"{wordless} more marks, without room for their names" in words(picture)


def test_the_last_pattern_and_its_faults_are_drawn(tmp_path: Path) -> None:
    """Elements in state +1 are filled, element i in column i // rows and row i % rows; faulty ones are crossed."""
    states = [1, -1, -1, 1, 1, -1, -1, -1, -1, -1, 1, 1]  # columns of three: + − −, + + −, − − −, − + +
    events: list[Event] = [
        pattern(0, 0.0, 1, Cause.FIRST, [-1] * 12),
        pattern(0, 0.0, 2, Cause.REFRESH, states),
        *steady(0, 2, faults=((4, "stuck+", 0.9), (4, "weak", 0.6), (11, "unmoved", 0.7))),
    ]
    told = drift(write(tmp_path / "a.mcap", events))
    assert told["pattern"] == {"id": 2, "t_s": 0.0, "states": "+--++-----++"}
    picture = drawn(told)
    (path,) = (
        each for each in picture.iter(f"{SVG}path") if each.get("fill") == svg.FILL and each.get("shape-rendering")
    )
    boxes = [
        tuple(map(float, box))
        for box in re.findall(r"M([\d.]+) ([\d.]+)h([\d.]+)v([\d.]+)h-[\d.]+z", path.get("d", ""))
    ]
    left, top, cell = min(box[0] for box in boxes), min(box[1] for box in boxes), boxes[0][3]
    filled = {
        (round((x - left) / cell) + column, round((y - top) / cell))
        for x, y, wide, _ in boxes
        for column in range(round(wide / cell))
    }
    assert filled == {(0, 0), (1, 0), (1, 1), (3, 1), (3, 2)}
    crosses = [each.get("d", "") for each in picture.iter(f"{SVG}path") if each.get("stroke") == svg.BAD]
    middles = []
    for cross in crosses:
        place = re.match(r"M([\d.]+) ([\d.]+)l([\d.]+)", cross)
        assert place
        x, y, arms = map(float, place.groups())
        middles.append((round((x + arms / 2 - left) / cell - 0.5), round((y + arms / 2 - top) / cell - 0.5)))
    assert middles == [(1, 1), (3, 2)]
    assert "4 columns, 3 rows, row 0 on top; filled: state +1; ×: 2 faulty" in words(picture)


def luminance(colour: str) -> float:
    """Relative luminance of #rrggbb, WCAG 2.1 (from memory)."""
    parts = [int(colour[at : at + 2], 16) / 255 for at in (1, 3, 5)]
    linear = [part / 12.92 if part <= 0.03928 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def test_colours_are_those_of_the_views_and_read_on_white() -> None:
    """The palette is one; each colour has the contrast of 4.5 to 1 that WCAG 2.1 (1.4.3, from memory) asks for."""
    ours = (svg.FILL, svg.GOOD, svg.CAUTION, svg.BAD, svg.QUIET)
    assert ours == palette.COLOURS
    for colour in (*ours, svg.INK):
        assert (luminance(svg.GROUND) + 0.05) / (luminance(colour) + 0.05) >= 4.5, colour


def test_a_picture_needs_nothing_from_elsewhere(blocked_log: Path) -> None:
    """Well-formed, with a title, all panels, both rates named, and no other host or file in it."""
    told = drift(blocked_log)
    text = Path(told["picture"]).read_text(encoding="utf-8")
    picture = drawn(told)
    assert picture.findtext(f"{SVG}title") == "link yard: what changed when"
    assert not re.search(r"https?://|href|url\(", text.replace("http://www.w3.org/2000/svg", ""))
    texts = words(picture)
    for wanted in (
        *("rate of the pattern in use, bit/s/Hz", "measured", "predicted", "innovation ratio", "noise on a tone, dB"),
        *("drift statistic over its threshold, highest", "receiver 0", "receiver 1", "over the whole time"),
        *("tracking", "acquiring", "reacquiring", "held", "last pattern, id 42", "20:26:40"),
    ):
        assert wanted in texts
    _, _, wide, high = map(float, picture.get("viewBox", "").split())
    for each in picture.iter(f"{SVG}text"):
        assert 0 <= float(each.get("x", "nan")) <= wide
        assert 0 <= float(each.get("y", "nan")) <= high


@pytest.mark.parametrize(
    ("span", "labels"),
    [
        (0.02, ["0.000 s", "0.002 s"]),
        (10.0, ["0 s", "1 s"]),
        (95.0, ["0 s", "10 s"]),
        (160.0, ["0 s", "15 s"]),
        (1200.0, ["0 min", "2 min"]),
        (36000.0, ["0 h", "1 h"]),
        (864000.0, ["0 d", "1 d"]),
    ],
)
def test_time_is_labelled_in_units_that_suit_it(span: float, labels: list[str]) -> None:
    """Seconds, minutes, hours or days, at round steps, from three to twelve marks."""
    marks = time_marks(span)
    assert [label for _, label in marks[:2]] == labels
    assert 3 <= len(marks) <= 12
    assert marks[-1][0] <= span * (1 + 1e-9)


@given(st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=20), st.integers(2, 6), st.booleans())
def test_axes_hold_all_values(values: list[float], parts: int, zero: bool) -> None:
    """Limits lie around the values, not much further apart than those, a whole number of round steps apart."""
    values = [abs(value) for value in values] if zero else values
    low, high, step = value_limits(values, parts, 0.5, zero=zero)
    slack = 1e-6 * step
    assert low - slack <= (0.0 if zero else min(values))
    assert max(values) <= high + slack
    assert round((high - low) / step) <= parts + 1
    assert (high - low) / step == pytest.approx(round((high - low) / step))
    assert high - low <= 4.0 * max(max(values) - (0.0 if zero else min(values)), 0.5)
    assert float(f"{step:.0e}") == pytest.approx(step)


# Where it comes from


def first_bursts(name: str, count: int, path: Path, said: bool = False) -> Path:
    """The first bursts of a recording of the yard; also, if wanted, what some other tracker said about them."""
    recording = LogReader(ROOT / "replay_logs" / name)
    with LogWriter(path, attachments=recording.attachments, clock_ns=lambda: START) as log:
        for number, record in zip(range(count), recording, strict=False):
            log.add(record.topic, record.body, record.log_time_ns, record.publish_time_ns)
            if said:
                kind, body, t_ns = encode("yard", state(number, number * 0.03, mode=Mode.HELD), 0, {})
                log.add(f"{kind}/yard", body, t_ns, t_ns)
            log.commit()
    return path


def test_a_log_without_states_is_replayed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """It says so, and the timeline is that of what the same replay writes into a log."""
    log = first_bursts("blocked-path.mcap", 320, tmp_path / "log.mcap")
    told = drift(log)
    assert (told["source"], told["own_settings"], told["states"]) == ("replayed", True, 320)
    assert "replayed under the log's own settings" in capsys.readouterr().out
    assert entry(["replay", str(log), "--quiet", "--out", str(tmp_path / "out.mcap")]) == 0
    again = drift(tmp_path / "out.mcap")
    assert again["source"] == "published"
    assert "as the tracker said it at the time" in capsys.readouterr().out
    for key in set(told) - {"logs", "picture", "source", "own_settings"}:
        assert told[key] == again[key], key


@pytest.fixture
def short(tmp_path: Path) -> Path:
    """Bursts, and states that say something else than a replay would."""
    return first_bursts("quiet-start.mcap", 60, tmp_path / "short.mcap", said=True)


def test_settings_ask_for_a_replay(short: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """What the tracker said at the time is then left aside, and the rates are those of the replay."""
    assert drift(short)["modes"] == {"held": 1.0}
    settings = tmp_path / "other.toml"
    settings.write_bytes(LogReader(short).attachments["settings.toml"] + b"\n[refresh]\nleast_gain = 0.5\n")
    told = drift(short, "--settings", settings)
    assert (told["source"], told["own_settings"]) == ("replayed", False)
    assert "replayed under other settings than the log's own" in capsys.readouterr().out
    assert "held" not in told["modes"]
    work = Replay(load(settings), tmp_path)
    work.run(short)
    predicted = [value for value in told["bins"]["predicted"]["mean"] if value is not None]
    assert np.mean(predicted) == pytest.approx(work.replayed.predicted.value)  # one state a bin
    assert told["patterns"]["first"] == 1
    assert sum(told["patterns"].values()) == work.replayed.patterns


def test_logs_continue_one_another(blocked_log: Path, tmp_path: Path) -> None:
    """Cut in two where the path is blocked, a log gives what it gives as one, effects that reach across included."""
    events = blocked()
    parts = [write(tmp_path / "a.mcap", events[:230]), write(tmp_path / "b.mcap", events[230:])]
    whole, cut = drift(blocked_log), drift(*parts)
    assert cut["logs"] == [str(part) for part in parts]
    assert Path(cut["picture"]) == tmp_path / "a.svg"
    for key in set(whole) - {"logs", "picture"}:
        assert whole[key] == cut[key], key


def test_other_links_and_unreadable_messages_are_left_out_and_told(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The settings in the log say which link is meant; what is not shown is said."""
    path = tmp_path / "a.mcap"
    with LogWriter(path, attachments={"settings.toml": SETTINGS.encode()}, clock_ns=lambda: START) as log:
        for number in range(40):
            for link, rate in (("dock", 3.0), ("yard", 8.0)):
                kind, body, t_ns = encode(link, state(number, 0.05 * number, rate), 0, {})
                log.add(f"{kind}/{link}", body, t_ns, t_ns)
        log.add("state/yard", b"\xc1", START, START)
        log.add("alarm/yard", b"\x80", START, START)
        log.add("camera", b"", START, START)
    told = drift(path)
    assert (told["link"], told["states"], told["unreadable"]) == ("yard", 40, 2)
    assert told["rate_measured"]["least"] == 8.0
    assert told["notes"] == ["links dock are left out: settings in the log name yard"]
    out = capsys.readouterr().out
    assert "unreadable  2 messages, left out" in out
    assert "note        links dock are left out" in out


def test_a_log_of_bursts_among_logs_with_states_is_told(short: Path, tmp_path: Path) -> None:
    """Nothing is mixed: what the tracker said is shown, and the log that holds none of it is named."""
    bare = first_bursts("quiet-start.mcap", 10, tmp_path / "bare.mcap")
    told = drift(short, bare)
    assert told["states"] == 60
    (note,) = told["notes"]
    assert note.startswith(f"{bare}: holds bursts but no states")


def test_a_damaged_log_is_shown_as_far_as_it_is_whole(blocked_log: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Cut in the middle of the blockage: the alarm is there, not back, and the cut is named."""
    data = blocked_log.read_bytes()
    blocked_log.write_bytes(data[: len(data) * 2 // 5])
    told = drift(blocked_log)
    assert 210 < told["states"] < 260
    assert (told["happenings"][1]["kind"], told["happenings"][1]["back_s"]) == ("direct-path", None)
    (damage,) = told["damage"]
    assert damage.startswith(f"{blocked_log}: byte ")
    out = capsys.readouterr().out
    assert f"damage      {damage}" in out
    assert "fell to 2.00, not back" in out


def test_what_a_log_says_steers_neither_terminal_nor_picture(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Control characters are replaced, markup stands as it is, and the picture stays well-formed."""
    kind = "<b>\x1b[31m & [red]\n\x00"
    events: list[Event] = [*steady(0, 2), alarm(40, 2.0, kind, action="a\x07]]>"), *steady(2, 3)]
    told = drift(write(tmp_path / "a.mcap", events))
    assert list(told["alarms"]) == ["<b>?[31m & [red]??"]
    assert marks_of(drawn(told))[0][0] == "<b>?[31m & [red]??"
    out = capsys.readouterr().out
    assert "alarm <b>?[31m & [red]??" in out
    assert "\x1b" not in out
    assert "a?]]>" in out


def test_numbers_that_cannot_be_are_left_out(tmp_path: Path) -> None:
    """NaN and infinity spoil neither figures nor JSON nor picture, nor do times that go back."""
    nan, inf = float("nan"), float("inf")
    events: list[Event] = [
        *steady(0, 2),
        state(40, 2.0, nan, innovation=(inf, nan), noise=(0.0, nan), statistic=inf, promise_kept=nan),
        state(41, 2.05, inf, innovation=(), noise=(), threshold=0.0, faults=((1, "weak", nan),)),
        alarm(42, 2.1, "motion", statistic=inf, threshold=nan),
        state(42, 1.0),
        *steady(2.15, 4),
    ]
    told = drift(write(tmp_path / "a.mcap", events))
    assert (told["rate_measured"]["least"], told["rate_measured"]["most"]) == (8.0, 8.0)
    assert told["innovation"]["most"] == 0.9
    assert told["promise_kept"] == 0.95
    motion = next(each for each in told["happenings"] if each["what"] == "alarm")
    assert (motion["statistic"], motion["threshold"]) == (None, None)
    assert "nan" not in Path(told["picture"]).read_text() + str(told["bins"])
    drawn(told)


@pytest.mark.parametrize("receivers", [1, 4, 64])
def test_any_number_of_receivers_is_drawn(receivers: int, tmp_path: Path) -> None:
    """Each by itself while they can be told apart, and all together when they are many."""
    noise = tuple(1e-11 * 1.05**number for number in range(receivers))
    told = drift(write(tmp_path / "a.mcap", steady(0, 5, noise=noise, innovation=(1.0,) * receivers)))
    assert len(told["noise_db"]) == receivers
    texts = words(drawn(told))
    assert ("noise on a tone, dB, 64 receivers together" in texts) == (receivers == 64)
    assert ("receiver 3" in texts) == (receivers == 4)


# The picture as a file, and mistakes


def test_the_picture_lies_beside_the_log_and_overwrites_nothing(blocked_log: Path, tmp_path: Path) -> None:
    """Under the log's name, else the next that is free; or where it is told to."""
    assert drift(blocked_log)["picture"] == str(tmp_path / "blocked.svg")
    (tmp_path / "blocked.svg").write_text("mine")
    assert drift(blocked_log)["picture"] == str(tmp_path / "blocked-2.svg")
    assert drift(blocked_log)["picture"] == str(tmp_path / "blocked-3.svg")
    assert (tmp_path / "blocked.svg").read_text() == "mine"
    assert drift(blocked_log, "--svg", tmp_path / "here.svg")["picture"] == str(tmp_path / "here.svg")


def mistakes(folder: Path) -> dict[str, tuple[list[str | Path], str]]:
    """What a user may get wrong, and what the line must say."""
    good = write(folder / "good.mcap", steady(0, 1))
    notes = folder / "notes.mcap"
    notes.write_text("Tuesday: moved the mast.\n" * 50)
    nothing = write(folder / "nothing.mcap", [])
    recording = next(iter(LogReader(ROOT / "replay_logs" / "quiet-start.mcap")))
    bare = folder / "bare.mcap"
    with LogWriter(bare, clock_ns=lambda: START) as log:
        log.add(recording.topic, recording.body, START, START)
    taken = folder / "taken.svg"
    taken.write_text("mine")
    wrong = folder / "wrong.toml"
    wrong.write_text("[link]\nname = 3\n")
    other = folder / "other.toml"
    other.write_text(SETTINGS.replace('"yard"', '"dock"'))
    return {
        "no such log": ([folder / "nowhere.mcap"], "nowhere.mcap: there is no such file"),
        "no log": ([notes], "notes.mcap: not a log"),
        "nothing": ([nothing], "nothing.mcap: holds neither states nor bursts"),
        "no settings": ([bare], "bare.mcap: holds no settings; give them with --settings"),
        "wrong settings": ([good, "--settings", wrong], "wrong.toml: link.name"),
        "no such settings": ([good, "--settings", folder / "no.toml"], "no.toml: there is no such file"),
        "another link": ([bare, "--settings", other], "holds no bursts of link 'dock', but of yard"),
        "states alone": ([good, "--settings", other], "good.mcap: no burst in it could be used"),
        "picture exists": ([good, "--svg", taken], "taken.svg: exists already, nothing is overwritten"),
        "no folder": ([good, "--svg", folder / "a" / "b.svg"], "b.svg: cannot be written: No such file"),
        "no folder for figures": ([good, "--json", folder / "a" / "b.json"], "there is no folder"),
    }


@pytest.mark.parametrize(
    "name",
    [
        *("no such log", "no log", "nothing", "no settings", "wrong settings", "no such settings", "another link"),
        *("states alone", "picture exists", "no folder", "no folder for figures"),
    ],
)
def test_mistakes_are_one_line(name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Exit status 2, one line that says which file and what to do, and no picture is left behind."""
    arguments, wanted = mistakes(tmp_path)[name]
    try:
        status = entry(["drift", *map(str, arguments), "--quiet"])
    except SystemExit as leaving:
        status = int(leaving.code or 0)
    out, err = capsys.readouterr()
    assert (status, out, err.count("\n")) == (2, "", 1)
    assert wanted in err
    assert [path.name for path in tmp_path.glob("*.svg")] == ["taken.svg"]
    assert (tmp_path / "taken.svg").read_text() == "mine"


def test_the_readme_tells_every_key(blocked_log: Path) -> None:
    """The tables under the command's heading name the keys of the JSON file, of a happening and of the bins."""
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    section = readme.partition("\n## What changed when\n")[2].partition("\n## ")[0]
    tables = [
        {key for row in table.splitlines() for key in re.findall(r"`([a-z_0-9]+)`", row.split("|")[1])}
        for table in re.findall(r"(?:^\|.*\n)+", section, re.MULTILINE)
    ]
    told = drift(blocked_log)
    assert tables[0] == set(told)
    assert tables[1] == set(told["happenings"][0])
    assert tables[2] | {"noise_1"} == set(told["bins"])
