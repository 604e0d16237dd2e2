"""From a model to proposals side by side: what is proposed, in which order, and what a person is told."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from autotune.design.candidates import AveragingDemand
from autotune.design.choices import Caution, Purpose
from autotune.design.forecast import Forecast
from autotune.design.loop_grid import seen_plant
from autotune.design.margins import margins
from autotune.design.proposal import Proposal, ProposalSheet
from autotune.design.propose import propose_from_model
from autotune.identify.model import ModelWithDraws, ProcessModel
from autotune.loop.block_units import from_block
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.settings import (
    AntiWindup,
    BlockDescription,
    BlockFields,
    FieldRange,
    GainKind,
    PidForm,
    PidSettings,
    SignConvention,
)
from autotune.loop.span import Span
from tests.design.plants import plant

SPAN = Span(0.0, 150.0, "degC")
LAGGING = plant(10.0, 3.0, gain=2.0, dead_time_s=2.0)
BLOCK = BlockDescription(PidForm.IDEAL, scan_s=0.2, anti_windup=AntiWindup.STOP)
COARSE = BlockDescription(
    PidForm.SERIES,
    gain_kind=GainKind.PROPORTIONAL_BAND,
    gain_range=FieldRange(10.0, 500.0, 10.0),
    integral_range=FieldRange(1.0, 500.0, 2.0),
    derivative_range=FieldRange(1.0, 100.0, 1.0),
    scan_s=0.2,
    anti_windup=AntiWindup.STOP,
)


@cache
def _drawn(spread: float = 0.04) -> ModelWithDraws:
    rng = np.random.default_rng(3)
    draws = tuple(
        plant(10.0 * a, 3.0 * b, gain=2.0 * c, dead_time_s=2.0 * d)
        for a, b, c, d in np.exp(spread * rng.standard_normal((12, 4)))
    )
    return ModelWithDraws(LAGGING, draws)


@cache
def _proposed(
    model: ModelWithDraws | None = None,
    block: BlockDescription = BLOCK,
    purpose: Purpose = Purpose.REGULATE,
    caution: Caution = Caution.MIDDLE,
    action: ControlAction = ControlAction.REVERSE,
    present: BlockFields | None = None,
    noise_pct: float | None = 0.01,
    dead_band_pct: float | None = None,
    averaging: AveragingDemand | None = None,
) -> ProposalSheet:
    return propose_from_model(
        model=model or _drawn(),
        block=block,
        action=action,
        pv_span=SPAN,
        purpose=purpose,
        caution=caution,
        present=present,
        noise_pct=noise_pct,
        dead_band_pct=dead_band_pct,
        averaging=averaging,
    )


def _column(sheet: ProposalSheet, name: str) -> Proposal:
    return next(column for column in sheet.proposals if column.name == name)


def _refusal(sheet: ProposalSheet, name: str) -> Refusal:
    return next(refused for refused in sheet.not_proposed if refused.name == name).refusal


def _forecast(column: Proposal) -> Forecast:
    assert isinstance(column.forecast, Forecast)
    return column.forecast


def test_the_optimum_stands_first_and_is_recommended_with_reason_and_risks() -> None:
    sheet = _proposed()
    first = sheet.proposals[0]
    assert sheet.recommended == first.name == "robust-regulate"
    assert "Derivative lessens" in sheet.reason
    assert "risks" in sheet.reason
    assert "Ms reaches" in sheet.reason
    assert first.fields.gain == first.in_block_form.controller_gain
    found = _forecast(first)
    assert found.margins.peak_sensitivity == pytest.approx(1.4, abs=0.02)
    assert found.op_noise_pct is not None
    assert len(sheet.proposals) > 30
    assert len({column.name for column in sheet.proposals}) == len(sheet.proposals)


@pytest.mark.parametrize("purpose", [Purpose.REGULATE, Purpose.FOLLOW, Purpose.GENTLE])
def test_proposals_are_ordered_for_the_purpose(purpose: Purpose) -> None:
    sheet = _proposed(ModelWithDraws(LAGGING), purpose=purpose)
    assert sheet.proposals[0].name == f"robust-{purpose.value}"
    calm = [column for column in sheet.proposals[1:12] if (_forecast(column).margins.peak_sensitivity or 9.0) <= 2.0]
    costs = []
    for column in calm:
        setpoint, load = _forecast(column).setpoint, _forecast(column).load
        assert setpoint is not None
        assert load is not None
        match purpose:
            case Purpose.REGULATE:
                costs.append(load.iae_pct_s)
            case Purpose.FOLLOW:
                costs.append(setpoint.iae_pct_s * (1.0 + setpoint.overshoot_pct / 10.0))
            case _:
                costs.append(setpoint.travel_pct + load.travel_pct)
    assert costs[:3] == sorted(costs[:3])


def test_rounding_to_the_fields_keeps_the_margins() -> None:
    """Steps of 10 in the band, 2 s in the integral and 1 s in the derivative."""
    sheet = _proposed(block=COARSE)
    first = sheet.proposals[0]
    assert first.name == "robust-regulate"
    assert first.fields.gain % 10.0 == pytest.approx(0.0, abs=1e-9)
    held = from_block(first.fields, COARSE, ControlAction.REVERSE, SPAN)
    assert isinstance(held, PidSettings)
    found = margins(seen_plant(LAGGING, 0.2), COARSE, held)
    assert (found.peak_sensitivity or 9.0) <= 1.4 * 1.005
    assert _forecast(first).unstable_share_ratio == 0.0


def test_a_direct_acting_block_with_signed_gains_gets_negative_numbers_of_the_same_size() -> None:
    signed = replace(BLOCK, sign=SignConvention.SIGNED_GAIN)
    direct = _proposed(ModelWithDraws(LAGGING), signed, action=ControlAction.DIRECT).proposals[0]
    reverse = _proposed(ModelWithDraws(LAGGING)).proposals[0]
    assert direct.fields.gain == pytest.approx(-reverse.fields.gain)


def test_rules_that_would_be_unstable_here_are_not_proposed() -> None:
    """Two large lags with almost no dead time under Ziegler-Nichols' PI (P2 T=50 of the test batch)."""
    model = ModelWithDraws(plant(50.0, 50.0, dead_time_s=1.0))
    sheet = _proposed(model, replace(BLOCK, scan_s=0.1))
    assert _refusal(sheet, "ziegler-nichols-pi").code == "UNSTABLE_HERE"


def test_rules_that_a_late_execution_or_two_would_upset_are_not_proposed() -> None:
    sheet = _proposed(ModelWithDraws(LAGGING), replace(BLOCK, scan_s=2.5))
    assert "DELAY_MARGIN" in {refused.refusal.code for refused in sheet.not_proposed}


def test_what_the_block_can_not_hold_is_not_proposed() -> None:
    sheet = _proposed(block=COARSE)
    assert _refusal(sheet, "no-overshoot-pid").code == "SERIES_CANNOT_HOLD"
    assert _refusal(sheet, "ziegler-nichols-integrator-pi").code == "NOT_FOR_THIS_PLANT"
    narrow = replace(COARSE, gain_range=FieldRange(400.0, 500.0, 10.0))
    assert _refusal(_proposed(block=narrow), "simc-pi").code == "OUT_OF_RANGE"


def test_an_optimum_that_the_fields_can_not_hold_is_told() -> None:
    sheet = _proposed(block=replace(COARSE, gain_range=FieldRange(10.0, 50.0, 10.0)))
    assert sheet.recommended is None
    assert "Nothing is recommended" in sheet.reason


def test_a_number_that_reads_back_as_no_setting_is_refused() -> None:
    """A gain that is held in whole units of 0.5 with a signed sign convention still reads back; zero does not exist."""
    tiny = replace(BLOCK, gain_range=FieldRange(0.0, 1000.0, 0.5))
    assert all(column.fields.gain >= 0.5 for column in _proposed(block=tiny).proposals)


def test_the_present_settings_are_forecast_too_and_the_change_is_told() -> None:
    sheet = _proposed(present=BlockFields(0.3, 40.0, 0.0))
    assert isinstance(sheet.present_forecast, Forecast)
    assert sheet.present_forecast.margins.is_stable
    first = sheet.proposals[0]
    assert first.gain_factor == pytest.approx(first.in_block_form.controller_gain / 0.3)
    assert any("half-way first" in caution for caution in first.cautions)


def test_unstable_present_settings_are_named() -> None:
    sheet = _proposed(present=BlockFields(9.0, 5.0, 0.0))
    assert isinstance(sheet.present_forecast, Forecast)
    assert "Unstable" in sheet.present_forecast.warnings[0]


def test_present_settings_that_are_not_understood_are_told() -> None:
    signed = replace(BLOCK, sign=SignConvention.SIGNED_GAIN)
    sheet = _proposed(block=signed, present=BlockFields(-2.0, 10.0, 0.0))
    assert isinstance(sheet.present_forecast, Refusal)
    assert any("not understood" in caution for caution in sheet.proposals[0].cautions)


def test_without_a_scan_rules_stand_without_forecast_and_nothing_is_recommended() -> None:
    sheet = _proposed(block=replace(BLOCK, scan_s=None), present=BlockFields(1.0, 10.0, 0.0))
    assert sheet.recommended is None
    assert "execution time is not declared" in sheet.reason
    assert _refusal(sheet, "robust-regulate").code == "SCAN_NOT_DECLARED"
    assert isinstance(sheet.present_forecast, Refusal)
    simc = _column(sheet, "simc-pi")
    assert isinstance(simc.forecast, Refusal)
    assert any("No forecast" in caution for caution in simc.cautions)


def test_without_anti_windup_no_forecast_stands_behind_the_optimum() -> None:
    sheet = _proposed(block=replace(BLOCK, anti_windup=AntiWindup.NOT_DECLARED))
    assert sheet.recommended is None
    assert "no forecast" in sheet.reason
    assert sheet.proposals[0].name == "robust-regulate"


def test_brisk_says_that_nothing_is_guarded_and_wild_draws_say_that_the_model_is_not_known() -> None:
    brisk = _proposed(caution=Caution.BRISK).proposals[0]
    assert any("not guarded" in caution for caution in brisk.cautions)
    wild = ModelWithDraws(LAGGING, (LAGGING, ProcessModel((1e6,), (1.0, 1.0, 0.0), 50.0)))
    sheet = _proposed(wild, caution=Caution.CAREFUL)
    assert any("not known well enough" in caution for caution in sheet.proposals[0].cautions)


def test_a_plant_without_admissible_gain_gets_no_optimum() -> None:
    double = ModelWithDraws(ProcessModel((1.0,), (1.0, 0.0, 0.0), 0.5))
    sheet = _proposed(double)
    assert sheet.recommended is None
    assert _refusal(sheet, "robust-regulate").code == "NO_ADMISSIBLE_GAIN"


def test_an_averaging_level_gets_its_band() -> None:
    vessel = ModelWithDraws(plant(gain=0.02, dead_time_s=0.1, integrators=1))
    sheet = _proposed(vessel, purpose=Purpose.AVERAGING, averaging=AveragingDemand(8.0, 20.0))
    assert sheet.recommended == "averaging-pi"
    assert any("times the least possible" in caution for caution in sheet.proposals[0].cautions)
    assert sheet.proposals[0].settings.controller_gain == pytest.approx(2.0 * 0.4972 * 0.5485 * 20.0 / 8.0, rel=0.01)


def test_averaging_needs_a_vessel_and_a_demand() -> None:
    assert "state what the vessel may use" in _proposed(purpose=Purpose.AVERAGING).reason
    sheet = _proposed(purpose=Purpose.AVERAGING, averaging=AveragingDemand(8.0, 20.0))
    assert _refusal(sheet, "averaging-pi").code == "NOT_FOR_THIS_PLANT"


def test_a_valve_that_would_keep_the_loop_swinging_is_to_be_repaired_first() -> None:
    """A vessel under PI with a dead band: the classic lasting cycle."""
    vessel = ModelWithDraws(plant(2.0, gain=0.1, dead_time_s=1.0, integrators=1))
    sheet = _proposed(vessel, dead_band_pct=2.0)
    assert sheet.recommended is None
    assert "Repair the valve first" in sheet.reason
