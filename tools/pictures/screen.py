"""A terminal screen as SVG that looks the same everywhere.

Text is set in whatever monospaced font there is, stretched to the grid. Blocks, shades and lines, which fonts draw with
gaps, become shapes.
"""

from collections.abc import Iterator, Sequence
from xml.sax.saxutils import escape

from rich.console import Console, RenderableType
from rich.segment import Segment

from pictures.theme import Theme

WIDE, HIGH = 9.0, 18.0  # of a character, px
MARGIN = 16.0
FONT = "ui-monospace, 'SF Mono', Menlo, Consolas, 'DejaVu Sans Mono', monospace"

# Parts of a cell that a character fills: left, top, right, bottom, as shares of the cell.
Box = tuple[float, float, float, float]
BLOCKS: dict[str, Box] = {chr(0x2580 + n): (0.0, 1.0 - n / 8.0, 1.0, 1.0) for n in range(1, 9)} | {
    "▀": (0.0, 0.0, 1.0, 0.5),
    "▐": (0.5, 0.0, 1.0, 1.0),
    "▕": (0.875, 0.0, 1.0, 1.0),
    "━": (0.0, 0.42, 1.0, 0.56),
}
SHADES = {"░": 0.25, "▒": 0.5, "▓": 0.75}
THIN = {
    "─": "M0,{y}H{w}",
    "│": "M{x},0V{h}",
    "╭": "M{x},{h}V{y}H{w}",
    "╮": "M{x},{h}V{y}H0",
    "╰": "M{x},0V{y}H{w}",
    "╯": "M{x},0V{y}H0",
    "┄": "M1,{y}h3M5.5,{y}h3",
}
DRAWN = frozenset(BLOCKS) | frozenset(SHADES) | frozenset(THIN)


def svg(content: RenderableType, columns: int, rows: int, theme: Theme, title: str) -> str:
    """Draw something that a terminal would show.

    Parameters
    ----------
    content : renderable
    columns, rows : int
        Room for it, characters.
    theme : Theme
    title : str
        What the picture shows, for those who cannot see it.

    Returns
    -------
    str
        A whole SVG file.
    """
    console = Console(width=columns, height=rows, force_terminal=True, color_system="truecolor", legacy_windows=False)
    lines = console.render_lines(content, console.options.update(width=columns, height=rows))
    wide, high = columns * WIDE + 2 * MARGIN, rows * HIGH + 2 * MARGIN
    parts = [part for row, line in enumerate(lines) for part in _line(line, row, theme)]
    return "\n".join(
        [
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {wide:g} {high:g}" role="img">',
            f"<title>{escape(title)}</title>",
            f'<rect x=".5" y=".5" width="{wide - 1:g}" height="{high - 1:g}" rx="8" fill="{theme.ground}" '
            f'stroke="{theme.edge}"/>',
            f'<g transform="translate({MARGIN:g} {MARGIN:g})" font-family="{FONT}" font-size="{HIGH * 0.8:g}" '
            'xml:space="preserve">',
            *parts,
            "</g>",
            "</svg>",
            "",
        ]
    )


def _line(line: Sequence[Segment], row: int, theme: Theme) -> Iterator[str]:
    """Draw one line: backgrounds, then runs of text and of shapes, each at its column."""
    column = 0
    for segment in line:
        style = segment.style
        colour = style.color.triplet.hex if style and style.color and style.color.triplet else theme.ink
        back = style.bgcolor.triplet.hex if style and style.bgcolor and style.bgcolor.triplet else None
        length = len(segment.text)
        if back:
            yield _rectangle(column, row, (0.0, 0.0, float(length), 1.0), back)
        for start, run in _runs(segment.text):
            at = column + start
            if run[0] in DRAWN:
                yield from _shape(run, at, row, colour)
            elif run.strip():
                bold = ' font-weight="bold"' if style and style.bold else ""
                at += len(run) - len(run.lstrip())
                text = run.strip()
                yield (
                    f'<text x="{at * WIDE:g}" y="{(row + 0.76) * HIGH:g}" fill="{colour}"{bold} '
                    f'textLength="{len(text) * WIDE:g}" lengthAdjust="spacingAndGlyphs">{escape(text)}</text>'
                )
        column += length


def _runs(text: str) -> Iterator[tuple[int, str]]:
    """Split into runs: one drawn character repeated, or text with no drawn character in it."""
    start = 0
    for at in range(1, len(text) + 1):
        ends = at == len(text) or (text[at] != text[at - 1] and bool({text[at], text[at - 1]} & DRAWN))
        if ends:
            yield start, text[start:at]
            start = at


def _shape(run: str, column: int, row: int, colour: str) -> Iterator[str]:
    """Draw a run of one character: as one rectangle where cells join, else cell by cell."""
    character, count = run[0], len(run)
    if character in SHADES:
        yield _rectangle(column, row, (0.0, 0.0, float(count), 1.0), colour, SHADES[character])
    elif character in BLOCKS:
        left, top, right, bottom = BLOCKS[character]
        if (left, right) == (0.0, 1.0):
            yield _rectangle(column, row, (0.0, top, float(count), bottom), colour)
            return
        for n in range(count):
            yield _rectangle(column + n, row, (left, top, right, bottom), colour)
    else:
        path = THIN[character].format(x=WIDE / 2, y=HIGH / 2, w=WIDE, h=HIGH)
        for n in range(count):
            place = f"translate({(column + n) * WIDE:g} {row * HIGH:g})"
            yield f'<path d="{path}" transform="{place}" fill="none" stroke="{colour}" stroke-width="1.4"/>'


def _rectangle(column: int, row: int, box: Box, colour: str, opacity: float = 1.0) -> str:
    left, top, right, bottom = box
    x, y = (column + left) * WIDE, (row + top) * HIGH
    seen = f' fill-opacity="{opacity:g}"' if opacity < 1.0 else ""
    # Crisp edges leave no seam between neighbours.
    return (
        f'<rect x="{x:g}" y="{y:g}" width="{(right - left) * WIDE:g}" height="{(bottom - top) * HIGH:g}" '
        f'fill="{colour}"{seen} shape-rendering="crispEdges"/>'
    )
