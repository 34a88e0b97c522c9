"""Starting and ending the service."""

import signal
from pathlib import Path

from threadpoolctl import threadpool_limits

from tracker import __version__
from tracker.assembly import configure
from tracker.engine.tracker import Tracker
from tracker.settings import load
from tracker.snapshots import Start, pack_start

from .checkpoint import Checkpoint
from .identity import IdFile
from .journal import Journal
from .log import configure_log
from .loop import Service
from .sockets import Sockets, receive_queue


def serve(settings_path: Path, log_level: str = "info") -> int:
    """Serve one link until SIGTERM, SIGINT or the verb ``stop``.

    Parameters
    ----------
    settings_path : Path
    log_level : str

    Returns
    -------
    int
        Exit status.

    Raises
    ------
    SettingsError, ServiceError
        One line for the user.
    """
    settings = load(settings_path)
    text = settings_path.read_text(encoding="utf-8")
    config = configure(settings, settings_path.parent)
    folder = settings_path.parent / settings.journal.folder
    log = configure_log(log_level)
    with threadpool_limits(limits=1), Sockets(settings) as sockets:
        folder.mkdir(parents=True, exist_ok=True)
        ids = IdFile(folder / f"{settings.link.name}.next-id")
        checkpoint = Checkpoint(folder / f"{settings.link.name}.checkpoint", text)
        tracker = Tracker(config, ids.next_id)
        resumed = checkpoint.resume(tracker)
        journal = Journal(
            folder, settings.link.name, text, settings.journal.rotate_mb, lambda: pack_start(_start(tracker))
        )
        service = Service(settings, text, tracker, sockets, journal, ids, log)
        previous = {
            number: signal.signal(number, lambda *_: service.stop()) for number in (signal.SIGTERM, signal.SIGINT)
        }
        log.info(
            "serving",
            version=__version__,
            link=settings.link.name,
            elements=config.elements,
            receivers=config.receivers,
            tones=config.tones,
            delay_directions=config.delay.shape[1],
            unknowns=config.aperture.size + 1,
            pilots=settings.sockets.pilots,
            publish=settings.sockets.publish,
            control=settings.sockets.control,
            queue_bursts=receive_queue(settings),
            journal=str(journal.path),
            first_pattern=tracker.next_id,
            resumed=resumed,
            blas_threads=1,
        )
        try:
            service.run()
            checkpoint.keep(tracker)
        finally:
            journal.close()
            ids.close()
            for number, handler in previous.items():
                signal.signal(number, handler)
        log.info("stopped", journal=str(journal.path), **service.totals())
    return 0


def _start(tracker: Tracker) -> Start:
    """How the tracker stands at the beginning of a journal file."""
    return Start(tracker.next_id, tracker.snapshot() if tracker.counts.bursts else None)
