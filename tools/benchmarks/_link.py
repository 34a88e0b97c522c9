"""A link at full pace for benchmarks: a sender and the service as processes of their own, a subscriber in this one.

Sender and subscriber share the first core that this process may use, the service has the last one. Bodies are made
beforehand; the sender only writes numbers and times into them.
"""

import contextlib
import os
import signal
import socket
import struct
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from multiprocessing import get_context
from multiprocessing.connection import Connection
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import zmq
from numpy.typing import NDArray

from tracker.messages import decode_reply, encode_pilots, encode_request
from tracker.settings import load
from tracker.simulation.testbed import Testbed
from tracker.simulation.yard import Scenario

BURSTS_PER_S = 437.5  # 28 000 frames/s in bursts of 64
PERIOD_NS = round(1e9 / BURSTS_PER_S)
# Bursts made beforehand, each with noise of its own; they last longer than an estimate remembers, and 36 rounds of
# 33 bursts hold a whole number of sweeps: a sweep cut off at the seam would be a change of how the link is sounded.
CYCLE = 1188
CYCLE_S = CYCLE / BURSTS_PER_S
# A number that takes nine bytes, as every later one does: bodies keep their length.
FIRST_SEQ = 1 << 32
PATIENCE_MS = 30_000
PROC = Path("/proc")


@dataclass(slots=True)
class Played:
    """What a run gave.

    Parameters
    ----------
    sent_ns : ndarray of int64
        When each burst was sent, monotonic.
    pattern_ns, state_ns : dict
        When the pattern, the state of each burst was received, by its place in the run.
    engine_us : list of float
        Time that the engine took, a burst.
    status : dict
        The service's own counts at the end.
    cpu_s : float
        Processor time that the service took while bursts came.
    idle_cpu : float
        Share of a core that it took before the first.
    grown_mb : float
        Memory that it took at the end beyond what it took a quarter into the run.
    """

    sent_ns: NDArray[np.int64]
    pattern_ns: dict[int, int] = field(default_factory=dict)
    state_ns: dict[int, int] = field(default_factory=dict)
    engine_us: list[float] = field(default_factory=list)
    status: dict[str, Any] = field(default_factory=dict)
    cpu_s: float = 0.0
    idle_cpu: float = 0.0
    grown_mb: float = 0.0

    def latencies_ms(self, received_ns: dict[int, int]) -> NDArray[np.float64]:
        """From sending a burst to receiving what rests on it, ms."""
        return np.array([(at - self.sent_ns[place]) / 1e6 for place, at in received_ns.items()])


def bodies(scenario: Scenario, count: int = CYCLE) -> list[bytes]:
    """Encode bursts of a testbed, to be played over and over: a scene that repeats itself as often shows no seam."""
    bed = Testbed(scenario.testbed, seed=1, run=1)
    return [
        encode_pilots("yard", replace(bed.next_burst(number * PERIOD_NS), seq=FIRST_SEQ, t_ns=time.time_ns()))
        for number in range(count)
    ]


def write_settings(scenario: Scenario, folder: Path, *more: str) -> Path:
    """Write the settings of a scenario with endpoints of our own, and with tables that it does not set itself."""
    with contextlib.ExitStack() as stack:
        sockets = [stack.enter_context(socket.socket()) for _ in range(3)]
        for each in sockets:
            each.bind(("127.0.0.1", 0))
        ends = [f"tcp://127.0.0.1:{each.getsockname()[1]}" for each in sockets]
    path = folder / "yard.toml"
    path.write_text("\n".join([scenario.settings("yard", *ends), *more]) + "\n", encoding="utf-8")
    return path


@contextmanager
def work_folder() -> Iterator[Path]:
    """Give a folder that goes again."""
    with tempfile.TemporaryDirectory(prefix="ris-tracker-bench-") as made:
        yield Path(made)


def play(
    settings_path: Path, made: list[bytes], seconds: float, idle_s: float = 0.0, bursts_per_s: float = BURSTS_PER_S
) -> Played:
    """Run the service, send it bursts at full pace, and take down what it publishes.

    Parameters
    ----------
    settings_path : Path
        The journal is left in the folder that it names.
    made : list of bytes
        See `bodies`; sent over and over.
    seconds, idle_s : float
        How long bursts are sent; and how long the service is watched before.
    bursts_per_s : float
        Pace.

    Raises
    ------
    RuntimeError
        When a process does not answer.
    """
    ends = load(settings_path).sockets
    count, period_ns = round(seconds * bursts_per_s), round(1e9 / bursts_per_s)
    cores = sorted(os.sched_getaffinity(0))
    here, there = {cores[0]}, {cores[-1]}
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    mine, theirs = get_context("spawn").Pipe()
    sender = get_context("spawn").Process(target=_send, args=(theirs, ends.pilots, made, count, period_ns, here))
    serve = f"import os, sys; os.sched_setaffinity(0, {there}); from tracker.cli import entry; sys.exit(entry())"
    service = subprocess.Popen(
        [sys.executable, "-c", serve, "serve", str(settings_path)], stderr=subprocess.DEVNULL, env=environment()
    )
    try:
        os.sched_setaffinity(0, here)
        sender.start()
        _wait(mine)  # the service has subscribed
        listening = context.socket(zmq.SUB)
        listening.setsockopt(zmq.RCVHWM, 0)
        listening.setsockopt(zmq.SUBSCRIBE, b"")
        listening.connect(ends.publish)
        asking = context.socket(zmq.REQ)
        asking.connect(ends.control)
        for _ in range(2):
            _ask(asking, "status")  # once answered, the subscription that left before is there
        before = _cpu_s(service.pid)
        time.sleep(idle_s)
        begun = _cpu_s(service.pid)
        mine.send("go")
        played = _listen(listening, count, service.pid)
        played.cpu_s = _cpu_s(service.pid) - begun
        played.idle_cpu = (begun - before) / idle_s if idle_s else 0.0
        played.status = _ask(asking, "status")
        played.sent_ns = np.frombuffer(_wait(mine), np.int64)
        service.send_signal(signal.SIGTERM)
        if service.wait(PATIENCE_MS / 1e3) != 0:
            raise RuntimeError(f"the service ended with status {service.returncode}")
        return played
    finally:
        os.sched_setaffinity(0, set(cores))
        for process in (service, sender):
            with contextlib.suppress(ProcessLookupError, AttributeError):
                process.kill()
        context.destroy(linger=0)


def environment() -> dict[str, str]:
    """Environment for a process that runs this project as this one does."""
    return {**os.environ, "OPENBLAS_NUM_THREADS": "1", "PYTHONPATH": os.pathsep.join(path for path in sys.path if path)}


def _send(pipe: Connection, endpoint: str, made: list[bytes], count: int, period_ns: int, cores: set[int]) -> None:
    """Send bursts when they are due; give back when each was sent."""
    os.sched_setaffinity(0, cores)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    out = context.socket(zmq.XPUB)
    out.setsockopt(zmq.SNDHWM, 0)
    out.bind(endpoint)
    if not out.poll(PATIENCE_MS):
        return
    out.recv()
    pipe.send(b"ready")
    pool = [bytearray(body) for body in made]
    places = [(body.index(b"\xa3seq\xcf") + 5, body.index(b"\xa4t_ns\xcf") + 6) for body in made]
    sent_ns = np.zeros(count, np.int64)
    pipe.recv()
    wall_ns, begun_ns = time.time_ns(), time.monotonic_ns() + period_ns
    for number in range(count):
        body, (seq, t_ns) = pool[number % len(pool)], places[number % len(pool)]
        struct.pack_into(">Q", body, seq, FIRST_SEQ + number)
        struct.pack_into(">Q", body, t_ns, wall_ns + number * period_ns)
        left_ns = begun_ns + number * period_ns - time.monotonic_ns()
        if left_ns > 0:
            time.sleep(left_ns / 1e9)
        sent_ns[number] = time.monotonic_ns()
        out.send_multipart([b"pilots/yard", body])
    pipe.send(sent_ns.tobytes())
    pipe.recv()  # the sockets stay open until all is heard


def _listen(listening: "zmq.Socket[bytes]", count: int, service: int) -> Played:
    played = Played(np.zeros(0, np.int64))
    quarter_mb = 0.0
    while len(played.state_ns) < count and listening.poll(2000):
        topic, body = listening.recv_multipart()
        now_ns = time.monotonic_ns()
        kind = topic.partition(b"/")[0]
        if kind == b"alarm":
            continue
        told = msgpack.unpackb(body)
        place = told["seq"] - FIRST_SEQ
        if kind == b"pattern":
            played.pattern_ns[place] = now_ns
            continue
        played.state_ns[place] = now_ns
        # The states of a block all tell the time of the block.
        played.engine_us.append(told["latency_us"]["engine"] / told["together"])
        if len(played.state_ns) == count // 4:
            quarter_mb = _memory_mb(service)
    played.grown_mb = _memory_mb(service) - quarter_mb
    return played


def _ask(asking: "zmq.Socket[bytes]", verb: str) -> dict[str, Any]:
    asking.send(encode_request(verb))
    if not asking.poll(PATIENCE_MS):
        raise RuntimeError("the service does not answer")
    return decode_reply(asking.recv()).values


def _wait(pipe: Connection) -> bytes:
    if not pipe.poll(PATIENCE_MS / 1e3):
        raise RuntimeError("the sender does not answer")
    answer: bytes = pipe.recv()
    return answer


def _cpu_s(process: int) -> float:
    """Processor time of a process with all its threads, s."""
    fields = (PROC / str(process) / "stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def _memory_mb(process: int) -> float:
    """Resident memory of a process, MB."""
    return int((PROC / str(process) / "statm").read_text().split()[1]) * os.sysconf("SC_PAGE_SIZE") / 1e6
