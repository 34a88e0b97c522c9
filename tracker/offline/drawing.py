"""A learned basis as one picture, SVG written by hand: eigenvalues, prediction errors, and the first columns.

Each column is drawn on the panel as seen from the front, rows upwards: brightness is the size of an entry, colour its
phase. A smooth wave shows as stripes, noise as confetti.
"""

import base64
import math
import struct
import zlib
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from tracker.basis_file import LearnedBasis

INK, QUIET, MARK, OTHER = "#1d2126", "#71767f", "#14828c", "#a56812"
WIDTH, CHART_HEIGHT = 920, 250
MOST_DRAWN = 8
MAP_SIZE, MAP_GAP = 200, 24


def draw(basis: LearnedBasis) -> str:
    """Draw a basis.

    Parameters
    ----------
    basis : LearnedBasis

    Returns
    -------
    str
        SVG.
    """
    parts = list(_eigenvalues(basis, 60, 40, 360))
    parts += _errors(basis, 520, 40, 360)
    shown = min(MOST_DRAWN, basis.columns.shape[1])
    top = CHART_HEIGHT + 140
    parts.append(
        _text(60, top - 28, "First columns on the panel, seen from the front: brightness amplitude, colour phase")
    )
    tall = MAP_SIZE * min(1.0, basis.panel[1] / basis.panel[0])
    for index in range(shown):
        x = 60 + index % 4 * (MAP_SIZE + MAP_GAP)
        y = top + index // 4 * (tall + 44)
        parts += _column(basis, index, x, y)
    height = top + math.ceil(shown / 4) * (tall + 44) + 10
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{WIDTH + 60}" height="{height:.0f}" '
        f'font-family="sans-serif" font-size="13" fill="{INK}">\n'
        f'<rect width="100%" height="100%" fill="#ffffff"/>\n' + "\n".join(parts) + "\n</svg>\n"
    )


def _eigenvalues(basis: LearnedBasis, x: float, y: float, width: float) -> Iterator[str]:
    """Eigenvalues against the level that noise adds, dB over the noise of an output."""
    levels = 10.0 * np.log10(np.maximum(basis.eigenvalues, 1e-12))
    noise = 10.0 * math.log10(max(basis.noise, 1e-12))
    low, high = _ticks(float(min(levels.min(), noise)) - 1.0, float(levels.max()) + 1.0, 5.0)
    chart = _Chart(x, y, width, (0.5, levels.size + 0.5), (low, high))
    yield from chart.frame("Power of each column", "column; filled: kept", "dB over noise", 5.0)
    yield chart.line([0.5, levels.size + 0.5], [noise, noise], OTHER, "4 3")
    yield _text(x + width, chart.at(0, noise)[1] - 5, "what noise adds", OTHER, "end")
    for place, level in enumerate(levels, 1):
        yield chart.dot(place, float(level), MARK, hollow=place > basis.columns.shape[1])


def _errors(basis: LearnedBasis, x: float, y: float, width: float) -> Iterator[str]:
    """Prediction error of held-out frames against the number of columns."""
    excess = [error for error in (*basis.errors, basis.followed_error) if math.isfinite(error)]
    most = max([*excess, 1.05])
    step = 10.0 ** math.floor(math.log10(most - 1.0)) * (0.5 if math.log10(most - 1.0) % 1.0 < 0.5 else 1.0)
    low, high = _ticks(1.0, most, step)
    sizes = [math.log2(size) for size in basis.sizes]
    chart = _Chart(x, y, width, (min(sizes) - 0.5, max(sizes) + 0.5), (low, high))
    yield from chart.frame("Error of predicting held-out frames", "columns", "1 is noise alone", step, [])
    for place, size in zip(sizes, basis.sizes, strict=True):
        yield _text(chart.at(place, low)[0], chart.at(place, low)[1] + 18, str(size), QUIET, "middle")
    if math.isfinite(basis.followed_error):
        yield chart.line([min(sizes) - 0.5, max(sizes) + 0.5], [basis.followed_error] * 2, OTHER, "4 3")
        yield _text(
            x + width,
            chart.at(0, basis.followed_error)[1] - 5,
            f"with the basis &quot;{basis.followed}&quot;",
            OTHER,
            "end",
        )
    yield chart.line(sizes, list(basis.errors), MARK)
    for place, error in zip(sizes, basis.errors, strict=True):
        yield chart.dot(place, error, MARK)


def _column(basis: LearnedBasis, index: int, x: float, y: float) -> Iterator[str]:
    columns, rows = basis.panel
    # Element i is column i // rows, row i % rows; the first line of a picture is the topmost row.
    values = basis.columns[:, index].reshape(columns, rows).T[::-1]
    tall = MAP_SIZE * min(1.0, rows / columns)
    wide = tall * columns / rows
    data = base64.b64encode(_png(_coloured(values))).decode()
    yield (
        f'<image x="{x:.1f}" y="{y:.1f}" width="{wide:.1f}" height="{tall:.1f}" preserveAspectRatio="none" '
        f'style="image-rendering:pixelated" href="data:image/png;base64,{data}"/>'
    )
    level = 10.0 * math.log10(float(basis.variances[index] / basis.variances[0]))
    yield _text(x, y + tall + 17, f"column {index + 1}, {level:+.1f} dB", QUIET)


def _coloured(values: NDArray[np.complex128]) -> NDArray[np.uint8]:
    """Colours of complex values, shape (rows, columns, 3): the hue runs round once with the phase."""
    size = np.abs(values) / max(float(np.abs(values).max()), 1e-300)
    phase = np.angle(values)[..., None] - np.array([0.0, 2.0, 4.0]) * np.pi / 3.0
    return np.asarray(np.round(255.0 * size[..., None] * (0.55 + 0.45 * np.cos(phase))), dtype=np.uint8)


def _png(pixels: NDArray[np.uint8]) -> bytes:
    """Encode colours, shape (rows, columns, 3), as PNG (ISO/IEC 15948): one unfiltered line after the other."""
    rows, columns = pixels.shape[:2]
    lines = np.concatenate([np.zeros((rows, 1), dtype=np.uint8), pixels.reshape(rows, -1)], axis=1)
    head = struct.pack(">IIBBBBB", columns, rows, 8, 2, 0, 0, 0)
    body = b"".join(
        struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))
        for kind, data in ((b"IHDR", head), (b"IDAT", zlib.compress(lines.tobytes(), 9)), (b"IEND", b""))
    )
    return b"\x89PNG\r\n\x1a\n" + body


class _Chart:
    """Axes of a chart."""

    def __init__(self, x: float, y: float, width: float, across: tuple[float, float], up: tuple[float, float]) -> None:
        self._x, self._y, self._width = x, y, width
        self._across, self._up = across, up

    def at(self, across: float, up: float) -> tuple[float, float]:
        (left, right), (low, high) = self._across, self._up
        return (
            self._x + self._width * (across - left) / (right - left),
            self._y + CHART_HEIGHT * (high - up) / (high - low),
        )

    def frame(
        self, title: str, across: str, up: str, step: float, places: Sequence[int] | None = None
    ) -> Iterator[str]:
        """Draw title, grid and names of the axes."""
        yield _text(self._x, self._y - 16, f"{title} ({up})")
        low, high = self._up
        for count in range(round((high - low) / step) + 1):
            level = low + count * step
            left, height = self.at(self._across[0], level)
            yield (
                f'<line x1="{left:.1f}" x2="{left + self._width:.1f}" y1="{height:.1f}" y2="{height:.1f}" '
                'stroke="#e3e5e8"/>'
            )
            yield _text(left - 6, height + 4, f"{level:.4g}", QUIET, "end")
        if places is None:
            last = int(self._across[1])
            places = sorted({1, *range(max(1, last // 4), last + 1, max(1, last // 4))})
        for place in places:
            left, height = self.at(place, low)
            yield _text(left, height + 18, str(place), QUIET, "middle")
        yield _text(self._x + self._width / 2, self._y + CHART_HEIGHT + 38, across, QUIET, "middle")

    def line(self, across: Sequence[float], up: Sequence[float], colour: str, dashes: str = "") -> str:
        points = " ".join("{:.1f},{:.1f}".format(*self.at(*pair)) for pair in zip(across, up, strict=True))
        dashed = f' stroke-dasharray="{dashes}"' if dashes else ""
        return f'<polyline points="{points}" fill="none" stroke="{colour}" stroke-width="1.5"{dashed}/>'

    def dot(self, across: float, up: float, colour: str, hollow: bool = False) -> str:
        left, height = self.at(across, up)
        fill = "#ffffff" if hollow else colour
        return f'<circle cx="{left:.1f}" cy="{height:.1f}" r="3.5" fill="{fill}" stroke="{colour}"/>'


def _ticks(low: float, high: float, step: float) -> tuple[float, float]:
    """Widen a range to whole steps."""
    return step * math.floor(low / step + 1e-9), step * math.ceil(high / step - 1e-9)


def _text(x: float, y: float, text: str, colour: str = INK, anchor: str = "start") -> str:
    return f'<text x="{x:.1f}" y="{y:.1f}" fill="{colour}" text-anchor="{anchor}">{text}</text>'
