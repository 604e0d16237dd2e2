"""After our own death: read first, then give back only what is surely still ours.

A journal without an end, whose test had begun to write, is an open intent.  The loop's lock is held
while it is looked at, so no living test can be mistaken for a dead one.
"""

import asyncio
from collections.abc import Callable
from dataclasses import replace
from datetime import datetime, timedelta

from autotune.config.types import LoopConfig
from autotune.confirmed_write.limits import changed_fields
from autotune.confirmed_write.plan import WritePlan
from autotune.errors import LinkError, WriteForbidden
from autotune.experiment.events import HandBackEnded, HandBackResult
from autotune.experiment.gate import gate_hand_back
from autotune.experiment.hand_back import by_hand, is_as_found
from autotune.experiment.held import Held, is_ours
from autotune.experiment.plan import TestPlan
from autotune.field.link import LoopLink
from autotune.field.translate import WireCommand, to_raw
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.sample import Sample
from autotune.loop.settings import BlockFields
from autotune.loop.write import WriteReport
from autotune.service.hand_back import HandBackRun
from autotune.service.journal import FileJournal
from autotune.service.journal_intents import OpenIntent, open_intents
from autotune.service.journal_reading import resume_journal
from autotune.service.reading import LoopReader
from autotune.service.workplace import Workplace

Say = Callable[[str], None]

NOT_SETTLED = "what broke off before is not settled: go to the panel and compare the loop with the values named"


async def recover(workplace: Workplace, loop: LoopConfig, say: Say) -> bool:
    """Settle every open intent of ``loop``, whose lock the caller holds; whether the loop is settled now.

    An intent that stays unsettled is said with as found beside present, and is looked at again next time.
    """
    settled = True
    for intent in open_intents(workplace.data_dir):
        if intent.fault is not None:
            say(f"A journal can't be read, so a loop may be as a test left it: {intent.fault}")
            settled = False
        elif intent.plan is not None and intent.plan.loop == loop.name:
            settled &= await _settle(workplace, loop, intent, intent.plan, say)
        elif intent.write_plan is not None and intent.write_plan.loop == loop.name:
            settled &= await _settle_write(workplace, loop, intent, intent.write_plan, say)
    return settled


async def _settle(workplace: Workplace, loop: LoopConfig, intent: OpenIntent, plan: TestPlan, say: Say) -> bool:
    as_found = intent.as_found
    if as_found is None:
        say(
            f"{intent.journal_id} broke off and its journal does not tell what was found: "
            "compare the loop with the panel"
        )
        return False
    say(f"The test {intent.journal_id} broke off. Reading {loop.name} before anything else.")
    link = workplace.open_link(loop)
    journal = resume_journal(intent.file, wall_clock=workplace.wall_clock)
    try:
        ended = await _look_and_give_back(workplace, loop, link, journal, intent, plan, as_found)
        is_settled = ended.result is not HandBackResult.NOT_CONFIRMED
        journal.record("event", ended, t_s=ended.t_s, durable=True)
        if is_settled:
            journal.record("end", f"recovered: {ended.result.value}", t_s=ended.t_s, durable=True)
    finally:
        journal.close()
        await link.close()
    stranded = "" if is_settled else "STRANDED. GO TO THE PANEL NOW. "
    say(f"{stranded}{loop.name}: {ended.result.value}; {ended.detail}")
    return is_settled


async def _settle_write(workplace: Workplace, loop: LoopConfig, intent: OpenIntent, plan: WritePlan, say: Say) -> bool:
    """A write of settings that broke off is only looked at: all old or all new, and not left in manual."""
    say(f"The write {intent.journal_id} broke off. Reading {loop.name}; nothing is written.")
    link = workplace.open_link(loop)
    try:
        fields, sample = await LoopReader(loop, link).read_settings_and_sample()
    except LinkError as fault:
        say(f"{loop.name} can't be read: {fault}")
        return False
    finally:
        await link.close()
    is_old, is_new = not changed_fields(plan.as_found, fields), not changed_fields(plan.fields, fields)
    if (is_old or is_new) and sample.mode is not LoopMode.MAN:
        which = "as found" if is_old else f"those of {plan.proposal}"
        say(f"{loop.name} is in {sample.mode.value} and holds the settings {which}.")
        _end_journal(workplace, intent, f"recovered: settings {which}")
        return True
    say(
        f"GO TO THE PANEL. {loop.name} is in {sample.mode.value} and holds {fields_in_words(fields)}; "
        f"as found {fields_in_words(plan.as_found)}; to be written {fields_in_words(plan.fields)}. "
        f"Put the mode right there; 'autotune restore' writes the settings as found back."
    )
    return False


def has_open_intent(workplace: Workplace, loop: LoopConfig) -> bool:
    """Whether a test or a write of settings of ``loop`` broke off and is not settled."""
    plans = (intent.plan or intent.write_plan for intent in open_intents(workplace.data_dir))
    return any(plan is not None and plan.loop == loop.name for plan in plans)


def close_write_intents(workplace: Workplace, loop: LoopConfig) -> None:
    """End the journals of broken-off writes of ``loop``, after its settings were restored and read back."""
    for intent in open_write_intents(workplace, loop):
        _end_journal(workplace, intent, "recovered: settings restored")


def open_write_intents(workplace: Workplace, loop: LoopConfig) -> tuple[OpenIntent, ...]:
    """The writes of settings of ``loop`` that broke off."""
    return tuple(
        intent
        for intent in open_intents(workplace.data_dir)
        if intent.write_plan is not None and intent.write_plan.loop == loop.name
    )


def fields_in_words(fields: BlockFields) -> str:
    """Settings in one line, in the controller's own units."""
    numbers = (("gain", fields.gain), ("integral", fields.integral), ("derivative", fields.derivative))
    return ", ".join(f"{name} {number:g}" for name, number in numbers if number is not None)


def _end_journal(workplace: Workplace, intent: OpenIntent, text: str) -> None:
    journal = resume_journal(intent.file, wall_clock=workplace.wall_clock)
    try:
        journal.record("end", text, t_s=asyncio.get_running_loop().time(), durable=True)
    finally:
        journal.close()


async def _look_and_give_back(
    workplace: Workplace,
    loop: LoopConfig,
    link: LoopLink,
    journal: FileJournal,
    intent: OpenIntent,
    plan: TestPlan,
    as_found: AsFound,
) -> HandBackEnded:
    now_s = asyncio.get_running_loop().time
    reader = LoopReader(loop, link)
    try:
        sample = await reader.read_sample()
    except LinkError as fault:
        return HandBackEnded(now_s(), HandBackResult.NOT_CONFIRMED, f"{fault}; {by_hand(as_found)}")
    if sample.guard is None and is_as_found(plan, as_found, sample):
        return HandBackEnded(now_s(), HandBackResult.RESTORED, f"nothing had to be written; {by_hand(as_found)}")
    held = held_at_the_end(intent, plan)
    doubt = why_not_ours(intent, plan, as_found, sample, workplace.wall_clock(), loop.recover_within_s)
    if doubt is not None:
        present = f"present: output {_shown(sample.op_pct)}, setpoint {_shown(sample.sp_pct)}, mode {sample.mode.value}"
        return HandBackEnded(now_s(), HandBackResult.NOT_CONFIRMED, f"{doubt}; {present}; {by_hand(as_found)}")

    async def write(command: WireCommand) -> WriteReport:
        refusal = gate_hand_back(as_found, plan.token, command)
        if refusal is not None:
            raise WriteForbidden(str(refusal))
        journal.record("command", command, t_s=now_s(), durable=True)
        return await link.write(to_raw(loop, command))

    return await HandBackRun(plan, as_found, held, reader, write).run()


def held_at_the_end(intent: OpenIntent, plan: TestPlan) -> Held:
    """What we held when we died.

    The last write of the journal may never have gone out: we write it down before we send it.  So until its answer
    is written down too, the loop may just as well stand where the write before has left it; both are ours.
    """
    output, mode = intent.last_output, intent.last_mode
    held = Held(token=plan.token)
    if mode is not None:
        held = replace(held, mode=mode.mode, modes_may_read=intent.modes)
    if output is not None and intent.outputs_pct:
        held = replace(
            held,
            op_pct=output.op_pct,
            sequence=output.sequence,
            heartbeat=output.heartbeat,
            op_may_read_pct=(min(intent.outputs_pct), max(intent.outputs_pct)),
        )
    return held


def why_not_ours(
    intent: OpenIntent, plan: TestPlan, as_found: AsFound, sample: Sample, now: datetime, within_s: float
) -> str | None:
    """Why nothing may be written now though nobody else has the loop, or ``None``.

    By itself a recovery writes only when the token is still ours, the PLC has not restarted, mode and output are
    such as our last writes explain, and the intent is young.  Exactly these outputs count, none between them: a
    block that was on its way has long arrived.  A guard that gave back, a restart and a mode that is not ours are
    left to ``next_hand_back_step``, which writes nothing then but the release of our token.
    """
    if sample.guard is not None and not is_ours(sample.guard, plan.token):
        return None
    if as_found.boot_count is not None and sample.boot_count != as_found.boot_count:
        return None
    if sample.mode not in (intent.modes or (as_found.mode,)):
        return None
    age = None if intent.last_utc is None else now - intent.last_utc
    if age is None or not timedelta(0) <= age <= timedelta(seconds=within_s):
        return f"the test broke off longer ago than recover_within_s = {within_s:g} s, so nothing is written"
    resolution_pct = plan.limits.op_resolution_pct
    is_explained = sample.op_pct is not None and any(
        abs(sample.op_pct - output_pct) <= resolution_pct for output_pct in intent.outputs_pct
    )
    if sample.mode is LoopMode.MAN and intent.last_output is not None and not is_explained:
        return f"the output is not at our last write of {intent.last_output.op_pct:.2f} %, so nothing is written"
    return None


def _shown(reading_pct: float | None) -> str:
    return "unknown" if reading_pct is None else f"{reading_pct:.2f} %"
