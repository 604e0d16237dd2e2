"""Memory and handles over time: ``python -m tests.benchmarks.soak [--loops N] [--minutes M] [--json]``.

One plant with N loops in a process of its own.  In this process every loop is read each 100 ms over a connection of its
own, and tests are started and aborted, one loop after the other, with journals and sheets as in earnest.  Memory and
open handles are looked at after each test.  Flat means: after the first third, which fills caches, neither grows
beyond its bar.  Exits with 1 where one does, or a test did not end as it must.
"""

import argparse
import asyncio
import json
import os
import re
import sys
import tempfile
from collections import Counter
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from statistics import median

from autotune.config.load import load
from autotune.config.types import LoopConfig
from autotune.errors import LinkError
from autotune.service.estimator import InlineEstimator
from autotune.service.reading import LoopReader
from autotune.service.scan_grid import ScanGrid
from autotune.service.testing import SupervisedTest
from autotune.service.workplace import Workplace, open_workplace
from tests.system.bench import BENCH, permission
from tests.system.plant import ROOT, SoftPlant, soft_plant

SCAN_S = 0.1
TEST_S = 3.0
MEMORY_GROWTH_AT_MOST_PCT = 5.0
HANDLES_GROWTH_AT_MOST = 0
BLOCK = 100
"""Registers of one loop of the plant."""


@dataclass(frozen=True, slots=True)
class Look:
    """This process after one more test."""

    t_s: float
    memory_kib: int
    handles: int


@dataclass(frozen=True, slots=True)
class Report:
    """The whole time; growth is from the median of the second third to that of the last one."""

    loops: int
    minutes: float
    tests: dict[str, int]
    readings: int
    failed_readings: int
    late_scans: int
    memory_kib_start: int
    memory_kib_end: int
    memory_growth_pct: float
    handles_start: int
    handles_end: int
    handles_growth: float

    @property
    def is_flat(self) -> bool:
        """Whether nothing grew, and every test was handed back."""
        is_memory_flat = self.memory_growth_pct <= MEMORY_GROWTH_AT_MOST_PCT
        return is_memory_flat and self.handles_growth <= HANDLES_GROWTH_AT_MOST and set(self.tests) == {"ABORTED"}


def rig_of(loops: int) -> str:
    """The fast loop, many times over."""
    head, body = (ROOT / "simulator/rigs/fast-loop.toml").read_text("utf-8").split("[[loop]]")
    return head + "".join(f"[[loop]]{body}\n".replace('"TIC-1"', f'"TIC-{k}"') for k in range(1, loops + 1))


def configuration_of(loops: int, port: int) -> str:
    """The bench's loop, many times over, each at its own block of registers."""
    head, body = BENCH.read_text("utf-8").replace("port = 50502", f"port = {port}").split("[[loop]]")
    body = body.replace("scan_s = 0.05", f"scan_s = {SCAN_S}").replace("hold_s = 1.2", "hold_s = 0.6")

    def of_loop(k: int) -> str:
        moved = re.sub(r"address = (\d+)", lambda found: f"address = {int(found[1]) + BLOCK * (k - 1)}", body)
        return "[[loop]]" + moved.replace('"TIC-1"', f'"TIC-{k}"')

    return head + "".join(of_loop(k) for k in range(1, loops + 1))


class Soak:
    """All readers and the tests in turn."""

    def __init__(self, workplace: Workplace, plant: SoftPlant) -> None:
        self.ends: Counter[str] = Counter()
        self.looks: list[Look] = []
        self.readings = self.failed = self.late = 0
        self._workplace = workplace
        self._plant = plant
        self._clock = asyncio.get_running_loop().time

    async def run(self, minutes: float) -> None:
        """Read all loops and test one after the other for so long."""
        loops = self._workplace.configuration.loops
        reading = [asyncio.create_task(self._read(loop), name=f"reading {loop.name}") for loop in loops]
        end_s, number = self._clock() + 60.0 * minutes, 0
        try:
            while self._clock() < end_s:
                await self._test(loops[number % len(loops)])
                number += 1
                self.looks.append(Look(self._clock(), memory_kib(), handles()))
        finally:
            for task in reading:
                task.cancel()
            await asyncio.gather(*reading, return_exceptions=True)

    async def _read(self, loop: LoopConfig) -> None:
        link = self._workplace.open_link(loop)
        reader, grid = LoopReader(loop, link), ScanGrid(self._clock(), SCAN_S)
        try:
            while True:
                await asyncio.sleep(max(grid.due_s - self._clock(), 0.0))
                self.late += grid.take(self._clock())
                try:
                    await reader.read_sample()
                    self.readings += 1
                except LinkError:
                    self.failed += 1
        finally:
            await link.close()

    async def _test(self, loop: LoopConfig) -> None:
        """Start a test, and abort it wherever it then is."""
        await self._plant.press(f"enable {loop.name}")
        await asyncio.sleep(2 * SCAN_S)
        async with SupervisedTest(self._workplace, loop) as supervised:
            looked = await supervised.look(0.5)
            runner = supervised.prepare(is_no_guard_accepted=False)
            running = asyncio.ensure_future(supervised.run(permission()))
            await asyncio.wait({running}, timeout=TEST_S)
            runner.abort("the soak")
            ended = await running
        is_touched = looked.is_fit and ended.experiment.as_found is not None
        self.ends[ended.experiment.phase.value if is_touched else "NOT TOUCHED"] += 1


def memory_kib() -> int:
    """Resident memory of this process."""
    pages = int(Path("/proc/self/statm").read_text("ascii").split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") // 1024


def handles() -> int:
    """Open files and sockets of this process."""
    return len(os.listdir("/proc/self/fd"))


async def soak(loops: int, minutes: float) -> Report:
    """Set all up, let it run, and report."""
    with tempfile.TemporaryDirectory(prefix="soak-") as name:
        folder = Path(name)
        (folder / "rig.toml").write_text(rig_of(loops), "utf-8")
        async with soft_plant(folder / "rig.toml") as plant:
            config = folder / "soak.toml"
            config.write_text(configuration_of(loops, plant.port), "utf-8")
            kept = open_workplace(load(config), may_create=True)
            soaking = Soak(Workplace(kept.configuration, kept.store, estimator=InlineEstimator()), plant)
            await soaking.run(minutes)
    looks = soaking.looks
    third = max(len(looks) // 3, 1)
    middle, last = looks[third : 2 * third] or looks, looks[-third:]
    memory = [median(look.memory_kib for look in part) for part in (middle, last)]
    return Report(
        loops=loops,
        minutes=minutes,
        tests=dict(soaking.ends),
        readings=soaking.readings,
        failed_readings=soaking.failed,
        late_scans=soaking.late,
        memory_kib_start=looks[0].memory_kib,
        memory_kib_end=looks[-1].memory_kib,
        memory_growth_pct=100.0 * (memory[1] / memory[0] - 1.0),
        handles_start=looks[0].handles,
        handles_end=looks[-1].handles,
        handles_growth=median(look.handles for look in last) - median(look.handles for look in middle),
    )


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the report; 1 where something is not flat."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.soak", description=__doc__)
    parser.add_argument("--loops", type=int, default=8, help="how many loops (default %(default)s)")
    parser.add_argument("--minutes", type=float, default=5.0, help="for how long (default %(default)s)")
    parser.add_argument("--json", action="store_true", help="one JSON document on standard output")
    chosen = parser.parse_args(arguments)
    report = asyncio.run(soak(chosen.loops, chosen.minutes))
    told = asdict(report) | {"is_flat": report.is_flat}
    print(json.dumps(told) if chosen.json else "\n".join(f"{name:20} {what}" for name, what in told.items()))
    return 0 if report.is_flat else 1


if __name__ == "__main__":
    sys.exit(main())
