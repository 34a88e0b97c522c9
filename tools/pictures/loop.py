"""The loop that the tracker closes, as a drawing: controller, pilots, tracker, pattern, surface, and the log."""

from collections.abc import Iterator
from xml.sax.saxutils import escape

from pictures.theme import Theme

WIDE, HIGH = 980, 440
TITLE = (
    "The testbed controller sends bursts of pilot frames to the tracker, which estimates the channel, watches for "
    "drift, chooses a pattern, journals all of it and sends the pattern back; the controller shows it on the surface."
)
FONT = "system-ui, 'Segoe UI', Helvetica, Arial, 'DejaVu Sans', sans-serif"
STAGES = (
    ("estimate", "least squares", "that forgets"),
    ("watch", "do frames still fit", "the estimate?"),
    ("choose", "local flips within", "the time allowed"),
    ("journal", "on disk before", "it is sent"),
)
# The pattern drawn on the surface, invented: a row a string.
ROWS = ("+--++-", "+-++--", "-++--+", "++--++", "+--++-", "--++-+")


class Drawing:
    """SVG elements in the colours of a theme."""

    def __init__(self, theme: Theme) -> None:
        self.theme = theme

    def name(self, x: float, y: float, text: str, size: int = 15, colour: str = "") -> str:
        """Set a name about x."""
        fill = colour or self.theme.ink
        return f'<text x="{x:g}" y="{y:g}" font-size="{size}" font-weight="600" fill="{fill}">{escape(text)}</text>'

    def words(self, x: float, y: float, *lines: str) -> str:
        """Set words about x, a line each."""
        return "".join(
            f'<text x="{x:g}" y="{y + 17 * number:g}" font-size="12.5" fill="{self.theme.quiet}">{escape(line)}</text>'
            for number, line in enumerate(lines)
        )

    def box(self, x: float, y: float, wide: float, high: float, edge: str = "") -> str:
        """Draw a box."""
        return (
            f'<rect x="{x:g}" y="{y:g}" width="{wide:g}" height="{high:g}" rx="7" fill="{self.theme.box}" '
            f'stroke="{edge or self.theme.edge}" stroke-width="1.5"/>'
        )

    def arrow(self, path: str, kind: str = "quiet", *, dashed: bool = False) -> str:
        """Draw a line that ends in an arrow head; the kind is a colour of the theme."""
        dashes = ' stroke-dasharray="5 5"' if dashed else ""
        colour = getattr(self.theme, kind)
        return f'<path d="{path}" fill="none" stroke="{colour}" stroke-width="2"{dashes} marker-end="url(#{kind})"/>'


def svg(theme: Theme) -> str:
    """Draw the loop; returns a whole SVG file."""
    drawing = Drawing(theme)
    heads = "".join(
        f'<marker id="{name}" viewBox="0 0 8 8" refX="7" refY="4" markerWidth="5" markerHeight="5" orient="auto">'
        f'<path d="M0,0L8,4L0,8z" fill="{getattr(theme, name)}"/></marker>'
        for name in ("quiet", "accent", "wave")
    )
    return "\n".join(
        [
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {WIDE} {HIGH}" role="img">',
            f"<title>{escape(TITLE)}</title>",
            f"<defs>{heads}</defs>",
            f'<rect x=".5" y=".5" width="{WIDE - 1}" height="{HIGH - 1}" rx="8" fill="{theme.ground}" '
            f'stroke="{theme.edge}"/>',
            f'<g font-family="{FONT}" text-anchor="middle">',
            *_messages(drawing),
            *_tracker(drawing),
            *_radio(drawing),
            *_beside(drawing),
            "</g>",
            "</svg>",
            "",
        ]
    )


def _messages(drawing: Drawing) -> Iterator[str]:
    """Draw the controller and what goes to and fro."""
    accent = drawing.theme.accent
    yield drawing.box(24, 40, 216, 126)
    yield drawing.name(132, 94, "testbed controller", 16)
    yield drawing.words(132, 118, "yours")
    yield drawing.arrow("M244,76H390", "accent")
    yield drawing.name(317, 66, "pilots", colour=accent)
    yield drawing.words(317, 95, "burst of frames")
    yield drawing.arrow("M392,134H246", "accent")
    yield drawing.name(317, 124, "pattern", colour=accent)
    yield drawing.words(317, 153, "id, bits, rate")


def _tracker(drawing: Drawing) -> Iterator[str]:
    """Draw the tracker and its four stages."""
    yield drawing.box(394, 24, 562, 158, drawing.theme.accent)
    yield drawing.name(675, 52, "ris-tracker serve", 16)
    for number, (name, *lines) in enumerate(STAGES):
        x = 408 + 137 * number
        yield drawing.box(x, 68, 123, 98)
        yield drawing.name(x + 61.5, 97, name)
        yield drawing.words(x + 61.5, 124, *lines)
        if number:
            yield drawing.arrow(f"M{x - 14},117h12")


def _radio(drawing: Drawing) -> Iterator[str]:
    """Draw mast, surface and terminal, and how the controller is joined to them."""
    theme = drawing.theme
    yield drawing.arrow("M100,170V262")
    yield drawing.words(56, 212, "shows the", "pattern")
    yield drawing.arrow("M226,310V170")
    yield drawing.words(274, 212, "hears the", "pilot tones")
    for row, states in enumerate(ROWS):
        for column, state in enumerate(states):
            fill = theme.accent if state == "+" else theme.box
            yield (
                f'<rect x="{70 + 10 * column}" y="{268 + 10 * row}" width="9" height="9" fill="{fill}" '
                f'stroke="{theme.edge}" stroke-width=".7"/>'
            )
    yield drawing.name(100, 347, "surface", 13)
    lattice = "M38,420L48,378L58,420M43,399h10M41,410h14"
    waves = "M41,378a9,9 0 0 1 0,-13M55,378a9,9 0 0 0 0,-13M36,382a15,15 0 0 1 0,-21M60,382a15,15 0 0 0 0,-21"
    yield f'<path d="{lattice}{waves}" fill="none" stroke="{theme.ink}" stroke-width="1.8"/>'
    yield f'<circle cx="48" cy="372" r="3.5" fill="{theme.ink}"/>'
    yield drawing.name(86, 418, "mast", 13)
    yield f'<rect x="218" y="316" width="17" height="28" rx="3" fill="none" stroke="{theme.ink}" stroke-width="2"/>'
    yield drawing.name(272, 336, "terminal", 13)
    yield drawing.arrow("M70,364L84,353", "wave")
    yield drawing.arrow("M138,300L210,324", "wave")
    yield drawing.arrow("M74,376L210,344", "wave", dashed=True)
    yield drawing.words(176, 384, "direct path")


def _beside(drawing: Drawing) -> Iterator[str]:
    """Draw what stands beside the loop: the live view, the log, the replay."""
    yield drawing.arrow("M470,186V282")
    yield drawing.words(514, 238, "state, alarm")
    yield drawing.box(390, 288, 160, 76)
    yield drawing.name(470, 320, "ris-tracker watch", 14)
    yield drawing.words(470, 343, "how it does, live")
    yield drawing.arrow("M880,186V282")
    yield drawing.words(836, 238, "all of it")
    yield drawing.box(816, 288, 140, 76)
    yield drawing.name(886, 320, "log")
    yield drawing.words(886, 343, "MCAP file")
    yield drawing.arrow("M812,326H786")
    yield drawing.box(590, 288, 192, 76)
    yield drawing.name(686, 320, "ris-tracker replay", 14)
    yield drawing.words(686, 343, "the same patterns, bit by bit")
