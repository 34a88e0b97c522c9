"""Traces, the panel map, colours and the summary of settings: what a person reads must be what there is."""

import re
import unicodedata
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tracker.assembly import configure
from tracker.settings import parse
from tracker.view import palette
from tracker.view.summary import demand, summary
from tracker.view.surface import panel_map, shape_guess
from tracker.view.trace import AXIS, EIGHTHS, History, Line, draw, scale


def luminance(colour: str) -> float:
    """Relative luminance of an sRGB colour (W3C, Web Content Accessibility Guidelines 2.1, from memory)."""
    channels = [int(colour[start : start + 2], 16) / 255 for start in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return float(np.dot([0.2126, 0.7152, 0.0722], linear))


@pytest.mark.parametrize("colour", palette.COLOURS)
def test_colours_read_on_black_and_on_white(colour: str) -> None:
    """Every colour has the contrast of 4.5 to 1 that WCAG 2.1 (1.4.3, from memory) asks for, on black and on white."""
    lit = luminance(colour) + 0.05
    assert lit / 0.05 >= 4.5
    assert 1.05 / lit >= 4.5


def test_block_characters_fill_as_the_character_standard_names_them() -> None:
    """The steps of a bar are the lower blocks of Unicode's Block Elements, one eighth to full."""
    names = ["one eighth", "one quarter", "three eighths", "half", "five eighths", "three quarters", "seven eighths"]
    assert [unicodedata.name(c) for c in EIGHTHS[1:-1]] == [f"LOWER {name.upper()} BLOCK" for name in names]
    assert unicodedata.name(EIGHTHS[-1]) == "FULL BLOCK"


def drawn(lines: list[Line], width: int, height: int, low: float, high: float) -> list[str]:
    rows = draw(lines, width=width, height=height, limits=(low, high), labels=("top", "base"))
    return ["".join(segment.text for segment in row) for row in rows]


def test_a_bar_is_as_high_as_its_value() -> None:
    """The eighths filled in a column count the value on the scale from low to high."""
    values = [0.0, 1.0, 2.5, 4.0]
    rows = drawn([Line(values)], AXIS + 4, 4, 0.0, 4.0)
    heights = [sum(EIGHTHS.index(row[AXIS + column]) for row in rows) for column in range(4)]
    assert heights == [round(8 * value) for value in values]


def test_marks_stand_at_their_value_and_the_axis_names_its_ends() -> None:
    """A mark is in the row whose range holds its value, over the filled part as well as over nothing."""
    rows = drawn([Line([4.0, 0.0]), Line([0.5, 3.5], "•")], AXIS + 2, 4, 0.0, 4.0)
    assert rows[3][AXIS] == "•"
    assert rows[0][AXIS + 1] == "•"
    assert rows[0].startswith("   top▕")
    assert rows[3].startswith("  base▕")


@given(st.lists(st.one_of(st.none(), st.floats(-1e6, 1e6)), max_size=40), st.integers(0, 60), st.integers(1, 12))
def test_a_plot_fills_its_room_exactly(values: list[float | None], width: int, height: int) -> None:
    """Whatever the values and the room, a plot has as many lines and characters as it was given."""
    lines = [Line(values), Line(values, "━")]
    low, high = scale(lines)
    known = [value for value in values if value is not None]
    assert low < high
    assert all(low - 1e-9 * abs(low) <= value <= high + 1e-9 * abs(high) for value in known)
    rows = drawn(lines, width, height, low, high)
    assert [len(row) for row in rows] == [max(width, AXIS)] * height


def test_a_history_gives_means_over_its_columns() -> None:
    """A column holds the mean of the values within it (against NumPy's mean of the same stretch)."""
    rng = np.random.default_rng(5)
    times = np.sort(rng.uniform(0.0, 60.0, 4000))
    values = rng.normal(size=4000)
    history = History()
    for time, value in zip(times, values, strict=True):
        history.add(float(time), float(value))
    columns = history.columns(59.9, 60.0, 60)
    for second in (0, 17, 58):
        inside = values[(times >= second) & (times < second + 1)]
        assert columns[second] == pytest.approx(inside.mean(), abs=1e-12)


def test_a_slow_link_gives_an_unbroken_trace_and_a_silent_one_ends() -> None:
    """A value holds for a few spacings of a link slower than the columns, and no longer."""
    history = History()
    for time in range(0, 60, 4):
        history.add(float(time), 1.0)
    assert None not in history.columns(59.0, 30.0, 30)
    assert history.columns(100.0, 30.0, 30) == [None] * 30


def test_a_history_keeps_no_more_than_it_was_told() -> None:
    """Old values are forgotten, and what is not finite never gets in."""
    history = History(keep_s=10.0)
    history.add(0.0, 7.0)
    history.add(1.0, float("nan"))
    history.add(1.0, None)
    assert history.columns(1.0, 2.0, 2) == [7.0, None]
    history.add(100.0, 1.0)
    assert 7.0 not in history.columns(100.0, 200.0, 200)


def checkerboard(columns: int, rows: int) -> NDArray[np.int8]:
    """Element i is column i // rows, row i % rows, as the wire format has it."""
    column, row = np.divmod(np.arange(columns * rows), rows)
    return np.where((column + row) % 2 == 0, 1, -1).astype(np.int8)


def test_the_map_shows_each_element_in_its_place() -> None:
    """With room, an element is two characters; column and row follow from its index."""
    states = np.full(6, -1, dtype=np.int8)
    states[4] = 1  # 3 columns of 2 rows: column 2, row 0
    assert panel_map(states, (3, 2), 20, 10).plain.split("\n") == ["    ██", "      "]


def test_the_map_puts_two_rows_into_a_character_where_room_is_short() -> None:
    """Half blocks: upper for the even row, lower for the odd, a last odd row alone."""
    states = np.array([1, -1, 1, -1, 1, 1], dtype=np.int8)  # 2 columns of 3 rows
    assert panel_map(states, (2, 3), 3, 2).plain.split("\n") == ["▀▄", "▀▀"]


def test_faulty_elements_show_without_colour() -> None:
    """An element at fault is an x in the map; one that does not exist is passed over."""
    text = panel_map(checkerboard(4, 4), (4, 4), 20, 10, faulty=[5, 99]).plain
    assert text.count("x") == 1
    assert text.split("\n")[1][3] == "x"
    assert panel_map(checkerboard(4, 4), (4, 4), 4, 2, faulty=[5]).plain.count("x") == 1


@given(st.integers(1, 200), st.integers(1, 200), st.integers(1, 60), st.integers(1, 30))
def test_the_map_fits_its_room(columns: int, rows: int, width: int, height: int) -> None:
    """A panel of any size fits into any room; all +1 is solid and all −1 empty."""
    for state, glyphs in ((1, "█▀▐"), (-1, " ")):
        lines = panel_map(np.full(columns * rows, state, dtype=np.int8), (columns, rows), width, height).plain.split(
            "\n"
        )
        assert len(lines) <= height
        assert max(map(len, lines)) <= width
        assert set("".join(lines)) <= set(glyphs)


@given(st.integers(1, 5000))
def test_a_guessed_shape_has_all_elements(elements: int) -> None:
    """The guess is a whole rectangle, at least as wide as high."""
    columns, rows = shape_guess(elements)
    assert columns * rows == elements
    assert columns >= rows


SETTINGS = """
[link]
name = "yard"
receivers = 2
[panel]
columns = 32
rows = 32
[tones]
fft = 256
first = 28
count = 200
spacing_khz = 156.25
"""


def test_the_summary_gives_sizes_that_can_be_worked_out_by_hand() -> None:
    """N, band, memory and work follow from the settings.

    Operation counts of symm (2 n² B), syrk (n² B) and of real by complex gemm (4 n D B) as in Golub & Van Loan,
    Matrix Computations (from memory); 200 tones of 156.25 kHz span 199 · 0.15625 = 31.094 MHz.
    """
    settings = parse(SETTINGS)
    config = configure(settings, Path())
    need = demand(config)
    n, outputs = 1025, 2 * config.delay.shape[1]
    assert (need.unknowns, need.outputs) == (n, outputs)
    assert need.covariance_bytes == np.zeros((n, n)).nbytes
    assert need.coefficient_bytes == np.zeros((n, outputs), dtype=np.complex128).nbytes
    assert need.flops_a_frame == 2 * n**2 + n**2 + 2 * 4 * n * outputs
    assert need.burst_bytes == 64 * (1024 // 8) + np.zeros((64, 2, 200), dtype=np.complex64).nbytes
    text = summary(settings, config, 5000)
    low, high = (float(found) for found in re.findall(r"([+-][\d.]+) to ([+-][\d.]+) MHz", text)[0])
    assert high - low == pytest.approx(31.094, abs=1e-3)
    assert "N = 1024" in text
    assert "5,000 bursts may wait" in text
    assert "8.02 MB" in text  # 1025² · 8 bytes, in units of 2^20
