"""The daemon's rounds: each loop is read now and then while nobody works on it, so that an index can show it."""

import asyncio
from collections import deque
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from statistics import median

from autotune.config.types import LoopConfig
from autotune.errors import LinkError
from autotune.loop.sample import Sample
from autotune.loop.settings import BlockFields
from autotune.service.desk import LoopDesk
from autotune.service.reading import LoopReader
from autotune.service.workplace import Workplace

ROUND_S = 5.0
"""From the end of one round to the next."""


@dataclass(frozen=True, slots=True)
class LoopReading:
    """A loop as last read; ``fault`` says why it could not be read the last time it was tried."""

    sample: Sample | None = None
    settings: BlockFields | None = None
    utc: datetime | None = None
    fault: str = ""


@dataclass(slots=True)
class ControllerHealth:
    """How one controller has answered the rounds since the daemon began; ``trips_s`` are the last round trips."""

    readings: int = 0
    missed: int = 0
    trips_s: deque[float] = field(default_factory=lambda: deque(maxlen=50))
    heard_utc: datetime | None = None
    fault: str = ""

    @property
    def round_trip_s(self) -> float | None:
        """The median of the last round trips."""
        return median(self.trips_s) if self.trips_s else None


class Rounds:
    """Reads all loops one after the other, one short connection at a time, and never where somebody works."""

    def __init__(self, workplace: Workplace, desks: Iterable[LoopDesk], round_s: float = ROUND_S) -> None:
        self._workplace = workplace
        self._desks: Sequence[LoopDesk] = tuple(desks)
        self._round_s = round_s
        self.loops = {desk.loop.name: LoopReading() for desk in self._desks}
        self.controllers = {desk.loop.controller.name: ControllerHealth() for desk in self._desks}

    async def run(self) -> None:
        """Go round until cancelled."""
        while True:
            for desk in self._desks:
                if not desk.turn.locked():
                    async with desk.turn:
                        await self._read(desk.loop)
            await asyncio.sleep(self._round_s)

    async def _read(self, loop: LoopConfig) -> None:
        now_s = asyncio.get_running_loop().time
        health, last = self.controllers[loop.controller.name], self.loops[loop.name]
        link = self._workplace.open_link(loop)
        reader = LoopReader(loop, link)
        health.readings += 1
        try:
            await link.connect()
            begun_s = now_s()
            settings, sample = (
                await reader.read_settings_and_sample() if reader.has_settings else (None, await reader.read_sample())
            )
        except LinkError as fault:
            health.missed += 1
            health.fault = str(fault)
            self.loops[loop.name] = LoopReading(last.sample, last.settings, last.utc, str(fault))
            return
        finally:
            await link.close()
        utc = self._workplace.wall_clock()
        health.trips_s.append(now_s() - begun_s)
        health.heard_utc, health.fault = utc, ""
        self.loops[loop.name] = LoopReading(sample, settings, utc)
