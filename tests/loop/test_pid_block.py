"""The difference equation of a described block."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.signal import cont2discrete, lfilter

from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.pid_block import PidLaw, at_rest, pid_law, step
from autotune.loop.settings import Algorithm, AntiWindup, BlockDescription, DerivativeOn, PidForm, PidSettings
from tests.loop.reference import CHECKS

REVERSE, DIRECT = ControlAction.REVERSE, ControlAction.DIRECT
TEXTBOOK = BlockDescription(
    PidForm.IDEAL,
    derivative_on=DerivativeOn.ERROR,
    derivative_filter_ratio=None,
    anti_windup=AntiWindup.STOP,
    scan_s=0.5,
)
PID = PidSettings(PidForm.IDEAL, 2.0, 10.0, 2.0)


def _law(
    block: BlockDescription,
    settings: PidSettings = PID,
    action: ControlAction = REVERSE,
    op_low_pct: float = -1e9,
    op_high_pct: float = 1e9,
) -> PidLaw:
    law = pid_law(block, settings, action, op_low_pct, op_high_pct)
    assert isinstance(law, PidLaw), law
    return law


def _outputs(law: PidLaw, sp_pct: list[float], pv_pct: list[float], op_pct: float = 0.0) -> list[float]:
    state = at_rest(law, 0.0, 0.0, op_pct)
    outputs = []
    for sp, pv in zip(sp_pct, pv_pct, strict=True):
        state, output_pct = step(law, state, sp, pv)
        outputs.append(output_pct)
    return outputs


@pytest.mark.parametrize("algorithm", Algorithm)
def test_a_step_of_the_error_gives_the_outputs_of_pf_08(algorithm: Algorithm) -> None:
    expected = CHECKS["PF-08"]["expected"]["u"]
    law = _law(replace(TEXTBOOK, algorithm=algorithm))
    assert _outputs(law, [1.0] * 5, [0.0] * 5) == pytest.approx(expected, abs=1e-12)


def test_the_incremental_form_has_the_coefficients_of_pf_07() -> None:
    expected = CHECKS["PF-07"]["expected"]["q"]
    law = _law(replace(TEXTBOOK, algorithm=Algorithm.INCREMENTAL))
    outputs = _outputs(law, [1.0, 0.0, 0.0, 0.0], [0.0] * 4)
    increments = [after - before for before, after in zip([0.0, *outputs], outputs, strict=False)]
    assert increments == pytest.approx([*expected, 0.0], abs=1e-12)


def test_the_filtered_pid_is_the_backward_difference_of_pf_09() -> None:
    check = CHECKS["PF-09"]["expected"]["backward"]
    law = _law(replace(TEXTBOOK, derivative_filter_ratio=10.0))
    error_pct = [1.0, -2.0, 0.5, 3.0, 3.0, 0.0, 0.0, 1.0]
    by_scipy = lfilter(check["num"], check["den"], error_pct)
    assert _outputs(law, error_pct, [0.0] * 8) == pytest.approx(list(by_scipy), abs=1e-6)


def test_the_derivative_filter_forgets_by_the_pole_of_pf_10() -> None:
    law = _law(replace(TEXTBOOK, derivative_filter_ratio=10.0), PidSettings(PidForm.IDEAL, 2.0, None, 2.0))
    outputs = _outputs(law, [1.0] * 3, [0.0] * 3)
    kicks = [output - 2.0 for output in outputs]
    pole = CHECKS["PF-10"]["expected"]["backward"]
    assert [kicks[1] / kicks[0], kicks[2] / kicks[1]] == pytest.approx([pole, pole], rel=1e-8)


@given(
    gain=st.floats(0.1, 20.0),
    ti_s=st.floats(1.0, 500.0),
    td_s=st.floats(0.1, 50.0),
    error_pct=st.lists(st.floats(-10.0, 10.0), min_size=3, max_size=12),
)
def test_a_series_block_is_the_product_of_its_two_factors(
    gain: float, ti_s: float, td_s: float, error_pct: list[float]
) -> None:
    """Oracle: each factor discretised by scipy's backward difference, one after the other."""
    law = _law(
        replace(TEXTBOOK, form=PidForm.SERIES, derivative_filter_ratio=10.0),
        PidSettings(PidForm.SERIES, gain, ti_s, td_s),
    )
    lead = cont2discrete((np.array([td_s * 1.1, 1.0]), np.array([td_s / 10.0, 1.0])), 0.5, method="backward_diff")
    integral = cont2discrete((np.array([gain * ti_s, gain]), np.array([ti_s, 0.0])), 0.5, method="backward_diff")
    through_lead = lfilter(lead[0].flatten(), lead[1], error_pct)
    expected = lfilter(integral[0].flatten(), integral[1], through_lead)
    assert _outputs(law, error_pct, [0.0] * len(error_pct)) == pytest.approx(list(expected), rel=1e-6, abs=1e-6)


@given(
    gain=st.floats(0.1, 20.0),
    ti_s=st.floats(1.0, 500.0),
    td_s=st.floats(0.1, 50.0),
    weight=st.floats(0.0, 1.0),
    filter_time_s=st.floats(0.0, 5.0),
    derivative_on=st.sampled_from(DerivativeOn),
    action=st.sampled_from(ControlAction),
    form=st.sampled_from(PidForm),
    moves=st.lists(st.tuples(st.floats(-50.0, 50.0), st.floats(-50.0, 50.0)), min_size=2, max_size=10),
)
def test_positional_and_incremental_agree_inside_the_limits(
    gain: float,
    ti_s: float,
    td_s: float,
    weight: float,
    filter_time_s: float,
    derivative_on: DerivativeOn,
    action: ControlAction,
    form: PidForm,
    moves: list[tuple[float, float]],
) -> None:
    block = replace(
        TEXTBOOK,
        form=form,
        setpoint_weight=weight,
        pv_filter_time_s=filter_time_s,
        derivative_on=derivative_on,
        derivative_filter_ratio=8.0,
    )
    settings = PidSettings(form, gain, ti_s, td_s)
    sp_pct, pv_pct = [move[0] for move in moves], [move[1] for move in moves]
    positional = _outputs(_law(block, settings, action), sp_pct, pv_pct)
    incremental = _outputs(_law(replace(block, algorithm=Algorithm.INCREMENTAL), settings, action), sp_pct, pv_pct)
    assert incremental == pytest.approx(positional, rel=1e-6, abs=1e-5)


@pytest.mark.parametrize("algorithm", Algorithm)
@pytest.mark.parametrize("form", PidForm)
def test_from_rest_it_goes_on_without_a_bump(algorithm: Algorithm, form: PidForm) -> None:
    block = replace(TEXTBOOK, algorithm=algorithm, form=form, derivative_on=DerivativeOn.PV, setpoint_weight=0.3)
    law = _law(block, PidSettings(form, 2.0, 10.0, 2.0))
    state = at_rest(law, 60.0, 60.0, 43.0)
    for _ in range(3):
        state, op_pct = step(law, state, 60.0, 60.0)
        assert op_pct == pytest.approx(43.0)


@pytest.mark.parametrize(("action", "sign"), [(REVERSE, -1.0), (DIRECT, 1.0)])
def test_a_rising_pv_moves_the_output_as_the_action_says(action: ControlAction, sign: float) -> None:
    outputs = _outputs(_law(TEXTBOOK, action=action), [0.0, 0.0], [1.0, 2.0])
    assert sign * outputs[0] > 0.0
    assert sign * outputs[1] > sign * outputs[0] - 20.0


def test_derivative_on_pv_does_not_kick_on_a_setpoint_change() -> None:
    on_pv = _outputs(_law(replace(TEXTBOOK, derivative_on=DerivativeOn.PV)), [1.0], [0.0])
    assert on_pv == pytest.approx([2.1])


def test_a_setpoint_weight_of_zero_leaves_the_setpoint_to_the_integral() -> None:
    block = replace(TEXTBOOK, setpoint_weight=0.0, derivative_on=DerivativeOn.PV)
    assert _outputs(_law(block), [1.0], [0.0]) == pytest.approx([0.1])


def test_the_pv_filter_is_a_lag_of_first_order() -> None:
    """Backward difference: h/(h + Tf) = 0.5/(0.5 + 1.5) of the way in one scan."""
    block = replace(TEXTBOOK, pv_filter_time_s=1.5)
    assert _outputs(_law(block, PidSettings(PidForm.IDEAL, 2.0, None, None)), [0.0, 0.0], [1.0, 1.0]) == pytest.approx(
        [-0.5, -0.875]
    )


def _scans_until_it_leaves_the_limit(anti_windup: AntiWindup) -> int:
    """An error of 30 % drives into the limit for 100 scans, then one of -2 % leads out of it."""
    block = replace(TEXTBOOK, anti_windup=anti_windup)
    law = _law(block, PidSettings(PidForm.IDEAL, 2.0, 10.0, None), op_low_pct=0.0, op_high_pct=100.0)
    state = at_rest(law, 0.0, 0.0, 50.0)
    for _ in range(100):
        state, op_pct = step(law, state, 30.0, 0.0)
        assert 0.0 <= op_pct <= 100.0
    assert op_pct == 100.0
    for scan in range(1, 500):
        state, op_pct = step(law, state, -2.0, 0.0)
        if op_pct < 100.0:
            return scan
    return 500


@pytest.mark.parametrize("anti_windup", [AntiWindup.STOP, AntiWindup.CONDITIONAL, AntiWindup.TRACKING])
def test_anti_windup_leaves_the_limit_as_soon_as_the_error_turns(anti_windup: AntiWindup) -> None:
    """Without it the integral would stand at 50 + 100 x 3 % and need 1500 scans of -0.2 % to come back."""
    assert _scans_until_it_leaves_the_limit(anti_windup) <= 2


def test_tracking_pulls_the_integral_towards_the_limited_output() -> None:
    law = _law(replace(TEXTBOOK, anti_windup=AntiWindup.TRACKING), PID, op_low_pct=0.0, op_high_pct=100.0)
    state = replace(at_rest(law, 0.0, 0.0, 50.0), integral_pct=300.0)
    after, op_pct = step(law, state, 0.0, 0.0)
    assert op_pct == 100.0
    assert 100.0 < after.integral_pct < 300.0


@pytest.mark.parametrize(("anti_windup", "moves"), [(AntiWindup.CONDITIONAL, True), (AntiWindup.STOP, False)])
def test_conditional_lets_the_integral_move_inwards_and_stop_does_not(anti_windup: AntiWindup, moves: bool) -> None:
    law = _law(
        replace(TEXTBOOK, anti_windup=anti_windup),
        PidSettings(PidForm.IDEAL, 2.0, 10.0, None),
        op_low_pct=0.0,
        op_high_pct=100.0,
    )
    state = replace(at_rest(law, 0.0, 0.0, 50.0), integral_pct=300.0)
    after, _ = step(law, state, -1.0, 0.0)
    assert (after.integral_pct < 300.0) is moves


def test_an_incremental_block_can_not_wind_up_and_needs_no_declaration() -> None:
    block = replace(TEXTBOOK, algorithm=Algorithm.INCREMENTAL, anti_windup=AntiWindup.NOT_DECLARED)
    law = _law(block, PidSettings(PidForm.IDEAL, 2.0, 10.0, None), op_low_pct=0.0, op_high_pct=100.0)
    state = at_rest(law, 0.0, 0.0, 50.0)
    for _ in range(100):
        state, _ = step(law, state, 30.0, 0.0)
    state, op_pct = step(law, state, 29.0, 0.0)
    state, op_pct = step(law, state, 20.0, 0.0)
    assert op_pct < 100.0


def _refusal(block: BlockDescription, settings: PidSettings = PID) -> str:
    refusal = pid_law(block, settings, REVERSE, 0.0, 100.0)
    assert isinstance(refusal, Refusal)
    return refusal.code


def test_what_decides_the_behaviour_and_is_not_declared_is_refused() -> None:
    assert _refusal(replace(TEXTBOOK, scan_s=None)) == "SCAN_NOT_DECLARED"
    assert _refusal(replace(TEXTBOOK, anti_windup=AntiWindup.NOT_DECLARED)) == "ANTI_WINDUP_NOT_DECLARED"


def test_settings_that_the_form_can_not_hold_do_not_run() -> None:
    series = replace(TEXTBOOK, form=PidForm.SERIES)
    assert _refusal(series, PidSettings(PidForm.IDEAL, 1.0, 3.0, 1.0)) == "SERIES_CANNOT_HOLD"
