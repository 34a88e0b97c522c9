"""The live screen: what a link does now, and did over the last minute, laid out for the room there is."""

import textwrap
import time
from collections.abc import Callable

from rich.console import Console, RenderableType
from rich.layout import Layout
from rich.live import Live
from rich.text import Text

from tracker.view import plain, sections
from tracker.view.sections import Scene
from tracker.view.stream import Stream

FRAMES_A_SECOND = 5
WIDE, HIGH = 100, 27  # from here on there is room for everything
NARROW, LOW = 44, 12  # below this, lines of words are all that can be read


def show(stream: Stream, console: Console, shape: tuple[int, int] | None, running: Callable[[], bool]) -> None:
    """Show a stream live for as long as `running` says so.

    Parameters
    ----------
    stream : Stream
    console : Console
        A terminal.
    shape : tuple of int or None
        Columns and rows of the panel when they are known.
    running : callable
        Asked several times a second.
    """
    since = time.monotonic()
    source = ", ".join(stream.endpoints)
    with Live(console=console, screen=True, auto_refresh=False) as live:
        while running():
            scene = Scene(stream.model, source, shape, since, time.monotonic())
            live.update(screen(scene, *console.size), refresh=True)
            stream.receive(1.0 / FRAMES_A_SECOND)


def screen(scene: Scene, width: int, height: int) -> RenderableType:
    """Lay out a screen for the room there is, in characters."""
    model = scene.model
    if width < NARROW or height < LOW:
        lines = [plain.line(model, scene.now, scene.since), *(str(note) for note in list(model.notes)[-1:])]
        wrapped = [part for line in lines for part in textwrap.wrap(line, width)]
        return Text("\n".join(wrapped[:height]), end="")
    if model.heard_at is None:
        return sections.waiting(scene)
    layout = Layout()
    head = Layout(sections.title(scene), size=2)
    if width < WIDE or height < HIGH:
        layout.split_column(
            head,
            Layout(sections.rate(scene), ratio=1, minimum_size=5),
            Layout(sections.digest(scene), size=3),
            Layout(sections.notes(scene), size=max(3, height // 4)),
        )
        return layout
    columns, rows = scene.shape or (0, 0)
    below = max(5, height // 5)
    figures = sections.figures(scene)
    # The map needs a line for two rows of elements, a frame and a heading; the last figures matter least.
    room = height - below - 3 - (-(-rows // 2) + 3)
    left, gap, right = Layout(ratio=1), Layout(" ", size=3), Layout(size=min(max(2 * columns + 2, 48), width // 2))
    left.split_column(
        Layout(sections.rate(scene), ratio=1),
        Layout(" ", size=1),
        Layout(sections.innovation(scene), size=5),
        Layout(" ", size=1),
        Layout(sections.drift(scene), size=5),
    )
    right.split_column(
        Layout(sections.surface(scene), ratio=1), Layout(figures, size=min(figures.row_count, max(room, 6)))
    )
    body = Layout(ratio=1)
    body.split_row(left, gap, right)
    layout.split_column(head, body, Layout(" ", size=1), Layout(sections.notes(scene), size=below))
    return layout
