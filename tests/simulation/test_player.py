"""The stand-in testbed as a process: sockets, pace, signals, mistakes."""

import os
import signal
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from itertools import pairwise
from pathlib import Path
from types import SimpleNamespace
from typing import cast

import msgpack
import numpy as np
import pytest
import zmq

from tracker.engine.burst import Burst
from tracker.engine.events import Cause, Pattern, Plan
from tracker.engine.panel import unpack
from tracker.messages import decode_pilots, encode_pattern, encode_plan
from tracker.simulation.__main__ import main
from tracker.simulation.player import Endpoints, Player
from tracker.simulation.searcher import Searcher
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import scenario

PATIENCE_MS = 20_000


@pytest.fixture
def wires() -> Iterator[SimpleNamespace]:
    """Give a tracker's side: bound to publish, listening to pilots that are yet to come."""
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    # Not pytest's own folder: names of such sockets may have 107 characters only.
    with tempfile.TemporaryDirectory() as folder:
        pilots = f"ipc://{folder}/pilots"
        listening, publishing = context.socket(zmq.SUB), context.socket(zmq.PUB)
        listening.setsockopt(zmq.RCVTIMEO, PATIENCE_MS)
        listening.setsockopt(zmq.RECONNECT_IVL, 10)  # the process binds later; then it is heard at once
        listening.subscribe(b"")
        listening.connect(pilots)
        publishing.bind("tcp://127.0.0.1:*")
        publish = publishing.getsockopt_string(zmq.LAST_ENDPOINT)
        yield SimpleNamespace(pilots=pilots, publish=publish, listening=listening, publishing=publishing)
        context.destroy(linger=0)


def play(wires: SimpleNamespace, *more: str) -> subprocess.Popen[str]:
    root = Path(__file__).parents[2]
    environment = {**os.environ, "PYTHONPATH": str(root), "OPENBLAS_NUM_THREADS": "1"}
    command = [sys.executable, "-m", "tracker.simulation", "play", *more]
    command += ["--pilots", wires.pilots, "--publish", wires.publish]
    return subprocess.Popen(command, stderr=subprocess.PIPE, text=True, env=environment, cwd=root)


def pattern(pattern_id: int, states: np.ndarray) -> bytes:
    event = Pattern(pattern_id, 1, 0, 0, states, 1.0, 1.0, 0.0, 2.0, Cause.REFRESH, 3)
    return encode_pattern("yard", event, 0)


def test_bursts_go_out_and_patterns_come_into_force(wires: SimpleNamespace) -> None:
    """A pattern published by the tracker shows by its id and its frames; SIGTERM ends the process with status 0."""
    states = np.where(np.arange(256) % 5 == 0, 1, -1).astype(np.int8)
    process = play(wires, "quiet", "--frames", "16", "--bursts-per-s", "50", "--truth-every", "0.05")
    try:
        topics, burst, truth = set(), None, None
        # Whether the subscription has reached the publisher cannot be seen: publish until it shows.
        while burst is None or burst.pattern_id != 3 or truth is None or truth["pattern"] != 3:
            wires.publishing.send_multipart([b"pattern/yard", pattern(3, states)])
            topic, body = wires.listening.recv_multipart()
            topics.add(topic)
            if topic == b"pilots/yard":
                burst = decode_pilots(body, "yard", None)
            else:
                truth = msgpack.unpackb(body)
        process.send_signal(signal.SIGTERM)
        _, said = process.communicate(timeout=PATIENCE_MS / 1e3)
    finally:
        process.kill()
    assert process.returncode == 0
    assert "stopped:" in said
    assert topics == {b"pilots/yard", b"truth/yard"}
    shown = unpack(burst.patterns, 256)
    assert np.any(np.all(shown == states, axis=1))
    assert set(truth) == {"v", "link", "run", "seq", "t_ns", "pattern", "rate", "best", "event"}
    assert (truth["v"], truth["link"], truth["run"], truth["event"]) == (1, "yard", burst.run, None)
    assert 0 < truth["rate"] < truth["best"]


def test_plans_are_obeyed_and_truth_says_what_is_left_for_payload(wires: SimpleNamespace) -> None:
    """A plan published shows bit by bit in the bursts of scene `payload`, one frame in 7, and in the net rate."""
    patterns = np.random.default_rng(2).integers(0, 256, (16, 32), dtype=np.uint8)
    plan = encode_plan("yard", Plan(1, 0, 0, 256, patterns, 0, 7))
    process = play(wires, "payload", "--truth-every", "0.05")
    try:
        burst, truth = None, None
        while burst is None or burst.frames != 16 or truth is None or not truth["net"]:
            wires.publishing.send_multipart([b"plan/yard", plan])
            topic, body = wires.listening.recv_multipart()
            if topic == b"pilots/yard":
                burst = decode_pilots(body, "yard", None)
            else:
                truth = msgpack.unpackb(body)
        process.send_signal(signal.SIGTERM)
        process.communicate(timeout=PATIENCE_MS / 1e3)
    finally:
        process.kill()
    assert process.returncode == 0
    np.testing.assert_array_equal(burst.patterns, patterns)
    assert burst.dt_ns == 7 * scenario("payload").testbed.frame_ns
    assert truth["net"] == pytest.approx(6 / 7 * truth["rate"])


def test_play_ends_by_itself_after_the_bursts_asked_for(wires: SimpleNamespace) -> None:
    """Numbers run from 0 without a gap, times ascend at the pace, and the process says what it did."""
    process = play(wires, "slow-carrier", "--bursts", "80", "--bursts-per-s", "40", "--no-truth", "--link", "yard")
    try:
        bursts: list[Burst] = []
        while not bursts or bursts[-1].seq < 79:
            topic, body = wires.listening.recv_multipart()
            assert topic == b"pilots/yard"
            bursts.append(decode_pilots(body, "yard", None))
        _, said = process.communicate(timeout=PATIENCE_MS / 1e3)
    finally:
        process.kill()
    assert process.returncode == 0
    assert "80 bursts sent" in said
    numbers = [burst.seq for burst in bursts]
    assert numbers == list(range(numbers[0], 80))
    gaps = np.diff([burst.t_ns for burst in bursts])
    assert np.all(gaps >= 25_000_000)


class Hands:
    """A clock that a test moves on; it moves by itself a little at every look."""

    def __init__(self, step_ns: int) -> None:
        self.now_ns, self.step_ns = 1_700_000_000_000_000_000, step_ns

    def __call__(self) -> int:
        self.now_ns += self.step_ns
        return self.now_ns


def test_machine_too_slow_for_the_pace_keeps_times_true_and_says_so(wires: SimpleNamespace) -> None:
    """When every look at the clock costs 4 ms, bursts begin later than asked, never at times that have passed."""
    said: list[str] = []
    clock = Hands(step_ns=4_000_000)
    config = TestbedConfig(scenario("quiet").config, frames=4)
    with Endpoints(wires.pilots, wires.publish, "yard") as endpoints:
        began_ns = clock.now_ns
        player = Player(Testbed(config, 1, start_ns=began_ns), endpoints, "yard", 250.0, clock, said.append)
        player.run(most_bursts=500)
        assert player.played.late > 400
    assert player.played.bursts == 500
    assert any("where 250 were asked for" in line for line in said)
    bursts = []
    while wires.listening.poll(200):
        bursts.append(decode_pilots(wires.listening.recv_multipart()[1], "yard", None))
    times = [burst.t_ns for burst in bursts]
    assert times == sorted(times)
    assert all(after - before >= 4_000_000 for before, after in pairwise(times))


class Gone:
    """A searcher whose process has been killed."""

    busy = False

    def ask(self, *_: object) -> None:
        raise BrokenPipeError

    def answer(self) -> None:
        return None


def test_bursts_go_on_when_the_search_has_died(wires: SimpleNamespace) -> None:
    """The user is told once; bursts are worth more than knowing what is true."""
    said: list[str] = []
    testbed = Testbed(TestbedConfig(scenario("quiet").config, frames=4), 1)
    with Endpoints(wires.pilots, wires.publish, "yard") as endpoints:
        player = Player(testbed, endpoints, "yard", 500.0, Hands(100_000), said.append, cast(Searcher, Gone()))
        player.run(most_bursts=20)
    assert player.played.bursts == 20
    assert len(said) == 1
    assert "bursts go on" in said[0]


def test_searcher_answers_what_the_testbed_itself_reports() -> None:
    """Rate, pattern and words of the other process are those of a testbed made here from the same seed."""
    config, start_ns = scenario("blocked").testbed, 5_000_000_000
    states = np.where(np.arange(256) % 7 == 0, 1, -1).astype(np.int8)
    searcher = Searcher(config, 3, start_ns, 50)
    try:
        searcher.ask(start_ns + 20_000_000_000, 12, states)
        assert searcher.wait(PATIENCE_MS / 1e3)
        known = searcher.answer()
        assert searcher.answer() is None
    finally:
        searcher.close()
    testbed = Testbed(config, 3, start_ns=start_ns)
    testbed.apply(12, states)
    report = testbed.report(start_ns + 20_000_000_000)
    assert known is not None
    assert (known.t_ns, known.pattern_id, known.rate) == (report.t_ns, 12, report.rate)
    assert known.happening == "direct path blocked"
    assert known.best > known.rate


def test_unusable_pattern_is_reported_and_the_one_in_force_stays(wires: SimpleNamespace) -> None:
    """A pattern of the wrong size and a body that is none: one line, no end."""
    said: list[str] = []
    testbed = Testbed(TestbedConfig(scenario("quiet").config, frames=4), 1)
    with Endpoints(wires.pilots, wires.publish, "yard") as endpoints:
        player = Player(testbed, endpoints, "yard", 500.0, Hands(100_000), said.append)
        while player.played.refused < 2:
            wires.publishing.send_multipart([b"pattern/yard", pattern(1, np.ones(10, dtype=np.int8))])
            wires.publishing.send_multipart([b"pattern/yard", b"no map"])
            player.run(most_bursts=player.played.bursts + 1)
    assert len(said) == 1
    assert "256 elements" in said[0] or "no map" in said[0] or "pattern" in said[0]
    np.testing.assert_array_equal(testbed.states, 1)


def test_endpoint_in_use_is_a_mistake_of_one_line(wires: SimpleNamespace, capsys: pytest.CaptureFixture[str]) -> None:
    """Two testbeds cannot bind one endpoint: exit status 2 and a hint."""
    arguments = ["play", "quiet", "--pilots", wires.publish, "--publish", wires.pilots, "--no-truth", "--bursts", "1"]
    assert main(arguments) == 2
    error = capsys.readouterr().err
    assert "--pilots" in error
    assert "cannot be used" in error
    assert error.count("\n") == 1


@pytest.mark.parametrize(
    ("arguments", "hint"),
    [
        (["play", "noisy"], "invalid choice: 'noisy'"),
        (["play", "quiet", "--frames", "0"], "'0' is not a whole number above zero"),
        (["play", "quiet", "--bursts-per-s", "nan"], "'nan' is not a number above zero"),
        (["play", "quiet", "--link", "The Yard"], "cannot name a link"),
        (["record", "quiet"], "OUT.mcap"),
    ],
)
def test_mistakes_in_arguments_are_one_line(
    arguments: list[str], hint: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """Exit status 2; the line says what was wrong."""
    with pytest.raises(SystemExit) as ended:
        main(arguments)
    error = capsys.readouterr().err
    assert ended.value.code == 2
    assert hint in error
    assert error.count("\n") == 1


def test_burst_too_large_to_travel_well_is_refused(wires: SimpleNamespace, capsys: pytest.CaptureFixture[str]) -> None:
    """Bursts over 512 KB end the play with a line that says what to do."""
    arguments = ["play", "quiet", "--frames", "1000", "--pilots", wires.pilots, "--publish", wires.publish]
    assert main([*arguments, "--no-truth", "--bursts", "1"]) == 2
    assert "use fewer --frames" in capsys.readouterr().err


def test_settings_and_list_commands_print_what_they_promise(capsys: pytest.CaptureFixture[str]) -> None:
    """`list` names every scene; `settings` prints the TOML of one."""
    assert main(["list"]) == 0
    assert "two-carriers" in capsys.readouterr().out
    assert main(["settings", "moving", "--link", "north"]) == 0
    assert capsys.readouterr().out == scenario("moving").settings("north")
