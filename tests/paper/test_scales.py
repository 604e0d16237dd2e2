import math

from hypothesis import given
from hypothesis import strategies as st

from autotune.paper.scales import Scale, clock_ticks, runs, scale_for, thinned, ticks

reading = st.floats(-1e6, 1e6)


@given(st.lists(reading, min_size=1, max_size=30), st.floats(0.01, 1e3))
def test_a_scale_shows_every_reading_and_is_never_narrower_than_asked(readings: list[float], least: float) -> None:
    scale = scale_for(readings, 10.0, 110.0, least)
    assert all(scale.holds(one) and 9.999 <= scale.at(one) <= 110.001 for one in readings)
    assert scale.high - scale.low >= least * (1.0 - 1e-6) - 1e-9 * abs(scale.high)


@given(st.floats(-1e5, 1e5), st.floats(1e-2, 1e5), st.integers(2, 9))
def test_ticks_are_round_few_within_the_scale_and_told_apart_by_their_decimals(
    low: float, width: float, at_most: int
) -> None:
    scale = Scale(low, low + width, 0.0, 100.0)
    marks, decimals = ticks(scale, at_most)
    assert len(marks) <= at_most + 1
    assert all(scale.low - 1e-6 * width <= mark <= scale.high + 1e-6 * width for mark in marks)
    assert len({f"{mark:.{decimals}f}" for mark in marks}) == len(marks)
    assert all(math.isclose(float(f"{mark:.{decimals}f}"), mark, abs_tol=1e-9) for mark in marks)


def test_ticks_of_a_known_scale() -> None:
    assert ticks(Scale(74.9, 82.2, 0.0, 100.0), 6) == ((76.0, 78.0, 80.0, 82.0), 0)
    marks, decimals = ticks(Scale(0.0, 0.5, 0.0, 100.0), 5)
    assert [f"{mark:.{decimals}f}" for mark in marks] == ["0.0", "0.1", "0.2", "0.3", "0.4", "0.5"]


def test_ticks_of_time_fall_on_whole_minutes_where_a_person_looks_for_them() -> None:
    assert clock_ticks(Scale(3590.0, 3990.0, 0.0, 400.0), 8) == (
        (3600.0, 3660.0, 3720.0, 3780.0, 3840.0, 3900.0, 3960.0),
        60.0,
    )
    _, step_s = clock_ticks(Scale(0.0, 40.0 * 86400.0, 0.0, 400.0), 8)
    assert step_s == 5 * 86400.0


@given(st.lists(st.tuples(st.floats(0.0, 100.0), reading), max_size=200), st.floats(0.1, 30.0))
def test_thinning_keeps_the_ends_and_the_extremes_in_order(points: list[tuple[float, float]], width: float) -> None:
    points.sort()
    kept = thinned(points, width)
    assert kept == sorted(kept, key=lambda point: point[0])
    assert set(kept) <= set(points)
    if points:
        assert (kept[0], kept[-1]) == (points[0], points[-1])
        heights = [height for _, height in points]
        assert {min(heights), max(heights)} <= {height for _, height in kept}


def test_many_points_are_thinned_to_four_for_each_width() -> None:
    points = [(n / 1000.0, math.sin(n)) for n in range(10000)]
    assert len(thinned(points, 1.0)) <= 4 * 10


def test_a_line_stops_where_a_reading_is_not_known() -> None:
    assert list(runs((0.0, 1.0, 2.0, 3.0), (1.0, None, 2.0, 3.0))) == [[(0.0, 1.0)], [(2.0, 2.0), (3.0, 3.0)]]
    assert list(runs((0.0,), (None,))) == []
