"""The dot plot: two by four dots in each character, nothing outside, the shape of what is drawn."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.cli.plot import DotPlot

_DOTS = ((0x01, 0x08), (0x02, 0x10), (0x04, 0x20), (0x40, 0x80))  # Unicode 15.0, block U+2800 Braille Patterns


def dots(lines: list[str]) -> set[tuple[int, int]]:
    """Set dots as (column, row) from the upper left."""
    return {
        (2 * column + across, 4 * row + down)
        for row, line in enumerate(lines)
        for column, cell in enumerate(line)
        for down in range(4)
        for across in range(2)
        if ord(cell) - 0x2800 & _DOTS[down][across]
    }


def test_an_empty_plot_is_blank_cells_of_the_size_asked_for() -> None:
    lines = DotPlot(12, 3, (0.0, 1.0), (0.0, 1.0)).lines()
    assert lines == ["\u2800" * 12] * 3


def test_the_corners_are_the_ends_of_both_ranges() -> None:
    plot = DotPlot(5, 2, (10.0, 20.0), (-1.0, 1.0))
    plot.add_line([10.0], [-1.0])
    assert dots(plot.lines()) == set()  # a single point joins nothing
    plot.add_line([10.0, 20.0], [-1.0, 1.0])
    drawn = dots(plot.lines())
    assert {(0, 7), (9, 0)} <= drawn
    assert len(drawn) == 10


def test_a_level_is_dotted_across_the_whole_width() -> None:
    plot = DotPlot(8, 4, (0.0, 1.0), (0.0, 15.0))
    plot.add_level(15.0)
    assert dots(plot.lines()) == {(0, 0), (4, 0), (8, 0), (12, 0)}


def test_a_vertical_jump_has_no_gap() -> None:
    plot = DotPlot(4, 4, (0.0, 7.0), (0.0, 15.0))
    plot.add_line([3.0, 3.0], [0.0, 15.0])
    assert dots(plot.lines()) == {(3, row) for row in range(16)}


def test_a_sine_goes_through_its_own_heights() -> None:
    plot = DotPlot(50, 8, (0.0, 1.0), (-1.0, 1.0))
    xs = [number / 400.0 for number in range(401)]
    plot.add_line(xs, [math.sin(2.0 * math.pi * x) for x in xs])
    drawn = dots(plot.lines())
    highest = [column for column, row in drawn if row == 0]
    lowest = [column for column, row in drawn if row == 31]
    assert sum(highest) / len(highest) == pytest.approx(0.25 * 99, abs=1.0)
    assert sum(lowest) / len(lowest) == pytest.approx(0.75 * 99, abs=1.0)
    assert {column for column, _ in drawn} == set(range(100))


@given(
    points=st.lists(st.tuples(st.floats(-5.0, 5.0), st.floats(-5.0, 5.0)), min_size=2, max_size=8),
    level=st.floats(-5.0, 5.0),
)
def test_whatever_lies_outside_is_not_drawn_and_breaks_nothing(points: list[tuple[float, float]], level: float) -> None:
    plot = DotPlot(10, 3, (-1.0, 1.0), (-1.0, 1.0))
    plot.add_line([x for x, _ in points], [y for _, y in points])
    plot.add_level(level)
    lines = plot.lines()
    assert [len(line) for line in lines] == [10, 10, 10]
    assert all(0x2800 <= ord(cell) <= 0x28FF for line in lines for cell in line)
