"""A confirmed write in virtual time: whatever a request, a cancellation or the disk does, old or new or loud (S4)."""

import asyncio
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import cache

import pytest

from autotune.config.types import LoopConfig
from autotune.confirmed_write.confirmation import confirm, short_digest
from autotune.confirmed_write.phases import Phase
from autotune.confirmed_write.plan import Confirmation, WritePlan
from autotune.confirmed_write.state import WritePace, WriteState
from autotune.errors import JournalError
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockFields
from autotune.service.journal import MemoryJournal
from autotune.service.journal_reading import JournalLine, read_journal_text
from autotune.service.writer import SettingsWriter
from simulator.block import Mode
from tests.fakes.link import FakeLink, Fault, FaultKind
from tests.fakes.plant import WITH_GUARD, PlantInMemory
from tests.fakes.virtual_time import run_virtual
from tests.service.test_runner import FullDisk

OLD, NEW = BlockFields(0.375, 1.5, 0.0), BlockFields(0.625, 2.5, 0.25)
PLAN = WritePlan(
    loop="TIC-204",
    proposal="tyreus-luyben-pid",
    as_found=OLD,
    fields=NEW,
    order=("integral", "derivative", "gain"),
    block_digest="b" * 64,
    configuration_digest="c" * 64,
)
PACE = WritePace(settle_s=0.2, within_s=2.0, put_back_within_s=4.0)

FAULTS = {
    "refused": Fault(FaultKind.REFUSED),
    "not heard but applied": Fault(FaultKind.SILENT),
    "not heard and not applied": Fault(FaultKind.SILENT, lands=False),
    "closed after it was applied": Fault(FaultKind.CLOSED),
    "late": Fault(FaultKind.LATE, delay_s=0.03),
}


@dataclass
class Written:
    """A write after its end."""

    plant: PlantInMemory
    link: FakeLink
    journal: MemoryJournal
    writer: SettingsWriter
    ended: WriteState | Refusal | None = None
    raised: BaseException | None = None
    task: "asyncio.Task[WriteState | Refusal] | None" = field(default=None)

    @property
    def lines(self) -> tuple[JournalLine, ...]:
        return read_journal_text("".join(f"{line}\n" for line in self.journal.lines)).lines

    @property
    def fields(self) -> BlockFields:
        """What the controller holds."""
        held = self.plant.loop.block.settings
        return BlockFields(held.gain, held.integral, held.derivative)

    @property
    def phase(self) -> Phase | None:
        return None if self.writer.state is None else self.writer.state.phase


def prepared(loop: LoopConfig = WITH_GUARD, journal: MemoryJournal | None = None) -> Written:
    plant = PlantInMemory()
    link = plant.open_link(loop)
    journal = MemoryJournal() if journal is None else journal
    return Written(plant, link, journal, SettingsWriter(loop, link, journal))


def confirmed(plan: WritePlan, now_s: float) -> Confirmation:
    confirmation = confirm(plan, short_digest(plan), "R. Lind", now_s)
    assert isinstance(confirmation, Confirmation)
    return confirmation


def write(
    one: Written,
    plan: WritePlan = PLAN,
    *,
    on_pass: Callable[[int], None] | None = None,
    spent: frozenset[Confirmation] = frozenset(),
) -> Written:
    async def main() -> None:
        await asyncio.sleep(1.0)
        confirmation = confirmed(plan, asyncio.get_running_loop().time())
        one.task = asyncio.ensure_future(one.writer.write(plan, confirmation, spent, PACE))
        await asyncio.wait({one.task})
        if one.task.cancelled():
            one.raised = asyncio.CancelledError()
        elif one.task.exception() is not None:
            one.raised = one.task.exception()
        else:
            one.ended = one.task.result()
        await asyncio.sleep(1.0)
        one.plant.run_to(asyncio.get_running_loop().time())

    run_virtual(main(), within_s=60.0, on_pass=on_pass)
    return one


@cache
def clean() -> tuple[int, int, int, int]:
    """Reads, writes, passes of the event loop and journal lines of a write without trouble."""
    passes = 0

    def count(number: int) -> None:
        nonlocal passes
        passes = number

    one = write(prepared(), on_pass=count)
    assert one.phase is Phase.WRITTEN
    return len(one.link.requests("read")), len(one.link.requests("write")), passes, len(one.lines)


def assert_old_or_new(one: Written) -> None:
    """The phase tells the truth about the controller, and the loop is in the mode as found."""
    expected = {Phase.WRITTEN: NEW, Phase.PUT_BACK: OLD, Phase.REFUSED: OLD}
    assert one.phase in expected, (one.phase, one.writer.state)
    assert one.fields == expected[one.phase], (one.phase, one.writer.state)
    assert one.plant.mode is LoopMode.AUTO, one.writer.state


def test_a_write_without_trouble_holds_every_number_and_gives_automatic_back() -> None:
    one = write(prepared())
    assert_old_or_new(one)
    assert [performed.name for performed in one.writer.writes] == ["integral", "derivative", "gain"]
    modes = [dict(request.values)["mode"] for request in one.link.requests("write") if request.names == ("mode",)]
    assert modes == [0, 1]


def test_the_plan_is_in_the_journal_before_the_first_write_and_the_end_after_the_last() -> None:
    kinds = [line.kind for line in write(prepared()).lines]
    assert kinds[0] == "write_plan"
    assert kinds[-1] == "end"
    assert kinds.count("end") == 1


@pytest.mark.parametrize("fault", FAULTS)
def test_a_write_that_fails_anywhere_ends_old_or_new(fault: str) -> None:
    _, writes, _, _ = clean()
    for number in range(1, writes + 1):
        one = prepared()
        one.link.write_faults[number] = FAULTS[fault]
        assert_old_or_new(write(one))


@pytest.mark.parametrize("fault", FAULTS)
def test_a_reading_that_fails_anywhere_ends_old_or_new(fault: str) -> None:
    reads, _, _, _ = clean()
    for number in range(1, reads + 1):
        one = prepared()
        one.link.read_faults[number] = FAULTS[fault]
        assert_old_or_new(write(one))


@pytest.mark.parametrize("times", [1, 2, 3])
@pytest.mark.parametrize("is_everybody", [False, True], ids=["the caller", "every task"])
def test_a_cancellation_anywhere_once_or_more_is_heard_as_put_back(times: int, is_everybody: bool) -> None:
    _, _, passes, _ = clean()
    for first in range(3 + times, passes):
        one = prepared()

        def on_pass(number: int, one: Written = one, first: int = first) -> None:
            if number in range(first, first + times) and one.task is not None:
                everybody = {task for task in asyncio.all_tasks() if "main" not in str(task.get_coro())}
                for task in everybody if is_everybody else {one.task}:
                    task.cancel()

        write(one, on_pass=on_pass)
        if one.writer.state is not None:
            assert_old_or_new(one)
        if one.raised is not None:
            assert isinstance(one.raised, asyncio.CancelledError)


@pytest.mark.parametrize("only", [False, True], ids=["from there on", "that line only"])
def test_a_journal_that_fails_at_any_line_ends_old_or_new(only: bool) -> None:
    _, _, _, lines = clean()
    first_command = [line.kind for line in write(prepared()).lines].index("command") + 1
    for first in range(1, lines + 1):
        one = write(prepared(journal=FullDisk(first, only=only)))
        if first <= first_command:
            assert isinstance(one.raised, JournalError)
            assert one.link.requests("write") == []
        else:
            assert one.raised is None
            assert_old_or_new(one)
            assert "the disk is full; free some space" in one.writer.faults
    assert one.phase is Phase.WRITTEN  # the last line is only the end


def test_a_used_confirmation_reads_and_writes_nothing() -> None:
    one = prepared()
    write(one, spent=frozenset({confirmed(PLAN, 1.0)}))
    assert isinstance(one.ended, Refusal)
    assert one.ended.code == "CONFIRMATION_USED"
    assert (one.link.log, one.journal.lines) == ([], [])


def test_settings_that_somebody_changed_meanwhile_are_left_alone() -> None:
    one = prepared()
    one.plant.loop.block.settings = replace(one.plant.loop.block.settings, gain=0.5)
    write(one)
    assert one.phase is Phase.REFUSED
    assert one.link.requests("write") == []


def test_a_person_who_takes_the_loop_back_to_automatic_is_not_fought() -> None:
    one = prepared()

    def on_pass(_number: int) -> None:
        if one.writer.state is not None and one.writer.state.phase is Phase.VERIFYING:
            one.plant.loop.block.mode = Mode.AUTO

    write(one, on_pass=on_pass)
    assert one.phase is not Phase.WRITTEN
    modes = [dict(request.values)["mode"] for request in one.link.requests("write") if request.names == ("mode",)]
    assert modes == [0]
    assert one.plant.mode is LoopMode.AUTO


def test_a_cable_pulled_in_the_middle_is_loud() -> None:
    one = prepared()

    def on_pass(_number: int) -> None:
        if len(one.writer.writes) == 1:
            one.link.is_reachable = False

    write(one, on_pass=on_pass)
    assert one.phase is Phase.UNVERIFIED
    assert isinstance(one.ended, WriteState)
    assert "could not be read" in str(one.ended.because[-1])


def test_a_setpoint_that_tracks_in_manual_is_given_back() -> None:
    tracking = replace(WITH_GUARD, block=replace(WITH_GUARD.block, sp_tracks_in_manual=True))
    one = prepared(tracking)

    def on_pass(_number: int) -> None:
        if one.plant.mode is LoopMode.MAN:
            one.plant.loop.block.sp_pct = 49.0

    write(one, replace(PLAN, sp_tracks_in_manual=True), on_pass=on_pass)
    assert one.phase is Phase.WRITTEN, one.writer.state
    assert one.plant.loop.block.sp_pct == pytest.approx(50.0, abs=1e-4)
