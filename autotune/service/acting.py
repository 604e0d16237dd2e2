"""Wishes that change something: only a daemon that may act has this."""

from typing import assert_never

from autotune.confirmed_write.plan import WritePlan
from autotune.loop.outcome import Refusal
from autotune.service.answers import change_answer
from autotune.service.change_table import ChangeTable
from autotune.service.changing import ChangeEnd
from autotune.service.daemon import Daemon
from autotune.service.desk import Allowed
from autotune.service.live_answers import plan_answer
from autotune.service.local_api import Answer
from autotune.service.local_requests import (
    AbortTest,
    ActRequest,
    ConfirmChange,
    DropPlan,
    FinishTest,
    PlanChange,
    PlanRestore,
    SmallerSteps,
    StartTest,
)
from autotune.service.local_views import DoneAnswer
from autotune.service.persons import Person
from autotune.service.sheet_mapping import settings_quantities

NOTHING_RUNS = Refusal("NO_TEST", "no test of this loop is under way", "look at the page again")


class Actor:
    """Does what persons ask for.  Who may ask is decided before."""

    def __init__(self, daemon: Daemon) -> None:
        self._daemon = daemon

    async def perform(self, request: ActRequest, by: Person) -> Answer | Refusal:
        """Do it, or say why not.  Raises ``AutotuneError``."""
        match request:
            case StartTest():
                return await self._start(request, by)
            case AbortTest(loop=loop):
                done = self._daemon.desk(loop).abort(by.name)
                return DoneAnswer(text="abort asked for: the loop is being handed back") if done else NOTHING_RUNS
            case FinishTest(loop=loop):
                done = self._daemon.desk(loop).finish(by.name)
                return DoneAnswer(text="finishing: what was measured is kept") if done else NOTHING_RUNS
            case SmallerSteps(loop=loop):
                done = self._daemon.desk(loop).smaller_steps(by.name)
                return DoneAnswer(text="smaller steps from the next switch on") if done else NOTHING_RUNS
            case PlanChange(sheet=sheet, proposal=proposal):
                table = await self._table_of(sheet)
                return self._shown(table, await table.plan_proposal(by, sheet, proposal))
            case PlanRestore(sheet=sheet):
                table = await self._table_of(sheet)
                return self._shown(table, await table.plan_restore(by, sheet))
            case ConfirmChange(loop=loop, typed=typed):
                return await self._confirm(loop, typed, by)
            case DropPlan(loop=loop):
                dropped = await self._table(loop).drop()
                return DoneAnswer(text="the plan is dropped; nothing was written" if dropped else "no plan was open")
            case _:
                assert_never(request)

    async def _start(self, asked: StartTest, by: Person) -> Answer | Refusal:
        desk = self._daemon.desk(asked.loop)
        if asked.typed_loop != desk.loop.name:
            return Refusal("NAME_WRONG", f"typed was {asked.typed_loop!r}", f"type {desk.loop.name} to start")
        at_most = self._daemon.workplace.configuration.concurrent_tests_at_most
        tested = [one.loop.name for one in self._daemon.desks.values() if one.occupation.doing == "test"]
        if len(tested) >= at_most:
            reason = f"concurrent_tests_at_most is {at_most}, and {', '.join(tested)} is being tested"
            return Refusal("TOO_MANY_TESTS", reason, "wait until that test is over")
        words = f"permit {asked.permit}; loop owner {asked.loop_owner}; the plant is protected by {asked.protection}"
        return await desk.start(Allowed(by, words, asked.accepted)) or DoneAnswer(text="the test has begun")

    async def _table_of(self, sheet: str) -> ChangeTable:
        workplace = self._daemon.workplace
        stored = await workplace.in_thread(workplace.store.get, sheet)
        return self._table(stored.sheet.loop)

    def _table(self, loop: str) -> ChangeTable:
        return self._daemon.tables[self._daemon.desk(loop).loop.name]

    def _shown(self, table: ChangeTable, plan: WritePlan | Refusal) -> Answer | Refusal:
        return plan if isinstance(plan, Refusal) else plan_answer(table.loop, plan)

    async def _confirm(self, loop: str, typed: str, by: Person) -> Answer | Refusal:
        table = self._table(loop)
        ended = await table.confirm(by, typed)
        if not isinstance(ended, ChangeEnd):
            return ended
        read = ended.state.last_read
        return change_answer(ended, settings_quantities(table.loop, None if read is None else read.fields))
