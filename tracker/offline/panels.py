"""The panels of the picture: a title, an axis with its grid, lines over bands; and a lane for each mode."""

import math
import statistics
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise

from .axes import Axis, ratio_limit, value_limits
from .bins import Bins
from .svg import BAD, CAUTION, EDGE, FAINT, FILL, GOOD, INK, LEFT, NARROW, QUIET, RIGHT, SMALL, text
from .timeline import decibels
from .timeline_text import minus

# Bins further apart than this many times the usual distance are not joined.
BROKEN = 3.5
# The title stands this much above its panel, px.
RAISED = 9.0
MOST_LINES = 4
COLOURS = (FILL, CAUTION, GOOD, INK)
DASHES = ("", "6 3", "2 2", "8 2 2 2")
# Where the axis of the drift statistic ends at most.
MOST_DRIFT = 3.0
MODES = (("tracking", GOOD), ("acquiring", CAUTION), ("reacquiring", BAD), ("held", QUIET))

# Time, ns, least, mean and most.
Points = list[tuple[int, float, float, float]]


@dataclass(frozen=True, slots=True)
class Line:
    """A quantity of a panel.

    Parameters
    ----------
    name : str
    points : Points
    colour, dash : str
    width : float
        px.
    band : bool
        Whether what lies between least and most is filled.
    """

    name: str
    points: Points
    colour: str
    dash: str = ""
    width: float = 1.5
    band: bool = True


def rates(bins: Bins, time: Axis, top: float, bottom: float) -> Iterator[str]:
    """Draw the rate of the pattern in use: measured, and predicted."""
    lines = [
        Line("measured", bins.series("measured"), FILL, width=1.8),
        Line("predicted", bins.series("predicted"), INK, "4 3", width=1.1, band=False),
    ]
    low, high, step = value_limits(_all(lines), 5, 0.5, zero=True)
    axis = Axis(low, high, bottom, top)
    yield from _panel("rate of the pattern in use, bit/s/Hz", axis, _steps(low, high, step), time, lines)


def innovation(bins: Bins, time: Axis, top: float, bottom: float) -> Iterator[str]:
    """Draw the innovation ratio, as far to either side of 1 as its means go, but for a few."""
    points = bins.series("innovation")
    means = sorted(mean for _, _, mean, _ in points)
    cut = len(means) // 50
    limit = ratio_limit(means[cut : len(means) - cut])
    beyond = max((most for *_, most in points), default=1.0)
    title = "innovation ratio" + (f" (up to {beyond:.3g})" if beyond > 1.02 * limit else "")
    axis = Axis(1.0 / limit, limit, bottom, top, logarithmic=True)
    marks = [(1.0 / limit, f"1/{limit:g}"), (1.0, "1"), (limit, f"{limit:g}")]
    yield from _panel(title, axis, marks, time, [Line("", points, FILL)], level=(1.0, "expected"))


def drift(bins: Bins, time: Axis, top: float, bottom: float) -> Iterator[str]:
    """Draw the drift statistic over its threshold, the highest of each bin: what matters is how near it came to 1."""
    points = [(t_ns, least, most, most) for t_ns, least, _, most in bins.series("drift")]
    beyond = max((most for *_, most in points), default=0.0)
    high = min(max(1.25, 0.5 * math.ceil(2.0 * beyond)), MOST_DRIFT)
    title = "drift statistic over its threshold, highest" + (f" (up to {beyond:.3g})" if beyond > high else "")
    marks = [(0.0, "0"), (1.0, "1"), *([(high, f"{high:g}")] if high >= 2.0 else [])]
    line = Line("", points, CAUTION, band=False)
    yield from _panel(title, Axis(0.0, high, bottom, top), marks, time, [line], level=(1.0, "alarm"))


def noise(bins: Bins, time: Axis, top: float, bottom: float, receivers: int) -> Iterator[str]:
    """Draw the noise at each receiver; of many, what they span together."""
    series = [bins.series(f"noise {number}", decibels) for number in range(receivers)]
    title = "noise on a tone, dB"
    if receivers <= MOST_LINES:
        styles = zip(series, COLOURS, DASHES, strict=False)
        lines = [
            Line(f"receiver {number}", points, colour, dash) for number, (points, colour, dash) in enumerate(styles)
        ]
    else:
        title += f", {receivers} receivers together"
        lines = [Line("", _together(series), FILL)]
    low, high, step = value_limits(_all(lines), 4, 2.0)
    yield from _panel(title, Axis(low, high, bottom, top), _steps(low, high, step), time, lines)


def modes(bins: Bins, time: Axis, top: float, bottom: float) -> Iterator[str]:
    """Draw a lane a mode, filled where states were of it: the shortest stay is seen, however long the log."""
    high = (bottom - top) / len(MODES)
    yield text("mode", LEFT, top - RAISED, weight="bold", halo=True)
    items = bins.items()
    reach = _reach([t_ns for t_ns, _ in items])
    half = bins.width_ns // 2
    for lane, (name, colour) in enumerate(MODES):
        y = top + lane * high
        yield f'<rect x="{LEFT:g}" y="{y + 1:g}" width="{RIGHT - LEFT:g}" height="{high - 2:g}" fill="{FAINT}"/>'
        yield text(name, LEFT - 8, y + high / 2 + 3.5, anchor="end", size=SMALL)
        stays: list[list[int]] = []
        for at, (t_ns, each) in enumerate(items):
            if name not in each.modes:
                continue
            # It holds until the next bin, unless nothing was said for long.
            joined = at + 1 < len(items) and items[at + 1][0] - t_ns <= reach
            until = items[at + 1][0] - half if joined else t_ns + half
            if stays and stays[-1][1] >= t_ns - half:
                stays[-1][1] = until
            else:
                stays.append([t_ns - half, until])
        for start, end in stays:
            x = time.place(start)
            wide = max(time.place(end) - x, 1.5)
            yield f'<rect x="{x:.1f}" y="{y + 1:g}" width="{wide:.1f}" height="{high - 2:g}" fill="{colour}"/>'


def _panel(
    title: str,
    axis: Axis,
    marks: Sequence[tuple[float, str]],
    time: Axis,
    lines: Sequence[Line],
    level: tuple[float, str] | None = None,
) -> Iterator[str]:
    """Draw a panel: title, grid, a level of note, lines, and their names where there are several."""
    yield text(title, LEFT, axis.end - RAISED, weight="bold", halo=True)
    for value, label in marks:
        y = axis.place(value)
        yield f'<path d="M{LEFT:g} {y:.1f}H{RIGHT:g}" stroke="{FAINT}"/>'
        yield text(label, LEFT - 8, y + 3.5, anchor="end", size=SMALL)
    yield f'<path d="M{LEFT:g} {axis.end:g}V{axis.start:g}" stroke="{EDGE}"/>'
    if level is not None:
        y = axis.place(level[0])
        yield f'<path d="M{LEFT:g} {y:.1f}H{RIGHT:g}" stroke="{QUIET}" stroke-dasharray="3 3"/>'
        yield text(level[1], RIGHT + 6, y + 3.5, size=SMALL, colour=QUIET)
    shown = [line for line in lines if line.points]
    for line in shown:
        yield from _trace(line, axis, time)
    if not shown:
        yield text("no value", (LEFT + RIGHT) / 2, (axis.start + axis.end) / 2 + 4, anchor="middle", colour=QUIET)
    if len(shown) > 1:
        yield from _names(shown, axis.end - RAISED)


def _trace(line: Line, axis: Axis, time: Axis) -> Iterator[str]:
    """Draw a line through the means, over a band from least to most."""
    dash = f' stroke-dasharray="{line.dash}"' if line.dash else ""
    for stretch in _stretches(line.points, _reach([point[0] for point in line.points])):
        spots = [(time.place(t), axis.place(low), axis.place(mean), axis.place(high)) for t, low, mean, high in stretch]
        if line.band and any(low - high > 0.5 for _, low, _, high in spots):
            upper = "L".join(f"{x:.1f} {high:.1f}" for x, _, _, high in spots)
            lower = "L".join(f"{x:.1f} {low:.1f}" for x, low, _, _ in reversed(spots))
            yield f'<path d="M{upper}L{lower}Z" fill="{line.colour}" fill-opacity="0.22"/>'
        path = "L".join(f"{x:.1f} {mean:.1f}" for x, _, mean, _ in spots)
        # A stretch of one bin is a dot.
        path += "h0.01" if len(spots) == 1 else ""
        yield (
            f'<path d="M{path}" fill="none" stroke="{line.colour}" stroke-width="{line.width:g}" '
            f'stroke-linejoin="round" stroke-linecap="{"butt" if dash else "round"}"{dash}/>'
        )


def _names(lines: Sequence[Line], y: float) -> Iterator[str]:
    """Name the lines, from the right end leftwards."""
    x = RIGHT
    for line in reversed(lines):
        yield text(line.name, x, y, anchor="end", size=SMALL, colour=QUIET, halo=True)
        x -= NARROW * len(line.name) + 6
        dash = f' stroke-dasharray="{line.dash}"' if line.dash else ""
        yield f'<path d="M{x - 24:.1f} {y - 3.5:.1f}h24" stroke="{line.colour}" stroke-width="{line.width:g}"{dash}/>'
        x -= 24 + 18


def _all(lines: Sequence[Line]) -> list[float]:
    return [value for line in lines for point in line.points for value in point[1:]]


def _steps(low: float, high: float, step: float) -> list[tuple[float, str]]:
    values = [low + number * step for number in range(round((high - low) / step) + 1)]
    return [(value, minus(f"{value:.6g}")) for value in values]


def _reach(times: Sequence[int]) -> float:
    """How far apart two bins may lie and still be joined, ns."""
    steps = [later - sooner for sooner, later in pairwise(times)]
    return BROKEN * statistics.median(steps) if steps else 0.0


def _stretches(points: Points, reach: float) -> Iterator[Points]:
    """Cut a series where nothing lies for long."""
    start = 0
    for at in range(1, len(points) + 1):
        if at == len(points) or points[at][0] - points[at - 1][0] > reach:
            yield points[start:at]
            start = at


def _together(series: Sequence[Points]) -> Points:
    """Make one series of several: least of all, mean of the means, most of all."""
    at: dict[int, Points] = {}
    for points in series:
        for point in points:
            at.setdefault(point[0], []).append(point)
    return [
        (
            t_ns,
            min(least for _, least, _, _ in points),
            statistics.fmean(mean for _, _, mean, _ in points),
            max(most for *_, most in points),
        )
        for t_ns, points in sorted(at.items())
    ]
