"""The panel as a map, elements about square: two characters each where there is room, else two elements a character.

A panel too large for that is shown in shades, each for the share of elements in state +1 behind it.
"""

import math
from collections.abc import Collection

import numpy as np
from numpy.typing import NDArray
from rich.style import Style
from rich.text import Text

from tracker.view.palette import BAD, FILL

HALVES = {(False, False): " ", (True, False): "▀", (False, True): "▄", (True, True): "█"}
SHADES = " ░▒▓█"


def shape_guess(elements: int) -> tuple[int, int]:
    """Columns and rows of the squarest panel of so many elements."""
    rows = next(rows for rows in range(math.isqrt(elements), 0, -1) if elements % rows == 0)
    return elements // rows, rows


def panel_map(
    states: NDArray[np.integer], shape: tuple[int, int], width: int, height: int, faulty: Collection[int] = ()
) -> Text:
    """Draw a pattern.

    Parameters
    ----------
    states : ndarray, shape (N,)
        States +1 and −1; element i is column i // rows, row i % rows; row 0 is on top.
    shape : tuple of int
        Columns, rows.
    width, height : int
        Room, in characters.
    faulty : collection of int
        Elements to set apart by colour and by `x`.

    Returns
    -------
    Text
        Lines of at most `width` characters.
    """
    columns, rows = shape
    on = (np.asarray(states) > 0).reshape(columns, rows).T
    bad = np.zeros((columns, rows), dtype=bool)
    for element in faulty:
        if element < columns * rows:
            bad[divmod(element, rows)] = True
    if 2 * columns <= width and rows <= height:
        lines = [_whole(on[row], bad.T[row]) for row in range(rows)]
    elif columns <= width and math.ceil(rows / 2) <= height:
        lines = [_halves(on[row : row + 2], bad.T[row : row + 2]) for row in range(0, rows, 2)]
    else:
        lines = _shades(on, width, height)
    return Text("\n").join(lines)


def _whole(on: NDArray[np.bool_], bad: NDArray[np.bool_]) -> Text:
    """Draw one row, two characters an element, which makes it about square."""
    text = Text(no_wrap=True)
    for plus, faulty in zip(on, bad, strict=True):
        if faulty:
            text.append("▐x" if plus else " x", Style(color=BAD, bold=True))
        else:
            text.append("██" if plus else "  ", Style(color=FILL))
    return text


def _halves(on: NDArray[np.bool_], bad: NDArray[np.bool_]) -> Text:
    """Draw two rows, or the last one, in one line."""
    text = Text(no_wrap=True)
    for column in range(on.shape[1]):
        if bad[:, column].any():
            text.append("x", Style(color=BAD, bold=True))
        else:
            lower = bool(on[1, column]) if len(on) > 1 else False
            text.append(HALVES[bool(on[0, column]), lower], Style(color=FILL))
    return text


def _shades(on: NDArray[np.bool_], width: int, height: int) -> list[Text]:
    """Draw as many elements a character as it takes to fit."""
    rows, columns = on.shape
    # A character is about twice as high as it is wide: a cell of b columns covers 2 b rows.
    block = max(math.ceil(columns / max(width, 1)), math.ceil(rows / (2 * max(height, 1))))
    lines = []
    for row in range(0, rows, 2 * block):
        text = Text(no_wrap=True)
        for column in range(0, columns, block):
            share = float(on[row : row + 2 * block, column : column + block].mean())
            text.append(SHADES[min(int(share * len(SHADES)), len(SHADES) - 1)], Style(color=FILL))
        lines.append(text)
    return lines
