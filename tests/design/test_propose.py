"""Proposals side by side, in the controller's form and units, with what a person must know."""

from dataclasses import replace
from math import inf

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.design.proposal import NotProposed, Proposal, ProposalSheet
from autotune.design.propose import propose
from autotune.design.rules import ULTIMATE_RULES
from autotune.identify.findings import UltimatePoint
from autotune.loop.block_units import from_block
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Interval
from autotune.loop.settings import (
    BlockDescription,
    BlockFields,
    DerivativeKind,
    FieldRange,
    GainKind,
    IntegralKind,
    PidForm,
    PidSettings,
)
from autotune.loop.span import Span

REVERSE = ControlAction.REVERSE
SPAN = Span(0.0, 200.0, "degC")
IDEAL = BlockDescription(PidForm.IDEAL, scan_s=0.1)
PANEL = BlockDescription(
    PidForm.SERIES,
    gain_kind=GainKind.PROPORTIONAL_BAND,
    integral_kind=IntegralKind.TIME_MIN,
    derivative_kind=DerivativeKind.TIME_MIN,
    gain_range=FieldRange(0.1, 999.9, 0.1),
    integral_range=FieldRange(0.01, 99.99, 0.01),
    derivative_range=FieldRange(0.01, 9.99, 0.01),
    panel_labels=("PB", "Ti", "Td"),
)
NARROW = UltimatePoint("relay", Interval(8.0, 7.8, 8.2), Interval(12.0, 11.8, 12.2))
LAGGING = Interval(1.0, 0.9, 1.1)
"""1/(K Ku) = 1/8: the lag rules."""


def _proposed(
    ultimate: UltimatePoint = NARROW,
    static_gain: Interval | None = LAGGING,
    block: BlockDescription = IDEAL,
    action: ControlAction = REVERSE,
    present: BlockFields | None = None,
    noise_pct: float | None = 0.0,
) -> ProposalSheet:
    return propose(
        ultimate=ultimate,
        static_gain=static_gain,
        block=block,
        action=action,
        pv_span=SPAN,
        present=present,
        noise_pct=noise_pct,
    )


def _column(sheet: ProposalSheet, name: str = "tyreus-luyben-pi") -> Proposal:
    return next(proposal for proposal in sheet.proposals if proposal.name == name)


def _refused(sheet: ProposalSheet, name: str) -> NotProposed:
    return next(refused for refused in sheet.not_proposed if refused.name == name)


def _told(proposal: Proposal, words: str) -> bool:
    return any(words in caution for caution in proposal.cautions)


def test_all_rules_stand_side_by_side_and_a_calm_one_is_recommended_with_its_risks() -> None:
    sheet = _proposed()
    assert [proposal.name for proposal in sheet.proposals] == [rule.name for rule in ULTIMATE_RULES]
    assert sheet.not_proposed == ()
    assert sheet.recommended == "tyreus-luyben-pi"
    assert "risks" in sheet.reason
    assert "32 %" in sheet.reason  # 8/3.2 of 7.8
    column = _column(sheet)
    ti_s = 2.2 * 12.0
    assert column.settings == PidSettings(PidForm.IDEAL, 2.5, ti_s, None)
    assert column.fields == BlockFields(2.5, ti_s, 0.0)
    assert column.rounding_pct == 0.0
    assert column.gain_factor is None
    assert column.suits
    assert "Limits of use" in column.cautions[0]


def test_a_narrow_interval_a_quiet_pv_and_a_calm_rule_need_no_more_than_the_limits_of_use() -> None:
    assert len(_column(_proposed()).cautions) == 1


def test_settings_are_shown_in_the_form_and_units_of_the_panel_with_their_rounding() -> None:
    sheet = _proposed(block=PANEL)
    column = _column(sheet)
    assert column.fields == BlockFields(40.0, 0.44, 0.0)
    pid = _column(sheet, "ziegler-nichols-pid")
    assert pid.settings.form is PidForm.IDEAL
    series = pid.in_block_form
    assert series.form is PidForm.SERIES
    assert [series.controller_gain, series.integral_time_s, series.derivative_time_s] == pytest.approx([2.4, 3.0, 3.0])
    assert pid.fields == BlockFields(41.7, 0.05, 0.05)


def test_a_rule_that_the_form_can_not_hold_is_told_with_its_reason() -> None:
    sheet = _proposed(block=PANEL)
    for name in ("no-overshoot-pid", "some-overshoot-pid", "pessen-pid"):
        assert _refused(sheet, name).refusal.code == "SERIES_CANNOT_HOLD"


def test_a_block_without_derivative_gets_no_pid() -> None:
    sheet = _proposed(block=replace(IDEAL, has_derivative=False))
    assert {proposal.name for proposal in sheet.proposals} == {
        "tyreus-luyben-pi",
        "ziegler-nichols-p",
        "ziegler-nichols-pi",
    }
    assert _refused(sheet, "pessen-pid").refusal.code == "NO_DERIVATIVE"


def test_a_field_that_can_not_hold_the_number_refuses_the_rule_and_the_recommendation() -> None:
    sheet = _proposed(block=replace(IDEAL, integral_range=FieldRange(0.0, 20.0)))
    assert _refused(sheet, "tyreus-luyben-pi").refusal.code == "OUT_OF_RANGE"
    assert sheet.recommended is None
    assert "20" in sheet.reason


def test_a_wide_interval_recommends_nothing_and_says_so() -> None:
    wide = replace(NARROW, ultimate_gain=Interval(8.0, 5.0, 10.5))
    sheet = _proposed(wide)
    assert sheet.recommended is None
    assert "between 5 and 10.5" in sheet.reason
    assert _told(_column(sheet), "known only between 5 and 10.5")


def test_a_recommendation_stands_on_the_low_end_of_the_interval() -> None:
    one_sided = replace(NARROW, ultimate_gain=Interval(8.0, 4.1, 8.1))
    sheet = _proposed(one_sided)
    assert _column(sheet).in_block_form.controller_gain > 0.6 * 4.1
    assert sheet.recommended is None
    assert _told(_column(sheet), "61 % of it: the loop may swing")


@given(best=st.floats(0.1, 50.0), low_ratio=st.floats(0.05, 1.0), high_ratio=st.floats(1.0, 20.0))
def test_what_is_recommended_keeps_below_0_6_of_the_least_ultimate_gain(
    best: float, low_ratio: float, high_ratio: float
) -> None:
    gain = Interval(best, best * low_ratio, best * high_ratio)
    sheet = _proposed(replace(NARROW, ultimate_gain=gain), static_gain=None)
    if sheet.recommended is not None:
        assert gain.high <= 2.0 * gain.low
        assert _column(sheet, sheet.recommended).in_block_form.controller_gain <= 0.6 * gain.low


def test_a_wide_period_is_told() -> None:
    sheet = _proposed(replace(NARROW, ultimate_period_s=Interval(12.0, 9.0, 16.0)))
    assert _told(_column(sheet), "ultimate period is known only between 9 and 16 s")


@pytest.mark.parametrize("high", [8.2, inf])
def test_an_ultimate_point_that_reaches_nothing_proposes_nothing(high: float) -> None:
    unusable = replace(NARROW, ultimate_gain=Interval(8.0, 0.0 if high < inf else 7.0, high))
    sheet = _proposed(unusable)
    assert sheet.proposals == ()
    assert {refused.refusal.code for refused in sheet.not_proposed} == {"ULTIMATE_POINT_UNKNOWN"}
    assert sheet.recommended is None


def test_a_brisk_rule_is_told_to_ring() -> None:
    pessen = _column(_proposed(), "pessen-pid")
    assert _told(pessen, "peak sensitivity Ms is at least")
    assert not _told(_column(_proposed()), "Ms is at least")


def test_noise_through_the_derivative_is_told_in_percent_of_output() -> None:
    """K (1 + N) times the noise: 0.6 x 8 x 11 x 0.1 % = 5.3 %."""
    assert _told(_column(_proposed(noise_pct=0.1), "ziegler-nichols-pid"), "about 5.3 % through the derivative")
    assert not _told(_column(_proposed(noise_pct=0.1)), "Noise")
    assert not _told(_column(_proposed(noise_pct=0.001), "ziegler-nichols-pid"), "Noise")
    assert _told(_column(_proposed(noise_pct=None), "ziegler-nichols-pid"), "noise of PV isn't known")


def test_an_unfiltered_derivative_amplifies_by_its_scan_or_by_nobody_knows_what() -> None:
    """K (1 + Td/h): 4.8 x (1 + 1.5/0.1) x 0.1 % = 7.7 %."""
    unfiltered = replace(IDEAL, derivative_filter_ratio=None)
    sheet = _proposed(block=unfiltered, noise_pct=0.1)
    assert _told(_column(sheet, "ziegler-nichols-pid"), "about 7.7 %")
    sheet = _proposed(block=replace(unfiltered, scan_s=None), noise_pct=0.1)
    assert _told(_column(sheet, "ziegler-nichols-pid"), "no declared filter")


def test_coarse_fields_are_told() -> None:
    fine = _column(_proposed(block=replace(IDEAL, gain_range=FieldRange(0.0, 10.0, 0.6))))
    assert (fine.fields.gain, _told(fine, "coarse")) == (2.4, False)
    coarse = _column(_proposed(block=replace(IDEAL, gain_range=FieldRange(0.0, 10.0, 2.0))))
    assert (coarse.fields.gain, _told(coarse, "rounding weakens a setting by 20 %")) == (2.0, True)


def test_a_large_change_goes_half_way_first_with_the_numbers_for_the_panel() -> None:
    sheet = _proposed(block=PANEL, present=BlockFields(400.0, 0.44, 0.0))
    column = _column(sheet)
    assert column.gain_factor == pytest.approx(10.0)
    assert _told(column, "go half-way first, with PB 126.5, Ti 0.44")


def test_a_small_change_is_not_called_large() -> None:
    sheet = _proposed(block=PANEL, present=BlockFields(50.0, 0.3, 0.0))
    assert _column(sheet).gain_factor == pytest.approx(1.25)
    assert not _told(_column(sheet), "half-way")
    assert not _told(_column(sheet), "switches")


def test_half_way_that_the_fields_can_not_hold_is_asked_for_without_numbers() -> None:
    narrow = replace(IDEAL, gain_range=FieldRange(2.0, 3.0))
    column = _column(_proposed(block=narrow, present=BlockFields(0.1, 26.4, 0.0)))
    assert _told(column, "go half-way first.")


def test_a_term_that_is_switched_on_or_off_is_told() -> None:
    sheet = _proposed(present=BlockFields(2.5, 26.4, 3.0))
    assert _told(_column(sheet), "switches derivative off")
    sheet = _proposed(present=BlockFields(0.5, 0.0, 0.0))
    assert _told(_column(sheet, "tyreus-luyben-pid"), "switches integral on and derivative on")


def test_present_settings_that_make_no_sense_are_told_and_not_compared() -> None:
    column = _column(_proposed(present=BlockFields(-2.0, 10.0, 0.0)))
    assert column.gain_factor is None
    assert _told(column, "not understood")


def test_dead_time_that_rules_the_loop_refuses_derivative_and_leaves_pi() -> None:
    """Pure dead time of gain 1: Ku = 1, so that 1/(K Ku) = 1."""
    sheet = _proposed(replace(NARROW, ultimate_gain=Interval(1.0, 0.98, 1.02)), static_gain=Interval(1.0, 0.95, 1.05))
    assert _refused(sheet, "tyreus-luyben-pid").refusal.code == "DEAD_TIME_RULES"
    assert {proposal.name for proposal in sheet.proposals} == {
        "tyreus-luyben-pi",
        "ziegler-nichols-p",
        "ziegler-nichols-pi",
    }


@pytest.mark.parametrize("unknown", [None, Interval(0.1, -0.2, 0.4)])
def test_an_unknown_static_gain_is_told_beside_every_derivative(unknown: Interval | None) -> None:
    sheet = _proposed(static_gain=unknown)
    assert _told(_column(sheet, "tyreus-luyben-pid"), "static gain isn't known")
    assert not _told(_column(sheet), "static gain")


@pytest.mark.parametrize(
    ("action", "static_gain"),
    [(ControlAction.REVERSE, Interval(-1.0, -1.1, -0.9)), (ControlAction.DIRECT, Interval(1.0, 0.9, 1.1))],
)
def test_a_plant_of_the_other_sign_gets_no_settings_at_all(action: ControlAction, static_gain: Interval) -> None:
    sheet = _proposed(action=action, static_gain=static_gain)
    assert sheet.proposals == ()
    assert {refused.refusal.code for refused in sheet.not_proposed} == {"ACTION_CONTRADICTED"}
    assert "control action" in sheet.reason


def test_a_direct_acting_loop_gets_the_same_settings() -> None:
    sheet = _proposed(action=ControlAction.DIRECT, static_gain=Interval(-1.0, -1.1, -0.9))
    assert _column(sheet).fields == _column(_proposed()).fields


@given(
    gain=st.floats(0.2, 30.0),
    period_s=st.floats(2.0, 2000.0),
    form=st.sampled_from([PidForm.IDEAL, PidForm.SERIES]),
    kind=st.sampled_from(GainKind),
    integral_kind=st.sampled_from([IntegralKind.TIME_S, IntegralKind.TIME_MIN, IntegralKind.REPEATS_PER_MIN]),
)
def test_what_is_to_be_written_is_what_the_rule_says_within_the_rounding_shown(
    gain: float, period_s: float, form: PidForm, kind: GainKind, integral_kind: IntegralKind
) -> None:
    block = BlockDescription(
        form,
        gain_kind=kind,
        integral_kind=integral_kind,
        gain_range=FieldRange(0.0, 1e5, 0.01),
        integral_range=FieldRange(0.0, 1e5, 0.001),
        derivative_range=FieldRange(0.0, 1e5, 0.001),
    )
    ultimate = UltimatePoint("relay", Interval(gain, gain, gain), Interval(period_s, period_s, period_s))
    sheet = _proposed(ultimate, static_gain=None, block=block)
    for proposal in sheet.proposals:
        held = from_block(proposal.fields, block, REVERSE, SPAN)
        assert isinstance(held, PidSettings)
        exact = proposal.in_block_form
        # Weaker by at most the change shown; a time that grows by p percent is an integral weaker by p/(1 + p).
        least = 1.0 / (1.0 + proposal.rounding_pct / 100.0) - proposal.rounding_pct / 100.0 - 1e-9
        assert least * exact.controller_gain <= held.controller_gain <= exact.controller_gain * (1.0 + 1e-9)
        if exact.integral_time_s is not None:
            assert held.integral_time_s is not None
            assert held.integral_time_s >= exact.integral_time_s * (1.0 - 1e-9)
