"""Replay of a journal that the live service wrote at full pace: how fast, and whether it is the same to the last bit.

N = 256, 128 tones, bursts of 64 frames at 437.5 bursts/s; the replay follows the blocks and the optimizer steps of the
live service. The journal is one of several files, which are worked off side by side, a process on each core; times
include reading, and starting the program.
"""

import json
import os
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from statistics import median
from typing import Any

from benchmarks._link import bodies, environment, play, work_folder, write_settings
from benchmarks.row import Row
from tracker.simulation.yard import scenario

LEAST_TIMES_REAL = 3.0
# Size of a file of the journal: small enough that no core waits long for the last.
FILE_MB = 64.0


def rows(quick: bool) -> Iterator[Row]:
    """Measure."""
    scene, seconds = scenario("quiet"), 2.0 if quick else 60.0
    with work_folder() as folder:
        play(write_settings(scene, folder, f"rotate_mb = {FILE_MB:g}"), bodies(scene), seconds)
        logs = sorted((folder / "journal").glob("*.mcap"))
        size_mb = sum(log.stat().st_size for log in logs) / 1e6
        outs = [folder / f"{turn}.mcap" for turn in range(2)]
        runs = [_replayed(logs, out) for out in outs]
        plain = [_replayed(logs, None) for _ in range(1 if quick else 3)]
        same = len({(folder / f"{turn}.mcap").read_bytes() for turn in range(2)}) == 1
    first, _ = runs[0]
    times = [summary["span_s"] / took for summary, took in plain]
    writing = [summary["span_s"] / took for summary, took in runs]
    patterns = first["logged"]["patterns"]
    yield Row(
        "replay of a live journal over real time",
        median(times),
        "times",
        f">= {LEAST_TIMES_REAL:g}",
        median(times) >= LEAST_TIMES_REAL,
        f"{first['counts']['bursts']} bursts, {size_mb:.0f} MB in {len(logs)} files, "
        f"{len(os.sched_getaffinity(0))} cores; runs "
        + ", ".join(f"{each:.2f}" for each in times)
        + "; writing a log as well "
        + ", ".join(f"{each:.2f}" for each in writing),
    )
    off = patterns - first["patterns_same"] + first["patterns_only_in_replay"]
    yield Row("replay: patterns that differ from those published", off, "patterns", "0", off == 0, f"of {patterns}")
    yield Row("replay: twice the same file", float(same), "yes = 1", "1", same, "byte by byte")


def _replayed(logs: list[Path], out: Path | None) -> tuple[dict[str, Any], float]:
    """Replay as a user does, and write a log of it if wanted; give the summary and the time it took."""
    told = logs[0].parent.parent / "told.json"
    command = [sys.executable, "-m", "tracker", "replay", *logs, "--quiet", "--json", told]
    if out is not None:
        command += ["--out", out]
    begun = time.perf_counter()
    subprocess.run([str(part) for part in command], check=True, env=environment(), stdout=subprocess.DEVNULL)
    took = time.perf_counter() - begun
    summary: dict[str, Any] = json.loads(told.read_text())
    return summary, took
