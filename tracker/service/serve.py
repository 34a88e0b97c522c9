"""Starting and ending the service."""

import signal
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from threadpoolctl import threadpool_limits

from tracker import __version__
from tracker.assembly import BASIS, configure, learned_basis
from tracker.engine.tracker import Tracker
from tracker.settings import load
from tracker.snapshots import Start, pack_start

from .checkpoint import Checkpoint
from .errors import ServiceError
from .faults import FaultsFile
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
    link = settings.link.name
    basis = learned_basis(settings, settings_path.parent)
    config = configure(settings, settings_path.parent, basis)
    attachments = {"settings.toml": text.encode()} | ({BASIS: basis} if basis is not None else {})
    folder = settings_path.parent / settings.journal.folder
    log = configure_log(log_level)
    with threadpool_limits(limits=1), Sockets(settings) as sockets:
        _make(folder)
        ids = IdFile(folder / f"{link}.next-id")
        checkpoint = Checkpoint(folder / f"{link}.checkpoint", attachments)
        tracker, resumed = checkpoint.resume(lambda: Tracker(config, ids.next_id))
        journal = Journal(
            folder,
            link,
            attachments,
            settings.journal.rotate_mb,
            lambda: pack_start(Start(tracker.next_id, tracker.snapshot())),
        )
        faults = FaultsFile(folder / f"{link}.faults.toml", settings, log)
        service = Service(settings, text, tracker, sockets, journal, ids, faults, log)
        with _stopped_by_signals(service.stop):
            log.info(
                "serving",
                version=__version__,
                link=link,
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
                try:
                    checkpoint.keep(tracker)
                except OSError as error:
                    log.warning("no checkpoint", why=error.strerror, then="the next start begins afresh")
            finally:
                journal.close()
                ids.close()
            log.info("stopped", journal=str(journal.path), **service.totals())
    return 0


def _make(folder: Path) -> None:
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise ServiceError(
            f"{folder}: {error.strerror}; journal.folder must be a folder that can be made and written"
        ) from None


@contextmanager
def _stopped_by_signals(stop: Callable[[], None]) -> Iterator[None]:
    previous = {number: signal.signal(number, lambda *_: stop()) for number in (signal.SIGTERM, signal.SIGINT)}
    try:
        yield
    finally:
        for number, handler in previous.items():
            signal.signal(number, handler)
