"""Records a scene into a log, as fast as the machine can."""

from collections.abc import Callable, Iterable
from pathlib import Path

from tracker.logs import LogWriter
from tracker.messages import encode_pilots
from tracker.outgoing import encode
from tracker.simulation.closed_loop import Turn


def record(
    turns: Iterable[Turn], path: Path, link: str, settings: str, advanced: Callable[[int], None] = lambda done: None
) -> int:
    """Write a log of what passes between a testbed and the engine.

    The log holds simulated times only, so that the same scene and seed give the same file.

    Parameters
    ----------
    turns : iterable of Turn
        See `closed_loop.turns`.
    path : Path
        Log to write; must not exist.
    link : str
    settings : str
        The tracker's settings, TOML; kept in the log as `settings.toml`.
    advanced : callable
        Told how many bursts are written.

    Returns
    -------
    int
        Bytes written.

    Raises
    ------
    LogError
        When the file exists or cannot be made.
    OSError
        When the disk is full or gone; what was written before is whole.
    """
    # No clock of this machine goes into the file.
    with LogWriter(path, attachments={"settings.toml": settings.encode()}, clock_ns=lambda: 0) as writer:
        for done, turn in enumerate(turns, start=1):
            writer.add(f"pilots/{link}", encode_pilots(link, turn.burst), turn.arrival_ns, turn.burst.t_ns)
            for event in turn.events:
                kind, body, t_ns = encode(link, event, 0, {})
                writer.add(f"{kind}/{link}", body, turn.arrival_ns, t_ns)
            writer.commit()
            advanced(done)
        writer.close()
        return writer.bytes_written
