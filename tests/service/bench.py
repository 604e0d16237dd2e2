"""One supervised test in virtual time on the plant in memory, and what must hold however it ended."""

import asyncio
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any, TypeVar

from autotune.config.test_plan import plan_for
from autotune.config.types import Configuration, LoopConfig
from autotune.design.proposal import ProposalSheet
from autotune.experiment.commands import HandBack
from autotune.experiment.plan import TestPlan
from autotune.experiment.state import Experiment
from autotune.identify.findings import FindingsOrRefusal
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal
from autotune.loop.record import Record
from autotune.service.estimator import Estimator
from autotune.service.journal import MemoryJournal
from autotune.service.journal_reading import JournalLine, read_journal_text
from autotune.service.journal_replay import replay
from autotune.service.proposing import DesignTask, proposals_for
from autotune.service.runner import TestRunner
from autotune.service.workplace import Workplace
from autotune.sheet.store import MemoryStore
from tests.fakes.link import FakeLink, LoggedRequest
from tests.fakes.plant import PlantInMemory
from tests.fakes.virtual_time import run_virtual

T = TypeVar("T")

TOKEN = 4711
BEGUN = datetime(2026, 3, 2, 8, 0, tzinfo=UTC)
"""The instant at which virtual time begins."""
BEGIN_S = 1.0
"""When the test begins, the plant being at rest."""
AFTERWARDS_S = 1.5
"""How long the plant runs on after it, so that what is late can still land."""


@dataclass
class Ran:
    """A test after its end.  ``raised`` is what the runner raised, ``ended_s`` when it was over."""

    loop: LoopConfig
    plant: PlantInMemory
    link: FakeLink
    plan: TestPlan
    journal: MemoryJournal
    runner: TestRunner
    raised: BaseException | None = None
    ended_s: float = 0.0
    task: "asyncio.Task[Experiment] | None" = field(default=None)

    @property
    def experiment(self) -> Experiment:
        """The last state."""
        return self.runner.experiment

    @property
    def lines(self) -> tuple[JournalLine, ...]:
        """The journal, read back from its code."""
        return read_journal_text("".join(f"{line}\n" for line in self.journal.lines)).lines

    @property
    def writes(self) -> list[LoggedRequest]:
        """Every write request that left us."""
        return self.link.requests("write")

    @property
    def said(self) -> str:
        """For the message of a failed check."""
        return f"{self.experiment.phase} {self.experiment.because!r} {self.experiment.hand_back} {self.runner.faults}"


def begin(
    loop: LoopConfig,
    plant: PlantInMemory | None = None,
    journal: MemoryJournal | None = None,
    link: FakeLink | None = None,
) -> Ran:
    """A test of ``loop`` that has not begun."""
    plant = PlantInMemory() if plant is None else plant
    link = plant.open_link(loop) if link is None else link
    plan = plan_for(loop, TOKEN, is_no_guard_accepted=True)
    journal = MemoryJournal() if journal is None else journal
    return Ran(loop, plant, link, plan, journal, TestRunner(loop, plan, link, journal))


def run(
    ran: Ran, *, on_pass: Callable[[int], None] | None = None, expects: type[BaseException] | tuple[()] = ()
) -> Ran:
    """Run it to its end, and the plant on for a while.  What it raises, if anything, is kept; ``expects`` allows it."""

    async def main() -> None:
        await asyncio.sleep(BEGIN_S)
        ran.task = asyncio.ensure_future(ran.runner.run())
        await asyncio.wait({ran.task})
        ran.ended_s = asyncio.get_running_loop().time()
        ran.raised = asyncio.CancelledError() if ran.task.cancelled() else ran.task.exception()
        await asyncio.sleep(AFTERWARDS_S)
        ran.plant.run_to(asyncio.get_running_loop().time())

    run_virtual(main(), within_s=120.0, on_pass=on_pass)
    assert ran.raised is None or isinstance(ran.raised, expects), repr(ran.raised)
    return ran


def at(plant: PlantInMemory, t_s: float, act: Callable[[], Any]) -> None:
    """Let something happen at the plant at the first scan from ``t_s`` on."""
    before = plant.when
    happened: list[float] = []

    def when(scan_s: float) -> None:
        before(scan_s)
        if scan_s >= t_s and not happened:
            happened.append(scan_s)
            act()

    plant.when = when


def assert_s1_on_the_wire(ran: Ran) -> None:
    """No output that left us lies outside the steps from as found or the clamps."""
    as_found = ran.experiment.as_found
    for request in ran.writes:
        for name, raw in request.values:
            if name in ("op", "op_request"):
                assert as_found is not None, f"{request} before the loop was found"
                limits = ran.plan.limits
                low = max(as_found.op_pct - limits.step_down_pct, limits.op_low_pct)
                high = min(as_found.op_pct + limits.step_up_pct, limits.op_high_pct)
                assert low - 1e-4 <= raw <= high + 1e-4, f"{request} leaves {low} .. {high} %"


def assert_journal_replays(ran: Ran) -> None:
    """The journal gives the same state again, and every command that was performed, in the same order."""
    lines = ran.lines
    experiment, commands = replay(lines)
    assert experiment == ran.experiment
    machines_own = iter([command for command in commands if not isinstance(command, HandBack)])
    is_handing_back = False
    for line in lines:
        is_handing_back |= line.kind == "phase" and line.payload == "RESTORING"
        if line.kind == "command" and not is_handing_back:
            assert any(line.payload == command for command in machines_own), f"the machine gave no {line.payload}"


def assert_as_found(ran: Ran) -> None:
    """The plant itself is as it was found, and nobody holds it for us."""
    block, guard, mailbox = ran.plant.loop.block, ran.plant.loop.guard, ran.plant.loop.mailbox
    assert ran.plant.mode is LoopMode.AUTO, ran.said
    assert abs(block.sp_pct - 50.0) < 1e-3, ran.said
    if ran.loop.has_guard:
        assert (guard.holder, mailbox.holder_request) == (0, 0), ran.said


async def at_once(work: Callable[..., T], /, *args: Any) -> T:
    """Blocking work, here and now: in virtual time nothing else is waiting."""
    return work(*args)


def virtual_now() -> datetime:
    """The wall clock of virtual time."""
    return BEGUN + timedelta(seconds=asyncio.get_running_loop().time())


class UnaskedEstimator:
    """Concludes nothing, at once: for tests of what surrounds the conclusion."""

    async def measure(self, record: Record) -> FindingsOrRefusal:
        """A refusal that tells how much there was."""
        return Refusal("NOT_ASKED", f"{len(record.samples)} samples were not looked at", "ask an estimator")

    async def propose(self, task: DesignTask) -> ProposalSheet:
        """As the product does, in this process."""
        return proposals_for(task)


def workplace_at(
    plant: PlantInMemory, folder: Path, *loops: LoopConfig, estimator: Estimator | None = None
) -> Workplace:
    """A workplace whose every part but journals and locks is in memory."""
    configuration = Configuration(
        file=Path("plant.toml"),
        data_dir=folder,
        loops=loops,
        controllers=(loops[0].controller,),
        concurrent_tests_at_most=1,
        digest="c" * 64,
    )
    return Workplace(
        configuration,
        MemoryStore(),
        open_link=plant.open_link,
        estimator=estimator or UnaskedEstimator(),
        wall_clock=virtual_now,
        new_token=lambda: TOKEN,
        in_thread=at_once,
    )
