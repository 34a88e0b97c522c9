"""The command line of the stand-in testbed: `python -m tracker.simulation`."""
# ruff: noqa: PLC0415 - parts are imported when a command needs them, so that mistakes answer at once

import argparse
import math
import re
import secrets
import signal
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from types import FrameType
from typing import NoReturn

from threadpoolctl import threadpool_limits

from tracker.simulation.testbed import Testbed
from tracker.simulation.yard import SCENARIOS, Scenario, scenario

PROGRAM = "python -m tracker.simulation"
# The first instant of a recorded log when none is given: a log has no clock of its own.
RECORD_START_NS = 1_750_000_000_000_000_000


class _Parser(argparse.ArgumentParser):
    """Reports a mistake as one line, without the usage in front of it."""

    def error(self, message: str) -> NoReturn:
        self.exit(2, f"{self.prog}: {message}; see {PROGRAM} --help\n")


def parser() -> argparse.ArgumentParser:
    """Build the parser of the command line."""
    top = _Parser(
        prog=PROGRAM,
        description="A stand-in for a radio testbed with a one-bit surface: an invented container yard, computed.",
        epilog="exit status: 0 done, 1 a fault of this program or machine, 2 the user's mistake",
        allow_abbrev=False,
    )
    commands = top.add_subparsers(dest="command", metavar="COMMAND", required=True, title="commands")

    play = commands.add_parser(
        "play",
        help="play a scene in real time: send bursts, apply the patterns that come back",
        description="Binds --pilots and sends bursts and what is true; connects to --publish and applies patterns.\n"
        "Runs until Ctrl-C, SIGTERM, --bursts or --seconds.",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    _common(play)
    play.add_argument("--pilots", metavar="ENDPOINT", default="tcp://127.0.0.1:5600", help="to bind for bursts")
    play.add_argument(
        "--publish", metavar="ENDPOINT", default="tcp://127.0.0.1:5601", help="where the tracker publishes"
    )
    play.add_argument("--bursts", metavar="COUNT", type=_count, help="end after so many bursts")
    play.add_argument(
        "--truth-every", metavar="S", type=_positive, default=0.25, help="s between two words on what is true"
    )
    play.add_argument("--no-truth", action="store_true", help="do not search the best rate, send no truth")
    play.add_argument("--search-steps", metavar="COUNT", type=_count, default=400, help="optimizer steps a search")

    record = commands.add_parser(
        "record", help="record a scene into a log, faster or slower than real time", allow_abbrev=False
    )
    _common(record)
    record.add_argument("out", metavar="OUT.mcap", type=Path, help="log to write; must not exist")
    record.add_argument("--open-loop", action="store_true", help="have no tracker refresh the pattern in force")

    settings = commands.add_parser("settings", help="print the tracker's settings for a scene", allow_abbrev=False)
    _scene(settings)
    settings.add_argument("--link", metavar="NAME", type=_link, default="yard", help="name of the link")

    commands.add_parser("list", help="list the scenes", allow_abbrev=False)
    return top


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command; returns the exit status."""
    args = parser().parse_args(arguments)
    commands: dict[str, Callable[[argparse.Namespace], int]] = {
        "play": _play,
        "record": _record,
        "settings": _settings,
        "list": _list,
    }
    with threadpool_limits(limits=1):
        try:
            return commands[args.command](args)
        except KeyboardInterrupt:
            return _mistake("interrupted", status=130)


def _play(args: argparse.Namespace) -> int:
    from tracker.simulation.player import Endpoints, Player, PlayerError, steady_clock
    from tracker.simulation.searcher import Searcher

    scene = _chosen(args)
    now_ns = steady_clock()
    start_ns = now_ns()
    testbed = Testbed(scene.testbed, args.seed, run=secrets.randbits(63), start_ns=start_ns)
    pace = args.bursts_per_s or scene.bursts_per_s
    try:
        with Endpoints(args.pilots, args.publish, args.link) as endpoints:
            searcher = None if args.no_truth else Searcher(scene.testbed, args.seed, start_ns, args.search_steps)
            try:
                player = Player(testbed, endpoints, args.link, pace, now_ns, _say, searcher, args.truth_every)
                with _Signals(player.stop):
                    _say(f"playing {scene.name}: {scene.text}; bursts on {args.pilots}, patterns from {args.publish}")
                    until_ns = None if args.seconds is None else now_ns() + round(args.seconds * 1e9)
                    player.run(args.bursts, until_ns)
            finally:
                if searcher is not None:
                    searcher.close()
    except PlayerError as error:
        return _mistake(str(error))
    played = player.played
    _say(f"stopped: {played.bursts} bursts sent ({played.late} late), {played.patterns} patterns applied")
    return 0


def _record(args: argparse.Namespace) -> int:
    from rich.console import Console
    from rich.progress import Progress

    from tracker.logs import LogError
    from tracker.settings import parse
    from tracker.simulation.closed_loop import EngineInLoop, turns
    from tracker.simulation.record import record

    scene = _chosen(args)
    text = scene.settings(args.link)
    testbed = Testbed(scene.testbed, args.seed, run=args.seed + 1, start_ns=RECORD_START_NS)
    engine = None if args.open_loop else EngineInLoop(parse(text))
    pace = args.bursts_per_s or scene.bursts_per_s
    count = math.ceil((args.seconds or 10.0) * pace)
    began = time.perf_counter()
    console = Console(stderr=True)
    with Progress(console=console, transient=True, disable=not console.is_terminal) as progress:
        task = progress.add_task(args.out.name, total=count)
        try:
            size = record(
                turns(testbed, RECORD_START_NS, pace, count, engine),
                args.out,
                args.link,
                text,
                lambda done: progress.update(task, completed=done),
            )
        except LogError as error:
            return _mistake(str(error))
        except OSError as error:
            return _mistake(f"{args.out}: cannot be written: {error.strerror}", status=1)
    took_s = time.perf_counter() - began
    _say(f"{args.out}: {count} bursts, {size / 1e6:.1f} MB, {count / pace:.1f} s recorded in {took_s:.1f} s")
    return 0


def _settings(args: argparse.Namespace) -> int:
    sys.stdout.write(scenario(args.scene).settings(args.link))
    return 0


def _list(args: argparse.Namespace) -> int:
    del args
    for name in SCENARIOS:
        sys.stdout.write(f"{name:14}{scenario(name).text}\n")
    return 0


class _Signals:
    """Turns SIGTERM and SIGINT into a call while inside."""

    def __init__(self, stop: Callable[[], None]) -> None:
        self._stop = stop

    def __enter__(self) -> None:
        self._before = {number: signal.signal(number, self._handle) for number in (signal.SIGTERM, signal.SIGINT)}

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    def _handle(self, number: int, frame: FrameType | None) -> None:
        del number, frame
        self._stop()


def _chosen(args: argparse.Namespace) -> Scenario:
    scene = scenario(args.scene)
    if args.frames is None:
        return scene
    return replace(scene, testbed=replace(scene.testbed, frames=args.frames))


def _scene(command: argparse.ArgumentParser) -> None:
    command.add_argument("scene", metavar="SCENE", choices=tuple(SCENARIOS), help=", ".join(SCENARIOS))


def _common(command: argparse.ArgumentParser) -> None:
    _scene(command)
    command.add_argument("--link", metavar="NAME", type=_link, default="yard", help="name of the link (default: yard)")
    command.add_argument("--seed", metavar="INT", type=_seed, default=1, help="all chance comes from it (default: 1)")
    command.add_argument("--bursts-per-s", metavar="PACE", type=_positive, help="default: the scene's own")
    command.add_argument("--frames", metavar="COUNT", type=_count, help="frames a burst (default: the scene's own)")
    command.add_argument("--seconds", metavar="S", type=_positive, help="how long (record: default 10)")


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not (0 < value < math.inf):
        raise argparse.ArgumentTypeError(f"{text!r} is not a number above zero")
    return value


def _count(text: str) -> int:
    if not text.isascii() or not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number above zero")
    return int(text)


def _seed(text: str) -> int:
    if not text.isascii() or not text.isdigit():
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number from zero up")
    return int(text)


def _link(text: str) -> str:
    if not re.fullmatch("[a-z0-9-]{1,32}", text):
        raise argparse.ArgumentTypeError(f"{text!r} cannot name a link: 1 to 32 of a-z, 0-9 and -")
    return text


def _say(line: str) -> None:
    sys.stderr.write(line + "\n")
    sys.stderr.flush()


def _mistake(line: str, status: int = 2) -> int:
    _say(f"{PROGRAM}: {line}")
    return status


if __name__ == "__main__":
    sys.exit(main())
