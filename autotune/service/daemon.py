"""The daemon: it owns every loop of one configuration for as long as it lives.

Screens come and go; tests, writes, links and locks are its own.  A daemon that only watches holds no locks, recovers
nothing and has no desk's table: nothing in it can write.
"""

import asyncio
from contextlib import suppress
from dataclasses import replace

import structlog

from autotune.experiment.phases import Phase
from autotune.service.change_table import ChangeTable
from autotune.service.desk import LoopDesk
from autotune.service.locks import HeldLock, HouseLocks, Tenant
from autotune.service.rounds import Rounds
from autotune.service.workplace import Workplace, endpoint_line, things_of

_LOG = structlog.get_logger("autotune.daemon")
_LATE_SCANS = 20.0
_LATE_AT_LEAST_S = 2.0


class Daemon:
    """Desks, tables and rounds of one configuration.  Use: ``await start()``, serve, ``await stop()``."""

    def __init__(self, workplace: Workplace, *, is_watch_only: bool = False) -> None:
        self.is_watch_only = is_watch_only
        self.workplace = replace(workplace, take=HouseLocks().hold)
        turns: dict[str, asyncio.Lock] = {}
        self.desks = {
            loop.name: LoopDesk(
                self.workplace, loop, turns.setdefault(endpoint_line(loop.controller.endpoint), asyncio.Lock())
            )
            for loop in workplace.configuration.loops
        }
        self.tables = (
            {} if is_watch_only else {name: ChangeTable(self.workplace, desk) for name, desk in self.desks.items()}
        )
        self.rounds = Rounds(self.workplace, self.desks.values())
        self._machine = workplace
        self._lock: HeldLock | None = None
        self._walking: asyncio.Task[None] | None = None

    async def start(self, page: str) -> None:
        """Become the one master of all loops on this machine, settle what an earlier run has left, begin the rounds.

        ``page`` tells the next one where to go.  Raises ``LoopBusy`` when somebody else holds one of the loops.
        """
        if not self.is_watch_only:
            configuration = self.workplace.configuration
            doing = f"serves {configuration.file.name}; use its page {page}".rstrip()
            things = {thing for loop in configuration.loops for thing in things_of(loop)}
            tenant = Tenant.present(doing, self.workplace.wall_clock)
            self._lock = self._machine.take(self.workplace.data_dir, things, tenant)
            for desk in self.desks.values():
                await desk.settle()
                if desk.notes:
                    _LOG.warning("recovered", loop=desk.loop.name, settled=desk.is_settled, notes=desk.notes)
        self._walking = asyncio.ensure_future(self.rounds.run())

    async def stop(self) -> None:
        """Hand back every loop, put back every write that has begun, keep their sheets, let the locks go."""
        if self._walking is not None:
            self._walking.cancel()
            with suppress(asyncio.CancelledError):
                await self._walking
        await asyncio.gather(*(desk.stop() for desk in self.desks.values()))
        await asyncio.gather(*(table.stop() for table in self.tables.values()))
        if self._lock is not None:
            self._lock.release()

    def desk(self, loop: str) -> LoopDesk:
        """The desk of a loop; raises ``ConfigError`` naming those there are."""
        return self.desks[self.workplace.loop(loop).name]

    @property
    def is_in_time(self) -> bool:
        """Whether every running test keeps its scan: what a watchdog outside is fed with.

        A hand-back has its own deadline and is never cut short by a watchdog.
        """
        now_s = asyncio.get_running_loop().time()
        return not any(
            desk.is_testing and desk.runner is not None and _is_late(desk, now_s) for desk in self.desks.values()
        )


def _is_late(desk: LoopDesk, now_s: float) -> bool:
    if desk.runner is None:
        return False
    experiment = desk.runner.experiment
    if experiment.t_s is None or experiment.phase is Phase.RESTORING:
        return False
    return now_s - experiment.t_s > max(_LATE_SCANS * desk.loop.scan_s, _LATE_AT_LEAST_S)
