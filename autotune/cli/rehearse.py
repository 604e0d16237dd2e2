"""``rehearse``: the whole job on the bundled soft plant, over a real socket.

Only here a scripted operator exists, since everything it can reach is the plant that this command
itself has started.
"""

import tempfile
from collections.abc import Sequence
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path

from autotune.cli.check import show_check
from autotune.cli.exit_codes import ExitCode
from autotune.cli.operators import Operator, PersonAtTheTerminal
from autotune.cli.printing import Voice
from autotune.cli.settings import confirmed_change
from autotune.cli.soft_plant import Link, SoftPlant, rehearsal
from autotune.cli.test import permitted_test, show_end
from autotune.config.types import LoopConfig
from autotune.errors import SheetError
from autotune.loop.outcome import Refusal
from autotune.service.aftermath import LoopAfter, watch_afterwards
from autotune.service.answers import change_answer, quantities_answer, test_answer
from autotune.service.changing import ChangeEnd, SettingsChange
from autotune.service.local_api import (
    LoopFoundAnswer,
    LoopNowAnswer,
    RehearsalAnswer,
    WriteAnswer,
    settings_answer,
)
from autotune.service.testing import SupervisedTest, TestEnd
from autotune.service.workplace import Workplace, open_workplace

_STEADY_S = 3.0
_AFTERWARDS_S = 30.0


class ScriptedOperator:
    """Says yes to everything, aloud.  It may only ever be given the soft plant of a rehearsal."""

    name = "scripted operator of the rehearsal"

    def __init__(self, voice: Voice) -> None:
        self._voice = voice

    def allows(self, cautions: Sequence[str], loop: str) -> str:
        """Permission for the soft plant."""
        self._show(cautions)
        self._voice.say(f"(scripted operator types {loop})", style="quiet")
        return "rehearsal on the soft plant; no real output moves"

    def types_digest(self, cautions: Sequence[str], short_digest: str) -> str:
        """The digest, as shown."""
        self._show(cautions)
        self._voice.say("(scripted operator types the digest)", style="quiet")
        return short_digest

    def _show(self, cautions: Sequence[str]) -> None:
        for number, caution in enumerate(cautions, start=1):
            self._voice.say(f" {number}. {caution}", style="caution")


async def rehearse(voice: Voice, loop_name: str, link: Link, *, is_scripted: bool, keep: Path | None) -> ExitCode:
    """Check, enable at the panel, test, compare, confirm, write, read back, watch; all on the soft plant.

    Its records are kept in the new folder ``keep``, or else not at all.
    """
    operator: Operator = ScriptedOperator(voice) if is_scripted else PersonAtTheTerminal(voice)
    with _records(keep) as folder:
        async with rehearsal(link, Path(folder)) as started:
            workplace = open_workplace(started.configuration, may_create=True)
            return await _whole_job(voice, workplace, workplace.loop(loop_name), started.plant, operator)


def _records(keep: Path | None) -> AbstractContextManager[str]:
    if keep is None:
        return tempfile.TemporaryDirectory(prefix="autotune-rehearsal-")
    try:
        keep.mkdir(parents=True)
    except OSError as fault:
        raise SheetError(f"{keep}: {fault.strerror}; name a new folder with --keep") from fault
    return nullcontext(str(keep))


async def _whole_job(
    voice: Voice, workplace: Workplace, loop: LoopConfig, plant: SoftPlant, operator: Operator
) -> ExitCode:
    voice.say("A rehearsal on the bundled soft plant: a skid that pasteurises fruit juice.", style="head")
    voice.say("Nothing real is connected. Every question is the one that a real test asks.")
    voice.say()
    await plant.press(f"enable {loop.name}")
    voice.say(f"(at the plant's panel somebody enables a test of {loop.name})", style="quiet")
    async with SupervisedTest(workplace, loop) as supervised:
        looked = await supervised.look()
        show_check(voice, looked)
        ended = await permitted_test(voice, workplace, supervised, looked, operator) if looked.is_fit else None
    if ended is None:
        voice.say("The rehearsal ends here: the test was not allowed.", style="caution")
        return ExitCode.NO
    show_end(voice, loop, ended)
    change, after = await _change(voice, workplace, loop, ended, operator)
    answer = rehearsal_answer(ended, change, after)
    voice.answer(answer)
    is_done = answer.test.outcome == "COMPLETE" and answer.write is not None and answer.write.outcome == "WRITTEN"
    is_left_well = answer.loop_after is not None and answer.loop_after.steady
    return ExitCode.DONE if is_done and is_left_well else ExitCode.NO


async def _change(
    voice: Voice, workplace: Workplace, loop: LoopConfig, ended: TestEnd, operator: Operator
) -> tuple[ChangeEnd | Refusal | None, LoopAfter | None]:
    recommended = None if ended.proposed is None else ended.proposed.recommended
    if recommended is None:
        return None, None
    async with SettingsChange(workplace, loop) as change:
        plan = await change.plan_proposal(workplace.store.get(ended.sheet.sheet_id), recommended)
        if isinstance(plan, Refusal):
            voice.say(f"Refused. {plan}", style="stop")
            return plan, None
        written = await confirmed_change(voice, change, plan, "write", ended.sheet.sheet_id, operator)
        if isinstance(written, Refusal):
            voice.say(f"Refused, nothing was written. {written}", style="stop")
            return written, None
    after = await watch_afterwards(workplace, loop, ended, _STEADY_S, _AFTERWARDS_S)
    voice.say(after.in_words, style="good" if after.is_steady else "caution")
    return written, after


def rehearsal_answer(ended: TestEnd, change: ChangeEnd | Refusal | None, after: LoopAfter | None) -> RehearsalAnswer:
    """The whole rehearsal as data; every figure is from the run."""
    found, sheet = ended.experiment.as_found, ended.sheet
    written = change if isinstance(change, ChangeEnd) else None
    left = None if written is None or written.state.last_read is None else written.state.last_read
    recommended = next((one.name for one in sheet.proposals if one.is_recommended), None)
    sample = None if after is None else after.last
    return RehearsalAnswer(
        as_found=LoopFoundAnswer(
            mode=None if found is None else found.mode.value,
            op_pct=None if found is None else found.op_pct,
            sp_pct=None if found is None else found.sp_pct,
            settings=None if sheet.as_found is None else quantities_answer(sheet.as_found.settings),
        ),
        as_left=LoopFoundAnswer(
            mode=None if left is None else left.mode.value,
            op_pct=None if left is None else left.op_pct,
            sp_pct=None if left is None else left.sp_pct,
            settings=None if left is None else settings_answer(left.fields),
        ),
        test=test_answer(ended),
        proposal=recommended,
        write=_write_answer(change),
        loop_after=None
        if after is None or sample is None
        else LoopNowAnswer(
            mode=sample.mode.value,
            steady=after.is_steady,
            pv_pct=sample.pv_pct,
            sp_pct=sample.sp_pct,
            op_pct=sample.op_pct,
            op_bump_pct=None if written is None else written.state.op_bump_pct,
        ),
        sheet=sheet.sheet_id,
    )


def _write_answer(change: ChangeEnd | Refusal | None) -> WriteAnswer | None:
    if change is None:
        return None
    if isinstance(change, Refusal):
        return WriteAnswer(outcome="REFUSED", read_back_equal=False, text=str(change))
    return change_answer(change)
