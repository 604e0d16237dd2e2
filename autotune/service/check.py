"""``check``: connect, read only, and say what would stop a test and what each missing tag costs."""

import asyncio
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from statistics import median

from autotune.config.types import LoopConfig
from autotune.errors import LinkError, LinkRefused
from autotune.field.facts import TellsFacts
from autotune.field.link import LoopLink
from autotune.loop.sample import Sample
from autotune.loop.settings import BlockFields
from autotune.service.clock import utc_now
from autotune.service.diagnose import OpenLink, implausible_signals, missing_tags
from autotune.service.readiness import Level, ReadinessFinding, judge_samples
from autotune.service.reading import LoopReader
from autotune.service.scan_grid import ScanGrid
from autotune.service.server_facts import judge_facts

_UNREADABLE = ("NODE_FAULT", "NODE_NO_NUMBER")


@dataclass(frozen=True, slots=True)
class LoopCheck:
    """What a look at one loop showed: findings, the last reading, settings and how the link behaves.

    ``round_trip_s`` is the median time of one reading; ``refresh_s`` the median time between changes of
    the PLC's clock or of PV (``None`` when nothing changed).
    """

    loop: LoopConfig
    findings: tuple[ReadinessFinding, ...]
    sample: Sample | None
    settings: BlockFields | None
    round_trip_s: float | None
    refresh_s: float | None

    @property
    def is_fit(self) -> bool:
        """Whether nothing stands against a test."""
        return not any(finding.level is Level.STOP for finding in self.findings)


async def check_loop(loop: LoopConfig, link: LoopLink, open_link: OpenLink, look_s: float) -> LoopCheck:
    """Read one loop for ``look_s`` seconds and judge it; nothing is written and nothing is raised for the wire."""
    reader = LoopReader(loop, link)
    try:
        told = await _told_facts(loop, link)
        if any(finding.code in _UNREADABLE for finding in told):
            return LoopCheck(loop, told, None, None, None, None)
        misread = await _first_look(loop, link, reader, open_link)
        if misread:
            return LoopCheck(loop, (*misread, *told), None, None, None, None)
        settings = await reader.read_settings() if reader.has_settings else None
        samples = await look_around(loop, reader, look_s)
    except LinkError as fault:
        unreached = ReadinessFinding(Level.STOP, "LINK", str(fault), "see LINK in the list of codes")
        return LoopCheck(loop, (unreached,), None, None, None, None)
    before_s = (loop.controller.plc_scan_s or 0.0) + loop.controller.io_time_s  # PV may be so much older
    trips = [sample.t_s - sample.taken.earliest_s - before_s for sample in samples]
    findings = (*told, *judge_samples(loop, samples))
    return LoopCheck(loop, findings, samples[-1], settings, median(trips), _refresh_s(samples))


async def look_around(loop: LoopConfig, reader: LoopReader, look_s: float) -> tuple[Sample, ...]:
    """Samples of ``look_s`` seconds on the loop's scan grid, at least one.  Raises ``LinkError``."""
    now_s = asyncio.get_running_loop().time
    start_s = now_s()
    grid = ScanGrid(start_s, loop.scan_s)
    samples: list[Sample] = []
    while not samples or now_s() < start_s + look_s:
        await asyncio.sleep(max(grid.due_s - now_s(), 0.0))
        grid.take(now_s())
        samples.append(await reader.read_sample())
    return tuple(samples)


async def _told_facts(loop: LoopConfig, link: LoopLink) -> tuple[ReadinessFinding, ...]:
    """What the controller tells by itself, where its protocol can; judged before any reading is believed."""
    if not isinstance(link, TellsFacts):
        return ()
    if not link.is_connected:
        await link.connect()
    return judge_facts(loop, await link.facts(), utc_now())


async def _first_look(
    loop: LoopConfig, link: LoopLink, reader: LoopReader, open_link: OpenLink
) -> tuple[ReadinessFinding, ...]:
    try:
        await reader.read_sample()
        if reader.has_settings:
            await reader.read_settings()
    except LinkRefused:
        missing = await missing_tags(loop, link)
        if missing:
            return missing
        raise
    return await implausible_signals(loop, link, open_link)


def _refresh_s(samples: Sequence[Sample]) -> float | None:
    changes = [b.t_s for a, b in pairwise(samples) if (a.plc_clock_ms, a.pv_pct) != (b.plc_clock_ms, b.pv_pct)]
    gaps = [b - a for a, b in pairwise(changes)]
    return median(gaps) if gaps else None
