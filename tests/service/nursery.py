"""Starts services in a fraction of the time: all is imported once, and each service is a fork of this process.

Reads one JSON list a line on standard input and answers each with one JSON value on standard output:
``["start", ARGUMENTS, LOG]`` gives the process id of a new `ris-tracker ARGUMENTS` whose standard error goes to LOG;
``["wait", ID]`` gives its exit status (negative: the signal that ended it), or null when it has not ended in time.
"""

import json
import os
import sys
import time

import tracker.offline.replay
import tracker.service.serve  # noqa: F401
from tracker.cli import entry

PATIENCE_S = 30.0


def start(arguments: list[str], log: str) -> int:
    child = os.fork()
    if child:
        return child
    status = 1
    try:
        os.dup2(os.open(os.devnull, os.O_RDONLY), 0)
        os.dup2(os.open(log, os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o644), 2)
        os.dup2(2, 1)
        status = entry(arguments)
    except SystemExit as leaving:
        status = leaving.code if isinstance(leaving.code, int) else 1
    finally:
        os._exit(status)  # never back into the loop below


def wait(child: int) -> int | None:
    until = time.monotonic() + PATIENCE_S
    while time.monotonic() < until:
        ended, status = os.waitpid(child, os.WNOHANG)
        if ended:
            return os.waitstatus_to_exitcode(status)
        time.sleep(0.005)
    return None


def main() -> None:
    for line in sys.stdin:
        verb, *rest = json.loads(line)
        answer = start(*rest) if verb == "start" else wait(*rest)
        sys.stdout.write(json.dumps(answer) + "\n")
        sys.stdout.flush()


if __name__ == "__main__":
    main()
