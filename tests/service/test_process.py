"""The service as a process: how it starts, how it ends, and what is left for the next one."""

import os
import signal
import socket
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from mcap.reader import make_reader

from tests.service.station import PATIENCE_S, RESTLESS, ROOT, Controller, Nursery, bursts
from tracker.basis_file import LearnedBasis, pack_basis
from tracker.engine.events import Mode
from tracker.logs import LogReader, LogWriter
from tracker.messages import decode_pattern, decode_pilots
from tracker.offline.rerun import Replay


def logs(controller: Controller) -> list[Path]:
    """The journal's files, in the order of their names."""
    return sorted(controller.journal.glob("*.mcap"))


def finished(path: Path) -> bool:
    """Whether a log has its end mark; if so, the library's indexed reader, which needs footer and index, accepts it."""
    if not path.read_bytes().endswith(b"\x89MCAP0\r\n"):  # the magic bytes of the open MCAP specification
        return False
    with path.open("rb") as file:
        assert make_reader(file).get_summary() is not None
    return True


def journaled(path: Path) -> list[tuple[int, int]]:
    """Bursts in a log, run and seq."""
    found = [decode_pilots(each.body, "yard", None) for each in LogReader(path) if each.topic == "pilots/yard"]
    return [(burst.run, burst.seq) for burst in found]


def replayed(paths: list[Path], out: Path | None = None) -> Replay:
    """Replay logs one after another."""
    writer = LogWriter(out, clock_ns=lambda: 0) if out else None
    work = Replay(None, paths[0].parent, writer)
    for path in paths:
        work.run(path)
    if writer:
        writer.close()
    return work


def published(path: Path) -> dict[int, bytes]:
    """Patterns in a log: states by id."""
    patterns = [decode_pattern(each.body).event for each in LogReader(path) if each.topic == "pattern/yard"]
    return {pattern.id: pattern.states.tobytes() for pattern in patterns}


def assert_same(work: Replay, patterns: int) -> None:
    """Every pattern of the log came out of the replay bit by bit, and no other."""
    assert work.comparison.first_difference is None
    assert work.comparison.unmatched == (0, 0)
    assert work.comparison.same == patterns
    assert work.damage == []


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_ends_the_service_in_order(controller: Controller, nursery: Nursery, number: signal.Signals) -> None:
    """Amid a stream of bursts: exit status 0, a whole journal with what was heard of, and a replay of it."""
    service = nursery.start("serve", controller.path)
    controller.meet()
    for burst in bursts(60):
        controller.send(burst)
    controller.listen(lambda heard: len(heard.state) >= 5)
    os.kill(service, number)
    assert nursery.wait(service) == 0
    heard = controller.listen_up()
    (path,) = logs(controller)
    assert finished(path)
    assert set(journaled(path)) >= {(state.run, state.seq) for state in heard.state}
    assert_same(replayed([path]), len(heard.pattern))


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_ends_an_idle_service(controller: Controller, nursery: Nursery, number: signal.Signals) -> None:
    """While it waits for bursts that do not come: exit status 0, and a journal that holds nothing and is whole."""
    service = nursery.start("serve", controller.path)
    controller.meet()
    os.kill(service, number)
    assert nursery.wait(service) == 0
    (path,) = logs(controller)
    assert finished(path)
    assert list(LogReader(path)) == []


def test_the_verb_stop_ends_the_service(controller: Controller, nursery: Nursery) -> None:
    """It is answered first; then as with a signal."""
    service = nursery.start("serve", controller.path)
    controller.meet()
    controller.step(bursts(1)[0])
    assert controller.ask("stop").ok
    assert nursery.wait(service) == 0
    assert finished(logs(controller)[0])


def test_the_program_itself_serves(controller: Controller) -> None:
    """`python -m tracker serve`: patterns out, one JSON object a line on standard error, nothing on standard output."""
    process = subprocess.Popen(
        [sys.executable, "-m", "tracker", "serve", str(controller.path), "--log", "debug"],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
    )
    try:
        controller.meet()
        controller.step(bursts(1)[0])
        process.send_signal(signal.SIGTERM)
        out, err = process.communicate(timeout=PATIENCE_S)
    finally:
        process.kill()
    assert (process.returncode, out) == (0, "")
    assert all(line.startswith("{") and line.endswith("}") for line in err.splitlines())
    for event in ('"serving"', '"burst"', '"pattern"', '"stopped"'):
        assert f'"event": {event}' in err


def test_the_service_outlives_the_reader_of_its_log(controller: Controller) -> None:
    """`ris-tracker serve … 2>&1 | head -1`: when the pipe is closed the service goes on."""
    process = subprocess.Popen(
        [sys.executable, "-m", "tracker", "serve", str(controller.path), "--log", "debug"],
        cwd=ROOT,
        stderr=subprocess.PIPE,
        env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
    )
    assert process.stderr is not None
    try:
        controller.meet()
        process.stderr.close()
        for burst in bursts(3):
            controller.step(burst)
        process.send_signal(signal.SIGTERM)
        assert process.wait(PATIENCE_S) == 0
    finally:
        process.kill()


def test_pattern_ids_go_on_over_restarts(controller: Controller, nursery: Nursery) -> None:
    """Ended in order or killed: the next service's first pattern has an id that was never given."""
    given: list[int] = []
    for run, number in enumerate((signal.SIGTERM, signal.SIGKILL, signal.SIGKILL, signal.SIGTERM)):
        service = nursery.start("serve", controller.path)
        controller.meet()
        assert controller.ask("refresh").ok
        for burst in bursts(3, run=run):
            controller.send(burst)
        ids = [pattern.id for pattern in controller.listen(lambda heard: bool(heard.pattern)).pattern]
        os.kill(service, number)
        assert nursery.wait(service) == (0 if number is signal.SIGTERM else -signal.SIGKILL)
        ids += [pattern.id for pattern in controller.listen_up().pattern[len(ids) :]]
        assert min(ids) > max(given, default=0)
        given += ids
    assert given == sorted(set(given))


def test_a_planned_restart_goes_on_with_the_estimate(
    make_controller: Callable[..., Controller], nursery: Nursery
) -> None:
    """The service is tracking at once, its counts go on, and both journals replay, one after another and alone."""
    controller = make_controller(estimator=RESTLESS)
    played = bursts(40)
    patterns = []
    for part in (played[:20], played[20:]):
        service = nursery.start("serve", controller.path)
        controller.meet()
        for burst in part:
            controller.step(burst)
        assert controller.ask("stop").ok
        assert nursery.wait(service) == 0
        patterns.append(len(controller.heard.pattern))
    first = controller.heard.state[0]
    assert (first.bursts, first.mode) == (21, Mode.TRACKING)
    assert controller.heard.pattern[0].cause != "first"
    paths = logs(controller)
    assert len(paths) == 2
    assert_same(replayed(paths), sum(patterns))
    assert_same(replayed(paths[1:]), patterns[1])


def test_a_crash_leaves_no_estimate_behind(controller: Controller, nursery: Nursery) -> None:
    """After a kill, and with settings that are not the same to the letter, the next service begins afresh."""
    for ending, comment in ((signal.SIGKILL, ""), (signal.SIGTERM, "# changed\n"), (signal.SIGTERM, "")):
        service = nursery.start("serve", controller.path)
        controller.meet()
        assert controller.step(bursts(1)[0]).bursts == 1
        os.kill(service, ending)
        nursery.wait(service)
        controller.path.write_text(comment + controller.text)


@pytest.mark.parametrize(
    "spoil",
    [lambda data: data[:-7], lambda data: b"", lambda data: data.replace(b"next_seq", b"nextXseq")],
    ids=["cut off", "empty", "a key is missing"],
)
def test_a_spoilt_checkpoint_is_left_alone(
    controller: Controller, nursery: Nursery, spoil: Callable[[bytes], bytes]
) -> None:
    """The service begins afresh instead of failing."""
    checkpoint = controller.journal / "yard.checkpoint"
    for _ in range(2):
        service = nursery.start("serve", controller.path)
        controller.meet()
        assert controller.step(bursts(1)[0]).bursts == 1
        assert controller.ask("stop").ok
        assert nursery.wait(service) == 0
        checkpoint.write_bytes(spoil(checkpoint.read_bytes()))


def test_each_file_of_a_journal_replays_alone_and_all_in_turn(
    make_controller: Callable[..., Controller], nursery: Nursery
) -> None:
    """A journal that begins a new file every few bursts, with commands in between."""
    controller = make_controller(journal="rotate_mb = 0.02", estimator=RESTLESS)
    service = nursery.start("serve", controller.path)
    controller.meet()
    for number, burst in enumerate(bursts(40)):
        if number in (7, 15, 23, 31):
            verb = {7: "hold", 15: "resume", 23: "refresh", 31: "adopt"}[number]
            assert controller.ask(verb, **({"bits": b"\x0f\xaa"} if verb == "adopt" else {})).ok
        controller.step(burst)
    assert controller.ask("stop").ok
    assert nursery.wait(service) == 0
    paths = logs(controller)
    assert len(paths) > 4
    assert all(map(finished, paths))
    assert_same(replayed(paths), len(controller.heard.pattern))
    alone = [replayed([path]) for path in paths]
    for work in alone:
        assert_same(work, work.comparison.same)
    assert sum(work.comparison.same for work in alone) == len(controller.heard.pattern)
    assert [burst for path in paths for burst in journaled(path)] == [(7, seq) for seq in range(40)]


def basis(seed: int) -> bytes:
    """A learned basis of six columns for the small panel."""
    columns, _ = np.linalg.qr(np.random.default_rng(seed).normal(size=(16, 6)) + 0j)
    return pack_basis(
        LearnedBasis(
            columns=columns,
            variances=np.full(6, 1e-12),
            eigenvalues=np.full(6, 1e-12),
            noise=1e-14,
            panel=(4, 4),
            logs=("yard.mcap",),
            sha256=("0" * 64,),
            span_ns=(0, 1),
            frames=1000,
            settings="",
            version="0",
            held=0.9,
            held_deviation=0.01,
            sizes=(6,),
            errors=(1.1,),
            followed="elements",
            followed_error=1.2,
        )
    )


def test_the_learned_basis_lies_in_the_journal(
    make_controller: Callable[..., Controller], nursery: Nursery, tmp_path: Path
) -> None:
    """A replay needs no other file; an estimate in one basis is not taken up in another."""
    controller = make_controller(aperture='basis = "learned"\nfile = "yard-basis.npz"', estimator=RESTLESS)
    file = tmp_path / "yard-basis.npz"
    for seed in (1, 2):
        file.write_bytes(basis(seed))
        service = nursery.start("serve", controller.path)
        controller.meet()
        for number, burst in enumerate(bursts(15)):
            assert controller.step(burst).bursts == number + 1
        assert controller.ask("stop").ok
        assert nursery.wait(service) == 0
    last, heard = logs(controller)[-1], len(controller.heard.pattern)
    assert heard > 2
    given = Replay(controller.settings, tmp_path)
    given.run(last)
    assert given.own_settings
    file.write_bytes(basis(3))
    other = Replay(controller.settings, tmp_path)
    other.run(last)
    assert not other.own_settings
    file.unlink()
    assert_same(replayed([last]), heard)


def lines_and_status(nursery: Nursery, controller: Controller, log: Path) -> tuple[int | None, list[str]]:
    """How a service that cannot start ends, and what it said."""
    service = nursery.start("serve", controller.path, log=log)
    status = nursery.wait(service)
    return status, log.read_text().splitlines()


def test_a_port_in_use_is_the_users_mistake(controller: Controller, nursery: Nursery, tmp_path: Path) -> None:
    """Exit status 2 and one line with key and endpoint; the journal is not touched."""
    for key in ("publish", "control"):
        endpoint: str = getattr(controller.settings.sockets, key)
        with socket.socket() as taken:
            taken.bind(("127.0.0.1", int(endpoint.rpartition(":")[2])))
            taken.listen()
            status, lines = lines_and_status(nursery, controller, tmp_path / f"{key}.log")
        assert (status, len(lines)) == (2, 1)
        assert f"sockets.{key}: {endpoint}" in lines[0]
        assert not controller.journal.exists()


@pytest.mark.parametrize("spoilt", ["journal", "journal/yard.next-id"])
def test_a_folder_that_cannot_be_used_is_the_users_mistake(
    controller: Controller, nursery: Nursery, tmp_path: Path, spoilt: str
) -> None:
    """Something else stands where the folder, or a file in it, should be: one line that names it."""
    wrong = tmp_path / spoilt
    if spoilt == "journal":
        wrong.write_text("a note, not a folder")
    else:
        wrong.mkdir(parents=True)
    status, lines = lines_and_status(nursery, controller, tmp_path / "said.log")
    assert (status, len(lines)) == (2, 1)
    assert str(wrong) in lines[0]


@pytest.mark.parametrize("text", ["seven", "-3", "0"])
def test_an_id_file_that_holds_none_is_the_users_mistake(
    controller: Controller, nursery: Nursery, tmp_path: Path, text: str
) -> None:
    """Guessing an id could give one twice: the user decides."""
    controller.journal.mkdir()
    (controller.journal / "yard.next-id").write_text(text)
    status, lines = lines_and_status(nursery, controller, tmp_path / "said.log")
    assert (status, len(lines)) == (2, 1)
    assert "yard.next-id: holds no pattern id" in lines[0]


def test_two_services_do_not_share_a_folder(
    make_controller: Callable[..., Controller], nursery: Nursery, tmp_path: Path
) -> None:
    """The second one for the same link is told so; ids would be given twice."""
    first = make_controller()
    service = nursery.start("serve", first.path)
    first.meet()
    second = make_controller()
    status, lines = lines_and_status(nursery, second, tmp_path / "said.log")
    assert (status, len(lines)) == (2, 1)
    assert "another tracker" in lines[0]
    assert first.ask("stop").ok
    assert nursery.wait(service) == 0


def test_settings_that_cannot_be_used_are_the_users_mistake(
    controller: Controller, nursery: Nursery, tmp_path: Path
) -> None:
    """A key of the wrong kind: one line with file and key; nothing is made."""
    controller.path.write_text(controller.text.replace("rows = 4", 'rows = "four"'))
    status, lines = lines_and_status(nursery, controller, tmp_path / "said.log")
    assert (status, len(lines)) == (2, 1)
    assert "yard.toml: panel.rows" in lines[0]
    assert not controller.journal.exists()


def test_killed_at_any_moment_nothing_that_was_heard_of_is_lost(
    make_controller: Callable[..., Controller], nursery: Nursery, tmp_path: Path
) -> None:
    """Twenty kills amid a stream of bursts: what a subscriber had received is in the journal, and a replay gives it."""
    controller = make_controller(estimator=RESTLESS)
    rng = np.random.default_rng(11)
    received = 0
    for turn in range(20):
        service = nursery.start("serve", controller.path)
        controller.meet()
        played = iter(bursts(400, run=turn))
        # Two bursts are on their way at any time; the kill comes when so many states are heard, and a moment later.
        for _ in range(2):
            controller.send(next(played))
        for number in range(int(rng.integers(1, 70))):
            controller.listen(lambda heard, number=number: len(heard.state) > number)  # type: ignore[misc]
            controller.send(next(played))
        for _ in range(int(rng.integers(0, 40_000))):
            pass  # up to a few times as long as a block takes
        os.kill(service, signal.SIGKILL)
        assert nursery.wait(service) == -signal.SIGKILL
        heard = controller.listen_up()
        path = logs(controller)[-1]
        assert not finished(path)
        held = set(journaled(path))
        assert held >= {(state.run, state.seq) for state in heard.state}
        assert held >= {(pattern.run, pattern.seq) for pattern in heard.pattern}
        work = replayed([path], tmp_path / f"{turn}.mcap")
        assert work.comparison.first_difference is None
        given = {pattern.id: pattern.states.tobytes() for pattern in heard.pattern}
        assert given.items() <= published(tmp_path / f"{turn}.mcap").items()
        received += len(heard.pattern)
    assert received > 100
