"""The live picture of a running test in a terminal, and plain lines where there is none."""

import asyncio
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager

from rich.console import Group, RenderableType
from rich.live import Live
from rich.table import Table
from rich.text import Text

from autotune.cli.plot import DotPlot
from autotune.cli.printing import Voice
from autotune.config.types import LoopConfig
from autotune.experiment.phases import Phase
from autotune.experiment.picture import Picture, picture
from autotune.loop.sample import Sample
from autotune.service.runner import TestRunner

_REFRESH_S = 0.2
_PLOT_ROWS = 9
_OP_ROWS = 4
_CYCLES_SHOWN = 6
_KEYS = "a abort   k finish now and keep   s smaller steps   Ctrl-C aborts too: every end hands the loop back"
_PHASE_STYLES = {Phase.STRANDED: "stop", Phase.RELEASED: "caution", Phase.ABORTED: "caution", Phase.COMPLETE: "good"}


async def watch(voice: Voice, loop: LoopConfig, runner: TestRunner, test: "asyncio.Task[object]") -> None:
    """Show a test until it is over; on a terminal with a picture and keys, otherwise in plain lines."""
    if voice.console.is_terminal and not voice.is_json:
        await _watch_on_screen(voice, loop, runner, test)
    else:
        await _watch_in_lines(voice, loop, runner, test)


async def _watch_on_screen(voice: Voice, loop: LoopConfig, runner: TestRunner, test: "asyncio.Task[object]") -> None:
    with (
        _keys(runner),
        Live(console=voice.console, auto_refresh=False, transient=False, vertical_overflow="crop") as live,
    ):
        while not test.done():
            live.update(screen(loop, picture(runner.experiment), runner.log.samples, voice.console.width), refresh=True)
            await asyncio.wait({test}, timeout=_REFRESH_S)
        live.update(screen(loop, picture(runner.experiment), runner.log.samples, voice.console.width), refresh=True)


async def _watch_in_lines(voice: Voice, loop: LoopConfig, runner: TestRunner, test: "asyncio.Task[object]") -> None:
    told: tuple[str, int] | None = None
    while True:
        now = picture(runner.experiment)
        if told != (now.stage, len(now.cycles)):
            told = (now.stage, len(now.cycles))
            voice.say(plain_line(loop, now))
        if test.done():
            return
        await asyncio.wait({test}, timeout=_REFRESH_S)


def plain_line(loop: LoopConfig, now: Picture) -> str:
    """The state of a test in one line."""
    pv = "unknown" if now.pv_pct is None else f"{loop.pv_span.to_eu(now.pv_pct):.2f} {loop.pv_span.unit}"
    op = "unknown" if now.op_pct is None else f"{now.op_pct:.1f} %"
    line = f"{now.elapsed_s:6.1f} s  {now.phase.value:9}  {now.stage}  PV {pv}  OP {op}"
    if now.period_s is not None and now.rough_ultimate_gain is not None:
        line += (
            f"  cycle {len(now.cycles)}: period {now.period_s:.2f} s, rough ultimate gain {now.rough_ultimate_gain:.2f}"
        )
    return line


def screen(loop: LoopConfig, now: Picture, samples: Sequence[Sample], width: int) -> RenderableType:
    """The sheet as it is being filled in: where it stands, the trend, the cycles, the way out."""
    columns = max(min(width - 14, 100), 20)
    return Group(
        _heading(loop, now, columns + 12),
        Text("─" * (columns + 12), style="quiet"),
        *_trends(loop, now, samples, columns),
        Text("─" * (columns + 12), style="quiet"),
        _numbers(now),
        _cycle_table(loop, now),
        Text(_KEYS, style="quiet"),
    )


def _heading(loop: LoopConfig, now: Picture, width: int) -> RenderableType:
    line = Table.grid(expand=False, padding=0)
    line.add_column(width=max(width - 12, 10))
    line.add_column(width=12, justify="right")
    line.add_row(
        Text(f"{loop.name}  {loop.service}", style="head"), Text(now.phase.value, _PHASE_STYLES.get(now.phase, "head"))
    )
    line.add_row(Text(now.stage), Text("" if now.mode is None else f"mode {now.mode.value}"))
    return line


def _trends(loop: LoopConfig, now: Picture, samples: Sequence[Sample], columns: int) -> Iterator[RenderableType]:
    if len(samples) < 2:
        yield Text("waiting for readings", style="quiet")
        return
    pv_marks = [now.pv_low_pct, now.pv_high_pct] if now.reference_pct is None else _near_marks(now)
    known = [(one.t_s, one.pv_pct) for one in samples if one.pv_pct is not None]
    yield from _trend("PV", loop.pv_span.unit, known, pv_marks, columns, _PLOT_ROWS, loop.pv_span.to_eu)
    moved = [(one.t_s, one.op_pct) for one in samples if one.op_pct is not None]
    op_marks = [now.op_low_pct, now.op_high_pct]
    yield from _trend("OP", loop.op_span.unit, moved, op_marks, columns, _OP_ROWS, loop.op_span.to_eu)


def _near_marks(now: Picture) -> list[float]:
    """The switching band; the PV limits lie farther out and stand in the numbers below."""
    if now.reference_pct is None or now.hysteresis_pct is None:
        return []
    return [now.reference_pct - now.hysteresis_pct, now.reference_pct + now.hysteresis_pct]


def _trend(
    name: str,
    unit: str,
    points: Sequence[tuple[float, float]],
    marks_pct: Sequence[float],
    columns: int,
    rows: int,
    to_eu: Callable[[float], float],
) -> Iterator[RenderableType]:
    if len(points) < 2:
        return
    seen_pct = [y for _, y in points]
    within = [mark for mark in marks_pct if min(seen_pct) - 5.0 <= mark <= max(seen_pct) + 5.0]
    low, high = min([*seen_pct, *within]), max([*seen_pct, *within])
    margin = max(0.05 * (high - low), 0.05)
    plot = DotPlot(columns, rows, (points[0][0], points[-1][0]), (low - margin, high + margin))
    for mark in within:
        plot.add_level(mark)
    plot.add_line([x for x, _ in points], seen_pct)
    for row, line in enumerate(plot.lines()):
        label = ""
        if row == 0:
            label = f"{to_eu(high + margin):8.2f}"
        elif row == rows - 1:
            label = f"{to_eu(low - margin):8.2f}"
        elif row == rows // 2:
            label = f"{name} {unit}"
        yield Text.assemble((f"{label:>10} ", "quiet"), line)


def _numbers(now: Picture) -> Text:
    def shown(amount: float | None, unit: str, digits: int = 2) -> str:
        return "not yet" if amount is None else f"{amount:.{digits}f} {unit}"

    minutes, seconds = divmod(round(now.left_at_most_s), 60)
    return Text(
        f"noise at rest {shown(now.noise_pct, '%', 3)}   hysteresis ±{shown(now.hysteresis_pct, '%', 3)}   "
        f"output asked {shown(now.asked_op_pct, '%', 1)}   at most {minutes:d}:{seconds:02d} min left"
    )


def _cycle_table(loop: LoopConfig, now: Picture) -> RenderableType:
    table = Table(box=None, padding=(0, 2), show_edge=False)
    for title in ("cycle", "period s", f"PV half-swing {loop.pv_span.unit}", "OP half-step %", "rough ultimate gain"):
        table.add_column(title, justify="right", header_style="quiet", no_wrap=True)
    shown = list(enumerate(now.cycles, start=1))[-_CYCLES_SHOWN:]
    for number, cycle in shown:
        table.add_row(
            str(number),
            f"{cycle.period_s:.2f}",
            f"{loop.pv_span.delta_to_eu(cycle.pv_amplitude_pct):.3f}",
            f"{cycle.amplitude_pct:.2f}",
            "-" if cycle.rough_ultimate_gain is None else f"{cycle.rough_ultimate_gain:.2f}",
        )
    if not shown:
        table.add_row("-", "-", "-", "-", "-")
    return table


@contextmanager
def _keys(runner: TestRunner) -> Iterator[None]:
    """Single keys while a picture stands, where the terminal can; Ctrl-C works everywhere."""
    try:
        import termios
        import tty
    except ImportError:  # not on Windows
        yield
        return
    if not sys.stdin.isatty():
        yield
        return
    descriptor = sys.stdin.fileno()
    before = termios.tcgetattr(descriptor)
    acts = {"a": runner.abort, "k": runner.finish, "s": runner.smaller_steps}

    def heard() -> None:
        act = acts.get(sys.stdin.read(1).lower())
        if act is not None:
            act("key at the terminal")

    running = asyncio.get_running_loop()
    tty.setcbreak(descriptor)
    running.add_reader(descriptor, heard)
    try:
        yield
    finally:
        running.remove_reader(descriptor)
        termios.tcsetattr(descriptor, termios.TCSADRAIN, before)
