"""What the service knows, in the shapes of ``local_api``."""

from math import tau

from autotune.confirmed_write.phases import Phase
from autotune.identify.findings import Findings
from autotune.loop.outcome import Refusal
from autotune.service.changing import ChangeEnd
from autotune.service.check import LoopCheck
from autotune.service.local_api import (
    CheckAnswer,
    FindingAnswer,
    ProposalAnswer,
    ProposalsAnswer,
    SettingsAnswer,
    TestAnswer,
    WriteAnswer,
    refusal_answer,
    settings_answer,
)
from autotune.service.sheet_mapping import fields_of
from autotune.service.testing import TestEnd
from autotune.sheet import schema


def check_answer(looked: LoopCheck) -> CheckAnswer:
    """A look at one loop as data."""
    loop, sample = looked.loop, looked.sample
    pv_pct, sp_pct, op_pct = (None, None, None) if sample is None else (sample.pv_pct, sample.sp_pct, sample.op_pct)
    return CheckAnswer(
        loop=loop.name,
        fit=looked.is_fit,
        findings=tuple(
            FindingAnswer(level=one.level.value, code=one.code, text=one.text, remedy=one.remedy)
            for one in looked.findings
        ),
        mode=None if sample is None else sample.mode.value,
        pv_eu=None if pv_pct is None else loop.pv_span.to_eu(pv_pct),
        sp_eu=None if sp_pct is None else loop.pv_span.to_eu(sp_pct),
        op_eu=None if op_pct is None else loop.op_span.to_eu(op_pct),
        settings=settings_answer(looked.settings),
        round_trip_s=looked.round_trip_s,
        refresh_s=looked.refresh_s,
    )


def test_answer(ended: TestEnd) -> TestAnswer:
    """A test's end as data."""
    experiment, findings = ended.experiment, ended.findings
    found = findings if isinstance(findings, Findings) else None
    refusal = findings if isinstance(findings, Refusal) else experiment.refusal
    gain = None if found is None else found.ultimate.ultimate_gain
    period = None if found is None else found.ultimate.ultimate_period_s
    return TestAnswer(
        outcome=experiment.phase.value,
        code=ended.sheet.outcome.code,
        text=ended.sheet.outcome.text,
        refusal=refusal_answer(refusal),
        cycles=len(experiment.usable_cycles),
        ultimate_gain=None if gain is None else gain.best,
        ultimate_gain_low=None if gain is None else gain.low,
        ultimate_gain_high=None if gain is None else gain.high,
        ultimate_period_s=None if period is None else period.best,
        ultimate_period_low_s=None if period is None else period.low,
        ultimate_period_high_s=None if period is None else period.high,
        describing_function_gain=None if found is None else 1.0 / found.describing_function.gain,
        describing_function_period_s=(None if found is None else tau / found.describing_function.frequency_rad_per_s),
        noise_pct=experiment.noise_pct,
        method=None if found is None else found.ultimate.method,
        time_base=None if found is None else found.time_base.value,
        because=() if found is None else found.ultimate.because,
        cautions=() if found is None else found.cautions,
        sheet=ended.sheet.sheet_id,
    )


def no_test_answer(outcome: str, text: str, refusal: Refusal | None = None) -> TestAnswer:
    """A test that did not take place, as data: there is no sheet of it."""
    fields: dict[str, object] = dict.fromkeys(TestAnswer.model_fields)
    told = {"outcome": outcome, "text": text, "cycles": 0, "because": (), "cautions": ()}
    return TestAnswer.model_validate({**fields, **told, "refusal": refusal_answer(refusal)})


def proposals_answer(sheet: schema.Sheet) -> ProposalsAnswer:
    """A sheet's proposals as data."""
    return ProposalsAnswer(
        sheet=sheet.sheet_id,
        loop=sheet.loop,
        as_found=None if sheet.as_found is None else quantities_answer(sheet.as_found.settings),
        recommended=next((one.name for one in sheet.proposals if one.is_recommended), None),
        proposals=tuple(
            ProposalAnswer(
                name=one.name,
                title=one.title,
                source=one.source,
                recommended=one.is_recommended,
                settings=quantities_answer(one.settings),
                rounding_pct=one.rounding_pct,
                gain_factor=one.gain_factor,
                cautions=one.cautions,
                not_proposed_because=one.not_proposed_because,
            )
            for one in sheet.proposals
        ),
    )


def quantities_answer(quantities: tuple[schema.Quantity, ...]) -> SettingsAnswer | None:
    """Kept settings as an answer."""
    return settings_answer(fields_of(quantities))


def change_answer(ended: ChangeEnd, read_back: tuple[schema.Quantity, ...] = ()) -> WriteAnswer:
    """A change's end as data; ``read_back`` in the controller's own words, where somebody shows them."""
    return WriteAnswer(
        outcome=ended.state.phase.name,
        read_back_equal=ended.is_read_back_equal,
        text=change_in_words(ended),
        read_back=read_back,
    )


def change_in_words(ended: ChangeEnd) -> str:
    """What became of the settings, and why."""
    reasons = " ".join(f"{refusal}." for refusal in ended.state.because)
    bump = ended.state.op_bump_pct
    bumped = "" if bump is None else f"The output moved by {bump:+.2f} % when the mode went back."
    match ended.state.phase:
        case Phase.WRITTEN:
            what = "The controller holds the confirmed values."
        case Phase.PUT_BACK:
            what = "The settings as found are back in the controller."
        case _:
            what = "GO TO THE PANEL NOW and compare the settings and the mode with the sheet."
    return " ".join(part for part in (what, reasons, bumped) if part)
