"""The PID block against printed difference equations, scipy's discretisation and closed forms."""

import json
from dataclasses import replace
from math import nan
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import signal

from simulator.block import (
    Action,
    Algorithm,
    AntiWindup,
    BlockSpec,
    DerivativeKind,
    Form,
    GainKind,
    GainPer,
    IntegralKind,
    Mode,
    Settings,
    Sign,
    to_terms,
)
from simulator.controller import PidBlock

CHECKS = {
    check["id"]: check
    for check in json.loads((Path(__file__).parents[1] / "reference" / "checks.json").read_text(encoding="utf-8"))
}
ERRORS = np.random.default_rng(3).normal(size=60)


def wide_open(**parameters: Any) -> BlockSpec:
    """A block whose clamps are never met."""
    return BlockSpec(op_low_pct=-1e9, op_high_pct=1e9, **parameters)


def filtered_by_scipy(
    numerator: npt.ArrayLike, denominator: npt.ArrayLike, scan_s: float, errors_pct: npt.NDArray[np.float64]
) -> npt.NDArray[np.float64]:
    """What the backward difference of a transfer function makes of these errors, by scipy."""
    system = (np.asarray(numerator, dtype=float), np.asarray(denominator, dtype=float))
    discrete = signal.cont2discrete(system, scan_s, method="backward_diff")
    return np.asarray(signal.lfilter(np.ravel(discrete[0]), np.ravel(discrete[1]), errors_pct))


def run(spec: BlockSpec, settings: Settings, errors_pct: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    """Outputs of a block that was at rest at zero and then sees these errors as setpoint against PV = 0."""
    block = PidBlock(spec, settings, pv_pct=0.0, sp_pct=0.0, op_pct=0.0)
    outputs = []
    for error_pct in errors_pct:
        block.sp_pct = float(error_pct)
        block.execute(0.0)
        outputs.append(block.op_pct)
    return np.array(outputs)


def unfiltered(check_id: str, algorithm: Algorithm) -> tuple[BlockSpec, Settings]:
    given_ = CHECKS[check_id]["inputs"]
    spec = wide_open(scan_s=given_["h"], is_derivative_on_error=True, derivative_filter_ratio=None, algorithm=algorithm)
    return spec, Settings(given_["K"], given_["Ti"], given_["Td"])


@pytest.mark.parametrize("algorithm", list(Algorithm))
def test_the_unfiltered_block_is_the_velocity_equation_of_the_handbooks(algorithm: Algorithm) -> None:
    q0, q1, q2 = CHECKS["PF-07"]["expected"]["q"]
    expected = signal.lfilter([q0, q1, q2], [1.0, -1.0], ERRORS)
    np.testing.assert_allclose(run(*unfiltered("PF-07", algorithm), ERRORS), expected, atol=1e-10)


@pytest.mark.parametrize("algorithm", list(Algorithm))
def test_a_step_of_the_error_gives_the_printed_outputs(algorithm: Algorithm) -> None:
    expected = CHECKS["PF-08"]["expected"]["u"]
    np.testing.assert_allclose(run(*unfiltered("PF-08", algorithm), np.ones(len(expected))), expected, atol=1e-12)


@pytest.mark.parametrize("algorithm", list(Algorithm))
def test_the_filtered_block_is_scipys_backward_difference_of_the_ideal_form(algorithm: Algorithm) -> None:
    given_, expected = CHECKS["PF-09"]["inputs"], CHECKS["PF-09"]["expected"]["backward"]
    spec, settings = unfiltered("PF-09", algorithm)
    outputs = run(replace(spec, derivative_filter_ratio=given_["N"]), settings, ERRORS)
    np.testing.assert_allclose(outputs, signal.lfilter(expected["num"], expected["den"], ERRORS), rtol=1e-7, atol=1e-7)
    np.testing.assert_allclose(
        outputs, filtered_by_scipy([44.0, 20.4, 2.0], [2.0, 10.0, 0.0], given_["h"], ERRORS), atol=1e-9
    )


def test_the_derivative_filter_has_the_pole_of_the_backward_difference() -> None:
    given_, expected = CHECKS["PF-10"]["inputs"], CHECKS["PF-10"]["expected"]["backward"]
    spec = wide_open(scan_s=given_["h"], is_derivative_on_error=True, derivative_filter_ratio=given_["N"])
    outputs = run(spec, Settings(1.0, 0.0, given_["Td"]), np.ones(6))
    kicks = outputs - 1.0  # less the proportional part: a pure exponential
    np.testing.assert_allclose(kicks[1:] / kicks[:-1], expected, rtol=1e-8)


def test_the_parallel_form_is_scipys_backward_difference_of_its_transfer_function() -> None:
    gain, integral_per_s, derivative_s, ratio, scan_s = 1.4, 0.3, 0.8, 8.0, 0.1
    spec = wide_open(
        scan_s=scan_s,
        form=Form.PARALLEL,
        integral_kind=IntegralKind.GAIN_PER_S,
        derivative_kind=DerivativeKind.GAIN_S,
        is_derivative_on_error=True,
        derivative_filter_ratio=ratio,
    )
    filter_s = derivative_s / gain / ratio
    # Kp + Ki/s + Kd s/(1 + Tf s) over the common denominator s (1 + Tf s)
    numerator = [gain * filter_s + derivative_s, gain + integral_per_s * filter_s, integral_per_s]
    expected = filtered_by_scipy(numerator, [filter_s, 1.0, 0.0], scan_s, ERRORS)
    np.testing.assert_allclose(
        run(spec, Settings(gain, integral_per_s, derivative_s), ERRORS), expected, rtol=1e-9, atol=1e-9
    )


@pytest.mark.parametrize("algorithm", list(Algorithm))
def test_the_series_form_is_scipys_backward_difference_of_its_transfer_function(algorithm: Algorithm) -> None:
    gain, integral_s, derivative_s, ratio, scan_s = 1.2, 4.0, 0.9, 5.0, 0.1
    spec = wide_open(
        scan_s=scan_s, form=Form.SERIES, is_derivative_on_error=True, derivative_filter_ratio=ratio, algorithm=algorithm
    )
    filter_s = derivative_s / ratio
    # K (1 + 1/(Ti s)) (1 + (Td + Tf) s)/(1 + Tf s)
    numerator = gain * np.polymul([integral_s, 1.0], [derivative_s + filter_s, 1.0])
    denominator = np.polymul([integral_s, 0.0], [filter_s, 1.0])
    expected = filtered_by_scipy(numerator, denominator, scan_s, ERRORS)
    np.testing.assert_allclose(
        run(spec, Settings(gain, integral_s, derivative_s), ERRORS), expected, rtol=1e-9, atol=1e-9
    )


# One controller, K = 2 %/%, Ti = 120 s, Td = 30 s, executed every 0.5 s on a span of 50 EU, told in all ways.
KINDS: list[tuple[dict[str, Any], Settings]] = [
    ({}, Settings(2.0, 120.0, 30.0)),
    ({"gain_kind": GainKind.PROPORTIONAL_BAND}, Settings(50.0, 120.0, 30.0)),
    ({"gain_per": GainPer.ENGINEERING_UNIT}, Settings(4.0, 120.0, 30.0)),
    (
        {"gain_kind": GainKind.PROPORTIONAL_BAND, "gain_per": GainPer.ENGINEERING_UNIT},
        Settings(25.0, 120.0, 30.0),
    ),
    ({"integral_kind": IntegralKind.TIME_MIN, "derivative_kind": DerivativeKind.TIME_MIN}, Settings(2.0, 2.0, 0.5)),
    ({"integral_kind": IntegralKind.REPEATS_PER_S}, Settings(2.0, 1.0 / 120.0, 30.0)),
    ({"integral_kind": IntegralKind.REPEATS_PER_MIN}, Settings(2.0, 0.5, 30.0)),
    ({"integral_kind": IntegralKind.GAIN_PER_S, "derivative_kind": DerivativeKind.GAIN_S}, Settings(2.0, 1 / 60, 60.0)),
    ({"integral_kind": IntegralKind.GAIN_PER_MIN, "derivative_kind": DerivativeKind.GAIN_MIN}, Settings(2.0, 1.0, 1.0)),
    (
        {
            "integral_kind": IntegralKind.GAIN_PER_EXECUTION,
            "derivative_kind": DerivativeKind.GAIN_PER_EXECUTION,
        },
        Settings(2.0, 1 / 120, 120.0),
    ),
    (
        {
            "gain_per": GainPer.ENGINEERING_UNIT,
            "integral_kind": IntegralKind.GAIN_PER_S,
            "derivative_kind": DerivativeKind.GAIN_S,
        },
        Settings(4.0, 1 / 30, 120.0),
    ),
    ({"sign": Sign.SIGNED_GAIN}, Settings(2.0, 120.0, 30.0)),
]


@pytest.mark.parametrize(("kinds", "settings"), KINDS)
def test_the_same_controller_told_in_other_units_is_the_same(kinds: dict[str, Any], settings: Settings) -> None:
    terms = to_terms(BlockSpec(scan_s=0.5, span_width_eu=50.0, **kinds), settings)
    assert terms.sign == 1
    assert terms.gain == pytest.approx(2.0)
    assert terms.integral_gain_per_s == pytest.approx(2.0 / 120.0)
    assert terms.derivative_gain_s == pytest.approx(60.0)
    assert terms.derivative_time_s == pytest.approx(30.0)
    assert terms.filter_time_s == pytest.approx(3.0)
    assert terms.tracking_time_s == pytest.approx(120.0)


def test_off_values_switch_integral_and_derivative_off() -> None:
    spec = BlockSpec(scan_s=0.5, integral_off=999.0, derivative_off=999.0)
    terms = to_terms(spec, Settings(2.0, 999.0, 999.0))
    assert terms.integral_gain_per_s == terms.derivative_gain_s == 0.0
    assert terms.tracking_time_s is None


@pytest.mark.parametrize(
    "settings",
    [
        Settings(nan, 1.0),
        Settings(1.0, float("inf")),
        Settings(-1.0, 1.0),
        Settings(1.0, -1.0),
        Settings(1.0, 1.0, -1.0),
        Settings(1.0, 0.0),
    ],
)
def test_settings_that_the_block_cannot_run_on_are_refused_and_change_nothing(settings: Settings) -> None:
    block = PidBlock(
        BlockSpec(scan_s=0.5, integral_off=999.0), Settings(1.0, 5.0), pv_pct=50.0, sp_pct=50.0, op_pct=40.0
    )
    with pytest.raises(ValueError, match=r"must|meaning"):
        block.settings = settings
    assert block.settings == Settings(1.0, 5.0)


def test_a_proportional_band_of_zero_is_refused() -> None:
    with pytest.raises(ValueError, match="proportional band"):
        to_terms(BlockSpec(scan_s=0.5, gain_kind=GainKind.PROPORTIONAL_BAND), Settings(0.0, 1.0))


@pytest.mark.parametrize(
    ("spec", "settings"),
    [
        (BlockSpec(scan_s=0.1, action=Action.DIRECT), Settings(2.0, 10.0)),
        (BlockSpec(scan_s=0.1, sign=Sign.SIGNED_GAIN), Settings(-2.0, 10.0)),
    ],
)
def test_a_direct_acting_block_opens_when_pv_rises(spec: BlockSpec, settings: Settings) -> None:
    block = PidBlock(spec, settings, pv_pct=50.0, sp_pct=50.0, op_pct=40.0)
    block.execute(51.0)
    # proportional 2 x 1 and one repeat of 2 x 0.1/10
    assert block.op_pct == pytest.approx(40.0 + 2.0 + 0.02)


def test_with_derivative_on_pv_a_setpoint_step_gives_no_kick() -> None:
    on_pv, on_error = (
        PidBlock(
            BlockSpec(scan_s=0.1, is_derivative_on_error=on_error),
            Settings(1.0, 0.0, 5.0),
            pv_pct=50.0,
            sp_pct=50.0,
            op_pct=40.0,
        )
        for on_error in (False, True)
    )
    for block in (on_pv, on_error):
        block.sp_pct = 51.0
        block.execute(50.0)
    assert on_pv.op_pct == pytest.approx(41.0)
    # K Td / (Td/N + h) = 5 / 0.6 on top of the proportional step
    assert on_error.op_pct == pytest.approx(41.0 + 5.0 / 0.6)


def test_the_setpoint_weight_scales_the_proportional_step() -> None:
    block = PidBlock(
        BlockSpec(scan_s=0.1, setpoint_weight=0.4), Settings(2.0, 0.0), pv_pct=50.0, sp_pct=50.0, op_pct=40.0
    )
    block.sp_pct = 60.0
    block.execute(50.0)
    assert block.op_pct == pytest.approx(40.0 + 2.0 * 0.4 * 10.0)


@given(
    pv_pct=st.lists(st.floats(45.0, 55.0), min_size=1, max_size=30),
    form=st.sampled_from(Form),
    on_error=st.booleans(),
    weight=st.floats(0.0, 1.0),
)
def test_increments_and_positions_agree_away_from_the_clamps(
    pv_pct: list[float], form: Form, on_error: bool, weight: float
) -> None:
    blocks = [
        PidBlock(
            wide_open(
                scan_s=0.2, form=form, algorithm=algorithm, is_derivative_on_error=on_error, setpoint_weight=weight
            ),
            Settings(1.5, 8.0, 1.0),
            pv_pct=50.0,
            sp_pct=50.0,
            op_pct=40.0,
        )
        for algorithm in Algorithm
    ]
    for number, reading_pct in enumerate(pv_pct):
        for block in blocks:
            block.sp_pct = 50.0 + number % 3
            block.execute(reading_pct)
    assert blocks[0].op_pct == pytest.approx(blocks[1].op_pct, abs=1e-8)


@pytest.mark.parametrize("algorithm", list(Algorithm))
@pytest.mark.parametrize("form", list(Form))
def test_from_manual_to_automatic_there_is_no_bump(form: Form, algorithm: Algorithm) -> None:
    block = PidBlock(
        BlockSpec(scan_s=0.1, form=form, algorithm=algorithm, setpoint_weight=0.5),
        Settings(1.5, 20.0, 2.0),
        pv_pct=50.0,
        sp_pct=50.0,
        op_pct=40.0,
    )
    block.mode = Mode.MAN
    block.execute(50.0)
    block.hold(63.0)
    block.execute(57.0)
    assert block.op_pct == 63.0
    block.mode = Mode.AUTO
    block.execute(58.0)
    # nothing but the first repeat of the integral: K/Ti h e
    assert block.op_pct == pytest.approx(63.0 - 1.5 / 20.0 * 0.1 * 8.0)


@pytest.mark.parametrize("algorithm", list(Algorithm))
def test_new_settings_in_automatic_do_not_by_themselves_move_the_output(algorithm: Algorithm) -> None:
    block = PidBlock(
        BlockSpec(scan_s=0.1, algorithm=algorithm, setpoint_weight=0.3),
        Settings(1.5, 20.0),
        pv_pct=50.0,
        sp_pct=50.0,
        op_pct=40.0,
    )
    block.execute(50.0)
    block.settings = Settings(6.0, 5.0, 1.0)
    block.execute(50.0)
    assert block.op_pct == pytest.approx(40.0)


def test_the_output_is_held_while_pv_is_no_number_and_goes_on_from_there() -> None:
    block = PidBlock(BlockSpec(scan_s=0.1), Settings(2.0, 20.0), pv_pct=50.0, sp_pct=50.0, op_pct=40.0)
    block.execute(nan)
    assert block.op_pct == 40.0
    block.execute(55.0)
    assert block.op_pct == pytest.approx(40.0 - 2.0 * 0.1 / 20.0 * 5.0)


def test_setpoint_tracking_in_manual_is_an_option() -> None:
    for is_tracking, expected_pct in ((True, 57.0), (False, 50.0)):
        block = PidBlock(
            BlockSpec(scan_s=0.1, sp_tracks_in_manual=is_tracking),
            Settings(1.0, 10.0),
            pv_pct=50.0,
            sp_pct=50.0,
            op_pct=40.0,
            mode=Mode.MAN,
        )
        block.execute(57.0)
        assert block.sp_pct == expected_pct


def saturated(spec: BlockSpec, scans: int) -> PidBlock:
    """A block that has stood at its upper clamp for so many scans under an error of 10 %."""
    block = PidBlock(spec, Settings(4.0, 10.0), pv_pct=50.0, sp_pct=50.0, op_pct=80.0)
    block.sp_pct = 60.0
    for _ in range(scans):
        block.execute(50.0)
    assert block.op_pct == 100.0
    assert block.is_at_high_clamp
    assert not block.is_at_low_clamp
    return block


@pytest.mark.parametrize("anti_windup", [AntiWindup.STOP, AntiWindup.CONDITIONAL])
def test_with_a_held_integral_a_long_saturation_leaves_no_trace(anti_windup: AntiWindup) -> None:
    spec = BlockSpec(scan_s=0.5, anti_windup=anti_windup)
    outputs = []
    for scans in (1, 500):
        block = saturated(spec, scans)
        block.execute(59.0)  # the error shrinks to 1: u = 4 x 1 + 80 + one repeat of 0.2
        outputs.append(block.op_pct)
    assert outputs == pytest.approx([84.2, 84.2])


def test_conditional_integration_goes_on_when_the_error_leads_back_inside() -> None:
    for anti_windup, expected_pct in ((AntiWindup.STOP, 80.0), (AntiWindup.CONDITIONAL, 79.6)):
        # beyond the upper clamp by its proportional weight alone, while the error is negative
        block = PidBlock(
            BlockSpec(scan_s=0.5, anti_windup=anti_windup, setpoint_weight=0.0),
            Settings(4.0, 10.0),
            pv_pct=60.0,
            sp_pct=50.0,
            op_pct=80.0,
        )
        block.execute(52.0)  # P rises by 32: 112 - 0.4, clamped; error -2 integrates -0.4
        assert block.op_pct == 100.0
        block.execute(60.0)  # back: 80, less what was integrated on both scans
        assert block.op_pct == pytest.approx(expected_pct - 2.0)


def test_tracking_draws_the_integral_back_with_its_own_time_constant() -> None:
    scan_s, tracking_s = 0.5, 5.0
    spec = BlockSpec(scan_s=scan_s, anti_windup=AntiWindup.TRACKING, tracking_time_s=tracking_s)
    block = saturated(spec, 400)
    # At rest of the recursion I += Ki h e - (h/Tt)(u - 100): the excess is Tt Ki e = 5 x 0.4 x 10 = 20 (a fixed point),
    # and what is left after it is I = 120 - 40 - ... ; with the error gone the output is I of that moment.
    increment_pct = 4.0 / 10.0 * scan_s * 10.0
    excess_pct = increment_pct * tracking_s / scan_s
    integral_pct = 100.0 + excess_pct - 4.0 * 10.0 - increment_pct
    block.execute(60.0)
    assert block.op_pct == pytest.approx(integral_pct, abs=1e-6)


def test_the_incremental_block_leaves_its_clamp_at_once() -> None:
    block = saturated(BlockSpec(scan_s=0.5, algorithm=Algorithm.INCREMENTAL), 500)
    block.execute(51.0)
    assert block.op_pct == pytest.approx(100.0 - 4.0 + 4.0 / 10.0 * 0.5 * 9.0)


def test_the_output_never_leaves_its_clamps() -> None:
    block = PidBlock(
        BlockSpec(scan_s=0.1, op_low_pct=10.0, op_high_pct=70.0),
        Settings(9.0, 1.0),
        pv_pct=50.0,
        sp_pct=50.0,
        op_pct=40.0,
    )
    block.execute(90.0)
    assert block.op_pct == 10.0
    assert block.is_at_low_clamp
    block.hold(99.0)
    assert block.op_pct == 70.0
