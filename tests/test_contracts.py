"""The scripts in tools/: what they promise to whoever runs them on a fresh machine."""

import json
import os
import shutil
import signal
import socket
import stat
import subprocess
import sys
import threading
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
SCRIPTS = [ROOT / name for name in ("tools/environment", "tools/test", "tools/bench", "tools/demo", ".ci/run")]

BENCHMARK = """
from collections.abc import Iterator

from benchmarks.row import Row


def rows(quick: bool) -> Iterator[Row]:
    yield Row("a thing", 2.0 if quick else 1.0, "ms", "≤ 3", True, "for the test")
"""


def run(*command: str | Path, cwd: Path = ROOT, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run a command, away from the checkout when asked."""
    return subprocess.run(
        [str(part) for part in command],
        cwd=cwd,
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


@pytest.mark.parametrize("script", SCRIPTS, ids=lambda path: path.name)
def test_scripts_can_be_run_as_they_are(script: Path) -> None:
    """Executable, found through env, valid shell, and free of absolute paths."""
    text = script.read_text(encoding="utf-8")
    assert script.stat().st_mode & stat.S_IXUSR
    assert text.startswith("#!/usr/bin/env bash\n")
    assert run("bash", "-n", script).returncode == 0
    for start in ("/home/", "/root/", "/Users/", "/opt/"):
        assert start not in text


@pytest.fixture
def checkout(tmp_path: Path) -> Path:
    """A checkout with nothing made in it yet."""
    shutil.copytree(ROOT / "tools", tmp_path / "tools", ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copy(ROOT / "pyproject.toml", tmp_path)
    for module in (tmp_path / "tools" / "benchmarks").glob("*.py"):
        if module.name not in ("__init__.py", "row.py", "run.py"):
            module.unlink()
    return tmp_path


def test_a_python_that_is_too_old_is_named_in_one_line(checkout: Path) -> None:
    """One line says what is needed; nothing is made."""
    old = checkout / "old-python"
    old.write_text("#!/bin/sh\nexit 1\n")  # fails the question for 3.11 as an older one does
    old.chmod(0o755)
    done = run(checkout / "tools" / "environment", PYTHON=str(old))
    assert done.returncode == 1
    assert done.stdout == ""
    assert done.stderr.count("\n") == 1
    assert "3.11" in done.stderr
    assert not (checkout / ".venv").exists()


def test_a_python_without_venv_says_what_to_install(checkout: Path) -> None:
    """Where the venv module is a package of its own, the line names it."""
    bare = checkout / "bare-python"
    bare.write_text(f'#!/bin/sh\ncase "$*" in *ensurepip*) exit 1;; esac\nexec "{sys.executable}" "$@"\n')
    bare.chmod(0o755)
    done = run(checkout / "tools" / "environment", PYTHON=str(bare))
    assert done.returncode == 1
    assert done.stderr.count("\n") == 1
    major, minor = sys.version_info[:2]
    assert f"python{major}.{minor}-venv" in done.stderr


def bench(checkout: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    """Run the benchmarks of a checkout from somewhere else."""
    return run(sys.executable, checkout / "tools" / "benchmarks" / "run.py", *arguments, cwd=checkout.parent)


def test_a_benchmark_that_fails_does_not_stop_the_others(checkout: Path) -> None:
    """The failure shows in the table and in the exit status; the other values are there, in the file too."""
    folder = checkout / "tools" / "benchmarks"
    (folder / "broken.py").write_text(BENCHMARK + '    raise OSError("no such device")\n')
    (folder / "sound.py").write_text(BENCHMARK)
    (folder / "unimportable.py").write_text("import nothing_of_that_name\n")
    (folder / "lends_a_hand.py").write_text('"""No benchmark."""\n')
    done = bench(checkout, "--quick")
    assert done.returncode == 1
    assert "OSError: no such device" in done.stdout
    kept = json.loads((checkout / "bench.json").read_text(encoding="utf-8"))
    assert kept["quick"] is True
    found = {each["name"]: (len(each["rows"]), each["error"]) for each in kept["benchmarks"]}
    assert found["sound"] == (1, None)
    assert found["broken"] == (1, "OSError: no such device")
    assert found["unimportable"][0] == 0
    assert "lends_a_hand" not in found
    assert kept["benchmarks"][0]["rows"][0]["value"] == 2.0


def test_one_benchmark_can_be_run_alone(checkout: Path) -> None:
    """`--only` runs what it names, `--json` says where the figures go, and a wrong name lists the right ones."""
    folder = checkout / "tools" / "benchmarks"
    (folder / "one.py").write_text(BENCHMARK)
    (folder / "two.py").write_text(BENCHMARK)
    done = bench(checkout, "--only", "two", "--json", str(checkout / "two.json"))
    assert done.returncode == 0
    kept = json.loads((checkout / "two.json").read_text(encoding="utf-8"))
    assert [(each["name"], each["rows"][0]["value"]) for each in kept["benchmarks"]] == [("two", 1.0)]
    wrong = bench(checkout, "--only", "three")
    assert wrong.returncode == 2
    assert "there are: one, two" in wrong.stderr


def test_benchmarks_that_can_be_drawn_are(checkout: Path) -> None:
    """`--pictures` names a folder; what a benchmark draws of its rows lies there under its name, and nothing else."""
    folder = checkout / "tools" / "benchmarks"
    (folder / "plain.py").write_text(BENCHMARK)
    (folder / "drawn.py").write_text(BENCHMARK + "\n\ndef picture(rows):\n    return f'<svg>{rows[0].value}</svg>'\n")
    assert bench(checkout, "--quick").returncode == 0
    assert not list(checkout.rglob("drawn.svg"))
    assert bench(checkout, "--quick", "--pictures", str(checkout / "made" / "here")).returncode == 0
    (made,) = (checkout / "made" / "here").iterdir()
    assert (made.name, made.read_text(encoding="utf-8")) == ("drawn.svg", "<svg>2.0</svg>")


def demo(checkout: Path, *arguments: str, path: Path = ROOT) -> subprocess.Popen[str]:
    """Start the demo of a checkout that has room for its own journal."""
    return subprocess.Popen(
        [sys.executable, checkout / "tools" / "demo.py", "--plain", *arguments],
        cwd=checkout.parent,
        env={**os.environ, "PYTHONPATH": os.pathsep.join([str(path), str(ROOT)])},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def test_the_demo_runs_service_and_testbed_and_leaves_nothing_running(checkout: Path) -> None:
    """Patterns reach the testbed over real sockets; on SIGTERM both processes end, and a summary and the log remain."""
    process = demo(checkout, "--seconds", "120")
    assert process.stdout is not None
    watchdog = threading.Timer(60.0, process.terminate)
    watchdog.start()
    try:
        line = next(line for line in process.stdout if "achieved" in line and "patterns 0," not in line)
        process.send_signal(signal.SIGTERM)
        out, err = process.communicate(timeout=60)
    finally:
        watchdog.cancel()
        process.terminate()
    assert ", tracking, " in line or ", acquiring, " in line
    assert (process.returncode, err) == (0, "")
    assert "% of the best possible" in out
    settings = tomllib.loads((checkout / "demo-journal" / "yard.toml").read_text(encoding="utf-8"))
    for endpoint in settings["sockets"].values():
        with socket.socket() as free:
            free.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            free.bind(("127.0.0.1", int(endpoint.rpartition(":")[2])))
    (log,) = (checkout / "demo-journal").glob("**/*.mcap")
    assert log.read_bytes()[:8] == b"\x89MCAP0\r\n"  # magic bytes of the open MCAP specification


def test_the_demo_says_which_part_failed(checkout: Path) -> None:
    """A service that ends by itself: status 1, one line that names it and its status, and the last it said."""
    hook = checkout / "hook"
    hook.mkdir()
    (hook / "sitecustomize.py").write_text(
        "import os, sys\nif 'serve' in sys.orig_argv:\n    os.write(2, b'out of order\\n')\n    os._exit(3)\n"
    )
    process = demo(checkout, "--seconds", "60", path=hook)
    try:
        _, err = process.communicate(timeout=60)
    finally:
        process.terminate()
    assert process.returncode == 1
    assert "the service ended by itself with status 3" in err
    assert err.splitlines()[-1].strip() == "out of order"
