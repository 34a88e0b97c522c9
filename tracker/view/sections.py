"""The parts of the live screen, each drawn from a `Scene` into whatever room it is given."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

from rich.align import Align
from rich.console import Console, ConsoleOptions, RenderableType, RenderResult
from rich.layout import Layout
from rich.panel import Panel
from rich.segment import Segment
from rich.table import Table
from rich.text import Text

from tracker.engine.events import Mode
from tracker.view.model import LinkModel, clean
from tracker.view.palette import BAD, CAUTION, FILL, GOOD, QUIET
from tracker.view.plain import figure, silence, sounding
from tracker.view.surface import panel_map, shape_guess
from tracker.view.trace import AXIS, Column, History, Line, draw, scale

SPAN_S = 60.0
MODES = {
    Mode.TRACKING: ("●", GOOD),
    Mode.ACQUIRING: ("◌", CAUTION),
    Mode.REACQUIRING: ("◍", BAD),
    Mode.HELD: ("■", CAUTION),
}
MEASURED, PREDICTED, EXACT, BEST, NET, LIMIT = "█", "┄", "•", "━", "◦", "┄"
MOST_RECEIVERS = 6  # shown one by one; of more, the noisiest


@dataclass(frozen=True, slots=True)
class Scene:
    """What a screen is drawn from.

    Parameters
    ----------
    model : LinkModel
    source : str
        Where it listens, for the title.
    shape : tuple of int or None
        Columns and rows of the panel when they are known.
    since : float
        When it began to listen, seconds.
    now : float
        Seconds of the same clock.
    """

    model: LinkModel
    source: str
    shape: tuple[int, int] | None
    since: float
    now: float


@dataclass(frozen=True, slots=True)
class _Plot:
    """Histories over each other, as large as the room they are given.

    Parameters
    ----------
    scene : Scene
    lines : sequence of (History, str)
        What to draw, and its mark; filled from below when the mark is empty.
    level : float or None
        A level to mark all along.
    logarithmic : bool
        Whether the axis counts doublings.
    """

    scene: Scene
    lines: Sequence[tuple[History, str]]
    level: float | None = None
    logarithmic: bool = False

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        width, height = options.max_width, max(2, options.height or 6)
        room = max(width - AXIS, 1)
        lines = [
            Line(self._scaled(history.columns(self.scene.now, SPAN_S, room)), mark) for history, mark in self.lines
        ]
        if self.level is not None:
            lines.append(Line(self._scaled([self.level] * room), LIMIT))
        low, high = scale(lines)
        if self.level is not None and not self.logarithmic:
            low = 0.0
        if self.logarithmic:
            low, high = min(low, -1.0), max(high, 1.0)
        labels = (self._label(high), self._label(low))
        for row in draw(lines, width=width, height=height, limits=(low, high), labels=labels):
            yield from row
            yield Segment.line()

    def _scaled(self, values: Sequence[Column]) -> list[Column]:
        if not self.logarithmic:
            return list(values)
        return [None if value is None else math.log2(max(value, 1e-6)) for value in values]

    def _label(self, value: float) -> str:
        return f"{2.0**value if self.logarithmic else value:.3g}"


def heading(title: str, *details: str | tuple[str, str]) -> Text:
    """Write the heading of a section: its title, then details in the quiet colour or in their own."""
    text = Text(no_wrap=True, overflow="ellipsis")
    text.append(title, "bold")
    for detail in details:
        part, style = (detail, QUIET) if isinstance(detail, str) else detail
        text.append("  ")
        text.append(part, style)
    return text


def under(head: Text, content: RenderableType) -> Layout:
    """Put a heading over something that fills the rest of the room."""
    layout = Layout()
    layout.split_column(Layout(head, size=1), Layout(content))
    return layout


def waiting(scene: Scene) -> RenderableType:
    """Say that nothing was heard so far, and what to look at."""
    text = Text(justify="center")
    text.append(scene.model.link, "bold")
    text.append("  ris-tracker\n\n", QUIET)
    text.append(f"Nothing heard from {scene.source} for {scene.now - scene.since:.0f} s.\n")
    text.append("Is the service running there, and does the controller send bursts?\n", QUIET)
    text.append("This view waits; Ctrl-C ends it.", QUIET)
    return Align.center(text, vertical="middle")


def title(scene: Scene) -> RenderableType:
    """Name the link, its mode and the burst it has got to."""
    model, state = scene.model, scene.model.state
    left = heading(model.link)
    if state is not None:
        mark, colour = MODES[state.mode]
        left.append(f"  {mark} {state.mode}", f"bold {colour}")
        left.append(f"  burst {state.seq:,} of run {state.run & 0xFFFF:04x}", QUIET)
    if silent := silence(model, scene.now, scene.since):
        left.append(f"  ○ {silent}", f"bold {BAD}")
    return _Title(left, Text(f"ris-tracker  {scene.source}", QUIET, no_wrap=True))


@dataclass(frozen=True, slots=True)
class _Title:
    """What matters on the left, and the rest on the right where there is room."""

    left: Text
    right: Text

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        room = options.max_width - self.left.cell_len - self.right.cell_len
        yield Text.assemble(self.left, " " * room, self.right, no_wrap=True) if room >= 2 else self.left


def rate(scene: Scene) -> RenderableType:
    """Trace the rates: measured, predicted and, from a testbed that knows, in force and best possible."""
    model = scene.model
    legend: list[str | tuple[str, str]] = [(f"{MEASURED} measured {figure(model.measured.last)}", FILL)]
    legend.append((f"{PREDICTED} predicted {figure(model.predicted.last)}", ""))
    lines = [(model.measured, ""), (model.predicted, PREDICTED)]
    if model.truth is not None:
        legend.append((f"{EXACT} in force {figure(model.truth.rate)}", ""))
        legend.append((f"{BEST} best {figure(model.truth.best)}", ""))
        lines += [(model.exact, EXACT), (model.best, BEST)]
        if model.truth.net is not None:
            legend.append((f"{NET} net of sounding {figure(model.truth.net)}", ""))
            lines.append((model.net, NET))
    details: list[str | tuple[str, str]] = [f"bit/s/Hz, last {SPAN_S:.0f} s"]
    if model.achieved is not None:
        details.append((f"{100 * model.achieved:.1f} % of the best possible", "bold"))
    return under(heading("Rate", *details), under(heading("", *legend), _Plot(scene, lines)))


def innovation(scene: Scene) -> RenderableType:
    """Trace measured over expected innovation: 1 when the model holds."""
    head = heading(
        "Innovation", "measured / expected", (figure(scene.model.innovation.last), "bold"), "1 when all is well"
    )
    return under(head, _Plot(scene, [(scene.model.innovation, "")], level=1.0, logarithmic=True))


def drift(scene: Scene) -> RenderableType:
    """Trace the drift statistic against its threshold."""
    state = scene.model.state
    known = "" if state is None else f"{state.statistic:.2f} of {state.threshold:.2f}"
    over = state is not None and state.statistic > state.threshold
    head = heading(
        "Drift", "statistic / threshold", (known, "bold"), ("above: drift", f"bold {BAD}") if over else "alarm at 1"
    )
    return under(head, _Plot(scene, [(scene.model.drift, "")], level=1.0))


def surface(scene: Scene) -> RenderableType:
    """Map the pattern in use, or the one published last."""
    model = scene.model
    pattern = model.in_use or model.pattern
    if pattern is None:
        return heading("Pattern", "none published yet")
    known = scene.shape is not None and scene.shape[0] * scene.shape[1] == pattern.states.size
    shape = scene.shape if known and scene.shape is not None else shape_guess(pattern.states.size)
    use = "in use" if pattern is model.in_use else "published last"
    head = heading(f"Pattern {pattern.id:,}", use, f"{shape[0]} × {shape[1]}{'' if known else ' (guessed)'}")
    faulty = [element for element, _, _ in model.state.faults] if model.state is not None else []
    return under(head, _Map(pattern.states, shape, faulty))


@dataclass(frozen=True, slots=True, eq=False)
class _Map:
    """A framed pattern, as large as fits."""

    states: object
    shape: tuple[int, int]
    faulty: Sequence[int]

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        height = max(1, (options.height or 20) - 2)
        drawn = panel_map(self.states, self.shape, options.max_width - 2, height, self.faulty)  # type: ignore[arg-type]
        yield Panel(drawn, expand=False, padding=0, border_style=QUIET)


def figures(scene: Scene) -> Table:
    """List what has no trace of its own: receivers, latency, counts, phase, faults."""
    model, state = scene.model, scene.model.state
    grid = Table.grid(padding=(0, 1))
    grid.add_column(style=QUIET, no_wrap=True, width=13)
    grid.add_column(no_wrap=True, overflow="ellipsis")
    if state is None:
        return grid
    if state.faults:
        named = ", ".join(f"{element} {clean(fault)}" for element, fault, _ in state.faults[:2])
        more = f" and {len(state.faults) - 2} more" if len(state.faults) > 2 else ""
        grid.add_row("faults", Text(f"x {named}{more}", BAD))
    for receiver, (noise, ratio) in _receivers(state.noise, state.innovation):
        decibel = f"{10.0 * math.log10(noise):.1f} dB" if noise > 0 else "not known yet"
        grid.add_row(f"receiver {receiver}", f"noise {decibel}, innovation {ratio:.2f}")
    latency = model.latency_ms(scene.now)
    grid.add_row("latency", "–" if latency is None else f"{latency[0]:.2f} ms median, {latency[1]:.2f} ms p99")
    stages = {stage: us for stage, us in model.stages_us.items() if stage != "whole"}
    if stages:
        stage, longest = max(stages.items(), key=lambda item: item[1])
        grid.add_row("slowest", f"{stage}, {longest / 1e3:.2f} ms of it")
    grid.add_row("bursts", f"{state.bursts:,} ({state.frames:,} frames)")
    counts = f"lost {state.lost:,}, duplicate {state.duplicate:,}, refused {state.refused:,}"
    grid.add_row("", Text(counts, CAUTION if state.lost + state.duplicate + state.refused else ""))
    grid.add_row("patterns", f"{model.patterns:,} heard")
    if model.pattern is not None:
        gain = model.pattern.rate - model.pattern.rate_before
        grid.add_row("", f"the last gains {gain:.2f}, holds {model.pattern.rate_low:.2f}")
    if model.plan is not None:
        grid.add_row("sounding", sounding(model.plan))
        if model.plan.net_rate is not None:
            grid.add_row("", f"net rate {figure(model.plan.net_rate)} predicted")
    grid.add_row("time constant", f"{state.time_constant_ms:,.0f} ms")
    grid.add_row("offset", f"{state.offset_hz:+.1f} Hz")
    return grid


def _receivers(noise: Sequence[float], ratios: Sequence[float]) -> list[tuple[int, tuple[float, float]]]:
    """Pick the receivers to show: all, or the noisiest when there are many."""
    numbered = list(enumerate(zip(noise, ratios, strict=False)))
    if len(numbered) > MOST_RECEIVERS:
        numbered = sorted(sorted(numbered, key=lambda item: -item[1][0])[:MOST_RECEIVERS])
    return numbered


def digest(scene: Scene) -> RenderableType:
    """Put drift, innovation, latency and counts into two lines, where there is no room for more."""
    model, state = scene.model, scene.model.state
    if state is None:
        return Text()
    latency = model.latency_ms(scene.now)
    first = f"innovation {figure(model.innovation.last)} (1 expected), drift {figure(model.drift.last)} (alarm at 1)"
    second = f"lost {state.lost:,}, refused {state.refused:,}, patterns {model.patterns:,}"
    if latency is not None:
        second += f", latency {latency[0]:.1f} ms, p99 {latency[1]:.1f}"
    return Text(f"{first}\n{second}", no_wrap=True, overflow="ellipsis")


@dataclass(frozen=True, slots=True)
class _Notes:
    """The latest notes, newest first, as many as fit."""

    scene: Scene

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        grid = Table.grid(padding=(0, 1))
        grid.add_column(justify="right", style=QUIET, no_wrap=True, min_width=9)
        grid.add_column(no_wrap=True, min_width=9)
        grid.add_column(no_wrap=True, overflow="ellipsis")
        notes = list(self.scene.model.notes)[::-1]
        for note in notes[: options.height or 5]:
            ago = max(0.0, self.scene.now - note.at)
            mark = Text(f"! {note.kind}", f"bold {BAD}") if note.grave else Text(f"· {note.kind}")
            grid.add_row(f"{ago:.0f} s ago", mark, Text(str(note)))
        yield grid


def notes(scene: Scene) -> RenderableType:
    """List the latest alarms and other events."""
    alarms = scene.model.alarms
    counted = ", ".join(f"{count} {kind}" for kind, count in alarms.most_common()) or "no alarms"
    return under(heading("Events", counted), _Notes(scene))
