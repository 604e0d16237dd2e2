"""Spans, stamps, intervals and the sign of an action."""

from math import inf, nan

import pytest

from autotune.loop.limits import AsFound
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.outcome import Interval, Refusal, Trip
from autotune.loop.quality import Quality
from autotune.loop.sample import Sample, Stamp
from autotune.loop.span import Span
from tests.loop.reference import CHECKS


def test_a_4_to_20_ma_span_reads_the_percents_of_namur_ne_43() -> None:
    check = CHECKS["ST-43"]
    span = Span(4.0, 20.0, "mA")
    assert [span.to_pct(current) for current in check["inputs"]["mA"]] == pytest.approx(check["expected"]["pct"])


def test_percent_and_engineering_units_are_inverse() -> None:
    span = Span(-50.0, 150.0, "degC")
    assert span.to_pct(span.low_eu) == 0.0
    assert span.to_pct(span.high_eu) == 100.0
    assert span.to_eu(span.to_pct(72.5)) == pytest.approx(72.5)
    assert span.delta_to_eu(span.delta_to_pct(3.0)) == pytest.approx(3.0)
    assert span.delta_to_pct(2.0) == pytest.approx(1.0)


@pytest.mark.parametrize(("low_eu", "high_eu"), [(0.0, 0.0), (1.0, 0.0), (nan, 1.0), (0.0, nan), (0.0, inf)])
def test_a_span_without_finite_width_is_refused(low_eu: float, high_eu: float) -> None:
    with pytest.raises(ValueError, match="finite low < high"):
        Span(low_eu, high_eu)


@pytest.mark.parametrize(("low", "best", "high"), [(1.0, 0.5, 2.0), (0.0, 3.0, 2.0), (nan, 1.0, 2.0), (0.0, nan, 1.0)])
def test_an_interval_that_does_not_hold_its_best_is_refused(low: float, best: float, high: float) -> None:
    with pytest.raises(ValueError, match="low <= best <= high"):
        Interval(best, low, high)


def test_an_interval_may_be_a_point() -> None:
    assert Interval(2.0, 2.0, 2.0).level == 0.95


def test_a_stamp_knows_its_middle_and_how_much_is_unknown() -> None:
    stamp = Stamp(1.0, 1.5)
    assert (stamp.middle_s, stamp.width_s) == (1.25, 0.5)
    assert Stamp.at(3.0).width_s == 0.0


def test_a_reverse_acting_controller_suits_a_process_of_positive_gain() -> None:
    assert ControlAction.REVERSE.process_sign == 1
    assert ControlAction.DIRECT.process_sign == -1


def test_as_found_gives_back_the_mode_and_the_restart_count_of_its_sample() -> None:
    sample = Sample(1.0, Stamp.at(1.0), 50.0, Quality.GOOD, 50.0, 40.0, Quality.GOOD, LoopMode.AUTO, boot_count=7)
    found = AsFound(40.0, 50.0, sample)
    assert (found.mode, found.boot_count) == (LoopMode.AUTO, 7)


def test_a_no_and_a_trip_read_as_one_line() -> None:
    assert str(Refusal("OUT_OF_RANGE", "too big", "choose less")) == "OUT_OF_RANGE: too big; choose less"
    assert str(Trip("PV_RANGE", "PV left its range", 3.0)) == "PV_RANGE: PV left its range"
