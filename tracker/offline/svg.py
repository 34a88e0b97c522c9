"""The parts that the picture of a timeline is made of: its place on the page, colours, text."""

from xml.sax.saxutils import escape

# The colours of the terminal views; a test holds them to be the same.
FILL, GOOD, CAUTION, BAD, QUIET = "#14828c", "#2c8543", "#a56812", "#d23f53", "#71767f"
GROUND, INK, EDGE, FAINT = "#ffffff", "#1f2328", "#b8bfc8", "#e6e9ed"
FONT = "'Helvetica Neue', Helvetica, Arial, 'Liberation Sans', 'DejaVu Sans', sans-serif"

WIDE = 1200.0
LEFT, RIGHT = 88.0, 1136.0  # of the panels
LABEL, SMALL, TINY, TITLE = 11.0, 10.5, 9.5, 17.0
# Width of a character of a label, px, on the generous side; and of the smaller ones as it usually is.
CHARACTER, NARROW = 6.3, 5.4


def text(
    words: str,
    x: float,
    y: float,
    *,
    anchor: str = "start",
    size: float = LABEL,
    colour: str = INK,
    weight: str = "normal",
    halo: bool = False,
) -> str:
    """Write words at a place, px; a halo keeps lines that run behind them off the letters."""
    more = f' text-anchor="{anchor}"' if anchor != "start" else ""
    more += f' font-size="{size:g}"' if size != LABEL else ""
    more += f' fill="{colour}"' if colour != INK else ""
    more += f' font-weight="{weight}"' if weight != "normal" else ""
    more += f' stroke="{GROUND}" stroke-width="3" stroke-linejoin="round" paint-order="stroke"' if halo else ""
    return f'<text x="{x:.1f}" y="{y:.1f}"{more}>{escape(words)}</text>'
