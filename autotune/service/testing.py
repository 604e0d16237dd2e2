"""One supervised test from the locks to the sheet: look, run, identify, propose, keep."""

import asyncio
from dataclasses import dataclass
from datetime import datetime
from hashlib import sha256
from pathlib import Path

from autotune.config.digest import canonical_text
from autotune.config.test_plan import plan_for
from autotune.config.types import LoopConfig
from autotune.design.proposal import ProposalSheet
from autotune.errors import RecordNotKept, SheetError
from autotune.experiment.phases import Phase
from autotune.experiment.state import Experiment, record
from autotune.field.link import LoopLink
from autotune.identify.findings import Findings, FindingsOrRefusal
from autotune.loop.outcome import Refusal
from autotune.loop.record import TimeBase
from autotune.loop.settings import BlockFields
from autotune.service.check import LoopCheck, check_loop
from autotune.service.deaf import to_the_end
from autotune.service.journal import FileJournal
from autotune.service.persons import Person
from autotune.service.proposing import DesignTask
from autotune.service.runner import TestRunner
from autotune.service.sheet_mapping import (
    TimeAxis,
    as_found_section,
    controller_line,
    costs_of,
    event_lines,
    findings_section,
    forecast_figures,
    limits_section,
    outcome_section,
    person_line,
    plan_section,
    proposals_section,
    rested_section,
    samples_section,
    span_section,
    versions,
    write_lines,
)
from autotune.service.workplace import Workplace
from autotune.sheet import schema


@dataclass(frozen=True, slots=True)
class Permission:
    """A person allows one test: who, in which words, and the cautions they accepted with the instant."""

    person: Person
    text: str
    cautions: tuple[tuple[str, datetime], ...]
    given: datetime


@dataclass(frozen=True, slots=True)
class TestEnd:
    """A test after its end: the last state, what was found and proposed, and where it is kept."""

    __test__ = False

    experiment: Experiment
    findings: FindingsOrRefusal | None
    proposed: ProposalSheet | None
    settings: BlockFields | None
    sheet: schema.Sheet
    sheet_hash: str
    faults: tuple[str, ...]


class SupervisedTest:
    """One test of one loop, held by one master.

    Use: ``async with SupervisedTest(...) as test``, then ``look`` (nothing written), then ``prepare``, then
    ``run``.  While it runs, ``runner`` shows the present state and takes abort, finish and smaller steps.
    Raises ``LoopBusy`` on entry when another master holds the loop.
    """

    def __init__(self, workplace: Workplace, loop: LoopConfig) -> None:
        self.loop = loop
        self.plan = plan_for(loop, workplace.new_token())
        self._workplace = workplace
        self._link: LoopLink = workplace.open_link(loop)
        self._check: LoopCheck | None = None

    async def __aenter__(self) -> "SupervisedTest":
        self._lock = self._workplace.hold(self.loop, f"test of {self.loop.name}")
        return self

    async def __aexit__(self, *_: object) -> None:
        await self._link.close()
        self._lock.release()

    async def look(self, look_s: float | None = None) -> LoopCheck:
        """Read the loop and judge its fitness; nothing is written.  The longer the look, the more it shows."""
        seconds = self.loop.look_around_s if look_s is None else look_s
        self._check = await check_loop(self.loop, self._link, self._workplace.open_link, seconds)
        return self._check

    def prepare(self, *, is_no_guard_accepted: bool) -> TestRunner:
        """The runner of this test, with its journal on the disk; nothing is read or written yet.

        ``is_no_guard_accepted`` is a person's recorded consent to test without a guard in the PLC.
        Raises ``JournalError`` and ``SheetError``: what can't be recorded isn't started.
        """
        self.plan = plan_for(self.loop, self.plan.token, is_no_guard_accepted=is_no_guard_accepted)
        started = self._workplace.wall_clock()
        self._axis = TimeAxis(asyncio.get_running_loop().time(), started)
        self._sheet_id = schema.sheet_id(self.loop.name, started, self.plan.token)
        self._workplace.store.head_hash()
        self._journal = FileJournal.create(
            self._workplace.data_dir, self._sheet_id, wall_clock=self._workplace.wall_clock
        )
        self.runner = TestRunner(self.loop, self.plan, self._link, self._journal)
        return self.runner

    async def run(self, permission: Permission) -> TestEnd:
        """Run the prepared and permitted test, identify, propose and keep the sheet, whatever the end.

        A cancellation is heard as "abort".  It and whatever else broke a contract are raised after the hand-back and
        after the sheet was kept.
        """
        return await to_the_end(self._run(permission), lambda: self.runner.abort("the service is stopping"))

    async def _run(self, permission: Permission) -> TestEnd:
        runner, journal = self.runner, self._journal
        try:
            broken = await self._finish(runner)
        finally:
            journal.close()
        settings = None if self._check is None else self._check.settings
        findings, proposed = await self._conclude(runner, settings)
        told = _Told(runner, findings, proposed, settings, journal.file)
        sheet = self._sheet(self._sheet_id, self._axis, permission, told)
        try:
            sheet_hash = await self._workplace.in_thread(self._workplace.store.append, sheet)
        except SheetError as fault:
            ended = sheet.outcome
            raise RecordNotKept(
                f"{ended.ended}. {ended.text} Its sheet could not be kept ({fault}); its journal is {journal.file}",
                is_stranded=runner.experiment.phase is Phase.STRANDED,
            ) from fault
        if broken is not None:
            raise broken
        return TestEnd(runner.experiment, findings, proposed, settings, sheet, sheet_hash, tuple(runner.faults))

    async def _finish(self, runner: TestRunner) -> BaseException | None:
        """Run to the end; what broke, whatever it is, is kept for after the sheet."""
        try:
            await runner.run()
        except (Exception, asyncio.CancelledError) as broken:  # noqa: BLE001 - raised once the sheet is kept
            return broken
        return None

    async def _conclude(
        self, runner: TestRunner, settings: BlockFields | None
    ) -> tuple[FindingsOrRefusal | None, ProposalSheet | None]:
        """Findings and proposals; a slip of ours in them costs these, never the sheet with what was measured."""
        recorded = record(runner.experiment)
        if recorded is None:
            return None, None
        findings: FindingsOrRefusal | None = None
        try:
            findings = await self._workplace.estimator.measure(recorded)
            return findings, await self._propose(findings, settings)
        except Exception as fault:  # noqa: BLE001 - told on the sheet
            runner.faults.append(f"{type(fault).__name__}: {fault}")
            lost = Refusal("NOT_CONCLUDED", f"the conclusion failed: {fault}", "report it with the sheet's samples")
            return findings or lost, None

    async def _propose(self, findings: FindingsOrRefusal | None, settings: BlockFields | None) -> ProposalSheet | None:
        if not isinstance(findings, Findings):
            return None
        noise_pct = self.runner.experiment.noise_pct
        task = DesignTask(findings, self.loop.block, self.loop.action, self.loop.pv_span, settings, noise_pct)
        return await self._workplace.estimator.propose(task)

    def _sheet(self, sheet_id: str, axis: TimeAxis, permission: Permission, told: "_Told") -> schema.Sheet:
        runner, experiment = told.runner, told.runner.experiment
        time_base = TimeBase.PLC_CLOCK if self.plan.has_clock_tags else TimeBase.OUR_CLOCK
        return schema.Sheet(
            sheet_id=sheet_id,
            loop=self.loop.name,
            service=self.loop.service,
            unit=self.loop.unit,
            controller=controller_line(self.loop),
            started_utc=axis.start_utc,
            ended_utc=self._workplace.wall_clock(),
            versions=versions(),
            configuration_digest=self._workplace.configuration.digest,
            configuration_text=canonical_text(self.loop),
            pv_span=span_section(self.loop.pv_span),
            op_span=span_section(self.loop.op_span),
            person=person_line(permission.person),
            permission=schema.Said(text=permission.text, utc=permission.given),
            cautions_accepted=tuple(schema.Said(text=text, utc=utc) for text, utc in permission.cautions),
            as_found=as_found_section(self.loop, experiment.as_found, told.settings),
            plan=plan_section(self.plan),
            limits=limits_section(self.plan),
            rested=rested_section(experiment),
            samples=samples_section(runner.log.samples),
            writes=write_lines(runner.log.writes, axis),
            events=event_lines(runner.log.story, axis),
            outcome=outcome_section(experiment, runner.faults),
            findings=findings_section(told.findings, time_base.value),
            proposals=proposals_section(self.loop, told.proposed),
            proposals_reason="" if told.proposed is None else told.proposed.reason,
            as_found_figures=() if told.proposed is None else forecast_figures(told.proposed.present_forecast),
            costs=costs_of(self.plan, self.loop),
            journal_file=told.journal.name,
            journal_digest=sha256(told.journal.read_bytes()).hexdigest(),
        )


@dataclass(frozen=True, slots=True)
class _Told:
    """What a finished test has to tell its sheet."""

    runner: TestRunner
    findings: FindingsOrRefusal | None
    proposed: ProposalSheet | None
    settings: BlockFields | None
    journal: Path
