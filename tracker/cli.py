"""The command line: reads arguments, hands them to the part that does the work, turns failures into one line.

Exit status: 0 done, 1 our fault (the traceback goes into a file), 2 the user's mistake, 130 interrupted.
Each command imports its part only when it is called, so that `--help` and mistakes answer at once.
"""
# ruff: noqa: PLC0415 - late imports are meant, see above

import argparse
import io
import os
import sys
import tempfile
import traceback
from collections.abc import Sequence
from pathlib import Path
from typing import NoReturn

from tracker import __version__

CAUTION = """\
caution:
  A reflecting surface concentrates radiated power: a pattern that this program publishes can raise the field
  at places where people are, and moves that place while it runs. Limits of exposure (ICNIRP 2020, Health
  Physics 118, or what your country sets) hold at the focus of the surface, not only at the antenna. Transmit
  only under a licence or an exemption that covers the site. Local rules and licensed practice come first.
"""

EXIT_STATUS = """\
exit status:
  0  done
  1  a fault of this program or of the machine; the last line says where the details are
  2  a mistake in arguments, settings or files; one line says what, where and what to do
  130  interrupted with Ctrl-C
"""


class _Parser(argparse.ArgumentParser):
    """Reports a mistake as one line, without the usage in front of it."""

    def error(self, message: str) -> NoReturn:
        self.exit(2, f"{self.prog}: {message}; see {self.prog} --help\n")


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="ris-tracker",
        description="Keeps the pattern of a one-bit reconfigurable intelligent surface right while the channel moves.",
        epilog=f"""\
examples:
  ris-tracker check yard.toml            what these settings mean, before anything runs
  ris-tracker serve yard.toml            take bursts of pilot frames, publish refreshed patterns
  ris-tracker watch yard.toml            see how a running service does
  ris-tracker drift journal/*.mcap       what changed when, and what became of the rate
  ris-tracker replay journal/*.mcap      work off recorded bursts again, with the same result bit by bit

{EXIT_STATUS}
{CAUTION}""",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    parser.add_argument("--version", action="version", version=f"ris-tracker {__version__}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True, title="commands")

    def command(name: str, summary: str, description: str, examples: str) -> argparse.ArgumentParser:
        return commands.add_parser(
            name,
            help=summary,
            description=description,
            epilog=f"examples:\n{examples}\n\n{EXIT_STATUS}\n{CAUTION}",
            formatter_class=argparse.RawDescriptionHelpFormatter,
            allow_abbrev=False,
        )

    serve = command(
        "serve",
        "run the service for one link",
        "Takes bursts of pilot frames from the testbed controller, keeps the channel estimate, and publishes\n"
        "refreshed patterns, the state and alarms. Runs until it is told to stop (Ctrl-C, SIGTERM or the control\n"
        "socket). Ended so and started again under the same settings, it goes on with the estimate that it had;\n"
        "after a crash, or under other settings, it estimates afresh.",
        "  ris-tracker serve yard.toml",
    )
    _settings(serve)
    serve.add_argument(
        "--log",
        metavar="LEVEL",
        choices=("debug", "info", "warning", "error"),
        default="info",
        help="what to log on standard error: debug, info, warning or error (default: info)",
    )

    replay = command(
        "replay",
        "work off recorded logs as the service would",
        "Feeds recorded bursts to the same engine as the service does. A journal under its own settings gives the\n"
        "same patterns bit by bit, which is checked; under other settings it shows what these would have done.",
        "  ris-tracker replay journal/yard-20260101T120000Z-000.mcap\n"
        "  ris-tracker replay journal/*.mcap --settings slower.toml --out slower.mcap --json slower.json",
    )
    _logs(replay)
    replay.add_argument(
        "--settings", metavar="SETTINGS", type=Path, help="use these settings (default: those recorded in the log)"
    )
    replay.add_argument("--out", metavar="OUT.mcap", type=Path, help="write what would have been published, as a log")
    _told(replay)

    check = command(
        "check",
        "say what settings mean, and whether they can be used",
        "Reads settings, and the files that they name, as the service would and prints what they amount to: delays,\n"
        "unknowns, memory, work a frame, least frame rate, queue. Opens no socket and writes nothing.",
        "  ris-tracker check yard.toml",
    )
    _settings(check)

    watch = command(
        "watch",
        "see a running service in the terminal",
        "Subscribes to what the service publishes and shows it: mode, rate, noise, drift, latency, the pattern in\n"
        "use, alarms. It only listens; any number may watch, from any machine that reaches the endpoint.",
        "  ris-tracker watch yard.toml\n"
        "  ris-tracker watch --publish tcp://192.0.2.7:5601 --link yard\n"
        "  ris-tracker watch yard.toml --plain --seconds 60 >> yard.log",
    )
    watch.add_argument(
        "settings", metavar="SETTINGS", type=Path, nargs="?", help="settings of the service: endpoint, link and panel"
    )
    watch.add_argument(
        "--publish", metavar="ENDPOINT", type=_endpoint, help="where the service publishes, as tcp://HOST:PORT"
    )
    watch.add_argument("--link", metavar="NAME", type=_link, help="name of the link")
    watch.add_argument("--plain", action="store_true", help="one line a second instead of a screen, for logs")
    watch.add_argument("--seconds", metavar="S", type=_positive, help="end after this many seconds")

    learn = command(
        "learn",
        "learn an aperture basis from recorded logs",
        "Finds the few columns in which the responses of all elements lie, as far as the logs show them: the engine\n"
        "then estimates those instead of every element, and follows a moving terminal with far fewer frames. Frames\n"
        "held out say how many columns to keep and how good they are. Writes a picture beside the basis (.svg); what\n"
        'stood there is replaced. To use it: aperture.basis = "learned", aperture.file = "BASIS.npz".',
        "  ris-tracker learn journal/yard-20260101T120000Z-000.mcap --out yard-basis.npz\n"
        "  ris-tracker learn journal/*.mcap --settings yard.toml --out yard-basis.npz --size 16",
    )
    _logs(learn)
    learn.add_argument(
        "--settings",
        metavar="SETTINGS",
        type=Path,
        help="use these settings (default: those recorded in the first log)",
    )
    learn.add_argument(
        "--out", metavar="BASIS.npz", type=Path, required=True, help="basis to write; the name ends in .npz"
    )
    learn.add_argument(
        "--size",
        metavar="R",
        type=_count,
        help="keep this many columns (default: aperture.size where the settings give it, else as held-out frames say)",
    )
    _quiet(learn)

    inspect = command(
        "inspect",
        "say what recorded logs hold",
        "Reads logs and tells what lies in them: links, runs, bursts, frames, gaps, sizes, levels of signal and\n"
        "noise, patterns, alarms, damage. Replays nothing.",
        "  ris-tracker inspect journal/*.mcap",
    )
    _logs(inspect)
    _told(inspect)

    drift = command(
        "drift",
        "show what changed when, over seconds or hours",
        "Tells from logs what happened to a link: alarms with their evidence, modes, losses, what the tracker did and\n"
        "what became of the rate; and draws it. A journal is taken as the service wrote it. A log without states is\n"
        "replayed first, and so is any log when settings are given.",
        "  ris-tracker drift journal/*.mcap\n"
        "  ris-tracker drift journal/yard-20260101T120000Z-000.mcap --svg tuesday.svg --json tuesday.json\n"
        "  ris-tracker drift recording.mcap --settings slower.toml",
    )
    _logs(drift)
    drift.add_argument("--settings", metavar="SETTINGS", type=Path, help="replay the logs under these settings")
    drift.add_argument(
        "--svg",
        metavar="PICTURE.svg",
        type=Path,
        help="picture to write, which must not exist (default: beside the first log, under its name or the next that "
        "is free)",
    )
    drift.add_argument(
        "--faults",
        metavar="FAULTS.toml",
        type=Path,
        help="write the faulty elements found at the end as settings; what stood there is replaced",
    )
    _told(drift)

    suggest = command(
        "suggest",
        "suggest settings from a recorded log",
        "Estimates from a log what fits it, such as the length of the channel and how fast it moves, and prints\n"
        "settings to start from, each with the reason why. What a log cannot tell is marked CORRECT THIS.",
        "  ris-tracker suggest journal/yard-20260101T120000Z-000.mcap > suggested.toml",
    )
    suggest.add_argument("log", metavar="LOG", type=_existing, help="a log, as the service records it")
    _quiet(suggest)
    return parser


def _settings(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("settings", metavar="SETTINGS", type=Path, help="settings of the link, a TOML file")


def _logs(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("logs", metavar="LOG", type=_existing, nargs="+", help="logs in the order of recording")


def _told(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--json", metavar="SUMMARY.json", type=Path, help="write the summary as JSON too")
    _quiet(parser)


def _quiet(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--quiet", action="store_true", help="show no progress")


def _existing(text: str) -> Path:
    path = Path(text)
    if not path.exists():
        raise argparse.ArgumentTypeError(f"{path}: there is no such file")
    if path.is_dir():
        raise argparse.ArgumentTypeError(f"{path}: is a folder, name the logs in it")
    return path


def _endpoint(text: str) -> str:
    return _allowed(text, endpoint=True)


def _link(text: str) -> str:
    return _allowed(text, endpoint=False)


def _allowed(text: str, *, endpoint: bool) -> str:
    from tracker.settings import not_allowed

    if said := not_allowed(text, endpoint=endpoint):
        raise argparse.ArgumentTypeError(said)
    return text


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = 0.0
    if not 0 < value < float("inf"):
        raise argparse.ArgumentTypeError(f"found {text!r}, allowed is: a number above 0")
    return value


def _count(text: str) -> int:
    if not text.isdecimal() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"found {text!r}, allowed is: a whole number above 0")
    return int(text)


def _serve(asked: argparse.Namespace) -> int:
    from tracker.service.serve import serve

    _one_blas_thread()
    return serve(asked.settings, asked.log)


def _replay(asked: argparse.Namespace) -> int:
    from tracker.offline.replay import replay

    _one_blas_thread()
    return replay(asked.logs, asked.settings, asked.out, asked.json, not asked.quiet)


def _check(asked: argparse.Namespace) -> int:
    from tracker.assembly import configure
    from tracker.service.sockets import receive_queue
    from tracker.settings import load
    from tracker.view.summary import summary

    settings = load(asked.settings)
    _one_blas_thread()
    print(summary(settings, configure(settings, asked.settings.parent), receive_queue(settings)))
    return 0


def _watch(asked: argparse.Namespace) -> int:
    from tracker.settings import SettingsError, load
    from tracker.view.watch import watch

    settings = load(asked.settings) if asked.settings is not None else None
    endpoint = asked.publish or (settings.sockets.publish if settings else None)
    link = asked.link or (settings.link.name if settings else None)
    if endpoint is None or link is None:
        raise SettingsError("name SETTINGS, or both --publish ENDPOINT and --link NAME")
    shape = (settings.panel.columns, settings.panel.rows) if settings else None
    return watch(endpoint, link, shape, plain=asked.plain, seconds=asked.seconds)


def _inspect(asked: argparse.Namespace) -> int:
    from tracker.offline.inspect import inspect

    return inspect(asked.logs, asked.json, not asked.quiet)


def _learn(asked: argparse.Namespace) -> int:
    from tracker.offline.learn import learn

    _one_blas_thread()
    return learn(asked.logs, asked.settings, asked.out, asked.size, not asked.quiet)


def _drift(asked: argparse.Namespace) -> int:
    from tracker.offline.drift import drift

    _one_blas_thread()
    return drift(asked.logs, asked.settings, asked.svg, asked.json, asked.faults, progress=not asked.quiet)


def _suggest(asked: argparse.Namespace) -> int:
    from tracker.offline.suggest import suggest

    _one_blas_thread()
    return suggest(asked.log, not asked.quiet)


COMMANDS = {
    "serve": _serve,
    "replay": _replay,
    "check": _check,
    "watch": _watch,
    "learn": _learn,
    "inspect": _inspect,
    "drift": _drift,
    "suggest": _suggest,
}


def _one_blas_thread() -> None:
    """Pin BLAS to one thread for good: with two it stalls for ~10 ms on small matrices."""
    import scipy.linalg  # noqa: F401 - threadpoolctl reaches only libraries that are loaded, NumPy's and SciPy's own
    from threadpoolctl import threadpool_limits

    threadpool_limits(limits=1, user_api="blas")


def _is_mistake(error: Exception) -> bool:
    """Tell errors whose message is one line for the user from faults of ours."""
    from tracker.logs.errors import LogError
    from tracker.offline.errors import OfflineError
    from tracker.service.errors import ServiceError
    from tracker.settings import SettingsError

    return isinstance(error, (SettingsError, LogError, OfflineError, ServiceError))


def entry(arguments: Sequence[str] | None = None) -> int:
    """Run one command.

    Parameters
    ----------
    arguments : sequence of str, optional
        The command line without the program's name; `sys.argv` by default.

    Returns
    -------
    int
        Exit status. Mistakes in the arguments themselves leave by SystemExit(2), help and version by SystemExit(0).
    """
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):  # what a terminal or a file of another encoding cannot show is spelt
            stream.reconfigure(errors="backslashreplace")
    asked, unknown = _parser().parse_known_args(arguments)
    if unknown:
        _Parser(prog=f"ris-tracker {asked.command}").error(f"unrecognized arguments: {' '.join(unknown)}")
    try:
        status = COMMANDS[asked.command](asked)
        sys.stdout.flush()
    except KeyboardInterrupt:
        print(f"ris-tracker {asked.command}: interrupted", file=sys.stderr)
        return 130
    except BrokenPipeError:
        # The reader of our output went away (`| head`); Python must not complain again when it closes the stream.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as fault:  # noqa: BLE001 - the outermost door: whatever it is, the user gets one line
        if _is_mistake(fault):
            print(f"ris-tracker {asked.command}: {fault}", file=sys.stderr)
            return 2
        print(f"ris-tracker {asked.command}: {_our_fault(fault)}", file=sys.stderr)
        return 1
    return status


def _our_fault(fault: Exception) -> str:
    """Describe a fault of ours in one line and put the traceback where it can be sent from."""
    said = " ".join(f"{type(fault).__name__}: {fault}".split())
    text = "".join(traceback.format_exception(fault))
    try:
        with tempfile.NamedTemporaryFile(
            "w", prefix="ris-tracker-fault-", suffix=".txt", delete=False, encoding="utf-8"
        ) as file:
            file.write(f"ris-tracker {__version__}, Python {sys.version}\n{' '.join(sys.argv)}\n\n{text}")
    except OSError:
        print(text, file=sys.stderr)
        return f"internal fault: {said} (traceback above; please report it)"
    return f"internal fault: {said} (traceback in {file.name}; please report it)"
