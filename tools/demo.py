"""The whole tool at work: a stand-in testbed and the service as processes of their own, and a view on them.

The two talk over loopback sockets just as a real testbed and the service would; this program only starts them,
watches, and ends them.
"""

import argparse
import contextlib
import os
import re
import shutil
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import FrameType

from rich.console import Console

from tracker.settings import Settings, parse
from tracker.view.model import LinkModel
from tracker.view.plain import write_lines
from tracker.view.stream import Stream
from tracker.view.terminal import show

ROOT = Path(__file__).resolve().parent.parent
FOLDER = ROOT / "demo-journal"
LINK = "yard"
TESTBED = (sys.executable, "-m", "tracker.simulation")
PATIENCE_S = 15.0  # for a process to end once it is asked to


@dataclass(slots=True)
class Part:
    """One of the two processes.

    Parameters
    ----------
    name : str
    process : Popen
    log : Path
        What it wrote on its standard output and error.
    """

    name: str
    process: subprocess.Popen[bytes]
    log: Path

    @classmethod
    def start(cls, name: str, command: Sequence[str | Path], folder: Path) -> "Part":
        """Start a process that writes into a log; Ctrl-C does not reach it, so that it can be ended in order."""
        log = folder / f"{name}.log"
        with log.open("wb") as out:
            process = subprocess.Popen(
                [str(part) for part in command],
                stdin=subprocess.DEVNULL,
                stdout=out,
                stderr=subprocess.STDOUT,
                cwd=folder,
                env={**os.environ, "OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"},
                start_new_session=True,
            )
        return cls(name, process, log)

    @property
    def running(self) -> bool:
        """Whether the process has not ended."""
        return self.process.poll() is None

    def end(self) -> None:
        """Ask the process to end, and make it when it does not."""
        if self.running:
            self.process.send_signal(signal.SIGTERM)
        try:
            self.process.wait(PATIENCE_S)
        except subprocess.TimeoutExpired:
            self.process.kill()
            self.process.wait()

    def complaint(self) -> str:
        """Say how the process ended and the last that it wrote."""
        lines = self.log.read_text(encoding="utf-8", errors="replace").splitlines()[-6:]
        said = "".join(f"\n    {line}" for line in lines) or " nothing"
        status = self.process.returncode
        return f"the {self.name} ended by itself with status {status}; the last it said ({self.log}):{said}"


def endpoints(count: int) -> list[str]:
    """Find free ports on the loopback."""
    with contextlib.ExitStack() as stack:
        sockets = [stack.enter_context(socket.socket()) for _ in range(count)]
        for each in sockets:
            each.bind(("127.0.0.1", 0))
        return [f"tcp://127.0.0.1:{each.getsockname()[1]}" for each in sockets]


def scenes() -> dict[str, str]:
    """Ask the testbed for its scenes: name and what happens."""
    listed = subprocess.run([*TESTBED, "list"], capture_output=True, text=True, check=True).stdout
    return {line.split()[0]: line.split(maxsplit=1)[1] for line in listed.splitlines()}


def write_settings(scene: str, folder: Path) -> tuple[Path, Settings]:
    """Write the scene's settings with endpoints of our own."""
    text = subprocess.run(
        [*TESTBED, "settings", scene, "--link", LINK], capture_output=True, text=True, check=True
    ).stdout
    for key, value in zip(("pilots", "publish", "control"), endpoints(3), strict=True):
        text = re.sub(rf"^{key} = .*$", f'{key} = "{value}"', text, flags=re.MULTILINE)
    path = folder / f"{LINK}.toml"
    path.write_text(text, encoding="utf-8")
    return path, parse(text, str(path))


@contextlib.contextmanager
def running(scene: str, seed: int, seconds: float, folder: Path) -> Iterator[tuple[Settings, list[Part]]]:
    """Run the service and the testbed; both have ended when this is left, however it is left."""
    path, settings = write_settings(scene, folder)
    with contextlib.ExitStack() as stack:
        parts = [Part.start("service", (sys.executable, "-m", "tracker", "serve", path), folder)]
        stack.callback(parts[0].end)
        sockets = settings.sockets
        play = (*TESTBED, "play", scene, "--link", LINK, "--seed", str(seed), "--pilots", sockets.pilots)
        # Its own end comes later than ours, so that nothing plays on for ever should this program be killed.
        own_end = ("--publish", sockets.publish, "--seconds", str(seconds + 60.0))
        parts.append(Part.start("testbed", (*play, *own_end), folder))
        stack.callback(parts[1].end)
        yield settings, parts


def watch(settings: Settings, parts: list[Part], seconds: float, plain: bool, console: Console) -> LinkModel:
    """Show what happens until the time is over, a part fails or the user has seen enough."""
    until = time.monotonic() + seconds

    def going() -> bool:
        return time.monotonic() < until and all(part.running for part in parts)

    with Stream(settings.sockets.publish, settings.sockets.pilots, link=LINK) as stream:
        stream.model.latency_span_s = float("inf")
        with contextlib.suppress(KeyboardInterrupt):
            if plain or not console.is_terminal:
                write_lines(stream, sys.stdout, going)
            else:
                show(stream, console, (settings.panel.columns, settings.panel.rows), going)
        return stream.model


def tell(model: LinkModel, scene: str, folder: Path) -> None:
    """Sum up a demo."""
    state, latency = model.state, model.latency_ms(time.monotonic())
    lines = [("scene", scene)]
    if state is not None:
        lines.append(("frames", f"{state.frames:,} in {state.bursts:,} bursts, {state.lost:,} bursts lost"))
    lines.append(("patterns", f"{model.patterns:,} published"))
    if model.achieved_so_far is not None:
        lines.append(("rate", f"{100 * model.achieved_so_far:.1f} % of the best possible, from the first burst on"))
    if model.net_so_far is not None:
        lines.append(("net rate", f"{100 * model.net_so_far:.1f} % of it, what sounding takes left out"))
    if latency is not None:
        lines.append(("latency", f"{latency[0]:.2f} ms median, {latency[1]:.2f} ms p99, from burst to pattern"))
    lines.append(("alarms", ", ".join(f"{count} {kind}" for kind, count in model.alarms.most_common()) or "none"))
    logs = sorted(folder.glob("**/*.mcap"))
    if logs:
        size = sum(path.stat().st_size for path in logs) / 1e6
        lines.append(("journal", f"{os.path.relpath(logs[0].parent)}, {size:,.0f} MB (gone with the next demo)"))
        program = os.path.relpath(Path(sys.executable).parent / "ris-tracker")
        lines.append(("next", f"{program} replay {' '.join(os.path.relpath(path) for path in logs)}"))
    print("\n".join(f"{label:<10}{text}" for label, text in lines))


def arguments() -> argparse.Namespace:
    """Read the command line."""
    known = scenes()
    parser = argparse.ArgumentParser(
        prog="tools/demo",
        description="Starts a stand-in testbed and the service, shows both at work, and ends by itself.\n"
        "The place is invented: a container yard, a gateway mast, a surface on a stack of containers,\n"
        "straddle carriers as terminals. Nothing is transmitted.",
        epilog="scenes:\n" + "\n".join(f"  {name:<14} {text}" for name, text in known.items()),
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--plain", action="store_true", help="one line a second instead of a screen")
    parser.add_argument("--seconds", metavar="S", type=float, default=60.0, help="how long (default: 60)")
    parser.add_argument(
        "--scene", metavar="NAME", choices=known, default="slow-carrier", help="what happens (default: slow-carrier)"
    )
    parser.add_argument("--seed", metavar="INT", type=int, default=1, help="of all chance in the scene (default: 1)")
    asked = parser.parse_args()
    if not 0 < asked.seconds < float("inf"):
        parser.error(f"--seconds {asked.seconds:g}: must be above 0")
    return asked


def interrupt(number: int, frame: FrameType | None) -> None:
    """Let SIGTERM and a closed terminal end the demo as Ctrl-C does, so that its processes end too."""
    del number, frame
    raise KeyboardInterrupt


def main() -> int:
    """Run the demo; 1 when one of its parts failed."""
    asked = arguments()
    signal.signal(signal.SIGTERM, interrupt)
    signal.signal(signal.SIGHUP, interrupt)
    console = Console()
    shutil.rmtree(FOLDER, ignore_errors=True)
    FOLDER.mkdir()
    failed: list[Part] = []
    model = LinkModel(LINK)
    with (
        contextlib.suppress(KeyboardInterrupt),
        running(asked.scene, asked.seed, asked.seconds, FOLDER) as (settings, parts),
    ):
        model = watch(settings, parts, asked.seconds, asked.plain, console)
        failed = [part for part in parts if not part.running]
    if model.heard_at is not None:
        tell(model, f"{asked.scene}: {scenes()[asked.scene]}", FOLDER)
    elif not failed:
        print("tools/demo: ended before anything was heard", file=sys.stderr)
    for part in failed:
        print(f"tools/demo: {part.complaint()}", file=sys.stderr)
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
