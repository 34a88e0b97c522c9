"""A small link for tests: settings, bursts, a controller with its sockets, and the service in this process or not."""

import json
import os
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import zmq

from tracker.assembly import configure
from tracker.engine.burst import Burst
from tracker.engine.events import Alarm, Event, Pattern, Plan, State
from tracker.engine.tracker import Tracker
from tracker.logs import LogWriter
from tracker.messages import (
    Reply,
    decode_alarm,
    decode_pattern,
    decode_plan,
    decode_reply,
    decode_state,
    encode_pilots,
    encode_request,
)
from tracker.service.faults import FaultsFile
from tracker.service.identity import IdFile
from tracker.service.journal import Journal
from tracker.service.log import configure_log
from tracker.service.loop import Service
from tracker.service.sockets import Sockets
from tracker.settings import Settings, parse
from tracker.simulation.config import DirectConfig, SceneConfig, Terminal, ToneGrid
from tracker.simulation.geometry import PanelConfig
from tracker.simulation.motion import Still
from tracker.simulation.sounding import SoundingConfig
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.snapshots import Start, pack_start

ROOT = Path(__file__).resolve().parent.parent.parent
PATIENCE_S = 20.0
PATIENCE_MS = round(PATIENCE_S * 1e3)
DECODERS: Mapping[str, Callable[[bytes], Any]] = {
    "pattern": decode_pattern,
    "state": decode_state,
    "alarm": decode_alarm,
    "plan": decode_plan,
}

# Keys of [estimator] under which noise alone makes every other burst publish a pattern.
RESTLESS = "time_constant_ms = 1.0"

SCENE = SceneConfig(
    carrier_hz=3.75e9,
    tones=ToneGrid(fft=32, first=8, count=16, spacing_hz=1.25e6),
    panel=PanelConfig(columns=4, rows=4, centre=(20.0, 15.0, 6.0), facing=(-0.2, -1.0, 0.0)),
    mast=Still((0.0, 0.0, 12.0)),
    terminals=(Terminal(Still((30.0, -5.0, 3.0))),),
    direct=DirectConfig(loss_db=40.0),
    snr_db=0.0,
)


def bursts(count: int, *, frames: int = 8, seed: int = 1, run: int = 7, start_ns: int | None = None) -> list[Burst]:
    """The bursts of a small testbed that begins now, one right after the other."""
    bed = Testbed(TestbedConfig(SCENE, SoundingConfig(kind="random"), frames=frames), seed, run)
    start = time.time_ns() if start_ns is None else start_ns
    return [bed.next_burst(start + number * bed.burst_ns) for number in range(count)]


def without(burst: Burst, frames: list[int]) -> Burst:
    """The same burst with NaN in some frames."""
    response = burst.response.copy()
    response[frames] = np.nan
    return replace(burst, response=response)


def free_port() -> int:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        return int(free.getsockname()[1])


def settings_text(pilots: str, name: str = "yard", **changes: str) -> str:
    """Settings of the small link; `changes` are keys by table, such as refresh="least_gain = 0.5"."""
    tables = {
        "link": f'name = "{name}"',
        "panel": "columns = 4\nrows = 4",
        "tones": "fft = 32\nfirst = 8\ncount = 16\nspacing_khz = 1250.0",
        "delay": "taps = 8",
        # So many steps whatever the clock says: results must not depend on how busy the machine is.
        "refresh": "budget_ms = 20000.0\nmost_steps = 12\nleast_gain = 0.0\nswitching_ms = 0.0",
        "sockets": f'pilots = "{pilots}"\n'
        + "\n".join(f'{key} = "tcp://127.0.0.1:{free_port()}"' for key in ("publish", "control")),
    }
    for table, lines in changes.items():
        keys = dict(line.split(" = ", 1) for line in f"{tables.get(table, '')}\n{lines}".splitlines() if line)
        tables[table] = "\n".join(f"{key} = {value}" for key, value in keys.items())
    return "\n".join(f"[{table}]\n{lines}" for table, lines in tables.items()) + "\n"


@dataclass
class Heard:
    """What the service published, by kind, in the order of its coming."""

    pattern: list[Pattern] = field(default_factory=list)
    state: list[State] = field(default_factory=list)
    alarm: list[Alarm] = field(default_factory=list)
    plan: list[Plan] = field(default_factory=list)
    latency_us: list[int] = field(default_factory=list)


class Controller:
    """The other side of the link: sends bursts, listens, asks."""

    def __init__(self, folder: Path, name: str = "yard", **changes: str) -> None:
        self.context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self.link = name
        self.pilots = self.context.socket(zmq.XPUB)
        self.pilots.setsockopt(zmq.SNDHWM, 0)
        self.pilots.setsockopt(zmq.XPUB_VERBOSE, 1)
        port = self.pilots.bind_to_random_port("tcp://127.0.0.1")
        self.text = settings_text(f"tcp://127.0.0.1:{port}", name, **changes)
        self.settings: Settings = parse(self.text)
        self.path = folder / "yard.toml"
        self.path.write_text(self.text)
        self.journal = folder / "journal"
        self.listening: zmq.Socket[bytes] | None = None
        self.asking: zmq.Socket[bytes] | None = None
        self.heard = Heard()

    def meet(self) -> None:
        """Wait until the service listens and is listened to; begin with nothing heard."""
        self.part()
        word = b""
        while not word.startswith(b"\x01"):  # a subscription; those of services that ended are taken back by 0
            assert self.pilots.poll(PATIENCE_MS), "the service does not subscribe"
            word = self.pilots.recv()
        self.heard = Heard()
        self.asking, self.listening = self._socket(zmq.REQ), self._socket(zmq.SUB)
        self.asking.connect(self.settings.sockets.control)
        monitor = self.listening.get_monitor_socket(zmq.EVENT_HANDSHAKE_SUCCEEDED)
        self.listening.setsockopt(zmq.RCVHWM, 0)
        self.listening.setsockopt(zmq.SUBSCRIBE, b"")
        self.listening.connect(self.settings.sockets.publish)
        assert monitor.poll(PATIENCE_MS), "the service does not publish"
        self.listening.disable_monitor()
        # The subscription left before these requests did, through the same thread: once they are answered it is there.
        for _ in range(2):
            assert self.ask("status").ok

    def part(self) -> None:
        """Close what was connected to the service."""
        for each in (self.listening, self.asking):
            if each is not None:
                each.close(linger=0)
        self.listening = self.asking = None

    def close(self) -> None:
        self.context.destroy(linger=0)

    def send(self, burst: Burst) -> None:
        self.send_body(encode_pilots(self.link, burst))

    def send_body(self, *bodies: bytes, topic: str | None = None) -> None:
        self.pilots.send_multipart([(topic or f"pilots/{self.link}").encode(), *bodies])

    def ask(self, verb: str, **args: Any) -> Reply:
        return self.ask_body(encode_request(verb, **args))

    def ask_body(self, *parts: bytes) -> Reply:
        assert self.asking is not None
        self.asking.send_multipart(parts)
        assert self.asking.poll(PATIENCE_MS), "no reply"
        return decode_reply(self.asking.recv())

    def listen(self, enough: Callable[[Heard], bool]) -> Heard:
        """Take in what is published until it is enough."""
        assert self.listening is not None
        until = time.monotonic() + PATIENCE_S
        while not enough(self.heard):
            left_ms = round((until - time.monotonic()) * 1e3)
            assert self.listening.poll(max(left_ms, 0)), f"not heard: {self.heard}"
            self.take()
        return self.heard

    def listen_up(self) -> Heard:
        """Take in what is there."""
        assert self.listening is not None
        while self.listening.poll(0):
            self.take()
        return self.heard

    def take(self) -> None:
        assert self.listening is not None
        topic, body = self.listening.recv_multipart()
        kind, _, link = topic.decode().partition("/")
        message = DECODERS[kind](body)
        assert message.link == link == self.link
        event: Event = message.event
        getattr(self.heard, kind).append(event)
        if kind == "pattern":
            self.heard.latency_us.append(message.latency_us)

    def step(self, burst: Burst) -> State:
        """Send a burst and wait for the state after it, so that every block is one burst."""
        before = len(self.heard.state)
        self.send(burst)
        return self.listen(lambda heard: len(heard.state) > before).state[-1]

    def _socket(self, kind: int) -> "zmq.Socket[bytes]":
        made = self.context.socket(kind)
        made.setsockopt(zmq.RECONNECT_IVL, 10)
        return made


class Nursery:
    """Starts services as processes; see `nursery.py`."""

    def __init__(self, folder: Path) -> None:
        self.log = folder / "service.log"
        self._children: list[int] = []
        self._process = subprocess.Popen(
            [sys.executable, str(Path(__file__).with_name("nursery.py"))],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
            cwd=ROOT,
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
        )

    def start(self, *arguments: str | Path, log: Path | None = None) -> int:
        child = self._ask("start", [str(argument) for argument in arguments], str(log or self.log))
        assert isinstance(child, int)
        self._children.append(child)
        return child

    def wait(self, child: int) -> int | None:
        """The exit status, negative for a signal."""
        status = self._ask("wait", child)
        if status is not None:
            self._children.remove(child)
        return status

    def close(self) -> None:
        for child in self._children:
            os.kill(child, 9)
        self._process.communicate(timeout=PATIENCE_S)

    def _ask(self, *what: object) -> int | None:
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._process.stdin.write(json.dumps(what) + "\n")
        self._process.stdin.flush()
        answer = json.loads(self._process.stdout.readline())
        assert answer is None or isinstance(answer, int)
        return answer


@dataclass
class Running:
    """A service in a thread of this process."""

    service: Service
    tracker: Tracker
    journal: Journal
    ended: threading.Event = field(default_factory=threading.Event)
    fault: BaseException | None = None


@contextmanager
def running(controller: Controller, create: Callable[..., LogWriter] = LogWriter, log: Any = None) -> Iterator[Running]:
    """Run the service in a thread, and stop it at the end."""
    settings, folder = controller.settings, controller.journal
    folder.mkdir(exist_ok=True)
    with Sockets(settings) as sockets:
        ids = IdFile(folder / f"{controller.link}.next-id")
        tracker = Tracker(configure(settings, folder), ids.next_id)
        journal = Journal(
            folder,
            controller.link,
            {"settings.toml": controller.text.encode()},
            settings.journal.rotate_mb,
            lambda: pack_start(Start(tracker.next_id, tracker.snapshot())),
            create,
        )
        log = log if log is not None else configure_log("error")
        faults = FaultsFile(folder / f"{controller.link}.faults.toml", settings, log)
        service = Service(settings, controller.text, tracker, sockets, journal, ids, faults, log)
        this = Running(service, tracker, journal)

        def work() -> None:
            try:
                service.run()
            except BaseException as fault:  # noqa: BLE001 - the test looks at it
                this.fault = fault
            this.ended.set()

        thread = threading.Thread(target=work)
        thread.start()
        try:
            controller.meet()
            yield this
        finally:
            service.stop()
            thread.join(PATIENCE_S)
            controller.part()
            journal.close()
            ids.close()
        assert not thread.is_alive()
