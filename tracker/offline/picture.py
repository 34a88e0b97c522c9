"""The timeline as one picture: panels over a common axis of time, alarms as marks through all of them, last pattern.

Written as SVG by hand. No meaning is carried by colour alone: lines differ in dashes and are named, modes have a lane
each, alarms are labelled.
"""

from collections.abc import Iterator
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape

from .axes import Axis, time_marks
from .bins import Bins
from .marks import LANE, draw_marks, place_marks
from .panel_map import map_height, panel_map
from .panels import drift, innovation, modes, noise, rates
from .svg import EDGE, FONT, GROUND, INK, LABEL, LEFT, QUIET, RIGHT, SMALL, TINY, TITLE, WIDE, text
from .timeline import clean
from .timeline_text import duration, figures, source, utc

# Columns that quantities are drawn in: enough to see when, few enough for a calm line.
COLUMNS = 350
TOP = 74.0  # below the heading
GAP = 34.0  # between panels, with the title of the lower one in it
MAP_WIDE, MAP_HIGH = 400.0, 190.0
ROW = 16.5
# Usual width of a character of the figures, px.
USUAL = 5.7


def picture(told: dict[str, Any], bins: Bins) -> str:
    """Draw a timeline.

    Parameters
    ----------
    told : dict
        As `Drift.as_dict` gives it, with ``logs``, the names of the logs.
    bins : Bins

    Returns
    -------
    str
        A whole SVG file.
    """
    time = _time_axis(told, bins)
    calm = bins.coarser(COLUMNS)
    marks = place_marks(bins, time)
    y = begin = TOP + LANE * (1 + max((mark.lane for mark in marks if mark.lane is not None), default=-1))
    parts: list[str] = []
    for draw, high in ((rates, 150.0), (innovation, 84.0), (drift, 72.0)):
        parts += draw(calm, time, y + GAP, y + GAP + high)
        y += GAP + high
    parts += noise(calm, time, y + GAP, y + GAP + 84.0, len(told["noise_db"]))
    y += GAP + 84.0
    parts += modes(bins, time, y + GAP, y + GAP + 56.0)
    y += GAP + 56.0
    parts = [*draw_marks(marks, begin, y), *parts, *_time_scale(time, y)]
    y += 62.0
    high = y + _foot_height(told)
    return "\n".join(
        [
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {WIDE:g} {high:g}" role="img" '
            f'font-family="{FONT}" font-size="{LABEL:g}" fill="{INK}">',
            f"<title>{escape(_title(told))}</title>",
            f'<rect width="{WIDE:g}" height="{high:g}" fill="{GROUND}"/>',
            *_heading(told, calm),
            *parts,
            *_foot(told, y),
            "</svg>",
            "",
        ]
    )


def _title(told: dict[str, Any]) -> str:
    return f"link {told['link']}: what changed when"


def _heading(told: dict[str, Any], drawn: Bins) -> Iterator[str]:
    start_ns = told["start_ns"]
    end_ns = start_ns + round(told["span_s"] * 1e9)
    yield text(_title(told), LEFT, 32, size=TITLE, weight="bold")
    name, more = clean(Path(told["logs"][0]).name), len(told["logs"]) - 1
    logs = f"{name} and {more} more" if more else name
    words = f"{utc(start_ns)} to {utc(end_ns)} UTC, {duration(told['span_s'])}; {logs}, {source(told)}"
    yield text(words, LEFT, 51, colour=QUIET)
    step = f"{drawn.width_ns / 1e6:.0f} ms" if drawn.width_ns < 10**9 else duration(drawn.width_ns / 1e9)
    yield text(f"lines: mean, bands: least to most, in {step}", RIGHT, 32, anchor="end", size=SMALL, colour=QUIET)


def _time_axis(told: dict[str, Any], bins: Bins) -> Axis:
    """Time on the picture, ns: from the first state to the last thing known."""
    start = told["start_ns"]
    latest = [mark.t_ns for _, each in bins.items() for mark in each.alarms.values()]
    end = max([start + round(told["span_s"] * 1e9), *latest])
    return Axis(start, max(end, start + 1_000_000), LEFT, RIGHT)


def _time_scale(time: Axis, y: float) -> Iterator[str]:
    """Mark times from the start, and below them the clock where the marks lie far enough apart to need no fractions."""
    yield f'<path d="M{LEFT:g} {y + 4:g}H{RIGHT:g}" stroke="{EDGE}"/>'
    marks = time_marks((time.high - time.low) / 1e9)
    yield text("UTC", LEFT - 34, y + 35, anchor="end", size=TINY, colour=QUIET)
    for seconds, label in marks:
        t_ns = round(time.low) + round(seconds * 1e9)
        x = time.place(t_ns)
        yield f'<path d="M{x:.1f} {y + 4:g}v5" stroke="{EDGE}"/>'
        yield text(label, x, y + 21, anchor="middle")
        if seconds == 0.0 or marks[1][0] >= 1.0:
            yield text(utc(t_ns)[11:19], x, y + 35, anchor="middle", size=TINY, colour=QUIET)


def _foot_height(told: dict[str, Any]) -> float:
    return max(28.0 + ROW * len(figures(told)), 20.0 + map_height(told, MAP_WIDE, MAP_HIGH))


def _foot(told: dict[str, Any], y: float) -> Iterator[str]:
    """Draw the last pattern, and beside it the figures of the whole."""
    x = LEFT
    if told["pattern"] is not None:
        yield from panel_map(told, x, y, MAP_WIDE, MAP_HIGH)
        x += MAP_WIDE + 40
    yield text("over the whole time", x, y, weight="bold")
    room = int((WIDE - 20 - x - 84) / USUAL)
    for number, (name, words) in enumerate(figures(told)):
        at = y + 22 + ROW * number
        yield text(name, x, at, colour=QUIET)
        yield text(words if len(words) <= room else f"{words[: room - 1]}…", x + 84, at)
