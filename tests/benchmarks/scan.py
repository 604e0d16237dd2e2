"""What our links cost: ``python -m tests.benchmarks.scan [--loops 1,10] [--seconds S] [--repeats N] [--json]``.

So many loops, each with a connection of its own, are scanned every 100 ms on an absolute grid, evenly staggered: the
tags of one sample are read, then the four tags of one output move are written.  Ours (``LoopLink.read`` and ``write``)
and the bare library (pymodbus, asyncua) ask the same peer, in a process of its own, by the same requests, told as
``requests_per_sample``: over OPC UA the sequence is written last and alone, for the guard's sake, where two would do.
The bare Modbus client is not asked to decode registers.  They take turns, and the best of the repeats counts for each:

* CPU of this process for one sample, with the scan's own timer, which is the same for both;
* round trip of both requests; its 99th percentile needs a hundred samples or more to mean anything;
* ticks missed, and how late scans start.

``load_average`` tells how busy the machine was: above the number of its cores only the ratios are worth a look.  Where
the bare library misses ticks too, the peer or the machine is at its end, and the row says little about our links.
"""

import argparse
import asyncio
import json
import logging
import os
import sys
import time
from collections.abc import AsyncIterator, Awaitable, Callable, Sequence
from contextlib import asynccontextmanager
from dataclasses import dataclass, field, replace
from typing import Protocol

import numpy as np
from asyncua import ua
from asyncua.client.client import Client
from asyncua.ua.attribute_ids import AttributeIds
from pymodbus.client import AsyncModbusTcpClient

from autotune.config.types import DataType, LoopConfig, ModbusEndpoint, ModbusTag
from autotune.experiment.commands import DriveOutput
from autotune.field import open_link
from autotune.field.link import RawValue
from autotune.field.modbus.requests import plan_reads
from autotune.field.opc_ua.writing import split_writes
from autotune.field.translate import sample_tags, to_raw
from autotune.loop.write import WriteOutcome
from tests.field.loops import ENDPOINT, GUARDED, at_endpoint
from tests.field.peer import Peer
from tests.field.ua_plant import UaPlant, in_the_plant, node_text
from tests.system.plant import ROOT

SCAN_S = 0.1
PATIENCE_S = 20.0
PROTOCOLS = ("modbus", "opc_ua")
SETTLE_SCANS = 3
"""First scans of a run that don't count."""

Scan = Callable[[int], Awaitable[None]]
"""One read and one write; the number is that of the scan."""


class Stack(Protocol):
    """Opens one connection: its scan, and how it is closed."""

    def __call__(self, protocol: str, port: int) -> Awaitable[tuple[Scan, Callable[[], Awaitable[None]]]]: ...


@dataclass(slots=True)
class Tally:
    """What one run showed."""

    round_trips_s: list[float] = field(default_factory=list)
    lateness_s: list[float] = field(default_factory=list)
    missed_ticks: int = 0
    cpu_s: float = 0.0

    def figures(self) -> dict[str, float]:
        """The run in few numbers."""
        trips_ms, late_ms = 1000.0 * np.array(self.round_trips_s), 1000.0 * np.array(self.lateness_s)
        return {
            "cpu_us": 1e6 * self.cpu_s / len(trips_ms),
            "round_trip_median_ms": float(np.median(trips_ms)),
            "round_trip_p99_ms": float(np.quantile(trips_ms, 0.99)),
            "jitter_p99_ms": float(np.quantile(late_ms, 0.99)),
            "missed_ticks": self.missed_ticks,
        }


def loop_at(protocol: str, port: int) -> LoopConfig:
    """A guarded loop in the peer."""
    if protocol == "modbus":
        return at_endpoint(GUARDED, replace(ENDPOINT, port=port, request_timeout_s=PATIENCE_S))
    return in_the_plant(GUARDED, f"opc.tcp://127.0.0.1:{port}/skid", PATIENCE_S)


def move(loop: LoopConfig) -> dict[str, RawValue]:
    """One output move as raw numbers; each scan sets its counters."""
    return to_raw(loop, DriveOutput(42.5, token=4711, heartbeat=0, sequence=0))


def requests_per_sample(protocol: str) -> int:
    """How many requests one read and one output move take."""
    return 1 + (1 if protocol == "modbus" else len(split_writes(list(move(GUARDED)))))


async def ours(protocol: str, port: int) -> tuple[Scan, Callable[[], Awaitable[None]]]:
    """A connection through our field room."""
    loop = loop_at(protocol, port)
    link, names, drive = open_link(loop), sample_tags(loop), move(loop)
    await link.connect()

    async def scan(number: int) -> None:
        await link.read(names)
        report = await link.write({**drive, "heartbeat": number, "sequence": number})
        assert report.outcome is WriteOutcome.APPLIED, report

    return scan, link.close


async def bare(protocol: str, port: int) -> tuple[Scan, Callable[[], Awaitable[None]]]:
    """A connection through the library alone."""
    return await (_bare_modbus(port) if protocol == "modbus" else _bare_opc_ua(port))


async def _bare_modbus(port: int) -> tuple[Scan, Callable[[], Awaitable[None]]]:
    loop = loop_at("modbus", port)
    endpoint = loop.controller.endpoint
    assert isinstance(endpoint, ModbusEndpoint)
    tags = [(name, tag) for name in sample_tags(loop) if isinstance(tag := loop.tag(name), ModbusTag)]
    (request,) = plan_reads(endpoint, tags)
    first = loop.tag("holder_request")
    assert isinstance(first, ModbusTag)
    start, device_id = first.address, endpoint.device_id
    client = AsyncModbusTcpClient("127.0.0.1", port=port, timeout=PATIENCE_S, retries=0)
    assert await client.connect()
    op = client.convert_to_registers(42.5, client.DATATYPE.FLOAT32)

    async def scan(number: int) -> None:
        read = await client.read_holding_registers(request.first, count=request.count, device_id=device_id)
        written = await client.write_registers(start, [0, 4711, number, number, *op], device_id=device_id)
        assert not read.isError()
        assert not written.isError()

    async def close() -> None:
        client.close()

    return scan, close


async def _bare_opc_ua(port: int) -> tuple[Scan, Callable[[], Awaitable[None]]]:
    loop = loop_at("opc_ua", port)
    client = Client(f"opc.tcp://127.0.0.1:{port}/skid", timeout=PATIENCE_S)
    await client.connect()
    read_nodes = [client.get_node(node_text(name)) for name in sample_tags(loop)]
    drive = move(loop)
    nodes = {name: client.get_node(node_text(name)) for name in drive}
    kinds = {name: await node.read_data_type_as_variant_type() for name, node in nodes.items()}
    parts = [(names, [nodes[name] for name in names]) for names in split_writes(list(drive))]

    async def scan(number: int) -> None:
        await client.read_attributes(read_nodes, AttributeIds.Value)
        raws = {**drive, "heartbeat": number, "sequence": number}
        for names, write_nodes in parts:
            variants = [ua.DataValue(ua.Variant(raws[name], kinds[name])) for name in names]
            codes = await client.write_values(write_nodes, variants, raise_on_partial_error=False)
            assert all(code.is_good() for code in codes)

    return scan, client.disconnect


async def run(stack: Stack, protocol: str, port: int, loops: int, seconds: float) -> dict[str, float]:
    """So many loops for so long; fails where a request does."""
    opened = [await stack(protocol, port) for _ in range(loops)]
    tally = Tally()
    clock = asyncio.get_running_loop().time
    begun_s = clock() + SCAN_S
    counts_from_s = begun_s + SETTLE_SCANS * SCAN_S
    ends_s = counts_from_s + seconds

    async def scan_on(scan: Scan, first_s: float) -> None:
        tick = 0
        while (due_s := first_s + tick * SCAN_S) < ends_s:
            if (ahead_s := due_s - clock()) > 0:
                await asyncio.sleep(ahead_s)
            started_s = clock()
            await scan(tick)
            ended_s = clock()
            next_tick = max(tick + 1, int(np.ceil((ended_s - first_s) / SCAN_S)))
            if due_s >= counts_from_s:
                tally.round_trips_s.append(ended_s - started_s)
                tally.lateness_s.append(started_s - due_s)
                tally.missed_ticks += next_tick - tick - 1
            tick = next_tick

    async def count_cpu() -> None:
        await asyncio.sleep(counts_from_s - clock())
        before_s = time.process_time()
        await asyncio.sleep(ends_s - clock())
        tally.cpu_s = time.process_time() - before_s

    try:
        scans = [scan_on(scan, begun_s + at * SCAN_S / loops) for at, (scan, _) in enumerate(opened)]
        await asyncio.gather(count_cpu(), *scans)
    finally:
        for _, close in opened:
            await close()
    return tally.figures()


async def row(protocol: str, loops: int, seconds: float, repeats: int) -> dict[str, float]:
    """Ours and the bare library in turn before one peer, and the best of the repeats beside each other."""
    async with peer(protocol) as port:
        runs: dict[Stack, list[dict[str, float]]] = {ours: [], bare: []}
        for _ in range(repeats):
            for stack, figures in runs.items():
                figures.append(await run(stack, protocol, port, loops, seconds))
    own, their = ({name: min(one[name] for one in runs[stack]) for name in runs[stack][0]} for stack in (ours, bare))
    return {
        "cpu_ratio": own["cpu_us"] / their["cpu_us"],
        "round_trip_median_ratio": own["round_trip_median_ms"] / their["round_trip_median_ms"],
        "round_trip_p99_ratio": own["round_trip_p99_ms"] / their["round_trip_p99_ms"],
        **own,
        **{f"bare_{name}": figure for name, figure in their.items()},
        "requests_per_sample": requests_per_sample(protocol),
        "load_average": os.getloadavg()[0],
    }


@asynccontextmanager
async def peer(protocol: str) -> AsyncIterator[int]:
    """The peer in a process of its own, and its port."""
    process = await asyncio.create_subprocess_exec(
        sys.executable, "-m", "tests.benchmarks.scan", "--serve", protocol,
        cwd=ROOT, stdin=asyncio.subprocess.PIPE, stdout=asyncio.subprocess.PIPE,
    )  # fmt: skip
    try:
        assert process.stdout is not None
        yield int(await process.stdout.readline())
    finally:
        process.kill()
        await process.wait()


def serve(protocol: str) -> None:
    """Be the peer until standard input ends."""
    if protocol == "modbus":
        asyncio.run(_serve_modbus())
        return
    held = {name: (DataType.DINT if name == "mode" else tag.type or DataType.REAL, 0) for name, tag in GUARDED.tags}
    with UaPlant(held) as plant:
        print(plant.port, flush=True)
        sys.stdin.read()


async def _serve_modbus() -> None:
    async with Peer() as device:
        print(device.port, flush=True)
        await asyncio.to_thread(sys.stdin.read)


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the table."""
    parser = argparse.ArgumentParser(
        prog="python -m tests.benchmarks.scan",
        description=__doc__,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--loops", default="1,10,50,100", help="how many loops, one run each (default %(default)s)")
    parser.add_argument("--seconds", type=float, default=5.0, help="length of a run, s (default %(default)s)")
    parser.add_argument("--repeats", type=int, default=3, help="the best of how many runs (default %(default)s)")
    parser.add_argument("--json", action="store_true", help="one JSON document on standard output")
    parser.add_argument("--serve", choices=PROTOCOLS, help=argparse.SUPPRESS)
    chosen = parser.parse_args(arguments)
    for library in ("pymodbus.logging", "asyncua"):
        logging.getLogger(library).setLevel(logging.CRITICAL)
    if chosen.serve is not None:
        serve(chosen.serve)
        return 0
    table = {
        protocol: {
            str(loops): asyncio.run(row(protocol, loops, chosen.seconds, chosen.repeats))
            for loops in map(int, chosen.loops.split(","))
        }
        for protocol in PROTOCOLS
    }
    if chosen.json:
        print(json.dumps(table, allow_nan=False))
        return 0
    print(f"{SCAN_S} s scans, ours over bare; {os.cpu_count()} cores")
    for protocol, rows in table.items():
        for loops, one in rows.items():
            print(
                f"{protocol:7} {loops:>4} loops  " + "  ".join(f"{name} {figure:.3g}" for name, figure in one.items())
            )
    return 0


if __name__ == "__main__":
    sys.exit(main())
