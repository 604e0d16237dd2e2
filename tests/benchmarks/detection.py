"""How soon a dead controller is seen: ``python -m tests.benchmarks.detection [--repeats N] [--json]``.

A plant in a process of its own is read every scan over our link, and beside it over the bare library, pymodbus: with
the same timeout and no retries, and as it comes.  Then the plant is killed, frozen, or its cable pulled (in a network
of its own, where this machine permits one), or it closes the connection while an answer is due; told are the seconds
to the first error, from that instant or from the request that gets it, whichever is later: waiting for the next scan
is nobody's merit or fault.  Last, a PLC goes to STOP in the middle of a test; told are the scans until the test stops:
its clock stands for longer than a sample may be old (request timeout, PLC scan and one scan), seen at the next
reading, after the reading that first showed that clock.  Exits with 1 where our link misses a bar.
"""

import argparse
import asyncio
import json
import logging
import sys
import tempfile
from collections.abc import AsyncIterator, Awaitable, Callable, Sequence
from contextlib import asynccontextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from statistics import median

from pymodbus.client import AsyncModbusTcpClient
from pymodbus.exceptions import ModbusException

from autotune.config.load import load
from autotune.errors import LinkError
from autotune.experiment.phases import Phase
from autotune.experiment.state import Stage
from autotune.field import open_link
from autotune.field.translate import sample_tags
from autotune.service.testing import SupervisedTest
from autotune.service.workplace import Workplace, open_workplace
from tests.faults.pair import Key, network, why_no_networks, write_config
from tests.system.bench import NotMeasured, permission
from tests.system.plant import LOOP, ROOT, SoftPlant, soft_plant

TIMEOUT_S = 0.2
SCAN_S = 0.1
DEAD_AT_MOST_S = 1.2 * TIMEOUT_S
CLOSED_AT_MOST_S = 0.05
STOP_AT_MOST_SCANS = (TIMEOUT_S + 0.02 + SCAN_S) / SCAN_S + 2.0
PATIENCE_S = 20.0
KEYS: Sequence[Key] = (
    ("controller.bench", "request_timeout_s", TIMEOUT_S),
    ("loop", "scan_s", SCAN_S),
    ("loop.baseline", "look_around_s", 0.4),
)

Read = Callable[[], Awaitable[None]]
"""One reading; raises when there is none."""


@dataclass(frozen=True, slots=True)
class Death:
    """One way for a controller to be gone, and how soon that must be seen (s)."""

    name: str
    strike: Callable[[SoftPlant, str | None], Awaitable[None]]
    at_most_s: float
    needs_network: bool = False


async def kill(plant: SoftPlant, _: str | None) -> None:
    await plant.kill()


async def freeze(plant: SoftPlant, _: str | None) -> None:
    plant.freeze()


async def pull(_: SoftPlant, cable: str | None) -> None:
    process = await asyncio.create_subprocess_exec("ip", "link", "set", str(cable), "down")
    await process.wait()


async def close(plant: SoftPlant, _: str | None) -> None:
    await plant.press("fault close-connections")


DEATHS = (
    Death("killed", kill, DEAD_AT_MOST_S),
    Death("frozen", freeze, DEAD_AT_MOST_S),
    Death("cable pulled", pull, DEAD_AT_MOST_S, needs_network=True),
    Death("closed while an answer is due", close, CLOSED_AT_MOST_S),
)


@asynccontextmanager
async def plant_at(cable: str | None) -> AsyncIterator[tuple[SoftPlant, str]]:
    """A plant and its address; behind ``cable`` where one is given."""
    if cable is None:
        async with soft_plant() as plant:
            yield plant, "127.0.0.1"
        return
    pid, number = map(int, cable.removeprefix("ft").split("-"))
    host = f"10.{200 + pid // 256 % 50}.{pid % 256}.{4 * number + 2}"
    process = await asyncio.create_subprocess_exec(
        "ip", "netns", "exec", cable, sys.executable, "-m", "simulator", "fast-loop",
        "--modbus", "0", "--host", host, "--until-eof",
        cwd=ROOT, stdin=asyncio.subprocess.PIPE, stdout=asyncio.subprocess.PIPE,
    )  # fmt: skip
    try:
        assert process.stdout is not None
        yield SoftPlant(process, json.loads(await process.stdout.readline())["modbus_port"]), host
    finally:
        with suppress(ProcessLookupError):
            process.kill()
        await process.wait()


def bench(folder: Path, host: str, port: int) -> Workplace:
    """The bench's loop with this benchmark's timeout and scan."""
    kept = open_workplace(load(write_config(folder, host, port, KEYS)), may_create=True)
    return Workplace(kept.configuration, kept.store, estimator=NotMeasured())


async def product(folder: Path, host: str, port: int) -> Read:
    """Our own link, as a test reads it."""
    loop = bench(folder, host, port).loop(LOOP)
    link, tags = open_link(loop), sample_tags(loop)
    await link.connect()

    async def read() -> None:
        await link.read(tags)

    return read


async def bare(host: str, port: int, **options: float) -> Read:
    """The library alone."""
    client = AsyncModbusTcpClient(host, port=port, **options)  # type: ignore[arg-type]  # timeouts are floats there too
    assert await client.connect()

    async def read() -> None:
        answer = await client.read_holding_registers(0, count=52, device_id=1)
        if answer.isError():
            raise ModbusException(str(answer))

    return read


async def seconds_to_see(death: Death, cable: str | None, folder: Path, which: str) -> float:
    """From the strike to the first failed reading, which are made every scan."""
    loop = asyncio.get_running_loop()
    async with plant_at(cable) as (plant, host):
        if which == "ours":
            read = await product(folder, host, plant.port)
        elif which == "pymodbus, same timeout":
            read = await bare(host, plant.port, timeout=TIMEOUT_S, retries=0)
        else:
            read = await bare(host, plant.port)
        for _ in range(5):
            await read()
            await asyncio.sleep(SCAN_S / 2)
        if death.strike is close:
            await plant.press("fault drop-answers")
        failed = asyncio.ensure_future(_until_failed(read))
        # The instant in the scan is left to chance, as at a plant; only a closing peer waits for an open question.
        await asyncio.sleep(SCAN_S / 4)
        struck_s = loop.time()
        await death.strike(plant, cable)
        try:
            async with asyncio.timeout(PATIENCE_S):
                asked_s, failed_s = await failed
            return failed_s - max(struck_s, asked_s)
        finally:
            plant.thaw() if death.strike is freeze else None
            if death.needs_network:
                process = await asyncio.create_subprocess_exec("ip", "link", "set", str(cable), "up")
                await process.wait()


async def _until_failed(read: Read) -> tuple[float, float]:
    """Read every scan on an absolute grid; when the first reading that failed was asked for, and when it failed."""
    loop = asyncio.get_running_loop()
    due_s = loop.time()
    while True:
        asked_s = loop.time()
        try:
            await read()
        except (LinkError, ModbusException, TimeoutError, OSError):
            return asked_s, loop.time()
        due_s += SCAN_S
        await asyncio.sleep(max(due_s - loop.time(), 0.0))


async def scans_to_see_stop(folder: Path) -> float:
    """From ``fault plc-stop`` in TESTING to the end of the test's driving, in our scans."""
    loop_clock = asyncio.get_running_loop().time
    async with soft_plant() as plant:
        workplace = bench(folder, "127.0.0.1", plant.port)
        await plant.press(f"enable {LOOP}")
        await plant.until(lambda state: state["enable"])
        async with SupervisedTest(workplace, workplace.loop(LOOP)) as supervised:
            await supervised.look(0.4)
            runner = supervised.prepare(is_no_guard_accepted=False)
            running = asyncio.ensure_future(supervised.run(permission()))
            while runner.experiment.stage is not Stage.CYCLING and not running.done():  # noqa: ASYNC110 - it tells nobody
                await asyncio.sleep(0.005)
            struck_s = loop_clock()
            await plant.press("fault plc-stop")
            while runner.experiment.phase is Phase.TESTING:  # noqa: ASYNC110 - it tells nobody
                await asyncio.sleep(0.002)
            seen_s = loop_clock()
            await plant.press("fault plc-run")
            await running
    return (seen_s - struck_s) / SCAN_S


async def measured(repeats: int) -> dict[str, dict[str, list[float]]]:
    """All ways of dying, each over all links in turn, and the STOP."""
    table: dict[str, dict[str, list[float]]] = {}
    refusal = why_no_networks()
    with tempfile.TemporaryDirectory(prefix="detection-") as name:
        for death in DEATHS:
            if death.needs_network and refusal is not None:
                print(f"skipped: {death.name}: {refusal}", file=sys.stderr)
                continue
            for which in ("ours", "pymodbus, same timeout", "pymodbus as it comes"):
                count = repeats if which != "pymodbus as it comes" else 1
                for number in range(count):
                    seconds = await _one(death, Path(name) / f"{death.name}-{which}-{number}", which)
                    table.setdefault(death.name, {}).setdefault(which, []).append(seconds)
        scans = [await scans_to_see_stop(Path(name) / f"stop-{number}") for number in range(repeats)]
        table["PLC in STOP, in scans"] = {"ours": scans}
    return table


async def _one(death: Death, folder: Path, which: str) -> float:
    if not death.needs_network:
        return await seconds_to_see(death, None, folder, which)
    async with network(0) as cable:
        return await seconds_to_see(death, cable, folder, which)


def bar_of(name: str) -> float:
    """The bar of a row: seconds, or scans for a STOP."""
    return next((death.at_most_s for death in DEATHS if death.name == name), STOP_AT_MOST_SCANS)


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the table; 1 where our link misses a bar."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.detection", description=__doc__)
    parser.add_argument("--repeats", type=int, default=3, help="how often each is measured (default %(default)s)")
    parser.add_argument("--json", action="store_true", help="one JSON document on standard output")
    chosen = parser.parse_args(arguments)
    logging.getLogger("pymodbus.logging").setLevel(logging.CRITICAL)
    table = asyncio.run(measured(chosen.repeats))
    reaches = {name: max(row["ours"]) <= bar_of(name) for name, row in table.items()}
    if chosen.json:
        print(json.dumps({"timeout_s": TIMEOUT_S, "scan_s": SCAN_S, "rows": table, "reaches_the_bars": reaches}))
        return 0 if all(reaches.values()) else 1
    print(f"request timeout {TIMEOUT_S} s, scan {SCAN_S} s; seconds to the first error, median / worst")
    for name, row in table.items():
        for which, numbers in row.items():
            bar = f"  bar {bar_of(name):.3g}" if which == "ours" else ""
            print(f"{name:30} {which:24} {median(numbers):7.3f} / {max(numbers):7.3f}{bar}")
    return 0 if all(reaches.values()) else 1


if __name__ == "__main__":
    sys.exit(main())
