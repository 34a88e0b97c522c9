"""The views against encoded messages: what is published is what a person sees, live, plainly or on a small screen."""

import io
import itertools
import statistics
import threading
import time
from collections.abc import Iterator
from dataclasses import replace
from typing import cast

import msgpack
import numpy as np
import pytest
import zmq
from hypothesis import given
from hypothesis import strategies as st
from rich.console import Console

from tracker.engine.events import Alarm, Cause, Mode, Pattern, Plan, State
from tracker.messages import encode_alarm, encode_pattern, encode_plan, encode_state
from tracker.view import plain
from tracker.view.model import LinkModel
from tracker.view.sections import Scene
from tracker.view.stream import Stream, take
from tracker.view.terminal import screen, show
from tracker.view.watch import watch

STATE = State(
    run=7,
    seq=1200,
    t_ns=0,
    mode=Mode.TRACKING,
    bursts=1201,
    frames=76864,
    lost=0,
    duplicate=0,
    refused=0,
    dropped_frames=0,
    noise=(1e-3, 1e-2),
    innovation=(1.02, 1.31),
    rate_measured=5.21,
    rate_predicted=5.43,
    offset_hz=-3.5,
    phase_rad=(0.0, 0.0),
    time_constant_ms=500.0,
    pattern=77,
    faults=((5, "unmoved", 0.98),),
    together=1,
    statistic=2.25,
    threshold=9.0,
)
PATTERN = Pattern(
    id=77,
    run=7,
    seq=1199,
    t_ns=0,
    states=np.where(np.arange(12) % 3 == 0, 1, -1).astype(np.int8),
    rate=5.43,
    rate_low=5.05,
    rate_before=5.31,
    rate_bound=6.0,
    cause=Cause.REFRESH,
    steps=40,
)
ALARM = Alarm(
    run=7,
    seq=1190,
    t_ns=50_000_000,
    since_ns=7_000_000,
    kind="motion",
    receiver=1,
    statistic=9.5,
    threshold=9.0,
    next_kind="channel",
    action="memory cut to 120 ms",
)


def truth(event: str | None = None, **changes: object) -> bytes:
    """Encode what a stand-in testbed knows."""
    values = {"v": 1, "link": "yard", "run": 7, "seq": 1, "t_ns": 0, "pattern": 77, "rate": 5.2, "best": 5.5}
    body: bytes = msgpack.packb({**values, "event": event, **changes})
    return body


def full_model(now: float = 100.0) -> LinkModel:
    """A model that has heard one of everything."""
    model = LinkModel("yard")
    take(model, "pattern", encode_pattern("yard", PATTERN, 1500), now)
    take(model, "state", encode_state("yard", STATE, {"estimate": 800, "refresh": 600, "whole": 1500}), now)
    take(model, "alarm", encode_alarm("yard", ALARM), now)
    take(model, "truth", truth("a straddle carrier drives off"), now)
    return model


def shown(
    model: LinkModel, width: int, height: int, *, now: float = 100.5, shape: tuple[int, int] | None = (4, 3)
) -> str:
    """Render the screen as text."""
    console = Console(width=width, height=height, file=io.StringIO(), record=True, force_terminal=True)
    scene = Scene(model, "tcp://127.0.0.1:5601", shape, since=90.0, now=now)
    console.print(screen(scene, width, height), height=height)
    return console.export_text()


class Halting:
    """A stream in which nothing comes, on a machine that stands still for seven seconds now and then."""

    def __init__(self) -> None:
        self.model, self.now, self.calls = LinkModel("yard"), 0.0, 0

    def receive(self, seconds: float) -> int:
        self.calls += 1
        self.now += 7.3 if self.calls % 20 == 0 else max(seconds, 0.05)
        return 0


def test_a_second_is_not_needed_for_a_line() -> None:
    """Who watches for less than a second, or on a machine that stands still, gets one line all the same."""
    out = io.StringIO()
    plain.write_lines(cast(Stream, Halting()), out, lambda: False)
    assert out.getvalue().endswith("yard, nothing heard yet, waiting for 0 s\n")
    assert out.getvalue().count("\n") == 1


def test_a_pause_of_the_machine_gives_one_line(monkeypatch: pytest.MonkeyPatch) -> None:
    """Lines come about a second apart, and a late one does not bring the next one forward."""
    stream, times = Halting(), list[float]()

    class Timed(io.StringIO):
        def write(self, text: str) -> int:
            times.append(stream.now)
            return super().write(text)

    monkeypatch.setattr(time, "monotonic", lambda: stream.now)
    plain.write_lines(cast(Stream, stream), Timed(), lambda: stream.now < 60.0)
    assert 20 < len(times) < 60
    assert min(b - a for a, b in itertools.pairwise(times)) > 0.9


def test_what_sounding_takes_is_shown_beside_the_rate() -> None:
    """One frame in 12, 6 of 8 planned ones in service, the net rate by the plan and by the testbed; in one line too."""
    model = full_model()
    served = np.arange(8) >= 2
    plan = Plan(7, 1200, 0, 12, np.zeros((8, 2), np.uint8), 0, 12, served, 4.95)
    take(model, "plan", encode_plan("yard", plan), 100.0)
    take(model, "truth", truth(net=5.05), 100.0)
    text = shown(model, 140, 44)
    assert "net of sounding 5.05" in text
    assert "1 frame in 12, 75 % in service" in text
    assert "net rate 4.95 predicted" in text
    line = plain.line(model, 100.5, 90.0)
    assert "net 5.05" in line
    assert "sounding 1 frame in 12, 75 % in service" in line
    assert model.net_so_far == pytest.approx(5.05 / 5.2)


def test_nothing_is_said_of_sounding_where_nothing_is_planned() -> None:
    """Neither a net rate nor a share."""
    text = shown(full_model(), 140, 44) + plain.line(full_model(), 100.5, 90.0)
    assert "sounding" not in text


def test_the_screen_shows_the_numbers_that_were_published() -> None:
    """Rates, innovation, drift, noise in dB, latency, counts, faults, alarms: all readable as published."""
    text = shown(full_model(), 140, 44)
    for wanted in (
        "yard",
        "● tracking",
        "measured 5.21",
        "predicted 5.43",
        "in force 5.20",
        "━ best 5.50",
        f"{100 * 5.2 / 5.5:.1f} % of the best possible",
        "1.31",  # the worst innovation
        "2.25 of 9.00",
        "noise -30.0 dB, innovation 1.02",  # 10 log10(1e-3)
        "noise -20.0 dB, innovation 1.31",
        "1.50 ms median",
        "estimate, 0.80 ms",
        "1,201 (76,864 frames)",
        "lost 0, duplicate 0, refused 0",
        "gains 0.12, holds 5.05",
        "500 ms",
        "-3.5 Hz",
        "5 unmoved",
        "Pattern 77  in use  4 × 3",
        "1 motion",
        "motion at receiver 1, else channel: 9.5 against 9, began 43 ms before; memory cut to 120 ms",
        "a straddle carrier drives off",
    ):
        assert wanted in text
    assert shown(full_model(), 140, 44, shape=None).count("(guessed)") == 1


def test_the_map_on_the_screen_is_the_pattern_in_use_not_the_latest() -> None:
    """The controller says which pattern it uses; a newer one that it has not taken up yet is not shown."""
    model = full_model()
    take(model, "pattern", encode_pattern("yard", replace(PATTERN, id=78, states=-PATTERN.states), 1500), 100.0)
    text = shown(model, 140, 44)
    assert "Pattern 77  in use" in text
    # Every third element is +1: in columns of three, those are the first row.
    lines = text.splitlines()
    top = next(number for number, line in enumerate(lines) if "╭" in line)
    left = lines[top].index("╭")
    assert [line[left : left + 10] for line in lines[top + 1 : top + 4]] == ["│████████│", "│        │", "│   x    │"]
    take(model, "state", encode_state("yard", replace(STATE, pattern=None), {}), 100.0)
    assert "Pattern 78  published last" in shown(model, 140, 44)


@pytest.mark.parametrize(
    ("width", "height"), list(itertools.product((1, 8, 30, 44, 60, 99, 100, 250), (1, 5, 12, 24, 27, 60)))
)
def test_no_size_of_terminal_is_too_small(width: int, height: int) -> None:
    """Whatever the size, and whether anything was heard, the screen fits; from 30 × 5 on the mode can be read."""
    for model in (LinkModel("yard"), full_model()):
        lines = shown(model, width, height).splitlines()
        assert len(lines) <= height
        assert max(map(len, lines), default=0) <= width
    if width >= 30 and height >= 5:
        assert "tracking" in shown(full_model(), width, height)


def test_a_silent_service_is_told_apart_from_a_quiet_one() -> None:
    """Before the first message the view says that it waits, and where; after a few seconds without one, since when."""
    waiting = shown(LinkModel("yard"), 120, 30)
    assert "Nothing heard from tcp://127.0.0.1:5601 for 10 s" in waiting
    assert "silent" not in shown(full_model(), 120, 30, now=101.0)
    assert "silent for 20 s" in shown(full_model(), 120, 30, now=120.0)


def test_latency_is_over_the_last_minute() -> None:
    """Median and 99th percentile of what was published in the last minute (against Python's statistics module)."""
    rng = np.random.default_rng(3)
    values = [int(value) for value in rng.integers(500, 9000, 200)]
    model = LinkModel("yard")
    take(model, "pattern", encode_pattern("yard", PATTERN, 10**9), 0.0)
    for number, value in enumerate(values):
        take(model, "pattern", encode_pattern("yard", PATTERN, value), 70.0 + number / 10)
    found = model.latency_ms(90.0)
    assert found is not None
    assert found[0] == pytest.approx(statistics.median(values) / 1e3)
    assert found[1] == pytest.approx(statistics.quantiles(values, n=100, method="inclusive")[98] / 1e3)
    assert model.latency_ms(1000.0) is None


def test_achieved_is_the_ratio_of_sums() -> None:
    """Over a stretch, what was achieved is the rate in force over the best, both summed."""
    model = LinkModel("yard")
    assert model.achieved is None
    for rate, best in ((1.0, 4.0), (3.0, 4.0), (2.0, 2.0)):
        take(model, "truth", truth(rate=rate, best=best), 0.0)
    assert model.achieved == 1.0
    assert model.achieved_so_far == pytest.approx(6.0 / 10.0)


def test_what_happens_is_noted_once() -> None:
    """Changes of mode, new runs, losses and alarms are noted; what repeats is counted on one line."""
    model = LinkModel("yard")
    for seq in range(50):
        take(model, "state", encode_state("yard", replace(STATE, seq=seq, lost=seq // 10), {}), float(seq))
    take(model, "state", encode_state("yard", replace(STATE, run=8, mode=Mode.HELD, lost=4), {}), 60.0)
    assert [(note.kind, str(note)) for note in model.notes] == [
        ("mode", "tracking"),
        ("fault", "elements do not follow: 5 unmoved"),
        ("lost", "bursts lost on the way in (4 times)"),
        ("run", "the controller started anew"),
        ("mode", "held"),
    ]


def test_elements_are_named_when_they_fail_and_when_they_follow_again() -> None:
    """New ones with their fault, many cut short; a fault that only gets another name is no news."""
    model = LinkModel("yard")
    many = tuple((element, "weak", 0.96) for element in range(10))
    for seq, faults in enumerate([(), STATE.faults, ((5, "stuck-", 0.99),), (), many]):
        take(model, "state", encode_state("yard", replace(STATE, seq=seq, faults=faults), {}), float(seq))
    assert [str(note) for note in model.notes if note.kind == "fault"] == [
        "elements do not follow: 5 unmoved",
        "elements follow again: 5",
        "elements do not follow: " + ", ".join(f"{element} weak" for element in range(8)) + " and 2 more",
    ]
    assert "faulty elements 10" in plain.line(model, 5.0, 0.0)


def test_messages_cannot_steer_the_terminal() -> None:
    """Control characters in a published text are not passed on (ECMA-48: escape is 0x1B)."""
    model = LinkModel("yard")
    take(model, "alarm", encode_alarm("yard", replace(ALARM, action="\x1b[2Jgone\n\x9b1m")), 100.0)
    state = replace(STATE, faults=((1, "weak\x1b[2J", 0.5),))
    take(model, "state", encode_state("yard", state, {"\x1b[2J": 5}), 100.0)
    for text in (shown(model, 140, 44), plain.line(model, 100.0, 90.0), str(model.notes[0])):
        assert "\x1b" not in text
        assert "\x9b" not in text


@given(st.sampled_from(["state", "pattern", "alarm", "truth"]), st.binary(max_size=200))
def test_bytes_that_are_no_message_are_counted_not_fatal(kind: str, body: bytes) -> None:
    """Whatever arrives, the view goes on and says how much it could not read."""
    model = LinkModel("yard")
    take(model, kind, body, 0.0)
    assert model.unreadable == 1
    assert model.notes[-1].grave


def test_the_plain_line_holds_what_matters() -> None:
    """One line: mode, rates, innovation, drift as a share of the threshold, latency, counts."""
    line = plain.line(full_model(), 100.5, 90.0)
    for wanted in (
        "yard, tracking, burst 1201",
        "rate 5.21 predicted 5.43 best 5.50 achieved 94.5 %",
        "innovation 1.31",
        "drift 0.25 of threshold",  # 2.25 / 9
        "latency 1.5 / 1.5 ms",
        "lost 0 refused 0",
        "alarms 1",
    ):
        assert wanted in line
    assert "\n" not in line
    assert plain.line(LinkModel("yard"), 95.0, 90.0) == "yard, nothing heard yet, waiting for 5 s"


class Publisher:
    """Publishes one of everything again and again, on a free port of the loopback, until it is closed."""

    def __init__(self, *messages: tuple[bytes, bytes]) -> None:
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.PUB)
        self._messages = messages
        self._ended = threading.Event()
        self.endpoint = f"tcp://127.0.0.1:{self._socket.bind_to_random_port('tcp://127.0.0.1')}"
        self._thread = threading.Thread(target=self._run, daemon=True)
        self._thread.start()

    def _run(self) -> None:
        while not self._ended.wait(0.01):
            for message in self._messages:
                self._socket.send_multipart(message)

    def close(self) -> None:
        """End the thread and the socket."""
        self._ended.set()
        self._thread.join(5)
        self._context.destroy(linger=0)


@pytest.fixture
def publisher() -> Iterator[Publisher]:
    made = Publisher(
        (b"state/yard", encode_state("yard", STATE, {"estimate": 800})),
        (b"state/yard-2", encode_state("yard-2", replace(STATE, mode=Mode.HELD), {})),
        (b"pattern/yard", encode_pattern("yard", PATTERN, 1500)),
        (b"alarm/yard", encode_alarm("yard", ALARM)),
        (b"truth/yard", truth()),
        (b"pilots/yard", b"not for a view"),
    )
    yield made
    made.close()


def receive_until_complete(stream: Stream) -> None:
    """Receive until one of everything has come, for at most ten seconds."""
    until = time.monotonic() + 10.0
    model = stream.model
    while time.monotonic() < until and not (model.state and model.pattern and model.alarms and model.truth):
        stream.receive(0.05)


def test_a_view_hears_its_link_and_no_other(publisher: Publisher) -> None:
    """Over a real socket: all kinds of messages of this link, none of a link whose name begins alike."""
    with Stream(publisher.endpoint, link="yard") as stream:
        receive_until_complete(stream)
        model = stream.model
    assert model.state is not None
    assert model.state == STATE
    assert model.pattern is not None
    assert np.array_equal(model.pattern.states, PATTERN.states)
    assert model.truth is not None
    assert model.alarms["motion"] >= 1
    assert model.unreadable == 0
    assert {str(note) for note in model.notes if note.kind == "mode"} == {"tracking"}


def test_the_live_screen_follows_a_socket(publisher: Publisher) -> None:
    """On a terminal, the live screen shows what arrives, and gives the terminal back when it ends."""
    console = Console(width=140, height=44, file=io.StringIO(), force_terminal=True, legacy_windows=False)
    until = time.monotonic() + 10.0
    frames = 0
    with Stream(publisher.endpoint, link="yard") as stream:

        def running() -> bool:
            nonlocal frames
            heard = bool(stream.model.state and stream.model.pattern and stream.model.truth)
            frames += heard
            return frames < 3 and time.monotonic() < until

        show(stream, console, (4, 3), running)
    assert isinstance(console.file, io.StringIO)
    written = console.file.getvalue()
    assert "measured 5.21" in written
    assert "Pattern 77" in written
    # Alternate screen on, and off again (xterm control sequences, private modes 1049).
    assert written.index("\x1b[?1049h") < written.index("measured 5.21") < written.index("\x1b[?1049l")


def test_watch_without_a_terminal_writes_lines_and_ends_in_time(
    publisher: Publisher, capsys: pytest.CaptureFixture[str]
) -> None:
    """Where output is no terminal, watch writes plain lines and the events between them, and ends when told."""
    assert watch(publisher.endpoint, "yard", (4, 3), seconds=2.5) == 0
    out = capsys.readouterr().out
    assert "yard, tracking, burst 1201, rate 5.21 predicted 5.43" in out
    assert "! yard, alarm: motion at receiver 1" in out
    assert "\x1b" not in out


def test_watch_waits_for_a_service_that_is_not_there(capsys: pytest.CaptureFixture[str]) -> None:
    """Nothing listens at the endpoint: watch says so in each line and ends without an error."""
    with zmq.Context() as context, context.socket(zmq.PUB) as unused:
        port = unused.bind_to_random_port("tcp://127.0.0.1")
    assert watch(f"tcp://127.0.0.1:{port}", "yard", seconds=1.3) == 0
    assert "yard, nothing heard yet" in capsys.readouterr().out
