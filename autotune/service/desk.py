"""One loop's desk in the daemon: what is under way there, and the wishes of persons about it.

A desk does one thing at a time: a recovery, a look, a test or a change of settings.  It owns the task of a test, so
that nothing a screen does or leaves undone ends one.
"""

import asyncio
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from autotune.config.types import LoopConfig
from autotune.errors import LoopBusy
from autotune.loop.outcome import Refusal
from autotune.service.before_a_test import cautions_before, consents
from autotune.service.check import LoopCheck, check_loop
from autotune.service.persons import Person
from autotune.service.readiness import Level
from autotune.service.recovery import NOT_SETTLED, recover
from autotune.service.runner import TestRunner
from autotune.service.testing import Permission, SupervisedTest
from autotune.service.workplace import Workplace

Begun = asyncio.Future[Refusal | None]


class Occupation:
    """What one loop is busy with, and by whom; one thing at a time."""

    def __init__(self, loop: str) -> None:
        self.doing = ""
        self.by = ""
        self._loop = loop

    def begin(self, doing: str, by: str) -> None:
        """Take the loop for something.  Raises ``LoopBusy`` where it is busy already."""
        if self.doing:
            raise LoopBusy(f"{self._loop} is busy: {self.doing} by {self.by}; wait until that is over")
        self.doing, self.by = doing, by

    def end(self) -> None:
        """The loop is free again."""
        self.doing = self.by = ""

    @contextmanager
    def during(self, doing: str, by: str) -> Iterator[None]:
        """``begin`` and ``end`` around a block."""
        self.begin(doing, by)
        try:
            yield
        finally:
            self.end()


@dataclass(frozen=True, slots=True)
class Look:
    """What a look showed, and when it ended."""

    check: LoopCheck
    utc: datetime


@dataclass(frozen=True, slots=True)
class Allowed:
    """A permission as it was given at a screen: by whom, in which words, and the cautions shown there."""

    by: Person
    words: str
    accepted: tuple[str, ...]


class LoopDesk:
    """Looks at one loop and tests it.

    ``runner`` is the present or the last test, ``test_id`` tells two of them apart, ``sheet_id`` is the last test's
    sheet once it is kept, ``fault`` what broke in it.  ``turn`` is shared by all desks of one controller's endpoint:
    whoever reads or acts there takes it.  ``notes`` are what the last recovery said.
    """

    def __init__(self, workplace: Workplace, loop: LoopConfig, turn: asyncio.Lock) -> None:
        self.loop = loop
        self.turn = turn
        self.occupation = Occupation(loop.name)
        self.is_settled = True
        self.notes: list[str] = []
        self.runner: TestRunner | None = None
        self.test_id = ""
        self.sheet_id: str | None = None
        self.fault = ""
        self._workplace = workplace
        self._test: asyncio.Task[str | None] | None = None

    @property
    def is_testing(self) -> bool:
        """Whether a test is under way that can hear wishes."""
        return self._test is not None and self.runner is not None and not self.runner.experiment.is_over

    async def settle(self) -> None:
        """Look at what an earlier run has left, and give back what is surely ours.  Raises ``LoopBusy``."""
        with self.occupation.during("recovery", "the daemon"):
            async with self.turn:
                with self._workplace.hold(self.loop, f"recovery of {self.loop.name}"):
                    await self._recover()

    async def look(self, by: str) -> Look:
        """Read the loop for its look-around time and judge it; nothing is written.  Raises ``LoopBusy``."""
        doing = f"look at {self.loop.name} by {by}"
        with self.occupation.during("look", by), self._workplace.hold(self.loop, doing):
            async with self.turn:
                link = self._workplace.open_link(self.loop)
                try:
                    check = await check_loop(self.loop, link, self._workplace.open_link, self.loop.look_around_s)
                finally:
                    await link.close()
        return Look(check, self._workplace.wall_clock())

    async def start(self, allowed: Allowed) -> Refusal | None:
        """Look once more and start a permitted test.

        Returns when it runs (``None``) or why it does not.  Raises ``LoopBusy`` and what stood against its journal.
        """
        self.occupation.begin("test", allowed.by.name)
        begun: Begun = asyncio.get_running_loop().create_future()
        test = self._test = asyncio.ensure_future(self._run(allowed, begun))
        test.add_done_callback(self._over)
        waiting: set[asyncio.Future[Any]] = {begun, test}
        await asyncio.wait(waiting, return_when=asyncio.FIRST_COMPLETED)
        if begun.done():
            return begun.result()
        if not test.cancelled() and (fault := test.exception()) is not None:
            raise fault
        return Refusal("NOT_STARTED", "the service is stopping", "start it again first")

    def abort(self, by: str) -> bool:
        """Hand the loop back now; whether there is a test to hear it."""
        return self._wish(lambda runner: runner.abort(by))

    def finish(self, by: str) -> bool:
        """Finish now and keep what was measured."""
        return self._wish(lambda runner: runner.finish(by))

    def smaller_steps(self, by: str) -> bool:
        """Smaller steps from the next switch on."""
        return self._wish(lambda runner: runner.smaller_steps(by))

    async def stop(self) -> None:
        """Hand the loop back and keep the sheet."""
        self.abort("the service is stopping")
        if self._test is not None:
            self._test.cancel()  # heard as "abort" once it runs, as "don't begin" before
            await asyncio.wait({self._test})

    async def _run(self, allowed: Allowed, begun: Begun) -> str | None:
        """The sheet's id; ``None`` where the test did not begin."""
        async with self.turn, SupervisedTest(self._workplace, self.loop) as supervised:
            looked = await self._fit(supervised, allowed)
            if isinstance(looked, Refusal):
                begun.set_result(looked)
                return None
            now = self._workplace.wall_clock()
            cautions = tuple((caution, now) for caution in cautions_before(self.loop, looked))
            self.runner = supervised.prepare(is_no_guard_accepted=bool(consents(looked)))
            self.test_id, self.sheet_id, self.fault = now.isoformat(), None, ""
            begun.set_result(None)
            ended = await supervised.run(Permission(allowed.by, allowed.words, cautions, now))
            return ended.sheet.sheet_id

    async def _fit(self, supervised: SupervisedTest, allowed: Allowed) -> LoopCheck | Refusal:
        """A fresh look, since the one that was shown is some time ago."""
        await self._recover()
        if not self.is_settled:
            return Refusal("STRANDED", " ".join(self.notes) or NOT_SETTLED, "go to the panel first")
        looked = await supervised.look()
        if not looked.is_fit:
            stops = "; ".join(str(finding) for finding in looked.findings if finding.level is Level.STOP)
            return Refusal("NOT_FIT", stops, "mend what is named, then look again")
        unread = [caution for caution in cautions_before(self.loop, looked) if caution not in allowed.accepted]
        if unread:
            return Refusal("CAUTION_NEW", "; ".join(unread), "look again, read the cautions and start again")
        return looked

    async def _recover(self) -> None:
        self.notes.clear()
        self.is_settled = await recover(self._workplace, self.loop, self.notes.append)

    def _over(self, test: "asyncio.Task[str | None]") -> None:
        """The loop is free before anybody can see the sheet."""
        self._test = None
        self.occupation.end()
        if test.cancelled():
            return
        if (fault := test.exception()) is not None:
            self.fault = f"{type(fault).__name__}: {fault}"
        else:
            self.sheet_id = test.result() or self.sheet_id

    def _wish(self, say: Callable[[TestRunner], None]) -> bool:
        if self.runner is None or not self.is_testing:
            return False
        say(self.runner)
        return True
