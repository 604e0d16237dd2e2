"""From the ultimate point to settings side by side, in the controller's own form and units.

The rules are computed from the best estimate, as published; the interval is judged beside them, and
what is recommended must stand on its low end.  Where the test gave a model, ``propose_from_model`` says more.
"""

from dataclasses import dataclass
from math import isfinite

from autotune.design.cautions import (
    GAIN_AT_MOST_RATIO,
    caution_change,
    caution_gain,
    caution_interval,
    caution_noise,
    caution_rounding,
    caution_sensitivity,
)
from autotune.design.margins import sensitivity_at_least
from autotune.design.model_proposals import propose_from_model
from autotune.design.proposal import NotProposed, Proposal, ProposalSheet
from autotune.design.rules import ULTIMATE_RULES, UltimateRule
from autotune.identify.findings import UltimatePoint
from autotune.loop.block_units import from_block, rounded, to_block
from autotune.loop.conversion import to_form
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Interval, Refusal
from autotune.loop.settings import BlockDescription, BlockFields, PidSettings
from autotune.loop.span import Span

__all__ = ["propose", "propose_from_model"]

RECOMMENDED_RULE = "tyreus-luyben-pi"

TOO_WIDE_RATIO = 2.0
"""High over low of the ultimate gain from which nothing is recommended: the rule itself keeps only a factor 3.2."""

DEAD_TIME_RULES_RATIO = 0.5
"""1/(|K| Ku) from which dead time rules a loop.

It is 0 for an integrating plant and 1 for dead time alone, where derivative no longer helps (the gain
ratio of Astrom & Hagglund, Advanced PID Control, 2006, whose own rule lets Td go to 0).
"""


@dataclass(frozen=True, slots=True)
class _Known:
    """What every rule is judged against; the fields are those of ``propose``."""

    ultimate: UltimatePoint
    static_gain: Interval | None
    block: BlockDescription
    action: ControlAction
    pv_span: Span
    present: PidSettings | Refusal | None
    noise_pct: float | None


def propose(
    *,
    ultimate: UltimatePoint,
    static_gain: Interval | None,
    block: BlockDescription,
    action: ControlAction,
    pv_span: Span,
    present: BlockFields | None = None,
    noise_pct: float | None = None,
) -> ProposalSheet:
    """All rules side by side, one of them recommended with its reason and its risks.

    ``static_gain`` is signed %PV/%OP, ``present`` the numbers in the controller now, ``noise_pct`` the
    standard deviation of PV at rest.  A rule that doesn't suit the loop or that the block can't hold is
    in ``not_proposed`` with its reason; ``recommended`` is ``None`` where the data don't carry one.
    """
    present_settings = None if present is None else from_block(present, block, action, pv_span)
    known = _Known(ultimate, static_gain, block, action, pv_span, present_settings, noise_pct)
    loop_refusal = _check_loop(known)
    proposals: list[Proposal] = []
    not_proposed: list[NotProposed] = []
    for rule in ULTIMATE_RULES:
        column = loop_refusal or _column(rule, known)
        if isinstance(column, Refusal):
            not_proposed.append(NotProposed(rule.name, rule.title, rule.source, column))
        else:
            proposals.append(column)
    recommended, reason = _recommend(proposals, not_proposed, ultimate.ultimate_gain)
    return ProposalSheet(tuple(proposals), tuple(not_proposed), recommended, reason)


def _check_loop(known: _Known) -> Refusal | None:
    """Refuse every rule where nothing can stand on what was found."""
    for interval in (known.ultimate.ultimate_gain, known.ultimate.ultimate_period_s):
        if not (interval.low > 0.0 and isfinite(interval.high)):
            return Refusal(
                "ULTIMATE_POINT_UNKNOWN",
                f"the ultimate point reaches from {interval.low:g} to {interval.high:g}, and no settings stand on that",
                "repeat the test, longer or with a larger step",
            )
    gain, sign = known.static_gain, known.action.process_sign
    if gain is not None and sign * gain.low < 0.0 and sign * gain.high < 0.0:
        return Refusal(
            "ACTION_CONTRADICTED",
            f"the plant's gain is {gain.best:.3g} %PV/%OP, and a {known.action.value} controller would drive PV away",
            "check the control action at the controller before anything else",
        )
    return None


def _column(rule: UltimateRule, known: _Known) -> Proposal | Refusal:
    """One rule in the block's form and units, or why not."""
    ku, tu_s = known.ultimate.ultimate_gain, known.ultimate.ultimate_period_s
    if (refusal := _check_derivative(rule, known)) is not None:
        return refusal
    settings = rule.settings(ku.best, tu_s.best)
    in_block_form = to_form(settings, known.block.form)
    if isinstance(in_block_form, Refusal):
        return in_block_form
    fields = to_block(in_block_form, known.block, known.action, known.pv_span)
    held = fields if isinstance(fields, Refusal) else rounded(fields, known.block)
    if isinstance(held, Refusal):
        return held
    gain_factor = None
    if isinstance(known.present, PidSettings):
        gain_factor = in_block_form.controller_gain / known.present.controller_gain
    return Proposal(
        name=rule.name,
        title=rule.title,
        source=rule.source,
        settings=settings,
        in_block_form=in_block_form,
        fields=held.fields,
        rounding_pct=held.largest_change_pct,
        gain_factor=gain_factor,
        cautions=_cautions(rule, known, in_block_form, held.largest_change_pct),
        suits=rule.suits,
    )


def _cautions(rule: UltimateRule, known: _Known, settings: PidSettings, rounding_pct: float) -> tuple[str, ...]:
    """All sentences beside one proposal; ``settings`` are in the block's form."""
    block, ultimate = known.block, known.ultimate
    ms_at_least = sensitivity_at_least(
        settings, block.derivative_filter_ratio, ultimate.ultimate_gain.low, ultimate.ultimate_period_s.best
    )
    sentences = [
        f"Limits of use: {rule.limits}.",
        *caution_interval(ultimate),
        *caution_gain(settings, ultimate.ultimate_gain),
        *caution_sensitivity(ms_at_least),
        *caution_noise(settings, block, known.noise_pct),
        *caution_rounding(rounding_pct),
    ]
    if rule.derivative_ratio is not None and _dead_time_ratio(known) is None:
        sentences.append("The static gain isn't known: if dead time rules this loop, this rule can make it unstable.")
    if isinstance(known.present, PidSettings):
        sentences += caution_change(settings, known.present, block, known.action, known.pv_span)
    elif known.present is not None:
        sentences.append(f"The present settings are not understood, so compare by hand: {known.present.reason}.")
    return tuple(sentences)


def _check_derivative(rule: UltimateRule, known: _Known) -> Refusal | None:
    dead_time_ratio = _dead_time_ratio(known)
    if rule.derivative_ratio is None or dead_time_ratio is None or dead_time_ratio <= DEAD_TIME_RULES_RATIO:
        return None
    return Refusal(
        "DEAD_TIME_RULES",
        f"1/(K Ku) is at least {dead_time_ratio:.2g}: dead time rules this loop, and this rule's derivative can "
        "make it unstable",
        "choose a PI",
    )


def _dead_time_ratio(known: _Known) -> float | None:
    """The least that 1/(|K| Ku) can be; ``None`` where the static gain is unknown or may be zero."""
    gain = known.static_gain
    if gain is None or gain.low <= 0.0 <= gain.high:
        return None
    return 1.0 / (max(abs(gain.low), abs(gain.high)) * known.ultimate.ultimate_gain.high)


def _recommend(
    proposals: list[Proposal], not_proposed: list[NotProposed], ultimate_gain: Interval
) -> tuple[str | None, str]:
    """One name with its reason and risks, or ``None`` with what stands against it."""
    for refused in not_proposed:
        if refused.name == RECOMMENDED_RULE:
            return None, f"Nothing is recommended: {refused.refusal.reason}; {refused.refusal.remedy}."
    chosen = next(proposal for proposal in proposals if proposal.name == RECOMMENDED_RULE)
    share_ratio = chosen.in_block_form.controller_gain / ultimate_gain.low
    if not (ultimate_gain.high <= TOO_WIDE_RATIO * ultimate_gain.low and share_ratio <= GAIN_AT_MOST_RATIO):
        return None, (
            f"Nothing is recommended: the ultimate gain may lie anywhere between {ultimate_gain.low:.3g} and "
            f"{ultimate_gain.high:.3g} %OP/%PV, and settings have to stand on the low end. "
            "Repeat the test, longer or with a larger step."
        )
    return chosen.name, (
        f"{chosen.title} is the calmest PI of these rules; its gain is {100.0 * share_ratio:.0f} % of the least that "
        "the ultimate gain may be. Its risks: it stands on one point of the frequency response only. A plant of two "
        "large lags with almost no dead time can ring or even be unstable with it, a loop that dead time rules will "
        "be slow, and a level that should average is held too tightly. Try it with a small bump, with somebody at "
        "the panel."
    )
