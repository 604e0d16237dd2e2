"""Between settings and the numbers in a controller's own fields."""

from dataclasses import replace
from math import inf, isclose, nan

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from autotune.loop.block_units import Rounded, from_block, is_same_number, number_of, rounded, strength, to_block
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.settings import (
    BlockDescription,
    BlockFields,
    DerivativeKind,
    FieldRange,
    GainKind,
    GainPer,
    IntegralKind,
    PidForm,
    PidSettings,
    SignConvention,
)
from autotune.loop.span import Span
from tests.loop.reference import CHECKS

REVERSE, DIRECT = ControlAction.REVERSE, ControlAction.DIRECT
PERCENT_SPAN = Span(0.0, 100.0, "%")
IDEAL = BlockDescription(PidForm.IDEAL)
INTEGRAL_TIMES = (IntegralKind.TIME_S, IntegralKind.TIME_MIN)


def _fields(settings: PidSettings, block: BlockDescription, action: ControlAction = REVERSE) -> BlockFields:
    fields = to_block(settings, block, action, PERCENT_SPAN)
    assert isinstance(fields, BlockFields), fields
    return fields


def _settings(fields: BlockFields, block: BlockDescription, action: ControlAction = REVERSE) -> PidSettings:
    settings = from_block(fields, block, action, PERCENT_SPAN)
    assert isinstance(settings, PidSettings), settings
    return settings


def _code(outcome: object) -> str:
    assert isinstance(outcome, Refusal), outcome
    return outcome.code


def test_parallel_gains_band_and_repeats_are_those_of_pf_05() -> None:
    check = CHECKS["PF-05"]
    inputs, expected = check["inputs"], check["expected"]
    settings = PidSettings(PidForm.IDEAL, inputs["K"], inputs["Ti"], inputs["Td"])
    parallel = BlockDescription(
        PidForm.PARALLEL, integral_kind=IntegralKind.GAIN_PER_S, derivative_kind=DerivativeKind.GAIN_S
    )
    assert _fields(settings, parallel) == BlockFields(inputs["K"], expected["Ki"], expected["Kd"])
    banded = replace(IDEAL, gain_kind=GainKind.PROPORTIONAL_BAND, integral_kind=IntegralKind.REPEATS_PER_MIN)
    assert _fields(settings, banded) == BlockFields(expected["PB"], expected["rep_per_min"], inputs["Td"])


def test_a_gain_per_engineering_unit_is_scaled_by_the_span_as_pf_06_has_it() -> None:
    check = CHECKS["PF-06"]
    span = Span(0.0, check["inputs"]["PVspan"])
    block = replace(IDEAL, gain_per=GainPer.ENGINEERING_UNIT)
    settings = from_block(BlockFields(check["inputs"]["Kc_eng"], 10.0, 0.0), block, REVERSE, span)
    assert settings == PidSettings(PidForm.IDEAL, check["expected"]["Kc_pct"], 10.0, None)
    banded = to_block(settings, replace(IDEAL, gain_kind=GainKind.PROPORTIONAL_BAND), REVERSE, span)
    assert isinstance(banded, BlockFields)
    assert banded.gain == check["expected"]["PB"]


def test_a_band_in_engineering_units_is_the_pv_change_for_the_whole_output() -> None:
    """Common practice, no source: 25 degC of band on a span of 200 degC is a band of 12.5 %, a gain of 8."""
    block = replace(IDEAL, gain_kind=GainKind.PROPORTIONAL_BAND, gain_per=GainPer.ENGINEERING_UNIT)
    settings = from_block(BlockFields(25.0, 10.0, 0.0), block, REVERSE, Span(0.0, 200.0, "degC"))
    assert settings == PidSettings(PidForm.IDEAL, 8.0, 10.0, None)


@pytest.mark.parametrize(
    ("kind", "number"),
    [
        (IntegralKind.TIME_S, 120.0),
        (IntegralKind.TIME_MIN, 2.0),
        (IntegralKind.REPEATS_PER_S, 1.0 / 120.0),
        (IntegralKind.REPEATS_PER_MIN, 0.5),
        (IntegralKind.GAIN_PER_S, 3.0 / 120.0),
        (IntegralKind.GAIN_PER_MIN, 1.5),
        (IntegralKind.GAIN_PER_EXECUTION, 3.0 * 0.25 / 120.0),
    ],
)
def test_every_kind_of_integral_field_holds_120_s_at_gain_3(kind: IntegralKind, number: float) -> None:
    """Common practice, no source: the definitions, worked by hand."""
    block = replace(IDEAL, integral_kind=kind, scan_s=0.25)
    assert _fields(PidSettings(PidForm.IDEAL, 3.0, 120.0, None), block).integral == pytest.approx(number)
    assert _settings(BlockFields(3.0, number, 0.0), block).integral_time_s == pytest.approx(120.0)


@pytest.mark.parametrize(
    ("kind", "number"),
    [
        (DerivativeKind.TIME_S, 30.0),
        (DerivativeKind.TIME_MIN, 0.5),
        (DerivativeKind.GAIN_S, 90.0),
        (DerivativeKind.GAIN_MIN, 1.5),
        (DerivativeKind.GAIN_PER_EXECUTION, 360.0),
    ],
)
def test_every_kind_of_derivative_field_holds_30_s_at_gain_3(kind: DerivativeKind, number: float) -> None:
    """Common practice, no source: the definitions, worked by hand."""
    block = replace(IDEAL, derivative_kind=kind, scan_s=0.25)
    assert _fields(PidSettings(PidForm.IDEAL, 3.0, 200.0, 30.0), block).derivative == pytest.approx(number)
    assert _settings(BlockFields(3.0, 200.0, number), block).derivative_time_s == pytest.approx(30.0)


def _is_close(one: float | None, other: float | None) -> bool:
    return one is other if one is None or other is None else isclose(one, other, rel_tol=1e-9)


BLOCKS = st.builds(
    BlockDescription,
    form=st.sampled_from(PidForm),
    gain_kind=st.sampled_from(GainKind),
    gain_per=st.sampled_from(GainPer),
    integral_kind=st.sampled_from(IntegralKind),
    integral_off=st.sampled_from([None, 0.0, 9999.0]),
    derivative_kind=st.sampled_from(DerivativeKind),
    derivative_off=st.sampled_from([None, 0.0]),
    has_derivative=st.booleans(),
    sign=st.sampled_from(SignConvention),
    scan_s=st.sampled_from([0.05, 0.1, 1.0]),
    gain_range=st.builds(FieldRange, st.just(0.0), st.just(1e9), st.sampled_from([0.0, 0.001, 0.01, 0.1])),
    integral_range=st.builds(FieldRange, st.just(0.0), st.just(1e9), st.sampled_from([0.0, 0.001, 0.01, 0.1])),
    derivative_range=st.builds(FieldRange, st.just(0.0), st.just(1e9), st.sampled_from([0.0, 0.001, 0.01])),
)
SETTINGS = st.builds(
    PidSettings,
    form=st.sampled_from(PidForm),
    controller_gain=st.floats(0.05, 50.0),
    integral_time_s=st.none() | st.floats(0.5, 5000.0),
    derivative_time_s=st.none() | st.floats(0.1, 1000.0),
)
SPANS = st.builds(Span, st.just(-20.0), st.floats(0.0, 500.0))


@given(settings=SETTINGS, block=BLOCKS, action=st.sampled_from(ControlAction), span=SPANS)
def test_what_a_block_can_hold_comes_back_as_it_went_in(
    settings: PidSettings, block: BlockDescription, action: ControlAction, span: Span
) -> None:
    fields = to_block(settings, block, action, span)
    assume(isinstance(fields, BlockFields))
    assert isinstance(fields, BlockFields)
    back = from_block(fields, block, action, span)
    assert isinstance(back, PidSettings)
    again = to_block(back, block, action, span)
    assert isinstance(again, BlockFields)
    for name in ("gain", "integral", "derivative"):
        assert _is_close(number_of(again, name), number_of(fields, name))
    if settings.form is block.form:
        assert _is_close(back.controller_gain, settings.controller_gain)
        assert _is_close(back.integral_time_s, settings.integral_time_s)
        assert _is_close(back.derivative_time_s, settings.derivative_time_s)


@given(settings=SETTINGS, block=BLOCKS, action=st.sampled_from(ControlAction), span=SPANS)
def test_rounding_never_strengthens_and_stays_within_one_step(
    settings: PidSettings, block: BlockDescription, action: ControlAction, span: Span
) -> None:
    fields = to_block(settings, block, action, span)
    assume(isinstance(fields, BlockFields))
    assert isinstance(fields, BlockFields)
    held = rounded(fields, block)
    assume(isinstance(held, Rounded))
    assert isinstance(held, Rounded)
    for name, limits in zip(
        ("gain", "integral", "derivative"),
        (block.gain_range, block.integral_range, block.derivative_range),
        strict=True,
    ):
        exact, number = number_of(fields, name), number_of(held.fields, name)
        if exact is None or number is None:
            assert exact is number
            continue
        assert abs(number - exact) <= limits.resolution * (1.0 + 1e-9)
        assert strength(name, number, block) <= strength(name, exact, block) * (1.0 + 1e-6)
        change_pct = 100.0 * abs(number - exact) / abs(exact) if exact else 0.0
        assert change_pct <= held.largest_change_pct * (1.0 + 1e-9)
    twice = rounded(held.fields, block)
    assert isinstance(twice, Rounded)
    assert (twice.fields, twice.largest_change_pct) == (held.fields, 0.0)


def test_gain_goes_down_band_goes_up_and_integral_goes_weaker() -> None:
    block = replace(
        IDEAL,
        gain_range=FieldRange(0.0, 100.0, 0.1),
        integral_range=FieldRange(0.0, 100.0, 0.5),
        derivative_range=FieldRange(0.0, 100.0, 0.2),
    )
    held = rounded(BlockFields(1.26, 10.1, 1.39), block)
    assert isinstance(held, Rounded)
    assert held.fields == BlockFields(1.2, 10.5, 1.2)
    assert held.largest_change_pct == pytest.approx(100.0 * 0.19 / 1.39)
    banded = replace(block, gain_kind=GainKind.PROPORTIONAL_BAND, integral_kind=IntegralKind.REPEATS_PER_MIN)
    held = rounded(BlockFields(79.31, 10.4, 1.4), banded)
    assert isinstance(held, Rounded)
    assert held.fields == BlockFields(79.4, 10.0, 1.4)


def test_a_whole_step_stays_and_reads_as_on_the_panel() -> None:
    block = replace(IDEAL, gain_range=FieldRange(0.0, 10.0, 0.1))
    held = rounded(BlockFields(0.1 + 0.2, 5.0, 0.0), block)
    assert isinstance(held, Rounded)
    assert held.fields.gain == 0.3


@pytest.mark.parametrize(("off", "wanted"), [(0.0, 0.0), (999.0, 999.0)])
def test_the_declared_number_switches_a_term_off(off: float, wanted: float) -> None:
    block = replace(IDEAL, integral_off=off, derivative_off=off)
    assert _fields(PidSettings(PidForm.IDEAL, 2.0, None, None), block) == BlockFields(2.0, wanted, wanted)
    assert _settings(BlockFields(2.0, off, off), block) == PidSettings(PidForm.IDEAL, 2.0, None, None)


def test_an_off_number_held_in_single_precision_is_still_off() -> None:
    block = replace(IDEAL, integral_off=9999.9)
    assert _settings(BlockFields(2.0, 9999.900390625, 0.0), block).integral_time_s is None


def test_an_off_number_stays_when_it_lies_outside_the_range_of_the_field() -> None:
    block = replace(IDEAL, integral_off=0.0, integral_range=FieldRange(1.0, 999.0, 1.0))
    held = rounded(BlockFields(2.0, 0.0, 0.0), block)
    assert isinstance(held, Rounded)
    assert held.fields.integral == 0.0


def test_a_rate_of_zero_is_off_whatever_is_declared() -> None:
    block = replace(IDEAL, integral_kind=IntegralKind.REPEATS_PER_MIN, integral_off=None, derivative_off=None)
    assert _settings(BlockFields(2.0, 0.0, 0.0), block) == PidSettings(PidForm.IDEAL, 2.0, None, None)
    assert _fields(PidSettings(PidForm.IDEAL, 2.0, None, None), block) == BlockFields(2.0, 0.0, 0.0)


def test_a_term_that_the_block_can_not_switch_off_is_refused() -> None:
    p_only = PidSettings(PidForm.IDEAL, 2.0, None, None)
    timed = replace(IDEAL, integral_off=None)
    assert _code(to_block(p_only, timed, REVERSE, PERCENT_SPAN)) == "CANNOT_SWITCH_OFF"
    pi_only = PidSettings(PidForm.IDEAL, 2.0, 10.0, None)
    floored = replace(IDEAL, derivative_off=None, derivative_range=FieldRange(0.1, 10.0))
    assert _code(to_block(pi_only, floored, REVERSE, PERCENT_SPAN)) == "CANNOT_SWITCH_OFF"


def test_a_term_whose_number_would_mean_off_is_refused() -> None:
    pid = PidSettings(PidForm.IDEAL, 2.0, 999.0, 3.0)
    assert _code(to_block(pid, replace(IDEAL, integral_off=999.0), REVERSE, PERCENT_SPAN)) == "MEANS_OFF"
    assert _code(to_block(pid, replace(IDEAL, derivative_off=3.0), REVERSE, PERCENT_SPAN)) == "MEANS_OFF"


def test_a_zero_time_where_zero_is_not_off_is_no_pid() -> None:
    block = replace(IDEAL, integral_off=999.0)
    assert _code(from_block(BlockFields(2.0, 0.0, 0.0), block, REVERSE, PERCENT_SPAN)) == "SETTINGS_INVALID"


def test_a_block_without_derivative_holds_none_and_takes_none() -> None:
    block = replace(IDEAL, has_derivative=False)
    assert _fields(PidSettings(PidForm.IDEAL, 2.0, 10.0, None), block) == BlockFields(2.0, 10.0, None)
    assert _settings(BlockFields(2.0, 10.0, None), block) == PidSettings(PidForm.IDEAL, 2.0, 10.0, None)
    pid = PidSettings(PidForm.IDEAL, 2.0, 10.0, 1.0)
    assert _code(to_block(pid, block, REVERSE, PERCENT_SPAN)) == "NO_DERIVATIVE"


def test_a_derivative_that_was_not_read_is_not_taken_for_off() -> None:
    assert _code(from_block(BlockFields(2.0, 10.0, None), IDEAL, REVERSE, PERCENT_SPAN)) == "DERIVATIVE_NOT_READ"


@pytest.mark.parametrize(("action", "sign"), [(REVERSE, 1.0), (DIRECT, -1.0)])
def test_a_signed_gain_is_negative_for_a_direct_acting_controller(action: ControlAction, sign: float) -> None:
    settings = PidSettings(PidForm.PARALLEL, 2.0, 10.0, 3.0)
    block = BlockDescription(
        PidForm.PARALLEL,
        integral_kind=IntegralKind.GAIN_PER_S,
        derivative_kind=DerivativeKind.GAIN_S,
        sign=SignConvention.SIGNED_GAIN,
    )
    fields = _fields(settings, block, action)
    assert fields == BlockFields(sign * 2.0, sign * 0.2, sign * 6.0)
    assert _settings(fields, block, action) == settings
    held = rounded(fields, replace(block, gain_range=FieldRange(0.0, 10.0, 0.3)))
    assert isinstance(held, Rounded)
    assert held.fields.gain == pytest.approx(sign * 1.8)


def test_a_gain_whose_sign_contradicts_the_action_is_refused() -> None:
    signed = replace(IDEAL, sign=SignConvention.SIGNED_GAIN)
    assert _code(from_block(BlockFields(2.0, 10.0, 0.0), signed, DIRECT, PERCENT_SPAN)) == "SIGN_CONTRADICTS"
    assert _code(from_block(BlockFields(-2.0, 10.0, 0.0), signed, REVERSE, PERCENT_SPAN)) == "SIGN_CONTRADICTS"
    assert _code(from_block(BlockFields(-2.0, 10.0, 0.0), IDEAL, REVERSE, PERCENT_SPAN)) == "SIGN_CONTRADICTS"


def test_a_range_of_signed_numbers_is_taken_as_it_is() -> None:
    block = replace(IDEAL, sign=SignConvention.SIGNED_GAIN, gain_range=FieldRange(-1.0, 5.0))
    assert _code(rounded(BlockFields(-2.0, 10.0, 0.0), block)) == "OUT_OF_RANGE"
    assert isinstance(rounded(BlockFields(-0.5, 10.0, 0.0), block), Rounded)


@pytest.mark.parametrize(
    "block",
    [
        replace(IDEAL, integral_kind=IntegralKind.GAIN_PER_EXECUTION),
        replace(IDEAL, derivative_kind=DerivativeKind.GAIN_PER_EXECUTION),
    ],
)
def test_a_number_per_execution_needs_the_execution_time(block: BlockDescription) -> None:
    settings = PidSettings(PidForm.IDEAL, 2.0, 10.0, 1.0)
    assert _code(to_block(settings, block, REVERSE, PERCENT_SPAN)) == "SCAN_NOT_DECLARED"
    assert _code(from_block(BlockFields(2.0, 10.0, 1.0), block, REVERSE, PERCENT_SPAN)) == "SCAN_NOT_DECLARED"


@pytest.mark.parametrize(
    "block",
    [
        BlockDescription(PidForm.PARALLEL, derivative_kind=DerivativeKind.GAIN_S),
        BlockDescription(PidForm.PARALLEL, integral_kind=IntegralKind.REPEATS_PER_MIN, has_derivative=False),
        BlockDescription(PidForm.PARALLEL, integral_kind=IntegralKind.GAIN_PER_S),
    ],
)
def test_a_parallel_block_with_times_is_ambiguous_and_not_guessed(block: BlockDescription) -> None:
    assert _code(from_block(BlockFields(2.0, 10.0, 1.0), block, REVERSE, PERCENT_SPAN)) == "FORM_AMBIGUOUS"


def test_a_parallel_block_without_derivative_needs_only_an_integral_gain() -> None:
    block = BlockDescription(PidForm.PARALLEL, integral_kind=IntegralKind.GAIN_PER_MIN, has_derivative=False)
    assert _fields(PidSettings(PidForm.IDEAL, 2.0, 60.0, None), block) == BlockFields(2.0, 2.0, None)


def test_settings_that_the_form_can_not_hold_are_refused() -> None:
    settings = PidSettings(PidForm.IDEAL, 2.0, 3.0, 1.0)
    series = BlockDescription(PidForm.SERIES)
    assert _code(to_block(settings, series, REVERSE, PERCENT_SPAN)) == "SERIES_CANNOT_HOLD"


@pytest.mark.parametrize("bad", [0.0, nan, inf])
@pytest.mark.parametrize("kind", GainKind)
def test_a_gain_that_is_no_number_above_zero_is_no_pid(bad: float, kind: GainKind) -> None:
    block = replace(IDEAL, gain_kind=kind)
    code = _code(from_block(BlockFields(bad, 10.0, 1.0), block, REVERSE, PERCENT_SPAN))
    assert code == "SETTINGS_INVALID"


@pytest.mark.parametrize("name", ["gain", "integral", "derivative"])
@pytest.mark.parametrize("bad", [500.0, nan, inf])
def test_what_a_field_can_not_hold_is_refused_and_not_clamped(name: str, bad: float) -> None:
    narrow = FieldRange(0.0, 100.0, 0.1)
    block = replace(IDEAL, gain_range=narrow, integral_range=narrow, derivative_range=narrow)
    fields = replace(BlockFields(2.0, 10.0, 1.0), **{name: bad})
    assert _code(rounded(fields, block)) == "OUT_OF_RANGE"


@pytest.mark.parametrize("name", ["gain", "derivative"])
def test_a_number_that_its_resolution_turns_into_zero_is_refused(name: str) -> None:
    coarse = FieldRange(0.0, 100.0, 1.0)
    block = replace(IDEAL, gain_range=coarse, derivative_range=coarse)
    fields = replace(BlockFields(2.0, 10.0, 1.0), **{name: 0.4})
    assert _code(rounded(fields, block)) == "FIELD_TOO_COARSE"


def test_a_number_that_its_resolution_turns_into_off_is_refused() -> None:
    block = replace(IDEAL, integral_off=999.0, integral_range=FieldRange(0.0, 9999.0, 1.0))
    assert _code(rounded(BlockFields(2.0, 998.6, 0.0), block)) == "FIELD_TOO_COARSE"


def test_strength_grows_with_the_action_and_is_zero_when_off() -> None:
    banded = replace(IDEAL, gain_kind=GainKind.PROPORTIONAL_BAND)
    assert strength("gain", 50.0, banded) > strength("gain", 100.0, banded)
    assert strength("gain", 2.0, IDEAL) > strength("gain", 1.0, IDEAL)
    assert strength("integral", 10.0, IDEAL) > strength("integral", 20.0, IDEAL) > strength("integral", 0.0, IDEAL)
    assert strength("derivative", 2.0, IDEAL) > strength("derivative", 1.0, IDEAL) > strength("derivative", 0, IDEAL)
    assert strength("integral", 0.0, replace(IDEAL, integral_off=None)) == inf


def test_numbers_are_the_same_as_far_as_single_precision_can_tell() -> None:
    assert is_same_number(1.23, 1.2300000190734863)
    assert not is_same_number(1.23, 1.2301)
    assert not is_same_number(nan, nan)
    assert is_same_number(None, None)
    assert not is_same_number(None, 0.0)


def test_an_unknown_field_is_our_fault() -> None:
    with pytest.raises(KeyError):
        number_of(BlockFields(1.0, 1.0, None), "bias")
