"""Curves on logarithmic axes as one picture, SVG written by hand: panels side by side that share the upright axis."""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from tracker.offline.axes import Axis
from tracker.offline.svg import BAD, CAUTION, EDGE, FAINT, FILL, FONT, GROUND, INK, QUIET, TITLE, text

WIDE, HIGH = 360.0, 300.0  # of a panel, px
LEFT, TOP, GAP, BELOW = 84.0, 84.0, 28.0, 132.0
COLOURS = (FILL, CAUTION, BAD)
MARK = 4.0


@dataclass(frozen=True, slots=True)
class Curve:
    """A named line through points (x, y), both above zero."""

    name: str
    points: tuple[tuple[float, float], ...]


@dataclass(frozen=True, slots=True)
class Panel:
    """Curves over the same x."""

    label: str
    curves: tuple[Curve, ...]


def page(title: str, subtitle: str, unit: str, panels: Sequence[Panel], mark: tuple[float, str]) -> str:
    """Draw panels side by side.

    Parameters
    ----------
    title, subtitle, unit : str
        Unit of y.
    panels : sequence of Panel
    mark : pair of float and str
        A y that is marked across all panels, and its name.

    Returns
    -------
    str
        SVG.
    """
    values = [y for panel in panels for curve in panel.curves for _, y in curve.points] + [mark[0]]
    low, high = 10.0 ** math.floor(math.log10(min(values))), 10.0 ** math.ceil(math.log10(max(values)))
    upright = Axis(low, high, TOP + HIGH, TOP, logarithmic=True)
    parts = [text(title, LEFT, 32.0, size=TITLE, weight="bold"), text(subtitle, LEFT, 54.0, colour=QUIET)]
    for place, panel in enumerate(panels):
        left = LEFT + place * (WIDE + GAP)
        parts += _panel(panel, left, upright, mark, first=place == 0)
    parts.append(text(unit, LEFT - 12.0, TOP - 12.0, anchor="end", colour=QUIET))
    wide, high_px = LEFT + len(panels) * (WIDE + GAP), TOP + HIGH + BELOW
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {wide:.0f} {high_px:.0f}" width="{wide:.0f}" '
        f'height="{high_px:.0f}" font-family="{FONT}" font-size="12" fill="{INK}">\n'
        f'<rect width="100%" height="100%" fill="{GROUND}"/>\n' + "\n".join(parts) + "\n</svg>\n"
    )


def _panel(panel: Panel, left: float, upright: Axis, mark: tuple[float, str], *, first: bool) -> Iterator[str]:
    places = sorted({x for curve in panel.curves for x, _ in curve.points})
    if not places:
        return
    margin = 1.15
    across = Axis(places[0] / margin, places[-1] * margin, left, left + WIDE, logarithmic=True)
    yield from _grid(upright, left, first=first)
    for x in places:
        at = across.place(x)
        yield _line(at, TOP, at, TOP + HIGH, FAINT)
        yield text(f"{x:g}", at, TOP + HIGH + 18.0, anchor="middle")
    yield text(panel.label, left + WIDE / 2, TOP + HIGH + 40.0, anchor="middle", colour=QUIET, size=12.0)
    at = upright.place(mark[0])
    yield _line(left, at, left + WIDE, at, INK, dashes="5 4")
    if first:
        yield text(mark[1], left + 6.0, at + 15.0, halo=True)
    for number, curve in enumerate(panel.curves):
        colour = COLOURS[number % len(COLOURS)]
        points = [(across.place(x), upright.place(y)) for x, y in curve.points]
        path = " ".join(f"{x:.1f},{y:.1f}" for x, y in points)
        yield f'<polyline points="{path}" fill="none" stroke="{colour}" stroke-width="2"/>'
        for x, y in points:
            yield _symbol(number, x, y, colour)
        below = TOP + HIGH + 62.0 + 20.0 * number
        yield _line(left + 2.0, below - 4.0, left + 30.0, below - 4.0, colour, width=2.0)
        yield _symbol(number, left + 16.0, below - 4.0, colour)
        yield text(curve.name, left + 38.0, below, size=12.0)
    yield f'<rect x="{left:.1f}" y="{TOP:.1f}" width="{WIDE:.1f}" height="{HIGH:.1f}" fill="none" stroke="{EDGE}"/>'


def _grid(upright: Axis, left: float, *, first: bool) -> Iterator[str]:
    """Lines at the decades, fainter ones at twice and five times each."""
    decade = upright.low
    while decade <= upright.high * 1.001:
        at = upright.place(decade)
        yield _line(left, at, left + WIDE, at, EDGE)
        if first:
            yield text(f"{decade:,.0f}".replace(",", " "), left - 10.0, at + 4.0, anchor="end")
        for step in (2.0, 5.0):
            if decade * step < upright.high:
                at = upright.place(decade * step)
                yield _line(left, at, left + WIDE, at, FAINT)
        decade *= 10.0


def _line(x1: float, y1: float, x2: float, y2: float, colour: str, *, width: float = 1.0, dashes: str = "") -> str:
    more = f' stroke-dasharray="{dashes}"' if dashes else ""
    ends = f'x1="{x1:.1f}" y1="{y1:.1f}" x2="{x2:.1f}" y2="{y2:.1f}"'
    return f'<line {ends} stroke="{colour}" stroke-width="{width:g}"{more}/>'


def _symbol(number: int, x: float, y: float, colour: str) -> str:
    """Mark a point, each curve in its own way, so that colour is not all that tells them apart."""
    corners = {1: ((-1, -1), (1, -1), (1, 1), (-1, 1)), 2: ((0, -1.3), (1.2, 0.9), (-1.2, 0.9))}
    if number % len(COLOURS) == 0:
        return f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{MARK}" fill="{colour}"/>'
    points = " ".join(f"{x + MARK * dx:.1f},{y + MARK * dy:.1f}" for dx, dy in corners[number % len(COLOURS)])
    return f'<polygon points="{points}" fill="{colour}"/>'
