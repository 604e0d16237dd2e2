"""Findings and proposals as a person compares them, and as data."""

from collections.abc import Sequence
from math import tau

from rich.table import Table

from autotune.cli.printing import Voice
from autotune.config.types import LoopConfig
from autotune.identify.findings import Findings
from autotune.loop.outcome import Refusal
from autotune.service.testing import TestEnd
from autotune.sheet import schema


def show_findings(voice: Voice, loop: LoopConfig, ended: TestEnd) -> None:
    """What was seen, what it means and how sure that is."""
    match ended.findings:
        case None:
            return
        case Refusal() as refusal:
            voice.say(f"No findings: {refusal}", style="caution")
            return
        case Findings() as findings:
            pass
    ultimate, seen = findings.ultimate, findings.describing_function
    gain, period = ultimate.ultimate_gain, ultimate.ultimate_period_s
    voice.say()
    voice.say("Findings", style="head")
    voice.say(f"  ultimate gain    {gain.best:8.3g} %/%   95 % interval {gain.low:.3g} .. {gain.high:.3g}")
    voice.say(f"  ultimate period  {period.best:8.3g} s     95 % interval {period.low:.3g} .. {period.high:.3g}")
    voice.say(f"  {ultimate.method}; times by the {findings.time_base.value}", style="quiet")
    textbook_s = tau / seen.frequency_rad_per_s
    voice.say(
        f"  textbook reading for comparison: 4d/(pi a) = {1.0 / seen.gain:.3g} at {textbook_s:.3g} s", style="quiet"
    )
    for reason in ultimate.because:
        voice.say(f"  because {reason}", style="quiet")
    for caution in findings.cautions:
        voice.say(f"  caution: {caution}", style="caution")


def proposals_table(voice: Voice, sheet: schema.Sheet, *, is_brief: bool = False) -> None:
    """All proposals side by side with the settings as found, in the controller's own words and units.

    ``is_brief`` tells the cautions of the recommended one only.  A caution that all share is told once.
    """
    as_found = () if sheet.as_found is None else sheet.as_found.settings
    proposals = [one for one in sheet.proposals if one.settings]
    fields = proposals[0].settings if proposals else as_found
    table = Table(box=None, padding=(0, 2, 0, 0), show_edge=False)
    table.add_column("", no_wrap=True)
    for one in fields:
        table.add_column(f"{one.label} {one.unit}", justify="right", header_style="quiet", no_wrap=True)
    table.add_column("rounded", justify="right", header_style="quiet", no_wrap=True)
    table.add_column("gain x", justify="right", header_style="quiet", no_wrap=True)
    table.add_row("as found", *_amounts(as_found, len(fields)), "", "1")
    for proposal in proposals:
        mark = " *" if proposal.is_recommended else ""
        factor = "-" if proposal.gain_factor is None else f"{proposal.gain_factor:.2f}"
        rounding = "-" if proposal.rounding_pct is None else f"{proposal.rounding_pct:.2f} %"
        table.add_row(f"{proposal.name}{mark}", *_amounts(proposal.settings, len(fields)), rounding, factor)
    voice.say()
    voice.say("Proposals", style="head")
    voice.console.print(table)
    for proposal in sheet.proposals:
        if proposal.not_proposed_because is not None:
            voice.say(f"  {proposal.name}: not proposed. {proposal.not_proposed_because}", style="quiet")
    if sheet.proposals_reason:
        recommended = any(one.is_recommended for one in proposals)
        voice.say(
            f"  {'* recommended: ' if recommended else 'Nothing is recommended: '}{sheet.proposals_reason}", "caution"
        )
    _show_cautions(voice, [one for one in proposals if one.is_recommended or not is_brief])
    if is_brief and len(proposals) > 1:
        voice.say(f"  'autotune propose CONFIG {sheet.sheet_id}' tells what speaks against each of the others.")
    voice.say()


def _show_cautions(voice: Voice, proposals: Sequence[schema.Proposal]) -> None:
    told: set[str] = set()
    for proposal in proposals:
        for caution in proposal.cautions:
            if caution not in told:
                voice.say(f"  {proposal.name}: {caution}", style="caution" if proposal.is_recommended else "quiet")
            told.add(caution)


def _amounts(quantities: tuple[schema.Quantity, ...], count: int) -> list[str]:
    shown = ["-" if one.amount is None else f"{one.amount:.4g}" for one in quantities]
    return shown + ["-"] * (count - len(shown))
