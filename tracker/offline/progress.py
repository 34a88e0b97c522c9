"""A progress bar over the bytes of logs, on standard error."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager

from rich.console import Console
from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

# Bytes between two updates: the bar must not cost what it measures.
STEP = 1 << 20


class Bars:
    """One bar a log."""

    def __init__(self, progress: Progress | None) -> None:
        self._progress = progress

    def begin(self, name: str) -> Callable[[int, int], None]:
        """Start the bar of a log; the callable returned takes bytes done and bytes in all."""
        progress = self._progress
        if progress is None:
            return lambda done, size: None
        task = progress.add_task(name, total=None)
        shown = -STEP

        def advanced(done: int, size: int) -> None:
            nonlocal shown
            if done - shown >= STEP or done >= size:
                shown = done
                progress.update(task, completed=done, total=size)

        return advanced


@contextmanager
def progress_bar(show: bool, logs: int) -> Iterator[Bars]:
    """Show progress over some logs, unless nobody wants to see it."""
    console = Console(stderr=True)
    if not show or not logs or not console.is_terminal:
        yield Bars(None)
        return
    columns = (TextColumn("{task.description}"), BarColumn(), TaskProgressColumn(), TimeRemainingColumn())
    with Progress(*columns, console=console, transient=True) as progress:
        yield Bars(progress)
