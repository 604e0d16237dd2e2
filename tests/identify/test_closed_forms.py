"""Exact limit cycles and ultimate points; tests/reference/checks.json names the source of every value."""

from math import pi

import pytest

from autotune.identify.closed_forms import (
    Fotd,
    Rational,
    describing_function_ratio,
    fotd_from_ultimate,
    relay_cycle_fotd,
    relay_cycle_integrator,
    ultimate_of,
    ultimate_of_equal_lags,
)
from autotune.identify.describing_function import relay_gain
from tests.identify.exact_relay import checks, reference_batch

FOTD_CHECKS = ["RL-01", "RL-02", "RL-03", "RL-04", "RL-05", "RL-06"]
DIGITS = 5e-8  # the values are printed to 8 digits


@pytest.mark.parametrize("check", FOTD_CHECKS)
def test_the_limit_cycle_of_a_lag_with_dead_time_is_exact(check: str) -> None:
    given, expected = checks()[check]["inputs"], checks()[check]["expected"]
    cycle = relay_cycle_fotd(Fotd(given["K"], given["T"], given["L"]), given["d"], given["d"], given["eps"])
    assert cycle.period_s == pytest.approx(expected["period"], rel=DIGITS)
    assert cycle.pv_amplitude_pct == pytest.approx(expected["a"], rel=DIGITS)
    assert relay_gain(given["d"], cycle.pv_amplitude_pct) == pytest.approx(expected["Ku_DF"], rel=DIGITS)


@pytest.mark.parametrize("check", FOTD_CHECKS)
def test_the_ultimate_point_of_a_lag_with_dead_time_is_exact_and_leads_back_to_it(check: str) -> None:
    given, expected = checks()[check]["inputs"], checks()[check]["expected"]
    gain, period_s = ultimate_of(Rational(gain=given["K"], lags_s=(given["T"],), dead_time_s=given["L"]))
    assert gain == pytest.approx(expected["Ku_exact"], rel=DIGITS)
    assert period_s == pytest.approx(expected["Tu_exact"], rel=DIGITS)
    plant = fotd_from_ultimate(given["K"], gain, period_s)
    assert plant.time_constant_s == pytest.approx(given["T"], rel=1e-9)
    assert plant.dead_time_s == pytest.approx(given["L"], rel=1e-9)


def test_the_textbook_reading_errs_between_the_limits_of_rl_07() -> None:
    expected = checks()["RL-07"]["expected"]
    assert describing_function_ratio(1e-6) == pytest.approx(expected["Ku_ratio_lag_dominant"], rel=1e-5)
    assert describing_function_ratio(1e4) == pytest.approx(expected["Ku_ratio_delay_dominant"], rel=1e-6)
    between = [describing_function_ratio(10**exponent) for exponent in (-2, -1, 0, 1, 2)]
    low, high = (1 + pct / 100 for pct in expected["err_pct"])
    assert all(low < ratio < high for ratio in between)


@pytest.mark.parametrize("check", ["RL-08", "RL-09"])
def test_unequal_steps_give_the_half_cycles_and_extremes_of_wang_hang_and_zou(check: str) -> None:
    given, expected = checks()[check]["inputs"], checks()[check]["expected"]
    mu, mu0 = given["mu"], given["mu0"]
    cycle = relay_cycle_fotd(Fotd(given["K"], given["T"], given["L"]), mu + mu0, mu - mu0, given["eps"])
    assert cycle.high_s == pytest.approx(expected["Tu1"], rel=1e-8)
    assert cycle.low_s == pytest.approx(expected["Tu2"], rel=1e-8)
    assert cycle.pv_high_pct == pytest.approx(expected["Au"], rel=1e-8)
    assert cycle.pv_low_pct == pytest.approx(expected["Ad"], rel=1e-8)


def test_the_mean_of_the_output_under_unequal_steps_is_that_of_rl_08() -> None:
    given, expected = checks()["RL-08"]["inputs"], checks()["RL-08"]["expected"]
    mu, mu0 = given["mu"], given["mu0"]
    cycle = relay_cycle_fotd(Fotd(given["K"], given["T"], given["L"]), mu + mu0, mu - mu0, given["eps"])
    mean_op = ((mu + mu0) * cycle.high_s - (mu - mu0) * cycle.low_s) / cycle.period_s
    assert mean_op == pytest.approx(expected["mean_u"], rel=1e-6)


def test_steps_too_small_for_the_hysteresis_make_no_cycle() -> None:
    with pytest.raises(ValueError, match="can't carry PV past"):
        relay_cycle_fotd(Fotd(1.0, 1.0, 1.0), 1.0, 0.5, 0.5)


def test_an_integrator_swings_in_a_triangle_as_in_rl_10() -> None:
    given, expected = checks()["RL-10"]["inputs"], checks()["RL-10"]["expected"]
    cycle = relay_cycle_integrator(given["k"], given["L"], given["d"], given["eps"])
    assert cycle.pv_amplitude_pct == pytest.approx(expected["a"], rel=1e-9)
    assert cycle.period_s == pytest.approx(expected["period"], rel=DIGITS)
    assert relay_gain(given["d"], cycle.pv_amplitude_pct) == pytest.approx(expected["Ku_DF"], rel=1e-7)
    gain, period_s = ultimate_of(Rational(gain=given["k"], dead_time_s=given["L"], integrators=1))
    assert gain == pytest.approx(expected["Ku_exact"], rel=1e-7)
    assert period_s == pytest.approx(expected["Tu_exact"], rel=1e-9)


def test_a_lag_with_dead_time_follows_from_static_gain_and_ultimate_point_as_in_rl_17() -> None:
    given, expected = checks()["RL-17"]["inputs"], checks()["RL-17"]["expected"]
    plant = fotd_from_ultimate(given["K"], given["Ku"], given["Tu"])
    assert plant.time_constant_s == pytest.approx(expected["T"], rel=1e-6)
    assert plant.dead_time_s == pytest.approx(expected["L"], rel=1e-6)


def test_no_lag_with_dead_time_is_as_strong_at_its_ultimate_point_as_at_rest() -> None:
    with pytest.raises(ValueError, match="must exceed 1"):
        fotd_from_ultimate(2.0, 0.5, 10.0)


@pytest.mark.parametrize("check", ["CF-3", "CF-4", "CF-5", "CF-6", "CF-8"])
def test_equal_lags_have_the_ultimate_point_of_the_closed_form_by_root_search_too(check: str) -> None:
    lags, expected = checks()[check]["inputs"]["n"], checks()[check]["expected"]
    by_root = ultimate_of(Rational(lags_s=(1.0,) * lags))
    for gain, period_s in (by_root, ultimate_of_equal_lags(lags)):
        assert gain == pytest.approx(expected["Ku"], rel=DIGITS)
        assert period_s == pytest.approx(expected["Tu"], rel=DIGITS)
    assert by_root == pytest.approx(ultimate_of_equal_lags(lags), rel=1e-12)


def test_two_equal_lags_have_no_ultimate_point() -> None:
    with pytest.raises(ValueError, match="never reach"):
        ultimate_of_equal_lags(2)
    with pytest.raises(ValueError, match="never reaches"):
        ultimate_of(Rational(lags_s=(1.0, 1.0)))


def test_an_integrator_and_a_pure_dead_time_have_the_elementary_ultimate_points() -> None:
    given, expected = checks()["CF-I"]["inputs"], checks()["CF-I"]["expected"]
    gain, period_s = ultimate_of(Rational(gain=given["k"], dead_time_s=given["L"], integrators=1))
    assert gain == pytest.approx(expected["Ku"], rel=DIGITS)
    assert period_s == pytest.approx(expected["Tu"], rel=1e-12)
    given, expected = checks()["CF-D"]["inputs"], checks()["CF-D"]["expected"]
    gain, period_s = ultimate_of(Rational(gain=given["k"], dead_time_s=given["L"]))
    assert (gain, period_s) == pytest.approx((expected["Ku"], expected["Tu"]), rel=1e-12)


def test_every_plant_of_the_reference_batch_has_its_ultimate_point() -> None:
    for plant in reference_batch():
        gain, period_s = ultimate_of(
            Rational(
                gain=plant.gain,
                lags_s=plant.lags_s,
                dead_time_s=plant.dead_time_s,
                zero_s=plant.zero_s or 0.0,
                quadratic=plant.quadratic or (0.0, 0.0),
                integrators=int(plant.is_integrating),
            )
        )
        assert gain == pytest.approx(plant.ultimate_gain, rel=1e-10), plant.name
        assert period_s == pytest.approx(plant.ultimate_period_s, rel=1e-10), plant.name


def test_rational_phase_is_unwrapped() -> None:
    assert Rational(dead_time_s=1.0).phase_at(10 * pi) == pytest.approx(-10 * pi)
