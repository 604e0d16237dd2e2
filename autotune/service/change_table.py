"""The table on which one planned change of settings waits for its digest."""

import asyncio
from collections.abc import Awaitable, Callable
from contextlib import AsyncExitStack
from dataclasses import dataclass
from typing import Literal

from autotune.config.types import LoopConfig
from autotune.confirmed_write.confirmation import GOOD_FOR_S
from autotune.confirmed_write.phases import Phase
from autotune.confirmed_write.plan import WritePlan
from autotune.loop.outcome import Refusal
from autotune.service.changing import ChangeEnd, SettingsChange, earlier_settings
from autotune.service.desk import LoopDesk
from autotune.service.persons import Person
from autotune.service.recovery import NOT_SETTLED, close_write_intents, open_write_intents, recover
from autotune.service.workplace import Workplace

_Plan = Callable[[SettingsChange], Awaitable[WritePlan | Refusal]]


@dataclass(frozen=True, slots=True)
class Tabled:
    """A plan, for whom it was made, and the open change that can write it."""

    plan: WritePlan
    kind: Literal["write", "restore"]
    sheet_id: str
    by: Person
    change: SettingsChange
    held: AsyncExitStack


class ChangeTable:
    """Plans and writes changes of one loop's settings.

    From the plan to its end the loop is taken: nobody tests it, and nobody else plans.  A plan leaves the table when
    it is written or dropped, or when its digest is good no longer.
    """

    def __init__(self, workplace: Workplace, desk: LoopDesk) -> None:
        self._workplace = workplace
        self._desk = desk
        self._tabled: Tabled | None = None
        self._write: asyncio.Task[ChangeEnd | Refusal] | None = None
        self._expiry: asyncio.Task[None] | None = None

    @property
    def loop(self) -> LoopConfig:
        """The loop whose settings change."""
        return self._desk.loop

    async def plan_proposal(self, by: Person, sheet_id: str, name: str) -> WritePlan | Refusal:
        """Put the change to a sheet's proposal on the table.  Raises ``LinkError``, ``LoopBusy``, ``SheetError``."""
        stored = await self._workplace.in_thread(self._workplace.store.get, sheet_id)
        return await self._lay("write", by, sheet_id, lambda change: change.plan_proposal(stored, name))

    async def plan_restore(self, by: Person, sheet_id: str) -> WritePlan | Refusal:
        """Put the way back to a sheet's settings as found on the table.  Raises as ``plan_proposal``."""
        kept, settings = await self._workplace.in_thread(earlier_settings, self._workplace, self.loop, sheet_id)
        return await self._lay("restore", by, kept, lambda change: change.plan_restore(settings, f"as found on {kept}"))

    async def confirm(self, by: Person, typed: str) -> ChangeEnd | Refusal:
        """Write the plan; a mistyped digest leaves it on the table.  A screen that goes away changes nothing."""
        tabled = self._tabled
        if tabled is None or self._write is not None:
            return Refusal("NO_PLAN", "no plan waits for its digest", "plan the change again")
        if tabled.by != by:
            return Refusal("NOT_YOUR_PLAN", f"this plan was made for {tabled.by.name}", "plan the change yourself")
        self._write = asyncio.ensure_future(self._written(tabled, typed))
        return await asyncio.shield(self._write)

    async def drop(self) -> bool:
        """Take the plan off the table; a write that has begun goes on.  Whether there was one to take."""
        if self._tabled is None or self._write is not None:
            return False
        await self._clear()
        return True

    async def stop(self) -> None:
        """Let a write put back what it has begun, and clear the table."""
        if self._write is not None:
            self._write.cancel()  # heard as "put back"
            await asyncio.wait({self._write})
        await self._clear()

    async def _lay(
        self, kind: Literal["write", "restore"], by: Person, sheet_id: str, make: _Plan
    ) -> WritePlan | Refusal:
        async with AsyncExitStack() as held:
            self._desk.occupation.begin("change of settings", by.name)
            held.callback(self._desk.occupation.end)
            await held.enter_async_context(self._desk.turn)
            change = await held.enter_async_context(SettingsChange(self._workplace, self.loop))
            if (refusal := await self._settled(kind)) is not None:
                return refusal
            plan = await make(change)
            if isinstance(plan, WritePlan):
                self._tabled = Tabled(plan, kind, sheet_id, by, change, held.pop_all())
                self._expiry = asyncio.ensure_future(self._expire())
            return plan

    async def _settled(self, kind: Literal["write", "restore"]) -> Refusal | None:
        """A write that broke off may be mended by a restore; everything else has to be settled first."""
        notes: list[str] = []
        is_settled = await recover(self._workplace, self.loop, notes.append)
        self._desk.is_settled, self._desk.notes[:] = is_settled, notes
        if is_settled or (kind == "restore" and open_write_intents(self._workplace, self.loop)):
            return None
        return Refusal("STRANDED", " ".join(notes) or NOT_SETTLED, "go to the panel first")

    async def _written(self, tabled: Tabled, typed: str) -> ChangeEnd | Refusal:
        try:
            ended = await tabled.change.write(tabled.kind, tabled.sheet_id, tabled.plan, typed, tabled.by)
        except BaseException:
            await self._clear()
            raise
        finally:
            self._write = None
        if isinstance(ended, Refusal) and ended.code == "DIGEST_WRONG":
            return ended
        if tabled.kind == "restore" and isinstance(ended, ChangeEnd) and ended.state.phase is Phase.WRITTEN:
            close_write_intents(self._workplace, self.loop)
        await self._clear()
        return ended

    async def _expire(self) -> None:
        await asyncio.sleep(GOOD_FOR_S)
        self._expiry = None
        await self.drop()

    async def _clear(self) -> None:
        if self._expiry is not None:
            self._expiry.cancel()
            self._expiry = None
        if self._tabled is not None:
            tabled, self._tabled = self._tabled, None
            await tabled.held.aclose()
