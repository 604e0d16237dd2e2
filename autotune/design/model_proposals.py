"""From a process model to settings side by side: one robust optimum for the purpose, and the published rules."""

from dataclasses import dataclass
from math import inf

from autotune.design.candidates import (
    AveragingDemand,
    Candidate,
    averaging_candidate,
    optimum_candidate,
    rule_candidates,
)
from autotune.design.cautions import caution_change, caution_noise, caution_rounding
from autotune.design.choices import Caution, Purpose
from autotune.design.draws import draws_on_grid
from autotune.design.forecast import NEAR_SENSITIVITY, Forecast, ForecastBench, forecast, forecast_bench
from autotune.design.loop_grid import seen_plant
from autotune.design.optimum import loop_bench
from autotune.design.proposal import NotProposed, Proposal, ProposalSheet
from autotune.design.readings import plant_readings
from autotune.identify.model import ModelWithDraws
from autotune.loop.block_units import Rounded, from_block, rounded, to_block
from autotune.loop.conversion import to_form
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockDescription, BlockFields, PidSettings
from autotune.loop.span import Span

DELAY_REFUSED_SCANS = 2.0
"""Executions of the block that must be left before the loop swings (common practice, no source)."""


@dataclass(frozen=True, slots=True)
class _Loop:
    """What every proposal is judged against; the fields are those of ``propose_from_model``."""

    block: BlockDescription
    action: ControlAction
    pv_span: Span
    present: PidSettings | Refusal | None
    noise_pct: float | None
    ready: ForecastBench | Refusal


def propose_from_model(
    *,
    model: ModelWithDraws,
    block: BlockDescription,
    action: ControlAction,
    pv_span: Span,
    purpose: Purpose = Purpose.REGULATE,
    caution: Caution = Caution.MIDDLE,
    present: BlockFields | None = None,
    noise_pct: float | None = None,
    op_delay_s: float = 0.0,
    dead_band_pct: float | None = None,
    averaging: AveragingDemand | None = None,
) -> ProposalSheet:
    """The robust optimum for ``purpose`` and all rules side by side, each with its forecast, ordered for the purpose.

    ``noise_pct`` is the standard deviation of PV at rest, ``op_delay_s`` the time from reading PV to OP's effect,
    ``dead_band_pct`` the measured dead band of the valve in percent of OP.  ``averaging`` is needed for that
    purpose only.  What doesn't suit the loop, is unstable on the model or doesn't fit the block is in
    ``not_proposed``; ``recommended`` is ``None`` where nothing carries one.
    """
    present_settings = None if present is None else from_block(present, block, action, pv_span)
    ready = _ready(model, block, op_delay_s, noise_pct, dead_band_pct)
    loop = _Loop(block, action, pv_span, present_settings, noise_pct, ready)
    if purpose is Purpose.AVERAGING:
        first = averaging_candidate(model.best, averaging)
    else:
        first = optimum_candidate(ready, purpose, caution, lambda settings: _as_held(settings, loop))
    proposals: list[Proposal] = []
    not_proposed: list[NotProposed] = []
    suited = set()
    for candidate in (first, *rule_candidates(plant_readings(model.best))):
        column = _column(candidate, loop)
        if isinstance(column, Refusal):
            not_proposed.append(NotProposed(candidate.name, candidate.title, candidate.source, column))
        else:
            proposals.append(column)
            suited.update([candidate.name] if purpose in candidate.purposes else [])
    proposals.sort(key=lambda column: (column.name != first.name, column.name not in suited, _cost(column, purpose)))
    recommended, reason = _recommend(proposals, not_proposed, first)
    return ProposalSheet(
        tuple(proposals), tuple(not_proposed), recommended, reason, _forecast_of_present(present_settings, ready)
    )


def _ready(
    model: ModelWithDraws,
    block: BlockDescription,
    op_delay_s: float,
    noise_pct: float | None,
    dead_band_pct: float | None,
) -> ForecastBench | Refusal:
    if block.scan_s is None:
        return Refusal("SCAN_NOT_DECLARED", "the block's execution time is not declared", "declare scan_s")
    bench = loop_bench(seen_plant(model.best, block.scan_s, op_delay_s), block)
    return forecast_bench(bench, model, draws_on_grid(model, bench.plant), noise_pct, dead_band_pct)


def _forecast_of_present(
    present: PidSettings | Refusal | None, ready: ForecastBench | Refusal
) -> Forecast | Refusal | None:
    if present is None or isinstance(present, Refusal):
        return present
    return ready if isinstance(ready, Refusal) else forecast(ready, present)


def _held(settings: PidSettings, loop: _Loop) -> tuple[Rounded, PidSettings] | Refusal:
    """The rounded numbers, and what the block does with them."""
    fields = to_block(settings, loop.block, loop.action, loop.pv_span)
    held = fields if isinstance(fields, Refusal) else rounded(fields, loop.block)
    if isinstance(held, Refusal):
        return held
    as_held = from_block(held.fields, loop.block, loop.action, loop.pv_span)
    return as_held if isinstance(as_held, Refusal) else (held, as_held)


def _as_held(settings: PidSettings, loop: _Loop) -> PidSettings | Refusal:
    held = _held(settings, loop)
    return held if isinstance(held, Refusal) else held[1]


def _column(candidate: Candidate, loop: _Loop) -> Proposal | Refusal:
    """One candidate in the block's form and units with its forecast, or why not."""
    if isinstance(candidate.settings, Refusal):
        return candidate.settings
    in_block_form = to_form(candidate.settings, loop.block.form)
    if isinstance(in_block_form, Refusal):
        return in_block_form
    fitted = _held(in_block_form, loop)
    if isinstance(fitted, Refusal):
        return fitted
    held, as_held = fitted
    foreseen = loop.ready if isinstance(loop.ready, Refusal) else forecast(loop.ready, as_held)
    if isinstance(foreseen, Forecast) and (refusal := _check_forecast(foreseen)) is not None:
        return refusal
    gain_factor = None
    if isinstance(loop.present, PidSettings):
        gain_factor = in_block_form.controller_gain / loop.present.controller_gain
    return Proposal(
        name=candidate.name,
        title=candidate.title,
        source=candidate.source,
        settings=candidate.settings,
        in_block_form=in_block_form,
        fields=held.fields,
        rounding_pct=held.largest_change_pct,
        gain_factor=gain_factor,
        cautions=_cautions(candidate, foreseen, in_block_form, held.largest_change_pct, loop),
        suits=candidate.suits,
        forecast=foreseen,
    )


def _check_forecast(foreseen: Forecast) -> Refusal | None:
    """Refuse what must not be tried on this model."""
    found = foreseen.margins
    if not found.is_stable:
        return Refusal(
            "UNSTABLE_HERE", "the loop would be unstable on the identified model", "choose settings with margins"
        )
    if found.delay_margin_scan_ratio is not None and found.delay_margin_scan_ratio < DELAY_REFUSED_SCANS:
        return Refusal(
            "DELAY_MARGIN",
            f"the loop swings if the block is late by {found.delay_margin_scan_ratio:.2g} of its executions",
            "choose calmer settings or a shorter scan",
        )
    return None


def _cautions(
    candidate: Candidate, foreseen: Forecast | Refusal, settings: PidSettings, rounding_pct: float, loop: _Loop
) -> tuple[str, ...]:
    """All sentences beside one proposal; ``settings`` are in the block's form."""
    sentences = [*candidate.words]
    if isinstance(foreseen, Forecast):
        sentences += foreseen.warnings
    else:
        sentences.append(f"No forecast: {foreseen.reason}; {foreseen.remedy}.")
    sentences += caution_noise(settings, loop.block, loop.noise_pct)
    sentences += caution_rounding(rounding_pct)
    if isinstance(loop.present, PidSettings):
        sentences += caution_change(settings, loop.present, loop.block, loop.action, loop.pv_span)
    elif loop.present is not None:
        sentences.append(f"The present settings are not understood, so compare by hand: {loop.present.reason}.")
    return tuple(sentences)


def _cost(column: Proposal, purpose: Purpose) -> float:
    """What the purpose wants little of; settings with thin margins come after all others."""
    foreseen = column.forecast
    if not isinstance(foreseen, Forecast) or foreseen.setpoint is None or foreseen.load is None:
        return inf
    thin = 1e6 if (foreseen.margins.peak_sensitivity or inf) > NEAR_SENSITIVITY else 1.0
    if purpose is Purpose.FOLLOW:
        return thin * foreseen.setpoint.iae_pct_s * (1.0 + foreseen.setpoint.overshoot_pct / 10.0)
    if purpose is Purpose.REGULATE:
        return thin * foreseen.load.iae_pct_s
    return thin * (foreseen.setpoint.travel_pct + foreseen.load.travel_pct)


def _recommend(proposals: list[Proposal], not_proposed: list[NotProposed], first: Candidate) -> tuple[str | None, str]:
    """The optimum with its reason and risks, or what stands against it."""
    for refused in not_proposed:
        if refused.name == first.name:
            return None, f"Nothing is recommended: {refused.refusal.reason}; {refused.refusal.remedy}."
    chosen = next(column for column in proposals if column.name == first.name)
    foreseen = chosen.forecast
    if not isinstance(foreseen, Forecast):
        return None, "Nothing is recommended: no forecast stands behind it. Declare the block, then propose again."
    if foreseen.limit_cycle is not None:
        return None, f"Nothing is recommended: {foreseen.warnings[-1]}"
    ms = foreseen.peak_sensitivity
    risks = "It stands on one test at one operating point"
    if ms is not None and ms.high > ms.best:
        risks += f"; over what the model may be instead, Ms reaches {ms.high:.2f}"
    return chosen.name, (
        f"{chosen.title} suits {chosen.suits}. {' '.join(first.words)} Ms is {ms.best if ms else inf:.2f}. "
        f"Its risks: {risks}. Try it with a small bump, with somebody at the panel."
    )
