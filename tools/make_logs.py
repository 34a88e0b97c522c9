"""Makes the logs in replay_logs/: three short recordings of the invented container yard.

    python tools/make_logs.py            write replay_logs/*.mcap anew
    python tools/make_logs.py --out DIR  write them elsewhere, to compare

A tracker refreshes the pattern in force while they are recorded, but only the bursts are written: what a tracker
makes of them is for the replay to show. Nothing depends on a clock or on chance of the machine: the same libraries on
the same kind of processor write the same bytes, other processors round the last bit of a response differently.
"""

import argparse
import sys
from dataclasses import dataclass, replace
from pathlib import Path

from rich.console import Console
from rich.progress import Progress
from threadpoolctl import threadpool_limits

from tracker.settings import parse
from tracker.simulation.closed_loop import EngineInLoop, turns
from tracker.simulation.config import SceneConfig, ToneGrid
from tracker.simulation.motion import Still, Track, Waypoints
from tracker.simulation.record import record
from tracker.simulation.schedule import Block
from tracker.simulation.testbed import Testbed, TestbedConfig
from tracker.simulation.yard import Scenario, lane, yard

LINK = "yard"
START_NS = 1_750_000_000_000_000_000
SEED = 20
FRAMES = 16


@dataclass(frozen=True, slots=True)
class Recording:
    """A log to make: a scenario and how long it is recorded."""

    scenario: Scenario
    seconds: float


def small(track: Track, shadow_db: float, snr_db: float) -> SceneConfig:
    """Build a small yard: 64 elements and 32 tones over 40 MHz, so that a log of 20 s stays below 4 MB."""
    scene = yard((track,), shadow_db, snr_db, columns=8, rows=8)
    return replace(scene, tones=ToneGrid(fft=64, first=16, count=32, spacing_hz=625e3))


def recordings() -> list[Recording]:
    """Say what is recorded."""
    waiting = Still(lane(0.0)[0])
    quiet = small(waiting, shadow_db=42.0, snr_db=-4.0)
    driving = Waypoints(lane(0.0, 1.5), 0.1, from_s=5.0)
    slow = small(driving, shadow_db=42.0, snr_db=-4.0)
    # Here the direct path is worth as much as the surface at its best, so that blocking it shows.
    blocked = small(waiting, shadow_db=30.0, snr_db=4.0)
    block = Block(from_s=8.0, until_s=14.0, loss_db=25.0, ramp_s=0.3)
    blocked = replace(blocked, direct=replace(blocked.direct, blocks=(block,)))

    def scenario(name: str, text: str, scene: SceneConfig, time_constant_ms: float) -> Scenario:
        return Scenario(name, text, TestbedConfig(scene, frames=FRAMES), 35.0, time_constant_ms)

    return [
        Recording(scenario("quiet-start", "a carrier waits in the lane, nothing moves", quiet, 1000.0), 20.0),
        Recording(scenario("slow-carrier", "a carrier waits for 5 s, then moves 1.5 m at 0.1 m/s", slow, 300.0), 20.0),
        Recording(scenario("blocked-path", "the direct path is blocked from 8 s to 14 s", blocked, 500.0), 20.0),
    ]


def main() -> int:
    """Make all logs."""
    parser = argparse.ArgumentParser(description="Make the logs in replay_logs/.")
    parser.add_argument("--out", type=Path, default=Path(__file__).parents[1] / "replay_logs", help="folder")
    folder: Path = parser.parse_args().out
    folder.mkdir(parents=True, exist_ok=True)
    console = Console(stderr=True)
    with threadpool_limits(limits=1), Progress(console=console, disable=not console.is_terminal) as progress:
        for one in recordings():
            path = folder / f"{one.scenario.name}.mcap"
            path.unlink(missing_ok=True)
            size = make(one, path, progress)
            print(f"{path.name}: {size / 1e6:.2f} MB")
    return 0


def make(recording: Recording, path: Path, progress: Progress) -> int:
    """Make one log; gives back its size in bytes."""
    scenario = recording.scenario
    settings = scenario.settings(LINK)
    count = round(recording.seconds * scenario.bursts_per_s)
    task = progress.add_task(path.name, total=count)
    testbed = Testbed(scenario.testbed, SEED, run=1, start_ns=START_NS)
    loop = turns(testbed, START_NS, scenario.bursts_per_s, count, EngineInLoop(parse(settings)))
    bursts = (replace(turn, events=()) for turn in loop)
    return record(bursts, path, LINK, settings, lambda done: progress.update(task, completed=done))


if __name__ == "__main__":
    sys.exit(main())
