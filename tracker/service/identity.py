"""Pattern ids that go on over restarts: the next one lies in a small file beside the journal."""

import fcntl
import os
from pathlib import Path

from .errors import ServiceError

WIDTH = 20  # decimal digits of the largest 64-bit id, so that every write has the same length


class IdFile:
    """Keeps the next pattern id, and the folder to one service a link.

    Written before a pattern goes out, so that no id is ever given twice, even when the process is killed.

    Parameters
    ----------
    path : Path

    Raises
    ------
    ServiceError
        When the file cannot be used, or another service uses it.
    """

    def __init__(self, path: Path) -> None:
        try:
            self._file = os.open(path, os.O_RDWR | os.O_CREAT, 0o644)
        except OSError as error:
            raise _unusable(path, error) from None
        try:
            fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            text = os.pread(self._file, WIDTH + 2, 0)
            self.next_id = int(text) if text else 1
            if not 1 <= self.next_id < 10**WIDTH:
                raise ValueError
        except BlockingIOError:
            os.close(self._file)
            raise ServiceError(
                f"{path}: another tracker serves this link into this folder; end it, or change journal.folder"
            ) from None
        except ValueError:
            os.close(self._file)
            raise ServiceError(
                f"{path}: holds no pattern id; write the next id into it, or remove it to begin at 1"
            ) from None
        except OSError as error:
            os.close(self._file)
            raise _unusable(path, error) from None

    def keep(self, next_id: int) -> None:
        """Note the next id.

        Raises
        ------
        OSError
            When the disk fails; the id noted before stays.
        """
        os.pwrite(self._file, f"{next_id:0{WIDTH}d}\n".encode(), 0)
        self.next_id = next_id

    def close(self) -> None:
        """Close the file."""
        os.close(self._file)


def _unusable(path: Path, error: OSError) -> ServiceError:
    return ServiceError(f"{path}: {error.strerror}; journal.folder must be a folder that can be written")
