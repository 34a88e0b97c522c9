"""The command line from outside: help, exit status, one line for a mistake, no traceback."""

import os
import subprocess
import sys
import tempfile
import tomllib
from collections.abc import Callable
from pathlib import Path

import pytest

from tracker import cli
from tracker.cli import entry

ROOT = Path(__file__).resolve().parent.parent
GOOD = """
[link]
name = "yard"
[panel]
columns = 20
rows = 16
[tones]
fft = 256
first = 28
count = 200
spacing_khz = 156.25
[sockets]
publish = "tcp://127.0.0.1:9"
"""
QUIET = str(ROOT / "replay_logs" / "quiet-start.mcap")
BRIEFLY = ["--plain", "--seconds", "1"]
ARGUMENTS = {
    "serve": ["SETTINGS", "--log"],
    "replay": ["LOG", "--settings", "--out", "--json", "--quiet"],
    "check": ["SETTINGS"],
    "watch": ["SETTINGS", "--publish", "--link", "--plain", "--seconds"],
    "learn": ["LOG", "--settings", "--out", "--size", "--quiet"],
    "inspect": ["LOG", "--json", "--quiet"],
    "drift": ["LOG", "--settings", "--svg", "--json", "--quiet"],
    "suggest": ["LOG", "--quiet"],
}


def run(*arguments: str, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run the program as a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "tracker", *arguments],
        cwd=ROOT,
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


def left_with(arguments: list[str]) -> int:
    """Run in this process and give the exit status, however it leaves."""
    try:
        return entry(arguments)
    except SystemExit as leaving:
        return -1 if not isinstance(leaving.code, int) else leaving.code


@pytest.fixture
def settings(tmp_path: Path) -> Path:
    path = tmp_path / "yard.toml"
    path.write_text(GOOD)
    return path


def test_the_version_is_the_packages() -> None:
    """`python -m tracker --version` prints the version that pyproject.toml gives."""
    version = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"]
    done = run("--version")
    assert (done.returncode, done.stdout, done.stderr) == (0, f"ris-tracker {version}\n", "")


def test_help_names_every_command(capsys: pytest.CaptureFixture[str]) -> None:
    """The overview lists all commands, gives examples, the exit status and the caution on radiated power."""
    assert left_with(["--help"]) == 0
    text = capsys.readouterr().out
    for wanted in (*ARGUMENTS, "examples:", "exit status:", "ICNIRP 2020", "licence", "Local rules"):
        assert wanted in text
    assert set(ARGUMENTS) == set(cli.COMMANDS)


@pytest.mark.parametrize("command", cli.COMMANDS)
def test_help_of_each_command_is_complete(command: str, capsys: pytest.CaptureFixture[str]) -> None:
    """Each command tells all its arguments, shows an example that begins with itself, and repeats the caution."""
    assert left_with([command, "--help"]) == 0
    text = capsys.readouterr().out
    for wanted in (*ARGUMENTS[command], f"  ris-tracker {command} ", "ICNIRP 2020"):
        assert wanted in text
    assert max(map(len, text.splitlines())) <= 120


@pytest.mark.parametrize(
    ("arguments", "wanted"),
    [
        ([], "COMMAND"),
        (["mend"], "'mend'"),
        (["serve"], "SETTINGS"),
        (["serve", "nowhere.toml"], "nowhere.toml: there is no such file"),
        (["serve", "nowhere.toml", "--log", "loud"], "'loud'"),
        (["check", "nowhere.toml"], "nowhere.toml: there is no such file"),
        (["check", "nowhere.toml", "more"], "more"),
        (["replay"], "LOG"),
        (["replay", "nowhere.mcap"], "nowhere.mcap: there is no such file"),
        (["replay", "."], "folder"),
        (["learn", "nowhere.mcap", "--out", "basis.npz"], "nowhere.mcap: there is no such file"),
        (["learn", QUIET], "--out"),
        (["learn", QUIET, "--out", "basis.npz", "--size", "0"], "'0'"),
        (["learn", QUIET, "--out", "basis.txt"], ".npz"),
        (["drift"], "LOG"),
        (["drift", "nowhere.mcap"], "nowhere.mcap: there is no such file"),
        (["inspect", "nowhere.mcap"], "nowhere.mcap: there is no such file"),
        (["suggest", "nowhere.mcap"], "nowhere.mcap: there is no such file"),
        (
            ["check", "nowhere.toml", "--more"],
            "ris-tracker check: unrecognized arguments: --more; see ris-tracker check",
        ),
        (["watch"], "--publish"),
        (
            ["watch", "--publish", "here:5601", "--link", "yard"],
            "--publish: found 'here:5601', allowed is: an endpoint",
        ),
        (
            ["watch", "--publish", "tcp://127.0.0.1:65536", "--link", "yard", *BRIEFLY],
            "65536', allowed is: an endpoint",
        ),
        (
            ["watch", "--publish", "tcp://127.0.0.1:5601", "--link", "B", *BRIEFLY],
            "--link: found 'B', allowed is: 1 to 32 char",
        ),
        (["watch", "--publish", "tcp://127.0.0.1:5601"], "--link"),
        (["watch", "--publish", "telephone", "--link", "yard", *BRIEFLY], "telephone"),
        (["watch", "--publish", "tcp://127.0.0.1:5601", "--link", "The Yard", *BRIEFLY], "The Yard"),
        (["watch", "--seconds", "0"], "'0'"),
        (["watch", "--seconds", "soon"], "'soon'"),
    ],
)
def test_a_mistake_is_one_line_and_exit_status_2(
    arguments: list[str], wanted: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """Whatever is wrong with the arguments: status 2, one line that names it, nothing on standard output."""
    assert left_with(arguments) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("ris-tracker")
    assert wanted in err
    assert err.count("\n") == 1
    assert "Traceback" not in err


@pytest.mark.parametrize(
    ("change", "wanted"),
    [
        (lambda text: text.replace("rows = 16", "rows = 0"), "panel.rows"),
        (lambda text: text.replace("rows", "colums = 3\nrows"), "panel.colums"),
        (lambda text: text + "[", "not valid TOML"),
        (lambda text: text.replace("count = 200", "count = 250"), "tones"),
        (lambda text: "\ufffe" * 3 + text, "not valid TOML"),
    ],
    ids=["out of range", "unknown key", "cut off", "outside the band", "no text"],
)
@pytest.mark.parametrize("command", ["check", "serve", "watch"])
def test_settings_that_cannot_be_used_are_the_users_mistake(
    command: str, change: Callable[[str], str], wanted: str, settings: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The one line names the file and the key."""
    settings.write_text(change(GOOD), encoding="utf-8")
    assert left_with([command, str(settings)]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert settings.name in err
    assert wanted in err


@pytest.mark.parametrize("command", ["replay", "inspect", "suggest"])
def test_a_file_that_is_no_log_is_the_users_mistake(
    command: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A file of another kind gives status 2 and one line that names it."""
    path = tmp_path / "notes.mcap"
    path.write_text("Tuesday: moved the mast.\n" * 100)
    assert left_with([command, str(path)]) == 2
    _, err = capsys.readouterr()
    assert path.name in err
    assert err.count("\n") == 1


def test_check_says_what_the_settings_mean(settings: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Settings in order: status 0, and elements, unknowns, memory and work on standard output."""
    assert left_with(["check", str(settings)]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    for wanted in ("N = 320 elements", "321 complex", "covariance 805 KB", "Mflop a frame", "yard"):  # 321² · 8 / 1024
        assert wanted in out


def test_watch_takes_endpoint_and_link_from_the_settings(settings: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Naming the settings is enough; a service that is not running is waited for, and the given time ends it."""
    assert left_with(["watch", str(settings), "--plain", "--seconds", "1.2"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "yard, nothing heard yet" in out


def test_a_fault_of_ours_keeps_its_traceback_in_a_file(
    settings: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """An unforeseen error: status 1, one line that names the file, and the whole traceback in it."""

    def broken(_: object) -> int:
        raise ZeroDivisionError("a fault\nof ours")

    monkeypatch.setitem(cli.COMMANDS, "check", broken)
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    assert left_with(["check", str(settings)]) == 1
    err = capsys.readouterr().err
    assert err.count("\n") == 1
    assert "ZeroDivisionError: a fault of ours" in err
    (kept,) = tmp_path.glob("ris-tracker-fault-*.txt")
    assert str(kept) in err
    assert "in broken" in kept.read_text()


def test_an_interrupt_ends_with_one_line(
    settings: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Ctrl-C: status 130 (128 + SIGINT, as shells count), one line."""

    def interrupted(_: object) -> int:
        raise KeyboardInterrupt

    monkeypatch.setitem(cli.COMMANDS, "check", interrupted)
    assert left_with(["check", str(settings)]) == 130
    assert capsys.readouterr().err == "ris-tracker check: interrupted\n"


def test_a_reader_that_goes_away_is_no_error(settings: Path) -> None:
    """`ris-tracker check … | true`: nothing on standard error, no traceback."""
    program = f"import sys; sys.argv = ['ris-tracker', 'check', {str(settings)!r}]; " + (
        "import os; r, w = os.pipe(); os.close(r); os.dup2(w, 1); from tracker.cli import entry; sys.exit(entry())"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], cwd=ROOT, capture_output=True, text=True, timeout=60, check=False
    )
    assert (done.returncode, done.stderr) == (0, "")


def test_output_that_knows_no_unicode_is_no_fault(settings: Path) -> None:
    """Where the terminal's encoding has no × or −, they are spelt, and the command is done."""
    done = run("check", str(settings), PYTHONIOENCODING="ascii")
    assert (done.returncode, done.stderr) == (0, "")
    assert "20 columns \\xd7 16 rows" in done.stdout


def test_help_and_mistakes_answer_without_the_heavy_parts() -> None:
    """Arguments are read before NumPy, sockets or screens are loaded."""
    program = (
        "import sys; from tracker.cli import entry\n"
        "try: entry(['--version'])\n"
        "except SystemExit: pass\n"
        "print([name for name in ('numpy', 'scipy', 'zmq', 'mcap', 'pydantic') if name in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", program],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    assert done.stdout.splitlines()[-1] == "[]"


def test_no_traceback_reaches_the_user_from_a_process() -> None:
    """As a process: status 2 and one line."""
    done = run("check", "nowhere.toml")
    assert done.returncode == 2
    assert done.stderr == "ris-tracker check: nowhere.toml: there is no such file\n"
