"""The engine and a testbed, wired to each other in simulated time: no socket, no clock, the same bits every time."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from tracker.assembly import configure
from tracker.engine.burst import Burst
from tracker.engine.events import Event, Pattern, Plan
from tracker.engine.search.budget import Steps
from tracker.engine.tracker import Tracker
from tracker.settings import Settings
from tracker.simulation.testbed import Testbed


@dataclass(frozen=True, slots=True, eq=False)
class Turn:
    """One burst and what came of it.

    Parameters
    ----------
    burst : Burst
    arrival_ns : int
        When its last frame was on the air, ns since the Unix epoch.
    events : sequence of Event
        What the engine published; empty when there is none in the loop.
    """

    burst: Burst
    arrival_ns: int
    events: Sequence[Event]


class EngineInLoop:
    """An engine that takes bursts one by one, with the optimizer's budget counted in steps.

    Parameters
    ----------
    settings : Settings
    folder : Path
        Where relative paths of the settings start.
    """

    def __init__(self, settings: Settings, folder: Path = Path()) -> None:
        self.tracker = Tracker(configure(settings, folder))
        self._budget = Steps(settings.refresh.most_steps)

    def take(self, burst: Burst, arrival_ns: int) -> Sequence[Event]:
        """Work off a burst and give back what is published."""
        self.tracker.admit(burst, arrival_ns)
        return self.tracker.advance([burst], self._budget).events


def turns(
    testbed: Testbed, start_ns: int, bursts_per_s: float, count: int, engine: EngineInLoop | None = None
) -> Iterator[Turn]:
    """Sound bursts at a pace; patterns and plans that the engine publishes are in force from the next burst on.

    Parameters
    ----------
    testbed : Testbed
    start_ns : int
        Time of the first frame, ns since the Unix epoch.
    bursts_per_s : float
        Slower when a burst takes longer than that; of no effect on a testbed that obeys plans, which never pauses.
    count : int
        Bursts to sound.
    engine : EngineInLoop or None
    """
    pause_ns = 0 if testbed.config.obeys else max(round(1e9 / bursts_per_s) - testbed.burst_ns, 0)
    arrival_ns = start_ns - pause_ns
    for _ in range(count):
        burst = testbed.next_burst(arrival_ns + pause_ns)
        arrival_ns = burst.t_ns + testbed.burst_ns
        events = engine.take(burst, arrival_ns) if engine is not None else ()
        yield Turn(burst, arrival_ns, events)
        for event in events:
            if isinstance(event, Pattern):
                testbed.apply(event.id, event.states)
            elif isinstance(event, Plan):
                testbed.obey(event)
