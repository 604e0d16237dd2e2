"""A mistake in the file or at the plant is named before the output moves; the plant's panel is the witness.

Everything is asked of the command that a person types, with a person who says yes to every question.
"""

import asyncio
import io
from collections.abc import Sequence
from contextlib import AsyncExitStack
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.cli.test import test as perform_test
from autotune.errors import LoopBusy
from autotune.service.testing import SupervisedTest
from autotune.service.workplace import Workplace
from tests.system.bench import Change, bench_workplace, permission, rig_with
from tests.system.plant import LOOP, State, as_real, moved, soft_plant
from tests.system.together import Outcomes, Scenario, Together

pytestmark = pytest.mark.socket

PROVED: Change = ('write_settings = "in manual"\n', 'write_settings = "in manual"\nprove_writable = true\n')


class SaysYes:
    """A person who allows everything and has read every caution."""

    name = "R. Bench"

    def __init__(self) -> None:
        self.cautions: Sequence[str] = ()

    def allows(self, cautions: Sequence[str], loop: str) -> str | None:
        self.cautions = cautions
        return f"permit for {loop}"

    def types_digest(self, cautions: Sequence[str], short_digest: str) -> str:
        raise AssertionError("a test writes no settings")


class SaysNoToCautions(SaysYes):
    """A person who refuses once a loop in manual is among the cautions."""

    def allows(self, cautions: Sequence[str], loop: str) -> str | None:
        super().allows(cautions, loop)
        return None if any("LOOP_IN_MANUAL" in caution for caution in cautions) else "permit"


@dataclass(frozen=True)
class Mistake:
    """What is wrong in the file, at the panel or in the PLC, and by which words it has to be named."""

    words: Sequence[str]
    changes: Sequence[Change] = ()
    pressed: Sequence[str] = (f"enable {LOOP}",)
    rig: Sequence[Change] = ()
    operator: type[SaysYes] = SaysYes


@dataclass(frozen=True, slots=True)
class Named:
    code: ExitCode
    text: str
    before: State
    after: State
    cautions: Sequence[str] = field(default=())


PV = 'pv = { address = 0, type = "REAL" }'
OP = 'op = { address = 4, type = "REAL" }'
ONE_SCAN_MORE = ("look_around_s = 0.6", "look_around_s = 2.0")

MISTAKES = {
    "the word order": Mistake(
        ("TAG_MISREAD: PV", "word order 'big'", "write word_order = 'big'"),
        (('word_order = "big"', 'word_order = "little"'),),
    ),
    "too small a span": Mistake(
        ("OUTSIDE_SPAN: PV reads", "outside its span 0 .. 40 degC", "compare [loop.span]"),
        (
            ("pv_high_eu = 100.0", "pv_high_eu = 40.0"),
            ("pv_low_eu = 25.0\npv_high_eu = 75.0", "pv_low_eu = 5.0\npv_high_eu = 35.0"),
        ),
    ),
    "a reversed action": Mistake(
        ("ACTION_REVERSED: the block moves OP like a reverse-acting controller", "write action = 'reverse'"),
        (('action = "reverse"', 'action = "direct"'), ONE_SCAN_MORE),
    ),
    "a setting that is locked": Mistake(
        ("SETTING_READ_ONLY: integral of TIC-1 at holding register 42", "can't be written", "open it for writing"),
        (PROVED,),
        rig=(('name = "TIC-1"', 'name = "TIC-1"\nread_only = ["integral"]'),),
    ),
    "a loop left in manual": Mistake(
        ("LOOP_IN_MANUAL: TIC-1 is in MAN", "No permission: nothing was written"),
        pressed=(f"enable {LOOP}", f"mode {LOOP} MAN"),
        operator=SaysNoToCautions,
    ),
    "a mode that no test knows": Mistake(
        ("MODE_NOT_TESTABLE", "correct [loop.mode_codes]"),
        (("AUTO = 1\nCAS = 2", "AUTO = 7\nCAS = 2"),),
    ),
    "a register that is missing": Mistake(
        ("REGISTER_MISSING: the controller does not answer for 'pv'", "correct [loop.tags] pv of TIC-1"),
        ((PV, 'pv = { address = 7000, type = "REAL" }'),),
    ),
    "all addresses off by one": Mistake(
        ("PV reads", "the address one down", "all its addresses are off by one"),
        (('block = "ideal-seconds"\n', 'block = "ideal-seconds"\naddress_offset = 1\n'),),
    ),
    "one address off by one": Mistake(
        ("TAG_MISREAD: OP reads", "the address one down", "correct the address of op"),
        (
            (OP, 'op = { address = 5, type = "REAL" }'),
            ('mode = { address = 6, type = "UINT" }', 'mode = { address = 7, type = "UINT" }'),
        ),
    ),
    "a guard that is not enabled": Mistake(
        ("GUARD_NOT_ENABLED", "press the test enable of TIC-1"),
        pressed=(),
    ),
    "stop pressed at the panel": Mistake(
        ("GUARD_STOPPED", "release it there"),
        pressed=(f"enable {LOOP}", f"stop {LOOP}"),
    ),
    "a condition that does not hold": Mistake(
        ("WATCH: divert_valve_closed reads 0", "the divert valve is open"),
        pressed=(f"enable {LOOP}", f"watch {LOOP} divert_valve_closed 0"),
    ),
    "a failed measurement": Mistake(
        ("PV_QUALITY: PV is bad", "mend the measurement first"),
        pressed=(f"enable {LOOP}", f"fault transmitter {LOOP} nan"),
    ),
    "a measurement at its upper end": Mistake(
        ("PV reads", "outside its span"),
        pressed=(f"enable {LOOP}", f"fault transmitter {LOOP} high"),
    ),
    "a plc in stop": Mistake(
        ("PLC_CLOCK_STANDS", "set the PLC to run"),
        pressed=(f"enable {LOOP}", "fault plc-stop"),
    ),
}  # fmt: skip


async def told(workplace: Workplace, operator: SaysYes) -> tuple[ExitCode, str]:
    """The command's exit code and what it says to the person."""
    voice = Voice()
    voice.console.file = io.StringIO()
    voice.console.width = 400
    code = await perform_test(voice, workplace, workplace.loop(LOOP), operator)
    return code, voice.console.file.getvalue()


async def tried(folder: Path, mistake: Mistake) -> Named:
    async with soft_plant(rig_with(folder / "rig", mistake.rig)) as plant:
        workplace, _ = bench_workplace(folder, plant.port, mistake.changes)
        for line in mistake.pressed:
            await plant.press(line)
        if not any("plc-stop" in line for line in mistake.pressed):
            await plant.scan_on(3)
        before, operator = await plant.state(), mistake.operator()
        code, text = await told(workplace, operator)
        return Named(code, text, before, await plant.state(), operator.cautions)


def _scenario(mistake: Mistake) -> Scenario[Named]:
    return lambda folder: tried(folder, mistake)


SCENARIOS = {name: _scenario(mistake) for name, mistake in MISTAKES.items()}


@pytest.fixture(scope="module")
def named(together: Together) -> Outcomes[Named]:
    return together.of(Path(__file__).stem, SCENARIOS)


@pytest.mark.parametrize("name", MISTAKES)
def test_a_mistake_is_named_with_its_remedy_and_nothing_has_moved(named: Outcomes[Named], name: str) -> None:
    ended = named.of(name)
    assert ended.code is ExitCode.NO
    for words in MISTAKES[name].words:
        assert words in ended.text
    assert moved(ended.before, ended.after) == {}
    assert (ended.after["heartbeat"], ended.after["holder_request"], ended.after["op_effect_count"]) == (0, 0, 0)


async def test_a_loop_that_another_master_holds_is_left_alone_and_the_other_goes_on(tmp_path: Path) -> None:
    async with soft_plant() as plant, AsyncExitStack() as stack:
        other, loop = bench_workplace(tmp_path / "other", plant.port)
        await plant.press(f"enable {LOOP}")
        await plant.until(lambda state: state["enable"])
        first = await stack.enter_async_context(SupervisedTest(other, loop))
        runner = first.prepare(is_no_guard_accepted=False)
        running = asyncio.ensure_future(first.run(permission()))
        held = await plant.until(lambda state: state["op_effect_count"] > 1)
        assert held["holder"] == first.plan.token

        ours, _ = bench_workplace(tmp_path / "ours", plant.port)
        code, text = await told(ours, SaysYes())

        assert code is ExitCode.NO
        assert f"GUARD_NOT_IDLE: the PLC's guard is armed, held by {first.plan.token}" in text
        assert (await plant.state())["holder"] == first.plan.token
        runner.abort("the bench")
        ended = await running
        assert ended.sheet.outcome.code == "OPERATOR_ABORT"


async def test_a_second_test_on_the_same_machine_is_told_who_is_at_it(tmp_path: Path) -> None:
    async with soft_plant() as plant:
        workplace, loop = bench_workplace(tmp_path, plant.port)
        before = await plant.state()
        async with SupervisedTest(workplace, loop):
            with pytest.raises(LoopBusy, match=r"is held by .* \(process \d+\) since .*: test of TIC-1"):
                await told(workplace, SaysYes())
        assert moved(before, await plant.state()) == {}


async def test_settings_that_can_be_written_are_shown_to_be_and_hold_what_they_held(tmp_path: Path) -> None:
    async with soft_plant() as plant:
        workplace, loop = bench_workplace(tmp_path, plant.port, (PROVED,))
        await plant.press(f"enable {LOOP}")
        before = await plant.until(lambda state: state["enable"])
        async with SupervisedTest(workplace, loop) as supervised:
            runner = supervised.prepare(is_no_guard_accepted=False)
            running = asyncio.ensure_future(supervised.run(permission()))
            after = await plant.until(lambda state: state["heartbeat"] > 0)
            runner.abort("the bench")
            ended = await running
        settings = ("gain", "integral", "derivative")
        assert [as_real(before[name]) for name in settings] == [after[name] for name in settings]
        proof = [line for line in ended.sheet.writes if line.why == "WriteBack"]
        assert [(line.tag, line.outcome) for line in proof] == [(name, "APPLIED") for name in settings]
        assert [line.raw for line in proof] == [as_real(before[name]) for name in settings]
        journal = (workplace.data_dir / "journals" / f"{ended.sheet.sheet_id}.jsonl").read_text("utf-8")
        assert journal.index('"writes back":"gain"') < journal.index("ClaimLoop")
