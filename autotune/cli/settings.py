"""``propose``, ``write`` and ``restore``: settings compared, confirmed, written, read back, put back."""

from typing import Literal

from rich.table import Table

from autotune.cli.answers import proposals_table
from autotune.cli.exit_codes import ExitCode
from autotune.cli.operators import Operator
from autotune.cli.printing import Voice
from autotune.cli.sheets import stored_sheet
from autotune.cli.signals import hear_signals
from autotune.config.types import LoopConfig
from autotune.confirmed_write.phases import Phase
from autotune.confirmed_write.plan import WritePlan
from autotune.loop.outcome import Refusal
from autotune.service.answers import change_answer, change_in_words, proposals_answer
from autotune.service.cautions import BEFORE_SETTINGS_ARE_WRITTEN
from autotune.service.changing import ChangeEnd, SettingsChange, digest_to_type, earlier_settings
from autotune.service.local_api import WriteAnswer
from autotune.service.persons import person_at_the_terminal
from autotune.service.recovery import (
    NOT_SETTLED,
    close_write_intents,
    has_open_intent,
    open_write_intents,
    recover,
)
from autotune.service.sheet_mapping import settings_quantities
from autotune.service.workplace import Workplace

_EXITS = {Phase.WRITTEN: ExitCode.DONE, Phase.PUT_BACK: ExitCode.NO, Phase.UNVERIFIED: ExitCode.STRANDED}
_STYLES = {Phase.WRITTEN: "good", Phase.PUT_BACK: "caution", Phase.UNVERIFIED: "stop"}


def propose(voice: Voice, workplace: Workplace, name: str) -> ExitCode:
    """A sheet's proposals; 1 when there are none."""
    stored = stored_sheet(workplace, name)
    voice.say(f"{stored.sheet.loop}  {stored.sheet.service}  sheet {stored.sheet.sheet_id}", style="head")
    proposals_table(voice, stored.sheet)
    voice.answer(proposals_answer(stored.sheet))
    return ExitCode.DONE if any(one.settings for one in stored.sheet.proposals) else ExitCode.NO


async def write(voice: Voice, workplace: Workplace, name: str, proposal: str, operator: Operator) -> ExitCode:
    """Write one proposal of a sheet after its digest was typed."""
    stored = stored_sheet(workplace, name)
    loop = workplace.loop(stored.sheet.loop)
    async with SettingsChange(workplace, loop) as change:
        if not await recover(workplace, loop, voice.say):
            return _not_settled(voice)
        plan = await change.plan_proposal(stored, proposal)
        return await _confirm_and_write(voice, change, plan, "write", stored.sheet.sheet_id, operator)


async def restore(
    voice: Voice, workplace: Workplace, loop: LoopConfig, sheet: str | None, operator: Operator
) -> ExitCode:
    """First give back what a broken-off test left, then offer the settings as found."""
    async with SettingsChange(workplace, loop) as change:
        was_broken_off = has_open_intent(workplace, loop)
        if not await recover(workplace, loop, voice.say) and not open_write_intents(workplace, loop):
            return _not_settled(voice)
        if was_broken_off and sheet is None and not workplace.store.list(loop.name):
            text = f"no sheet of {loop.name} is kept yet, so there are no earlier settings to restore"
            voice.say(f"{text[0].upper()}{text[1:]}.")
            voice.answer(WriteAnswer(outcome="NOTHING_TO_WRITE", read_back_equal=False, text=text))
            return ExitCode.DONE
        sheet_id, settings = earlier_settings(workplace, loop, sheet)
        plan = await change.plan_restore(settings, f"as found on {sheet_id}")
        if isinstance(plan, Refusal) and plan.code == "NOTHING_TO_WRITE":
            voice.say(
                f"{loop.name} holds the settings as found on {sheet_id}; there is nothing to write.", style="good"
            )
            voice.answer(WriteAnswer(outcome="NOTHING_TO_WRITE", read_back_equal=True, text=str(plan)))
            return ExitCode.DONE
        code = await _confirm_and_write(voice, change, plan, "restore", sheet_id, operator)
        if code is ExitCode.DONE:
            close_write_intents(workplace, loop)
        return code


def _not_settled(voice: Voice) -> ExitCode:
    voice.answer(WriteAnswer(outcome="STRANDED", read_back_equal=False, text=NOT_SETTLED))
    return ExitCode.STRANDED


async def _confirm_and_write(
    voice: Voice,
    change: SettingsChange,
    plan: WritePlan | Refusal,
    kind: Literal["write", "restore"],
    sheet_id: str,
    operator: Operator,
) -> ExitCode:
    ended = plan if isinstance(plan, Refusal) else await confirmed_change(voice, change, plan, kind, sheet_id, operator)
    if isinstance(ended, Refusal):
        voice.say(f"Refused, nothing was written. {ended}", style="stop")
        voice.answer(WriteAnswer(outcome="REFUSED", read_back_equal=False, text=str(ended)))
        return ExitCode.NO
    voice.answer(change_answer(ended))
    return _EXITS[ended.state.phase]


async def confirmed_change(
    voice: Voice,
    change: SettingsChange,
    plan: WritePlan,
    kind: Literal["write", "restore"],
    sheet_id: str,
    operator: Operator,
) -> ChangeEnd | Refusal:
    """Show the exact values, have the digest typed, write, and say how it ended."""
    show_plan(voice, change.loop, plan)
    typed = operator.types_digest(BEFORE_SETTINGS_ARE_WRITTEN, digest_to_type(plan))
    if isinstance(typed, Refusal):
        return typed
    with hear_signals(change.put_back):
        ended = await change.write(kind, sheet_id, plan, typed, person_at_the_terminal(operator.name))
    if not isinstance(ended, Refusal):
        phase = ended.state.phase
        voice.say(f"{phase.name}. {change_in_words(ended)}", style=_STYLES[phase])
    return ended


def show_plan(voice: Voice, loop: LoopConfig, plan: WritePlan) -> None:
    """Present beside new, in the controller's own words and units, in the order of writing."""
    table = Table(box=None, padding=(0, 2), show_edge=False)
    for title in ("field", "holds now", "will hold", "unit"):
        table.add_column(title, justify="left" if title in {"field", "unit"} else "right", header_style="quiet")
    present = settings_quantities(loop, plan.as_found)
    wanted = {one.name: one for one in settings_quantities(loop, plan.fields)}
    for one in sorted(present, key=lambda one: plan.order.index(one.name) if one.name in plan.order else 9):
        new = wanted[one.name].amount
        changed = one.name in plan.order
        table.add_row(one.label, f"{one.amount:.6g}", f"{new:.6g}" if changed else "unchanged", one.unit)
    how = "in manual, with the output held, then back" if plan.write_in_manual else "in the present mode"
    voice.say(f"{loop.name}  {loop.service}: {plan.proposal}", style="head")
    voice.console.print(table)
    voice.say(f"Written from top to bottom, {how}; each value is read back before the next one goes.")
