"""Between ideal, series and parallel: exact, or refused."""

from math import inf, nan

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.loop.conversion import to_form
from autotune.loop.outcome import Refusal
from autotune.loop.settings import PidForm, PidSettings
from tests.loop.reference import CHECKS

GAINS = st.floats(0.01, 100.0)
TIMES_S = st.floats(0.1, 1e4)


def _converted(settings: PidSettings, form: PidForm) -> PidSettings:
    converted = to_form(settings, form)
    assert isinstance(converted, PidSettings)
    return converted


def _numbers(settings: PidSettings) -> list[float | None]:
    return [settings.controller_gain, settings.integral_time_s, settings.derivative_time_s]


def test_a_series_pid_becomes_ideal_as_pf_01_has_it() -> None:
    check = CHECKS["PF-01"]
    ideal = _converted(PidSettings(PidForm.SERIES, *check["inputs"]["series"]), PidForm.IDEAL)
    assert _numbers(ideal) == check["expected"]["ideal"]


def test_an_ideal_pid_becomes_series_as_pf_02_has_it() -> None:
    check = CHECKS["PF-02"]
    series = _converted(PidSettings(PidForm.IDEAL, *check["inputs"]["ideal"]), PidForm.SERIES)
    assert _numbers(series) == pytest.approx(check["expected"]["series"], rel=1e-7)


def test_the_limit_case_of_pf_03_has_two_equal_times() -> None:
    check = CHECKS["PF-03"]
    series = _converted(PidSettings(PidForm.IDEAL, *check["inputs"]["ideal"]), PidForm.SERIES)
    assert _numbers(series) == check["expected"]["series"]


def test_less_than_four_derivative_times_do_not_fit_a_series_block() -> None:
    """PF-03: Ti/Td = 3.9."""
    refusal = to_form(PidSettings(PidForm.IDEAL, 1.0, 3.9, 1.0), PidForm.SERIES)
    assert isinstance(refusal, Refusal)
    assert refusal.code == "SERIES_CANNOT_HOLD"
    assert "3.9 times" in refusal.reason


def test_simc_settings_are_series_and_become_ideal_as_pf_04_has_it() -> None:
    """Common error: a SIMC PID entered in an ideal block as it is printed."""
    check = CHECKS["PF-04"]
    for name, series in check["inputs"].items():
        ideal = _converted(PidSettings(PidForm.SERIES, *series), PidForm.IDEAL)
        assert _numbers(ideal) == pytest.approx(check["expected"][name], rel=1e-7)


@given(gain=GAINS, ti_s=TIMES_S, td_s=TIMES_S)
def test_series_to_ideal_multiplies_the_polynomial_out(gain: float, ti_s: float, td_s: float) -> None:
    ideal = _converted(PidSettings(PidForm.SERIES, gain, ti_s, td_s), PidForm.IDEAL)
    assert ideal.integral_time_s is not None
    assert ideal.derivative_time_s is not None
    series_numerator = np.polymul([gain, gain / ti_s], [td_s, 1.0])
    k = ideal.controller_gain
    assert [k * ideal.derivative_time_s, k, k / ideal.integral_time_s] == pytest.approx(list(series_numerator))


@given(gain=GAINS, ti_s=TIMES_S, ratio=st.floats(0.01, 0.24), form=st.sampled_from([PidForm.IDEAL, PidForm.PARALLEL]))
def test_there_and_back_is_the_same_controller(gain: float, ti_s: float, ratio: float, form: PidForm) -> None:
    settings = PidSettings(form, gain, ti_s, ratio * ti_s)
    back = _converted(_converted(settings, PidForm.SERIES), form)
    assert _numbers(back) == pytest.approx(_numbers(settings), rel=1e-6)


@pytest.mark.parametrize("form", PidForm)
@pytest.mark.parametrize("wanted", PidForm)
@pytest.mark.parametrize(("ti_s", "td_s"), [(None, None), (5.0, None), (None, 5.0)])
def test_p_pi_and_pd_are_the_same_numbers_in_every_form(
    form: PidForm, wanted: PidForm, ti_s: float | None, td_s: float | None
) -> None:
    assert to_form(PidSettings(form, 2.0, ti_s, td_s), wanted) == PidSettings(wanted, 2.0, ti_s, td_s)


def test_parallel_settings_are_kept_as_ratios_so_they_are_ideal_ones() -> None:
    settings = PidSettings(PidForm.PARALLEL, 2.0, 10.0, 4.0)
    assert to_form(settings, PidForm.IDEAL) == PidSettings(PidForm.IDEAL, 2.0, 10.0, 4.0)


@pytest.mark.parametrize("bad", [0.0, -1.0, nan, inf])
@pytest.mark.parametrize("place", range(3))
def test_what_is_no_pid_is_refused(bad: float, place: int) -> None:
    numbers = [1.0, 10.0, 1.0]
    numbers[place] = bad
    refusal = to_form(PidSettings(PidForm.IDEAL, *numbers), PidForm.IDEAL)
    assert isinstance(refusal, Refusal)
    assert refusal.code == "SETTINGS_INVALID"
