"""``test``: one supervised test on the terminal, from the look to the sheet."""

import asyncio
from collections.abc import Coroutine
from typing import Any

from autotune.cli.answers import proposals_table, show_findings
from autotune.cli.check import show_check
from autotune.cli.exit_codes import ExitCode
from autotune.cli.live import watch
from autotune.cli.operators import Operator
from autotune.cli.printing import Voice
from autotune.cli.signals import hear_signals
from autotune.config.types import LoopConfig
from autotune.experiment.phases import Phase
from autotune.loop.outcome import Refusal
from autotune.service.answers import no_test_answer, test_answer
from autotune.service.before_a_test import cautions_before, consents, extremes, writes_of_a_test
from autotune.service.check import LoopCheck
from autotune.service.deaf import to_the_end
from autotune.service.persons import person_at_the_terminal
from autotune.service.readiness import Level
from autotune.service.recovery import NOT_SETTLED, recover
from autotune.service.runner import TestRunner
from autotune.service.testing import Permission, SupervisedTest, TestEnd
from autotune.service.workplace import Workplace

_EXITS = {
    Phase.COMPLETE: ExitCode.DONE,
    Phase.ABORTED: ExitCode.NO,
    Phase.RELEASED: ExitCode.NO,
    Phase.STRANDED: ExitCode.STRANDED,
}


async def test(voice: Voice, workplace: Workplace, loop: LoopConfig, operator: Operator) -> ExitCode:
    """Look, ask for permission, run, show what was found and proposed."""
    async with SupervisedTest(workplace, loop) as supervised:
        if not await recover(workplace, loop, voice.say):
            voice.answer(no_test_answer("STRANDED", NOT_SETTLED))
            return ExitCode.STRANDED
        looked = await supervised.look()
        show_check(voice, looked)
        if not looked.is_fit:
            return _refused(voice, looked)
        ended = await permitted_test(voice, workplace, supervised, looked, operator)
    if ended is None:
        voice.say("No permission: nothing was written.")
        voice.answer(no_test_answer("NOT_ALLOWED", "no permission was given; nothing was written"))
        return ExitCode.NO
    show_end(voice, loop, ended)
    voice.answer(test_answer(ended))
    return _EXITS[ended.experiment.phase]


async def permitted_test(
    voice: Voice, workplace: Workplace, supervised: SupervisedTest, looked: LoopCheck, operator: Operator
) -> TestEnd | None:
    """Ask for permission and run; ``None`` when it was not given."""
    loop = supervised.loop
    for line in extremes(loop, looked):
        voice.say(line)
    cautions = cautions_before(loop, looked)
    words = operator.allows(cautions, loop.name)
    if words is None:
        return None
    now = workplace.wall_clock()
    person = person_at_the_terminal(operator.name)
    permission = Permission(person, words, tuple((caution, now) for caution in cautions), now)
    runner = supervised.prepare(is_no_guard_accepted=bool(consents(looked)))
    with hear_signals(runner.abort):
        watched = _run_watched(voice, loop, runner, supervised.run(permission))
        return await to_the_end(watched, lambda: runner.abort("the command is ending"))


async def _run_watched(
    voice: Voice, loop: LoopConfig, runner: TestRunner, run: Coroutine[Any, Any, TestEnd]
) -> TestEnd:
    """The test beside its picture.  A picture that fails ends the test; the loop is handed back before it is told."""
    running = asyncio.ensure_future(run)
    try:
        await watch(voice, loop, runner, running)
    except Exception:
        runner.abort("the picture of the test failed")
        await asyncio.wait({running})
        raise
    return await running


async def dry_run(voice: Voice, workplace: Workplace, loop: LoopConfig) -> ExitCode:
    """Everything that a test would do, without doing it; the loop is only read."""
    async with SupervisedTest(workplace, loop) as supervised:
        looked = await supervised.look()
    show_check(voice, looked)
    for line in (*extremes(loop, looked), *writes_of_a_test(loop)):
        voice.say(line)
    return ExitCode.DONE if looked.is_fit else ExitCode.NO


def show_end(voice: Voice, loop: LoopConfig, ended: TestEnd) -> None:
    """The end of a test, its findings and proposals, and where it is kept."""
    style = {Phase.COMPLETE: "good", Phase.STRANDED: "stop"}.get(ended.experiment.phase, "caution")
    voice.say()
    voice.say(f"{ended.experiment.phase.value}. {ended.sheet.outcome.text}", style=style)
    show_findings(voice, loop, ended)
    if ended.sheet.proposals:
        proposals_table(voice, ended.sheet, is_brief=True)
    voice.say(f"Sheet {ended.sheet.sheet_id}")
    voice.say(f"hash {ended.sheet_hash}", style="quiet")


def _refused(voice: Voice, looked: LoopCheck) -> ExitCode:
    voice.say("The test was refused; nothing was written.", style="stop")
    first = next(finding for finding in looked.findings if finding.level is Level.STOP)
    text = "; ".join(str(finding) for finding in looked.findings if finding.level is Level.STOP)
    voice.answer(no_test_answer("REFUSED", text, Refusal(first.code, first.text, first.remedy)))
    is_link = any(finding.code == "LINK" for finding in looked.findings)
    return ExitCode.LINK if is_link else ExitCode.NO
