"""``check``: the configuration, then each loop as it is, without writing anything."""

from collections.abc import Sequence

from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.config.types import LoopConfig
from autotune.service.answers import check_answer
from autotune.service.check import LoopCheck, check_loop
from autotune.service.local_api import ChecksAnswer
from autotune.service.readiness import Level
from autotune.service.sheet_mapping import controller_line, settings_quantities
from autotune.service.workplace import Workplace

_STYLES = {Level.STOP: "stop", Level.CAUTION: "caution", Level.NOTE: "quiet"}


async def check(voice: Voice, workplace: Workplace, loops: Sequence[LoopConfig], look_s: float) -> ExitCode:
    """Look at each loop in turn; 0 when all are fit to test, 3 when one can't be reached, 1 otherwise."""
    checks = []
    for loop in loops:
        link = workplace.open_link(loop)
        try:
            looked = await check_loop(loop, link, workplace.open_link, look_s)
        finally:
            await link.close()
        show_check(voice, looked)
        checks.append(looked)
    voice.answer(ChecksAnswer(loops=tuple(check_answer(looked) for looked in checks)))
    if any(finding.code == "LINK" for looked in checks for finding in looked.findings):
        return ExitCode.LINK
    return ExitCode.DONE if all(looked.is_fit for looked in checks) else ExitCode.NO


def show_check(voice: Voice, looked: LoopCheck) -> None:
    """One loop's look, as a technician compares it with the panel."""
    loop, sample = looked.loop, looked.sample
    voice.say(f"{loop.name}  {loop.service}", style="head")
    voice.say(f"  {controller_line(loop)}")
    if sample is not None:
        voice.say(f"  mode {sample.mode.value}   {_readings(loop, looked)}")
        voice.say(f"  output: 0 % {loop.op_low_means}, 100 % {loop.op_high_means}; on failure {loop.failure_position}")
    settings = settings_quantities(loop, looked.settings)
    if settings:
        held = "   ".join(f"{one.label} {one.amount:g} {one.unit}" for one in settings)
        voice.say(f"  settings ({loop.block.form.value} form): {held}")
    if looked.round_trip_s is not None:
        refresh = "not seen" if looked.refresh_s is None else f"{1000 * looked.refresh_s:.0f} ms"
        voice.say(f"  one reading takes {1000 * looked.round_trip_s:.1f} ms; values refresh every {refresh}")
    for finding in looked.findings:
        voice.say(f"  {finding.level.value:8}{finding}", style=_STYLES[finding.level])
    verdict = ("fit to test", "good") if looked.is_fit else ("not fit to test: see the lines marked 'stop'", "stop")
    voice.say(f"  {verdict[0]}", style=verdict[1])
    voice.say()


def _readings(loop: LoopConfig, looked: LoopCheck) -> str:
    sample = looked.sample
    if sample is None:
        return ""
    signals = (
        ("PV", sample.pv_pct, loop.pv_span),
        ("SP", sample.sp_pct, loop.pv_span),
        ("OP", sample.op_pct, loop.op_span),
    )
    return "   ".join(
        f"{name} {'unknown' if reading is None else f'{span.to_eu(reading):.2f} {span.unit}'}"
        for name, reading, span in signals
    )
