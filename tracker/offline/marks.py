"""Alarms on the picture: a mark each from its words down through all panels, the time that it took to tell shaded."""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from xml.sax.saxutils import escape

from .axes import Axis
from .bins import Bins
from .svg import BAD, CHARACTER, QUIET, RIGHT, SMALL, WIDE, text

# Marks of one kind nearer than this become one, px.
NEAR = 4.0
LANES, LANE = 4, 13.0
# With more marks than this, they are drawn fainter.
MANY = 30


@dataclass(frozen=True, slots=True)
class Placed:
    """An alarm, or several of a kind, on the drawing.

    Parameters
    ----------
    x, since : float
        Where the first was told and began, px.
    words : str
    lane : int or None
        Lane of the words; None where there is no room for any.
    left : bool
        Whether the words stand to the left of the mark.
    """

    x: float
    since: float
    words: str
    lane: int | None
    left: bool


def place_marks(bins: Bins, time: Axis) -> list[Placed]:
    """Find where alarms lie, what to write beside each, and where."""
    found: dict[str, list[list[float]]] = {}  # kind: [x of the first, its beginning, x of the last, count]
    for _, each in bins.items():
        for kind, mark in each.alarms.items():
            x, near = time.place(mark.t_ns), found.setdefault(kind, [])
            if near and x - near[-1][2] < NEAR:
                near[-1][2] = x
                near[-1][3] += mark.count
            else:
                near.append([x, time.place(mark.since_ns), x, mark.count])
    ends = [-math.inf] * LANES
    placed: list[Placed] = []
    for x, since, kind, count in sorted((x, since, kind, n) for kind, near in found.items() for x, since, _, n in near):
        words = kind if count == 1 else f"{kind} ×{count:.0f}"
        wide = 10.0 + CHARACTER * len(words)
        left = x + wide > WIDE - 4
        start = x - wide if left else x - 4
        lane = next((lane for lane, end in enumerate(ends) if start >= end), None)
        if lane is not None:
            ends[lane] = start + wide + 4
        placed.append(Placed(x, since, words, lane, left))
    return placed


def draw_marks(marks: Sequence[Placed], begin: float, end: float) -> Iterator[str]:
    """Draw the marks from above `begin`, where their words stand, down to `end`; words come last, over all lines."""
    seen = 0.6 if len(marks) <= MANY else 0.35
    for mark in marks:
        if mark.x - mark.since >= 1.0:
            yield (
                f'<rect x="{mark.since:.1f}" y="{begin + 4:g}" width="{mark.x - mark.since:.1f}" '
                f'height="{end - begin - 4:g}" fill="{BAD}" fill-opacity="0.10"/>'
            )
        yield (
            f'<path class="alarm" d="M{mark.x:.1f} {_top(mark, begin):g}V{end:g}" stroke="{BAD}" '
            f'stroke-opacity="{seen:g}"><title>{escape(mark.words)}</title></path>'
        )
    for mark in marks:
        if mark.lane is not None:
            top = _top(mark, begin)
            yield f'<path d="M{mark.x - 3.5:.1f} {top - 6:g}h7l-3.5 6z" fill="{BAD}"/>'
            at, anchor = (mark.x - 6, "end") if mark.left else (mark.x + 6, "start")
            yield text(mark.words, at, top + 1, anchor=anchor, size=SMALL, colour=BAD, halo=True)
    wordless = sum(mark.lane is None for mark in marks)
    if wordless:
        words = f"{wordless} more marks, without room for their names"
        yield text(words, RIGHT, begin - LANES * LANE - 6, anchor="end", size=SMALL, colour=QUIET)


def _top(mark: Placed, begin: float) -> float:
    """Where a mark begins, px."""
    return begin + 4 if mark.lane is None else begin - (mark.lane + 1) * LANE + 6
