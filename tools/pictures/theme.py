"""The two grounds that pictures are drawn on: a page may be light or dark."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Theme:
    """Colours of one ground, as #rrggbb.

    Parameters
    ----------
    name : str
        Part of the file name.
    ground, box : str
        Background, and the inside of boxes.
    ink, quiet : str
        Text, and text that matters less.
    edge : str
        Thin lines.
    accent, wave : str
        What the eye is to follow, and radio waves.
    """

    name: str
    ground: str
    box: str
    ink: str
    quiet: str
    edge: str
    accent: str
    wave: str


LIGHT = Theme("light", "#ffffff", "#f4f6f8", "#1f2328", "#59616b", "#b8bfc8", "#0f727b", "#955a08")
DARK = Theme("dark", "#0f1318", "#1a2028", "#dde1e6", "#a0a8b2", "#48505a", "#3fb0bb", "#d0943a")
THEMES = (LIGHT, DARK)
