"""The panel as a drawing: each element a square, filled in state +1, empty in state −1, crossed where it is faulty."""

import math
from collections.abc import Iterator, Sequence
from typing import Any

from .svg import BAD, EDGE, FILL, GROUND, QUIET, SMALL, text

MOST_CELL = 16.0
HEAD, TAIL = 12.0, 16.0  # from the title to the map, and from the map to the words below it, px


def panel_map(told: dict[str, Any], x: float, y: float, wide: float, high: float) -> Iterator[str]:
    """Draw the last pattern.

    Parameters
    ----------
    told : dict
        With ``pattern``, ``panel`` (columns and rows, or None) and ``faults``.
    x, y : float
        Base line of the title, px; the map hangs below it.
    wide, high : float
        Room for the map and what is written below it, px.

    Yields
    ------
    str
        Elements of an SVG file.
    """
    states: str = told["pattern"]["states"]
    columns, rows = shape_of(told["panel"], len(states))
    known = told["panel"] is not None and told["panel"][0] * told["panel"][1] == len(states)
    cell = _cell(columns, rows, wide, high)
    left, top = x, y + HEAD
    yield text(f"last pattern, id {told['pattern']['id']}", x, y, weight="bold")
    yield (
        f'<rect x="{left:.1f}" y="{top:.1f}" width="{columns * cell:.2f}" height="{rows * cell:.2f}" fill="none" '
        f'stroke="{EDGE}"/>'
    )
    path = "".join(_runs(states, columns, rows, left, top, cell))
    yield f'<path d="{path}" fill="{FILL}" shape-rendering="crispEdges"/>'
    # An element may have several faults; it is crossed once.
    faulty = sorted({fault[0] for fault in told["faults"] if fault[0] < len(states)})
    arm = max(cell * 0.3, 1.5)
    for element in faulty:
        column, row = divmod(element, rows)
        middle_x, middle_y = left + (column + 0.5) * cell, top + (row + 0.5) * cell
        cross = f"M{middle_x - arm:.1f} {middle_y - arm:.1f}l{2 * arm:.1f} {2 * arm:.1f}m0 {-2 * arm:.1f}"
        d = f"{cross}l{-2 * arm:.1f} {2 * arm:.1f}"
        yield f'<path d="{d}" stroke="{GROUND}" stroke-width="3.6"/><path d="{d}" stroke="{BAD}" stroke-width="1.8"/>'
    shape = f"{columns} columns, {rows} rows, row 0 on top" if known else f"{len(states)} elements, shape not known"
    words = f"{shape}; filled: state +1" + (f"; ×: {len(faulty)} faulty" if faulty else "")
    yield text(words, x, top + rows * cell + TAIL, size=SMALL, colour=QUIET)


def map_height(told: dict[str, Any], wide: float, high: float) -> float:
    """How far the map and what is written below it reach below the title, px; 0 without a pattern."""
    if told["pattern"] is None:
        return 0.0
    columns, rows = shape_of(told["panel"], len(told["pattern"]["states"]))
    return HEAD + rows * _cell(columns, rows, wide, high) + TAIL


def shape_of(panel: Sequence[int] | None, elements: int) -> tuple[int, int]:
    """Columns and rows: those of the settings where they fit, else of the squarest panel of so many elements."""
    if panel is not None and panel[0] * panel[1] == elements:
        return panel[0], panel[1]
    rows = next(rows for rows in range(math.isqrt(elements), 0, -1) if elements % rows == 0)
    return elements // rows, rows


def _cell(columns: int, rows: int, wide: float, high: float) -> float:
    """Side of an element that fits into the room, px."""
    return min(wide / columns, (high - HEAD - TAIL) / rows, MOST_CELL)


def _runs(states: str, columns: int, rows: int, left: float, top: float, cell: float) -> Iterator[str]:
    """Draw each row's runs of state +1 as one rectangle; element i is column i // rows, row i % rows."""
    for row in range(rows):
        line = states[row::rows]
        start = None
        for column in range(columns + 1):
            on = column < columns and line[column] == "+"
            if on and start is None:
                start = column
            elif not on and start is not None:
                x, y, wide = left + start * cell, top + row * cell, (column - start) * cell
                yield f"M{x:.2f} {y:.2f}h{wide:.2f}v{cell:.2f}h{-wide:.2f}z"
                start = None
