"""Many runs, a few at a time: one fault each, at one moment, judged by the panel and the wire."""

import asyncio
import random
import shutil
import signal
import tempfile
from collections import Counter, defaultdict
from collections.abc import Callable, Sequence
from contextlib import AsyncExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from tests.faults.evidence import SETTINGS, End, Evidence, State, Verdict, judge, pv_beyond_pct, seconds_to_safe
from tests.faults.moments import Moment, reach
from tests.faults.nursery import Nursery, Tool
from tests.faults.pair import Pair, network, pair, why_no_networks, why_no_small_disk
from tests.faults.strikes import FAULTS, Fault
from tests.system.plant import LOOP

BORNE_AFTER_S = 1.0
"""A fault that the test has outlived by so much has been borne; it is then asked to end."""
OVER_WITHIN_S = 40.0
SETTLED_WITHIN_S = 3.0
TRIES = 3
PRESENT_SETTINGS = {"gain": 0.8, "integral": 2.25, "derivative": 0.125}
"""What the controller holds before a write of settings brings back those as found on the newest sheet."""
_WORDS = ("not confirmed", "guard gave back", "restored", "taken")

Tell = Callable[[str], None]


@dataclass(frozen=True, slots=True)
class Run:
    """One planned run."""

    fault: Fault
    moment: Moment
    seed: int


@dataclass(frozen=True, slots=True)
class Outcome:
    """One run that struck: the verdict, the seconds to a safe loop and how far PV went beyond its limits.

    ``safe_s`` is ``None`` where that never came, ``pv_beyond_pct`` where somebody else moved the output.
    """

    run: Run
    verdict: Verdict
    is_borne: bool
    safe_s: float | None
    pv_beyond_pct: float | None
    told: str

    @property
    def complaints(self) -> tuple[str, ...]:
        """What is wrong with it; empty when all is as it may be."""
        ends = self.run.fault.ends
        unwanted = () if self.verdict.end in ends else (f"ended {self.verdict.end.name}",)
        return (*unwanted, *self.verdict.complaints)


@dataclass(slots=True)
class Tally:
    """What a campaign brought."""

    outcomes: list[Outcome] = field(default_factory=list)
    missed: list[str] = field(default_factory=list)
    skipped: dict[str, str] = field(default_factory=dict)

    def as_json(self) -> dict[str, Any]:
        """The report."""
        table: dict[str, dict[str, Counter[str]]] = defaultdict(lambda: defaultdict(Counter))
        worst: dict[str, dict[str, float]] = defaultdict(dict)
        for one in self.outcomes:
            table[one.run.fault.name][one.run.moment.name][one.verdict.outcome] += 1
            row = worst[one.run.fault.name]
            if one.pv_beyond_pct is not None:
                row["pv_beyond_limit_pct"] = max(row.get("pv_beyond_limit_pct", 0.0), one.pv_beyond_pct)
            if one.safe_s is not None and not one.is_borne:
                row["s_to_safe"] = max(row.get("s_to_safe", 0.0), one.safe_s)
        ends = Counter(one.verdict.end for one in self.outcomes)
        return {
            "injected": len(self.outcomes),
            "outcomes": table,
            "as_found_restored": ends[End.RESTORED],
            "released": ends[End.RELEASED],
            "stranded": ends[End.STRANDED],
            "silent": ends[End.SILENT],
            "beyond_limits": sum(one.verdict.beyond_limits for one in self.outcomes),
            "writes_after_release": sum(one.verdict.writes_after_release for one in self.outcomes),
            "worst_s_to_safe": max((row.get("s_to_safe", 0.0) for row in worst.values()), default=None),
            "worst_pv_beyond_limit_pct": max(
                (row.get("pv_beyond_limit_pct", 0.0) for row in worst.values()), default=None
            ),
            "worst": worst,
            "complaints": [line for one in self.outcomes for line in described(one)],
            "missed": self.missed,
            "skipped": self.skipped,
        }


def described(outcome: Outcome) -> list[str]:
    """Every complaint about one run, with what it takes to see it again."""
    run = outcome.run
    where = f"{run.fault.name} in {run.moment.name} (seed {run.seed}): {outcome.verdict.outcome}"
    return [f"{where}: {complaint}; it said: {outcome.told[-400:]!r}" for complaint in outcome.complaints]


def every_run(seed: int) -> list[Run]:
    """Every fault at every moment once, in an order drawn from the seed."""
    rng = random.Random(seed)
    runs = [Run(fault, moment, rng.randrange(2**31)) for fault in FAULTS for moment in fault.moments]
    rng.shuffle(runs)
    return runs


def planned(count: int, seed: int, is_wanted: Callable[[Run], bool] = lambda _: True) -> list[Run]:
    """``count`` runs: every fault at every moment, again and again with other seeds; only those wanted."""
    runs: list[Run] = []
    for again in range(count):
        if len(runs) >= count:
            break
        runs += [run for run in every_run(seed + again) if is_wanted(run)]
    return runs[:count]


async def campaign(runs: Sequence[Run], pairs: int, tell: Tell = lambda _: None) -> Tally:
    """Carry out the runs, ``pairs`` at a time; what this machine does not permit is skipped and said."""
    tally = Tally()
    queue = list(reversed(runs))
    with tempfile.TemporaryDirectory(prefix="faults-") as name:
        folder = Path(name)
        tally.skipped = _not_permitted(folder)
        nursery = await Nursery.open()
        try:
            sheets = await _sheets(nursery, folder / "sheets")
            async with AsyncExitStack() as stack:
                networks: list[str | None] = [None] * pairs
                if "network" not in tally.skipped:
                    networks = [await stack.enter_async_context(network(number)) for number in range(pairs)]

                async def work(number: int) -> None:
                    while queue:
                        run = queue.pop()
                        if run.fault.needs in tally.skipped:
                            continue
                        outcome = await _until_struck(nursery, folder / f"pair-{number}", run, sheets, networks[number])
                        if outcome is None:
                            tally.missed.append(f"{run.fault.name} in {run.moment.name}")
                            continue
                        tally.outcomes.append(outcome)
                        tell(f"{len(tally.outcomes)}: {run.fault.name}, {run.moment.name}: {outcome.verdict.outcome}")
                        for line in described(outcome):
                            tell(f"   DEFECT {line}")

                async with asyncio.TaskGroup() as together:
                    for number in range(pairs):
                        together.create_task(work(number), name=f"pair {number}")
        finally:
            await nursery.close()
    return tally


def _not_permitted(folder: Path) -> dict[str, str]:
    reasons = {"network": why_no_networks(), "small disk": why_no_small_disk(folder)}
    return {name: reason for name, reason in reasons.items() if reason is not None}


async def _sheets(nursery: Nursery, folder: Path) -> Path:
    """One whole test with no fault: its sheets are what a write of settings begins from."""
    for _ in range(TRIES):
        shutil.rmtree(folder, ignore_errors=True)
        async with pair(nursery, folder, has_guard=True) as bench:
            tool = await bench.start("test")
            if await tool.ended() == 0:
                return bench.data_dir
    raise RuntimeError(f"a test with no fault does not complete: {tool.said[-2000:]}")


async def _until_struck(nursery: Nursery, folder: Path, run: Run, sheets: Path, cable: str | None) -> Outcome | None:
    """Carry out one run; where the tool ends before its moment comes, again with a fresh pair."""
    for _ in range(TRIES):
        shutil.rmtree(folder, ignore_errors=True)
        fault = run.fault
        async with pair(
            nursery,
            folder,
            has_guard=fault.has_guard,
            network=cable if fault.needs == "network" else None,
            has_small_disk=fault.needs == "small disk",
        ) as bench:
            outcome = await _strike_once(bench, run, sheets)
        if outcome is not None:
            return outcome
    return None


async def _strike_once(bench: Pair, run: Run, sheets: Path) -> Outcome | None:
    rng = random.Random(run.seed)
    is_test = run.moment.act == "test"
    wanted = None
    if not is_test:
        shutil.copytree(sheets, bench.data_dir, dirs_exist_ok=True)
        wanted = {name: bench.seen[0][1][name] for name in SETTINGS}
        changes = " ".join(f"{name}={number}" for name, number in PRESENT_SETTINGS.items())
        await bench.press(f"settings {LOOP} {changes}")
    found = await bench.look()
    tool = await bench.start(run.moment.act)
    if not await reach(bench, run.moment, rng):
        return None
    struck_s = asyncio.get_running_loop().time()
    is_borne = await _end(bench, run, tool, rng)
    await bench.heal()
    code, said = await tool.ended(), tool.said
    word = _word(tool)
    if run.fault.restarts or word == "killed":
        await asyncio.sleep(rng.choice((0.0, 0.2, 1.5)))
        tool = await bench.start("test", typed="")
        code, word = await _ended(tool), f"after a restart {_settled_word(tool)}"
        said += tool.said
    left = bench.seen_last or await _settled(bench, found)
    evidence = Evidence(
        found=found,
        left=left,
        taken=bench.taken,
        wanted=wanted,
        struck_s=struck_s,
        word=word,
        exit_code=code,
        said=said,
        writes=tuple(bench.wire.writes),
        shown=tuple(bench.wire.shown),
        has_guard=run.fault.has_guard,
    )
    return Outcome(
        run=run,
        verdict=judge(evidence),
        is_borne=is_borne,
        safe_s=seconds_to_safe(bench.seen, evidence) if is_test else None,
        pv_beyond_pct=None if "op" in bench.taken else pv_beyond_pct(bench.seen, struck_s),
        told=said,
    )


async def _end(bench: Pair, run: Run, tool: Tool, rng: random.Random) -> bool:
    """Strike, and see the tool to its end; whether the fault was borne."""
    await run.fault.strike(bench, rng)
    ended = asyncio.ensure_future(tool.ended())
    is_lasting = run.moment.name.startswith("CHECKING")
    await asyncio.wait({ended}, timeout=BORNE_AFTER_S + (1.5 if is_lasting else 0.0))
    is_borne = not ended.done()
    if is_borne:
        tool.signal(signal.SIGINT)
        await asyncio.wait({ended}, timeout=OVER_WITHIN_S)
    if not ended.done():
        tool.signal(signal.SIGKILL)
        await ended
    return is_borne


async def _ended(tool: Tool) -> int:
    ended = asyncio.ensure_future(tool.ended())
    await asyncio.wait({ended}, timeout=OVER_WITHIN_S)
    tool.signal(signal.SIGKILL)
    return await ended


def _word(tool: Tool) -> str:
    """The tool's own word for how it ended, in its answer or in what it said."""
    if (answer := tool.answer) is not None:
        return str(answer["outcome"])
    if tool.code < 0:
        return "killed"
    return f"exit {tool.code}"


def _settled_word(tool: Tool) -> str:
    """What a restarted tool said of what its predecessor had left; where that was nothing, how it ended itself."""
    return next((word for word in _WORDS if f"{LOOP}: {word};" in tool.said), _word(tool))


async def _settled(bench: Pair, found: State) -> State:
    """The panel once nothing of ours is under way any more: as found, or after a while as it is."""
    until_s = asyncio.get_running_loop().time() + SETTLED_WITHIN_S
    while asyncio.get_running_loop().time() < until_s:
        left = await bench.look()
        if left["guard_state"] != "armed" and left["mode"] == found["mode"]:
            break
        await asyncio.sleep(0.05)
    return left
