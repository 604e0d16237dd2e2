"""One supervised test from the locks to the sheet, in virtual time; nothing learned is lost (S9)."""

import asyncio
import json
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import timedelta
from hashlib import sha256
from math import atan, hypot, pi
from pathlib import Path

import pytest
from scipy.optimize import brentq

from autotune.config.types import LoopConfig
from autotune.design.proposal import ProposalSheet
from autotune.errors import JournalError, LoopBusy, RecordNotKept, SheetError
from autotune.experiment.phases import Phase
from autotune.experiment.state import Stage
from autotune.identify.findings import Findings, FindingsOrRefusal
from autotune.loop.outcome import Refusal
from autotune.loop.record import Record
from autotune.service.aftermath import watch_afterwards
from autotune.service.check import LoopCheck
from autotune.service.estimator import InlineEstimator
from autotune.service.journal import journal_file
from autotune.service.persons import Person
from autotune.service.proposing import DesignTask, proposals_for
from autotune.service.sheet_mapping import fields_of
from autotune.service.testing import Permission, SupervisedTest, TestEnd
from autotune.service.workplace import Workplace
from autotune.sheet.schema import Sheet
from simulator.block import Mode
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD, PlantInMemory
from tests.fakes.virtual_time import run_virtual
from tests.service.bench import BEGUN, at, virtual_now, workplace_at

R_LIND = Person("R. Lind")
LOOPS = pytest.mark.parametrize("loop", [WITH_GUARD, WITHOUT_GUARD], ids=["with a guard", "without a guard"])


@dataclass
class Ended:
    """A supervised test after its end; ``raised`` stands for ``end`` where it raised."""

    workplace: Workplace
    plant: PlantInMemory
    looked: LoopCheck
    test: SupervisedTest
    end: TestEnd | None = None
    raised: BaseException | None = None

    @property
    def sheet(self) -> Sheet:
        """The only sheet that is kept."""
        (line,) = self.workplace.store.list()
        return self.workplace.store.get(line.sheet_id).sheet


def permission() -> Permission:
    accepted = (("Independent protection stays in service.", virtual_now()),)
    return Permission(R_LIND, "permit 77", accepted, virtual_now())


def supervise(
    loop: LoopConfig,
    folder: Path,
    *,
    plant: PlantInMemory | None = None,
    during: Callable[[SupervisedTest, "asyncio.Task[TestEnd]"], None] | None = None,
    change: Callable[[Workplace], Workplace] = lambda workplace: workplace,
) -> Ended:
    """Look, prepare and run one test; ``during`` is called before each pass while it runs."""
    plant = PlantInMemory() if plant is None else plant
    workplace = change(workplace_at(plant, folder, loop))
    running: list[tuple[SupervisedTest, asyncio.Task[TestEnd]]] = []

    async def main() -> Ended:
        await asyncio.sleep(1.0)
        async with SupervisedTest(workplace, loop) as test:
            looked = await test.look(1.5)
            test.prepare(is_no_guard_accepted=True)
            task = asyncio.ensure_future(test.run(permission()))
            running.append((test, task))
            await asyncio.wait({task})
        if task.cancelled():
            return Ended(workplace, plant, looked, test, raised=asyncio.CancelledError())
        if task.exception() is not None:
            return Ended(workplace, plant, looked, test, raised=task.exception())
        return Ended(workplace, plant, looked, test, end=task.result())

    def on_pass(_number: int) -> None:
        if running and during is not None:
            during(*running[0])

    return run_virtual(main(), within_s=120.0, on_pass=on_pass)


@pytest.fixture(scope="module", params=[WITH_GUARD, WITHOUT_GUARD], ids=["with a guard", "without a guard"])
def finished(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Ended:
    """A whole test with everything that is concluded from it."""
    return supervise(
        request.param,
        tmp_path_factory.mktemp("finished"),
        change=lambda place: replace(place, estimator=InlineEstimator()),
    )


def test_a_finished_test_becomes_a_sheet_that_tells_everything(finished: Ended) -> None:
    ended, loop = finished, finished.test.loop
    assert ended.looked.is_fit
    assert ended.end is not None
    sheet = ended.sheet
    assert sheet == ended.end.sheet
    assert Sheet.model_validate_json(sheet.model_dump_json()) == sheet
    assert sheet.outcome.ended == "COMPLETE"
    assert (sheet.person.name, sheet.permission.text) == ("R. Lind", "permit 77")
    assert all(event.utc == BEGUN + timedelta(seconds=event.t_s) for event in sheet.events)
    assert sheet.as_found is not None
    assert fields_of(sheet.as_found.settings) == ended.looked.settings
    assert sheet.as_found.op_eu == pytest.approx(45.0, abs=0.1)
    assert sheet.as_found.sp_eu == pytest.approx(75.0, abs=0.1)
    runner = ended.test.runner
    assert len(sheet.samples.t_s) == len(runner.log.samples)
    assert len(sheet.writes) == sum(len(write.values) for write in runner.log.writes)
    assert {write.tag for write in sheet.writes} == (
        {"holder_request", "heartbeat", "sequence", "op_request", "mode"} if loop.has_guard else {"op", "mode"}
    )
    assert [event.text for event in sheet.events if event.kind == "phase"][-1] == "COMPLETE"
    assert sheet.findings is not None
    assert [one.name for one in sheet.findings.concluded][:2] == ["ultimate_gain", "ultimate_period_s"]
    assert sum(one.is_recommended for one in sheet.proposals) <= 1
    assert any(one.settings for one in sheet.proposals)
    costs = " ".join(sheet.costs)
    assert ("no guard" in costs) is not loop.has_guard
    assert ("no PLC clock" in costs) is not ended.test.plan.has_clock_tags


def test_the_sheet_holds_the_digest_of_its_journal(finished: Ended) -> None:
    sheet = finished.sheet
    journal = journal_file(finished.workplace.data_dir, sheet.sheet_id)
    assert sheet.journal_file == journal.name
    assert sheet.journal_digest == sha256(journal.read_bytes()).hexdigest()
    assert json.loads(journal.read_text("utf-8").splitlines()[-1])["kind"] == "end"


def test_what_is_concluded_holds_the_true_ultimate_point_of_the_plant(finished: Ended) -> None:
    """By definition: where the phase of 1.5 e^(-0.22 s) / ((1 + 0.6 s)(1 + 0.05 s)) is -180 degrees (scipy's root)."""
    assert finished.end is not None
    findings = finished.end.findings
    assert isinstance(findings, Findings)
    omega = brentq(lambda w: atan(0.6 * w) + atan(0.05 * w) + 0.22 * w - pi, 1.0, 20.0)
    period, gain = findings.ultimate.ultimate_period_s, findings.ultimate.ultimate_gain
    assert period.low <= 2.0 * pi / omega <= period.high
    assert gain.low <= hypot(1.0, 0.6 * omega) * hypot(1.0, 0.05 * omega) / 1.5 <= gain.high


def test_a_cancellation_keeps_the_sheet_and_is_raised_afterwards(tmp_path: Path) -> None:
    for stage in (Stage.LOOKING, Stage.HOLDING, Stage.CYCLING, Stage.GIVING_BACK, Stage.OVER):
        folder = tmp_path / stage.name

        def cancel(test: SupervisedTest, task: "asyncio.Task[TestEnd]", stage: Stage = stage) -> None:
            if test.runner.experiment.stage is stage and not task.cancelling():
                task.cancel()

        ended = supervise(WITHOUT_GUARD, folder, during=cancel)
        if stage is not Stage.OVER:
            assert isinstance(ended.raised, asyncio.CancelledError)
        assert ended.sheet.outcome.ended in ("ABORTED", "COMPLETE")


def test_an_untouched_end_says_that_nothing_was_changed(tmp_path: Path) -> None:
    def abort(test: SupervisedTest, _task: "asyncio.Task[TestEnd]") -> None:
        if test.runner.experiment.stage is Stage.LOOKING:
            test.runner.abort("R. Lind")

    sheet = supervise(WITHOUT_GUARD, tmp_path, during=abort).sheet
    assert (sheet.outcome.ended, sheet.outcome.code) == ("ABORTED", "OPERATOR_ABORT")
    assert "Nothing was changed." in sheet.outcome.text
    assert (sheet.as_found, sheet.findings, sheet.writes) == (None, None, ())


def test_a_loop_that_somebody_took_is_told_as_released(tmp_path: Path) -> None:
    plant = PlantInMemory()
    at(plant, 5.5, lambda: setattr(plant.loop.block, "mode", Mode.AUTO))
    sheet = supervise(WITHOUT_GUARD, tmp_path, plant=plant).sheet
    assert sheet.outcome.ended == "RELEASED"
    assert "it is theirs" in sheet.outcome.text


def test_a_stranded_loop_is_told_with_what_to_enter(tmp_path: Path) -> None:
    plant = PlantInMemory()
    at(plant, 5.5, plant.plc.restart)
    sheet = supervise(WITHOUT_GUARD, tmp_path, plant=plant).sheet
    assert sheet.outcome.ended == "STRANDED"
    assert "Go to the panel now and enter by hand" in sheet.outcome.text
    assert "output 45.0" in sheet.outcome.text


class Clumsy:
    """An estimator that falls over."""

    async def measure(self, record: Record) -> FindingsOrRefusal:
        raise ZeroDivisionError(f"a slip of ours after {len(record.samples)} samples")

    async def propose(self, task: DesignTask) -> ProposalSheet:
        """As the product does, in this process."""
        return proposals_for(task)


def test_a_slip_in_the_conclusion_costs_the_findings_and_not_the_sheet(tmp_path: Path) -> None:
    ended = supervise(WITHOUT_GUARD, tmp_path, change=lambda place: replace(place, estimator=Clumsy()))
    assert ended.end is not None
    assert isinstance(ended.end.findings, Refusal)
    assert ended.end.findings.code == "NOT_CONCLUDED"
    assert ended.sheet.outcome.ended == "COMPLETE"
    assert "a slip of ours" in ended.sheet.outcome.text
    assert len(ended.sheet.samples.t_s) > 20


def test_our_own_fault_in_the_test_keeps_the_sheet_and_is_raised(tmp_path: Path) -> None:
    plant = PlantInMemory()

    opened = plant.open_link

    def open_link(loop: LoopConfig) -> object:
        link = opened(loop)
        refresh, reads = link.on_read, iter(range(1000))

        def on_read() -> None:
            refresh()
            if next(reads) == 60:
                link.read = None  # type: ignore[method-assign, assignment]

        link.on_read = on_read
        return link

    ended = supervise(
        WITH_GUARD,
        tmp_path,
        plant=plant,
        change=lambda place: replace(place, open_link=open_link),  # type: ignore[arg-type]
    )
    assert isinstance(ended.raised, TypeError)
    assert ended.sheet.outcome.ended == "STRANDED"
    assert "last-resort hand-back: not confirmed" in ended.sheet.outcome.text


def test_one_master_holds_a_loop(tmp_path: Path) -> None:
    workplace = workplace_at(PlantInMemory(), tmp_path, WITH_GUARD)

    async def main() -> None:
        async with SupervisedTest(workplace, WITH_GUARD):
            with pytest.raises(LoopBusy, match="test of TIC-204"):
                async with SupervisedTest(workplace, WITH_GUARD):
                    pass
        async with SupervisedTest(workplace, WITH_GUARD):
            pass

    run_virtual(main())


def test_what_can_not_be_recorded_is_not_started(tmp_path: Path) -> None:
    workplace = workplace_at(PlantInMemory(), tmp_path, WITH_GUARD)

    async def main() -> None:
        async with SupervisedTest(workplace, WITH_GUARD) as test:
            (tmp_path / "journals").write_text("a file where the folder should be")
            with pytest.raises(JournalError, match="no test starts without its journal"):
                test.prepare(is_no_guard_accepted=False)

    run_virtual(main())


class BrokenStore:
    """A store that can't even tell its head."""

    def head_hash(self) -> str:
        raise SheetError("the store is damaged; run `autotune sheet verify`")


def test_a_store_that_is_damaged_is_told_before_anything_moves(tmp_path: Path) -> None:
    whole = workplace_at(PlantInMemory(), tmp_path, WITH_GUARD)
    workplace = replace(whole, store=BrokenStore())  # type: ignore[arg-type]

    async def main() -> None:
        async with SupervisedTest(workplace, WITH_GUARD) as test:
            with pytest.raises(SheetError, match="damaged"):
                test.prepare(is_no_guard_accepted=False)

    run_virtual(main())


class FullStore:
    """A store that has no room left when the sheet comes."""

    def head_hash(self) -> str:
        return "0" * 64

    def append(self, sheet: Sheet) -> str:
        raise SheetError(f"the disk is full; {sheet.sheet_id} can't be kept")


@pytest.mark.parametrize("is_stranded", [False, True])
def test_how_a_test_ended_is_told_though_its_sheet_can_not_be_kept(is_stranded: bool, tmp_path: Path) -> None:
    plant = PlantInMemory()
    if is_stranded:
        at(plant, 5.5, plant.plc.restart)
    raised = supervise(
        WITHOUT_GUARD,
        tmp_path,
        plant=plant,
        change=lambda place: replace(place, store=FullStore()),  # type: ignore[arg-type]
    ).raised
    assert isinstance(raised, RecordNotKept)
    assert raised.is_stranded is is_stranded
    assert str(raised).startswith("STRANDED. " if is_stranded else "COMPLETE. ")
    assert ("Go to the panel now and enter by hand" in str(raised)) is is_stranded
    assert "the disk is full" in str(raised)
    assert ".jsonl" in str(raised)


@pytest.mark.parametrize("is_disturbed", [False, True])
def test_the_watch_afterwards_tells_a_quiet_loop_from_one_that_is_not(
    is_disturbed: bool, finished: Ended, tmp_path: Path
) -> None:
    assert finished.end is not None
    test_end = finished.end
    plant = PlantInMemory()
    workplace = workplace_at(plant, tmp_path, WITH_GUARD)

    async def main() -> None:
        await asyncio.sleep(1.0)
        if is_disturbed:
            plant.run_to(1.0)
            plant.loop.process.add_load_step(1.0, 8.0)
        after = await watch_afterwards(workplace, WITH_GUARD, test_end, 1.0, 1.5)
        assert after.is_steady is not is_disturbed
        assert ("NOT steady" in after.in_words) is is_disturbed
        assert after.last is after.samples[-1]
        assert plant.links[-1].is_connected is False

    run_virtual(main())


def test_the_phase_of_a_test_is_complete_only_with_the_loop_back(finished: Ended) -> None:
    ended = finished
    assert ended.end is not None
    assert ended.end.experiment.phase is Phase.COMPLETE
    assert ended.plant.loop.block.mode is Mode.AUTO
    assert ended.end.sheet_hash == ended.workplace.store.head_hash()
