"""What the interlocks know of the past."""

from math import nan

import pytest

from autotune.experiment.trace import RATE_SAMPLES, Trace, with_claim, with_sample
from autotune.loop.sample import Sample
from tests.experiment.readings import guard, reading


def traced(samples: list[tuple[float, Sample]], scan_s: float = 0.1) -> Trace:
    trace = Trace()
    for t_s, sample in samples:
        trace = with_sample(trace, sample, t_s, scan_s)
    return trace


def test_the_rate_is_that_of_the_last_two_readings() -> None:
    trace = traced([(1.0, reading(pv_pct=40.0)), (1.5, reading(pv_pct=41.0))])
    assert trace.rate_pct_per_s == pytest.approx(2.0)


def test_readings_closer_than_a_scan_count_as_a_scan_apart() -> None:
    trace = traced([(1.0, reading(pv_pct=40.0)), (1.0, reading(pv_pct=41.0))])
    assert trace.rate_pct_per_s == pytest.approx(10.0)


@pytest.mark.parametrize("slope_pct_per_s", [2.0, -0.5])
def test_a_straight_line_has_a_sure_rate(slope_pct_per_s: float) -> None:
    trace = traced([(0.5 * k, reading(pv_pct=40.0 + 0.5 * k * slope_pct_per_s)) for k in range(20)])
    assert trace.sure_rate_pct_per_s == pytest.approx(slope_pct_per_s)
    assert len(trace.recent) == RATE_SAMPLES


def test_too_few_readings_or_no_passage_of_time_have_no_sure_rate() -> None:
    assert Trace().sure_rate_pct_per_s == 0.0
    assert traced([(0.0, reading()), (1.0, reading(pv_pct=50.0))]).sure_rate_pct_per_s == 0.0
    assert traced([(0.0, reading(pv_pct=float(k))) for k in range(5)]).sure_rate_pct_per_s == 0.0


def test_standing_still_is_timed_from_the_first_reading_of_the_same_pv() -> None:
    trace = traced([(0.0, reading(pv_pct=39.0)), (1.0, reading()), (2.0, reading()), (4.0, reading())])
    assert trace.pv_stood_s == 3.0


def test_a_pv_that_is_no_number_is_left_out() -> None:
    trace = traced([(0.0, reading()), (1.0, reading(pv_pct=nan)), (2.0, reading(pv_pct=None))])
    assert trace.recent == ((0.0, 40.0),)
    assert trace.pv_stood_s == 2.0


def test_the_echo_is_timed_from_its_last_change_and_afresh_from_the_claim() -> None:
    echoes = [(0.0, 1), (1.0, 2), (2.0, 2), (3.0, None)]
    trace = traced([(t_s, reading(guard=guard(heartbeat_echo=echo))) for t_s, echo in echoes])
    assert trace.echo_stood_s == 2.0
    assert with_claim(trace, 3.0).echo_stood_s == 0.0
    assert with_sample(with_claim(trace, 3.0), reading(), 3.5, 0.1).echo_stood_s == 0.5


def test_the_clock_of_the_plc_is_timed_from_its_last_change_where_there_is_one() -> None:
    trace = traced([(t_s, reading(plc_clock_ms=500)) for t_s in (0.0, 1.0, 2.5)])
    assert trace.clock_stood_s == 2.5
    assert traced([(t_s, reading()) for t_s in (0.0, 1.0, 2.5)]).clock_stood_s == 0.0
