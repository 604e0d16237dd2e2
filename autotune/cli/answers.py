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

_BRIEF_ROWS = 8
_COMPARED = ("peak_sensitivity", "overshoot_pct", "load_iae_pct_s")
_WIDE_COLUMNS = 104


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
    """Proposals side by side with the settings as found, in the controller's own words and units.

    They stand in the order of the sheet, the best suited first.  ``is_brief`` shows the first few and tells the
    cautions of the recommended one only.  A caution that several share is told once.
    """
    proposals = [one for one in sheet.proposals if one.settings]
    shown = proposals[:_BRIEF_ROWS] if is_brief else proposals
    voice.say()
    voice.say("Proposals", style="head")
    voice.console.print(_comparison(sheet, shown, is_wide=voice.console.width >= _WIDE_COLUMNS))
    if sheet.proposals_reason:
        is_any = any(one.is_recommended for one in proposals)
        words = "* recommended: " if is_any else "Nothing is recommended: "
        voice.say(f"  {words}{sheet.proposals_reason}", "caution")
    _show_cautions(voice, [one for one in shown if one.is_recommended or not is_brief])
    if is_brief:
        others = len(sheet.proposals) - len(shown)
        voice.say(f"  'autotune propose CONFIG {sheet.sheet_id}' shows {others} more, and what speaks against each.")
    else:
        for proposal in sheet.proposals:
            if proposal.not_proposed_because is not None:
                voice.say(f"  {proposal.name}: not proposed. {proposal.not_proposed_because}", style="quiet")
    voice.say()


def _comparison(sheet: schema.Sheet, proposals: Sequence[schema.Proposal], *, is_wide: bool) -> Table:
    """A narrow terminal has room for the margin only."""
    as_found = () if sheet.as_found is None else sheet.as_found.settings
    fields = proposals[0].settings if proposals else as_found
    figures = [
        one
        for one in (proposals[0].figures if proposals else ())
        if one.name in (_COMPARED if is_wide else _COMPARED[:1])
    ]
    table = Table(box=None, padding=(0, 2, 0, 0), show_edge=False)
    table.add_column("", no_wrap=True)
    titles = [f"{one.label} {one.unit}".rstrip() for one in (*fields, *figures)]
    for title in (*titles, "rounded", "gain x"):
        table.add_column(title, justify="right", header_style="quiet", no_wrap=True)
    table.add_row("as found", *_amounts(as_found, fields), *_amounts(sheet.as_found_figures, figures, 3), "", "1")
    for one in proposals:
        factor = "-" if one.gain_factor is None else f"{one.gain_factor:.2f}"
        rounding = "-" if one.rounding_pct is None else f"{one.rounding_pct:.2f} %"
        name = f"{one.name} *" if one.is_recommended else one.name
        table.add_row(name, *_amounts(one.settings, fields), *_amounts(one.figures, figures, 3), rounding, factor)
    return table


def _show_cautions(voice: Voice, proposals: Sequence[schema.Proposal]) -> None:
    told: set[str] = set()
    for proposal in proposals:
        for caution in proposal.cautions:
            if caution not in told:
                voice.say(f"  {proposal.name}: {caution}", style="caution" if proposal.is_recommended else "quiet")
            told.add(caution)


def _amounts(quantities: Sequence[schema.Quantity], wanted: Sequence[schema.Quantity], digits: int = 4) -> list[str]:
    """The amounts of the wanted names, in their order."""
    amounts = {one.name: one.amount for one in quantities}
    return ["-" if (amount := amounts.get(one.name)) is None else f"{amount:.{digits}g}" for one in wanted]
