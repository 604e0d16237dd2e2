"""``test``: one supervised test on the terminal, from the look to the sheet."""

import asyncio
from collections.abc import Coroutine
from typing import Any

from autotune.cli.answers import no_test_answer, proposals_table, show_findings, test_answer
from autotune.cli.check import show_check
from autotune.cli.exit_codes import ExitCode
from autotune.cli.live import watch
from autotune.cli.operators import Operator
from autotune.cli.printing import Voice
from autotune.cli.signals import hear_signals
from autotune.config.types import LoopConfig
from autotune.experiment.phases import Phase
from autotune.experiment.room import allowed_op_pct
from autotune.field.translate import settings_tags
from autotune.loop.limits import AsFound
from autotune.loop.outcome import Refusal
from autotune.service.cautions import BEFORE_THE_OUTPUT_MOVES, WHERE_SETTINGS_ARE_PROVED
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
    consents = tuple(str(finding) for finding in looked.findings if finding.level is Level.CAUTION)
    proof = (WHERE_SETTINGS_ARE_PROVED,) if loop.proves_writable else ()
    cautions = (*BEFORE_THE_OUTPUT_MOVES, *proof, *consents)
    words = operator.allows(cautions, loop.name)
    if words is None:
        return None
    now = workplace.wall_clock()
    person = person_at_the_terminal(operator.name)
    permission = Permission(person, words, tuple((caution, now) for caution in cautions), now)
    runner = supervised.prepare(is_no_guard_accepted=bool(consents))
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


def extremes(loop: LoopConfig, looked: LoopCheck) -> tuple[str, ...]:
    """How far the output may go, in which order, and for how long at most."""
    sample = looked.sample
    if sample is None or sample.op_pct is None:
        return ()
    low_pct, high_pct = allowed_op_pct(loop.limits, AsFound(sample.op_pct, sample.sp_pct, sample))
    relay = loop.relay
    low_eu, high_eu = loop.op_span.to_eu(low_pct), loop.op_span.to_eu(high_pct)
    pv_low_eu, pv_high_eu = (loop.pv_span.to_eu(pct) for pct in (loop.limits.pv_low_pct, loop.limits.pv_high_pct))
    swing = (
        ""
        if relay.wanted_swing_pct is None
        else (
            f", steps then fitted for a PV half-swing of {loop.pv_span.delta_to_eu(relay.wanted_swing_pct):g} "
            f"{loop.pv_span.unit}"
        )
    )
    return (
        f"The output stands at {sample.op_pct:.1f} % and will move {relay.first_move.value} first, to "
        f"+{relay.step_up_pct:g} / -{relay.step_down_pct:g} %{swing}.",
        f"It never leaves {low_eu:.1f} .. {high_eu:.1f} {loop.op_span.unit} "
        f"(0 % {loop.op_low_means}, 100 % {loop.op_high_means}).",
        f"PV outside {pv_low_eu:g} .. {pv_high_eu:g} {loop.pv_span.unit} stops the test; "
        f"it takes at most {loop.limits.test_within_s / 60.0:.1f} min or {loop.limits.cycles_at_most} cycles.",
    )


def writes_of_a_test(loop: LoopConfig) -> tuple[str, ...]:
    """Every tag that a test of this loop writes, and when."""
    settings = f"{', '.join(settings_tags(loop))}: before all else, each with the number that it holds"
    proof = (settings,) if loop.proves_writable else ()
    guard = ("holder_request, heartbeat, sequence, op_request: every scan, in one write",) if loop.has_guard else ()
    direct = () if loop.has_guard else ("op: at every switch, and back to the value as found",)
    tracked = ("sp: back to the value as found, after the test",) if loop.block.sp_tracks_in_manual else ()
    tags = (*proof, *guard, *direct, "mode: to MAN before, back to the mode as found after", *tracked)
    return ("Tags that the test writes:", *(f"  {tag}" for tag in tags))


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
