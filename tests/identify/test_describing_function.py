"""Describing functions against the tables' values (tests/reference/checks.json names the books) and python-control."""

from cmath import phase
from math import degrees, pi

import control
import pytest

from autotune.identify.describing_function import (
    backlash,
    describing_function_point,
    relay_gain,
    relay_with_bias,
    relay_with_dead_zone,
    relay_with_hysteresis,
    relay_with_preload,
    saturation,
)
from autotune.identify.findings import Cycle
from tests.identify.exact_relay import checks


def test_an_ideal_relay_has_the_gain_of_df_01() -> None:
    given, expected = checks()["DF-01"]["inputs"], checks()["DF-01"]["expected"]
    assert relay_gain(given["d"], given["a"]) == pytest.approx(expected["N"], rel=1e-8)  # printed to 8 digits


def test_a_relay_with_hysteresis_keeps_its_gain_and_turns_the_phase_as_df_02_and_python_control_say() -> None:
    given, expected = checks()["DF-02"]["inputs"], checks()["DF-02"]["expected"]
    gain = relay_with_hysteresis(given["d"], given["eps"], given["a"])
    assert gain.real == pytest.approx(expected["re"], rel=1e-8)
    assert gain.imag == pytest.approx(expected["im"], rel=1e-8)
    assert abs(gain) == pytest.approx(relay_gain(given["d"], given["a"]), rel=1e-14)
    assert degrees(phase(gain)) == pytest.approx(expected["phase_deg"], rel=1e-7)
    library = control.relay_hysteresis_nonlinearity(given["d"], given["eps"]).describing_function(given["a"])
    assert gain == pytest.approx(library, rel=1e-12)


def test_the_negative_inverse_of_a_relay_with_hysteresis_is_df_03() -> None:
    given, expected = checks()["DF-03"]["inputs"], checks()["DF-03"]["expected"]
    point = -1 / relay_with_hysteresis(given["d"], given["eps"], given["a"])
    assert point.real == pytest.approx(expected["re"], rel=1e-7)
    assert point.imag == pytest.approx(expected["im"], rel=1e-7)


def test_a_biased_relay_has_the_mean_and_the_gain_of_df_04() -> None:
    given, expected = checks()["DF-04"]["inputs"], checks()["DF-04"]["expected"]
    mean, gain = relay_with_bias(given["d"], given["b"], given["a"])
    assert mean == pytest.approx(expected["mean"], rel=1e-6)
    assert gain == pytest.approx(expected["N"], rel=1e-6)


def test_a_saturation_has_the_gain_of_df_05_and_python_control() -> None:
    given, expected = checks()["DF-05"]["inputs"], checks()["DF-05"]["expected"]
    gain = saturation(given["k"], given["delta"], given["a"])
    assert gain == pytest.approx(expected["N"], rel=1e-8)
    library = control.saturation_nonlinearity(given["delta"]).describing_function(given["a"])
    assert gain == pytest.approx(complex(library).real, rel=1e-12)


def test_a_saturation_below_its_knee_is_its_slope() -> None:
    assert saturation(2.0, 1.0, 0.5) == pytest.approx(2.0)


def test_a_preload_adds_a_gain_to_the_relay_as_in_df_06() -> None:
    given, expected = checks()["DF-06"]["inputs"], checks()["DF-06"]["expected"]
    assert relay_with_preload(given["Kp"], given["d"], given["a"]) == pytest.approx(expected["N"], rel=1e-8)


def test_a_dead_zone_weakens_the_relay_as_in_df_07() -> None:
    given, expected = checks()["DF-07"]["inputs"], checks()["DF-07"]["expected"]
    assert relay_with_dead_zone(given["d"], given["D"], given["a"]) == pytest.approx(expected["N"], rel=1e-6)


def test_a_backlash_has_the_gain_of_df_08_and_python_control() -> None:
    given, expected = checks()["DF-08"]["inputs"], checks()["DF-08"]["expected"]
    gain = backlash(given["b"], given["a"])
    assert gain.real == pytest.approx(expected["re"], rel=1e-8)
    assert gain.imag == pytest.approx(expected["im"], rel=1e-8)
    library = control.friction_backlash_nonlinearity(given["b"]).describing_function(given["a"])
    assert gain == pytest.approx(library, rel=1e-12)


def test_a_swing_that_the_backlash_swallows_passes_nothing() -> None:
    assert backlash(2.0, 1.0) == 0


@pytest.mark.parametrize("inside", [relay_with_hysteresis, relay_with_bias, relay_with_dead_zone])
def test_a_swing_inside_the_threshold_has_no_describing_function(inside) -> None:  # type: ignore[no-untyped-def]
    with pytest.raises(ValueError, match="lies inside"):
        inside(1.0, 0.5, 0.5)


def test_the_textbook_reading_is_the_mean_of_the_cycles_with_their_scatter() -> None:
    cycles = (Cycle(0.0, 10.0, 2.0, 5.0), Cycle(10.0, 10.2, 2.2, 5.0))
    point = describing_function_point(cycles, hysteresis_pct=1.05)
    assert point.gain == pytest.approx(pi * 2.1 / 20)
    assert point.frequency_rad_per_s == pytest.approx(2 * pi / 10.1)
    assert degrees(point.phase_rad) == pytest.approx(-150.0)  # asin(1/2)
    assert point.gain_sd_ratio == pytest.approx(0.1 / 2.1)  # half the difference of two, over their mean
    assert point.phase_sd_rad == pytest.approx(2 * pi * 0.1 / 10.1)


def test_a_swing_inside_the_hysteresis_reads_as_the_most_that_a_relay_turns() -> None:
    cycles = (Cycle(0.0, 10.0, 1.0, 5.0), Cycle(10.0, 10.0, 1.0, 5.0))
    assert degrees(describing_function_point(cycles, hysteresis_pct=1.5).phase_rad) == pytest.approx(-90.0)
