"""Curves from characters, judged by a slow drawing and by the names of the Unicode characters."""

from __future__ import annotations

import math
import unicodedata

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from daq.view.plot import ascii_cells, braille, line_plot, log_ticks, raster, round_ticks

EPS = 1e-9


def slowly(x: np.ndarray, y: np.ndarray, shape: tuple[int, int], slack: float) -> np.ndarray:
    """Return the same dots segment by segment, column by column; ``slack`` widens or narrows each span."""
    mask = np.zeros(shape, dtype=bool)
    first = 0
    for i in range(
        len(x) + 1
    ):  # NaN ends a line: what begins after it is another one, in the same column too
        if i == len(x) or not math.isfinite(y[i]):
            mask |= one_line(x[first:i], y[first:i], shape, slack)
            first = i + 1
    return mask


def one_line(x: np.ndarray, y: np.ndarray, shape: tuple[int, int], slack: float) -> np.ndarray:
    """Draw one unbroken line, column by column."""
    rows, columns = shape
    mask = np.zeros(shape, dtype=bool)
    for c in range(columns):
        low, high = math.inf, -math.inf
        for i in range(len(x)):
            if not (math.isfinite(x[i]) and math.isfinite(y[i])):
                continue
            if c <= x[i] <= c + 1:
                low, high = min(low, y[i]), max(high, y[i])
            if i + 1 < len(x) and math.isfinite(x[i + 1]) and math.isfinite(y[i + 1]) and x[i + 1] > x[i]:
                for u in (max(c, x[i]), min(c + 1, x[i + 1])):
                    if c <= u <= c + 1 and x[i] <= u <= x[i + 1]:
                        v = y[i] + (y[i + 1] - y[i]) * (u - x[i]) / (x[i + 1] - x[i])
                        low, high = min(low, v), max(high, v)
        if low <= high:
            top = max(math.floor(low - slack), 0)
            bottom = min(math.floor(high + slack), rows - 1)
            mask[top : bottom + 1, c] = True
    return mask


numbers = st.integers(-8, 60).map(lambda n: n / 4)


@settings(max_examples=120, deadline=None)
@given(
    st.lists(st.tuples(numbers, st.one_of(numbers, st.just(math.nan))), max_size=12),
    st.integers(1, 9),
    st.integers(1, 12),
)
@example([(0.0, 0.0), (0.0, math.nan), (0.25, 2.0)], 3, 1)
def test_the_raster_is_that_of_a_slow_drawing(
    points: list[tuple[float, float]], rows: int, columns: int
) -> None:
    """Every column holds the span of the line there, also where points share it and NaN breaks it."""
    points.sort(key=lambda p: p[0])
    x = np.array([p[0] for p in points])
    y = np.array([min(p[1], rows - 0.25) if p[1] == p[1] else p[1] for p in points])
    y = np.maximum(y, 0.0)
    drawn = raster(x, y=rows - y, shape=(rows, columns), x_range=(0, columns), y_range=(0, rows))
    least = slowly(x, y, (rows, columns), -EPS)
    most = slowly(x, y, (rows, columns), EPS)
    assert not (drawn & ~most).any()
    assert not (least & ~drawn).any()


def test_a_spike_of_one_sample_is_seen_among_a_hundred_thousand() -> None:
    """Decimation by every n-th sample would lose it."""
    y = np.zeros(100_000)
    y[54_321] = 1.0
    drawn = raster(np.arange(y.size, dtype=float), y, (8, 40), (0, y.size), (0, 1))
    assert drawn[0].sum() == 1
    assert drawn[-1].all()


def test_a_gap_stays_empty() -> None:
    """A line across a time without readings would be an invention."""
    t = np.arange(100.0)
    y = np.where((t > 40) & (t < 60), np.nan, 0.5)
    drawn = raster(t, y, (4, 50), (0, 100), (0, 1))
    assert not drawn[:, 21:29].any()
    assert drawn[:, :20].any(axis=0).all()


@pytest.mark.parametrize("dot", range(1, 9))
def test_braille_dots_are_those_of_their_unicode_names(dot: int) -> None:
    """The names of the Unicode standard (block 2800-28FF) number the dots; the standard library has them."""
    row, column = {1: (0, 0), 2: (1, 0), 3: (2, 0), 4: (0, 1), 5: (1, 1), 6: (2, 1), 7: (3, 0), 8: (3, 1)}[
        dot
    ]
    mask = np.zeros((4, 2), dtype=bool)
    mask[row, column] = True
    (cell,) = braille(mask)
    assert unicodedata.name(cell) == f"BRAILLE PATTERN DOTS-{dot}"


def test_all_braille_patterns_are_made_of_their_dots() -> None:
    """A cell with several dots is the union of its dots."""
    for code in range(1, 256):
        mask = np.zeros((4, 2), dtype=bool)
        for dot in unicodedata.name(chr(0x2800 + code)).removeprefix("BRAILLE PATTERN DOTS-"):
            n = int(dot) - 1
            mask[(n % 3, n // 3) if n < 6 else (3, n - 6)] = True
        assert braille(mask) == [chr(0x2800 + code)]


def test_ascii_cells_tell_three_levels() -> None:
    """A terminal without braille still shows a rise as a rise."""
    mask = np.eye(3, dtype=bool)
    assert ascii_cells(mask) == ["'-."]
    assert ascii_cells(mask[::-1]) == [".-'"]


@pytest.mark.parametrize("plain", [True, False])
def test_a_plot_has_the_size_asked_for(plain: bool) -> None:
    """Whatever the data, a picture must not push the screen about."""
    x = np.linspace(-5, 15, 333)
    for size in [(1, 1), (3, 7), (10, 150)]:
        lines = line_plot(x, np.sin(x), size, (0, 10), (-0.5, 0.5), plain=plain)
        assert [len(line) for line in lines] == [size[1]] * size[0]


def test_ticks_are_round_few_and_inside() -> None:
    """A scale with odd figures is not read at a glance."""
    assert round_ticks(0, 3.4, 4) == [0, 1, 2, 3]
    assert round_ticks(0, 326.1, 5) == pytest.approx([0, 100, 200, 300])
    assert round_ticks(1, 1, 5) == []
    assert log_ticks(0.004, 0.07, 4) == pytest.approx([0.005, 0.01, 0.02, 0.05])
    assert log_ticks(1e-6, 1e2, 4) == pytest.approx([1e-6, 1e-3, 1e0])
    for most in range(1, 12):
        assert len(round_ticks(-0.3, 17.7, most)) <= most
        assert len(log_ticks(2e-5, 8e-2, most)) <= most
