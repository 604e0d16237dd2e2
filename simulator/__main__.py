"""``python -m simulator RIG``: the soft plant as a process of its own.

Prints one JSON line when it is ready, then answers each line of its panel by one JSON line.
"""

import argparse
import asyncio
import gc
import json
import logging
import os
import signal
import sys
import tempfile
import threading
from collections.abc import Awaitable, Callable, Mapping, Sequence
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path
from typing import TYPE_CHECKING

from simulator.faults import WireFaults
from simulator.modbus_server import PlantServer
from simulator.opc_ua_options import add_options
from simulator.panel import Panel
from simulator.plc import Plc
from simulator.registers import Registers, map_lines
from simulator.rig import Rig, RigError, load_rig

if TYPE_CHECKING:
    from simulator.opc_ua_server import OpcUaServer

EXIT_USAGE = 2
EXIT_ADDRESS = 3


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the plant named on the command line; returns the exit code."""
    parser = argparse.ArgumentParser(
        prog="python -m simulator", description="A soft plant that answers Modbus/TCP, OPC UA and a panel on stdin."
    )
    parser.add_argument("rig", metavar="RIG", help="a rig file, or the name of a bundled rig such as juice-skid")
    parser.add_argument(
        "--modbus", metavar="PORT", type=_port, help="Modbus/TCP port; 0 takes a free one (default, unless --opc-ua)"
    )
    parser.add_argument("--opc-ua", metavar="PORT", type=_port, help="OPC UA port; 0 takes a free one")
    parser.add_argument("--host", default="127.0.0.1", help="address to listen on (default %(default)s)")
    parser.add_argument("--map", action="store_true", help="print the register map of the rig and end")
    parser.add_argument("--until-eof", action="store_true", help="end when stdin ends")
    add_options(parser)
    options = parser.parse_args(arguments)
    try:
        rig = load_rig(options.rig)
    except RigError as fault:
        print(f"python -m simulator: {fault}", file=sys.stderr)
        return EXIT_USAGE
    if options.map:
        print("\n".join(map_lines(rig.build())))
        return 0
    for library in ("pymodbus.logging", "asyncua"):
        logging.getLogger(library).setLevel(logging.CRITICAL)
    try:
        with _folder_for_certificates(options) as folder:
            asyncio.run(_run(rig, options, Path(folder)))
    except (_BadOption, _AddressTaken) as fault:
        print(f"python -m simulator: {fault}", file=sys.stderr)
        return EXIT_USAGE if isinstance(fault, _BadOption) else EXIT_ADDRESS
    return 0


class _BadOption(Exception):
    pass


class _AddressTaken(Exception):
    pass


def _folder_for_certificates(options: argparse.Namespace) -> AbstractContextManager[str]:
    """None is made without need: a plant that is killed, as plants in tests are, leaves it behind."""
    if options.opc_ua is None or options.opc_ua_pki is not None:
        return nullcontext("")
    return tempfile.TemporaryDirectory(prefix="soft-plant-")


def _port(word: str) -> int:
    if not word.isdecimal() or int(word) > 65535:
        raise argparse.ArgumentTypeError(f"{word!r} is no port; write 0 to 65535")
    return int(word)


async def _run(rig: Rig, options: argparse.Namespace, folder: Path) -> None:
    plc, wire = rig.build(), WireFaults()
    panel = Panel(plc, wire)
    opc_ua = None if options.opc_ua is None else await _start_opc_ua(plc, wire, options, folder)
    modbus = None
    if options.modbus is not None or opc_ua is None:
        modbus = await _start_modbus(rig, plc, wire, options)
    gc.freeze()  # OPC UA's address space never becomes garbage, and walking it would hold up scans
    scanning = asyncio.create_task(plc.run(opc_ua.show if opc_ua else None), name="plc scans")
    lines = _stdin_lines(asyncio.get_running_loop())
    ended = asyncio.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        asyncio.get_running_loop().add_signal_handler(number, ended.set)
    ready = {"ready": True, "modbus_port": modbus.port if modbus else None, "rig": rig.file.stem, "pid": os.getpid()}
    _say(ready | ({"opc_ua_url": opc_ua.url, **opc_ua.identity} if opc_ua else {}))

    async def follow_faults() -> None:
        if modbus:
            modbus.follow_closings()
        if opc_ua:
            await opc_ua.follow_faults()

    listening = asyncio.create_task(_serve_panel(panel, follow_faults, lines, options.until_eof, ended), name="panel")
    await asyncio.wait({scanning, listening, asyncio.ensure_future(ended.wait())}, return_when=asyncio.FIRST_COMPLETED)
    for task in (scanning, listening):
        task.cancel()
    outcomes = await asyncio.gather(scanning, listening, return_exceptions=True)
    for server in (modbus, opc_ua):
        if server:
            await server.stop()
    for outcome in outcomes:
        if isinstance(outcome, Exception):
            raise outcome


async def _start_modbus(rig: Rig, plc: Plc, wire: WireFaults, options: argparse.Namespace) -> PlantServer:
    host, port = options.host, options.modbus or 0
    registers = Registers(plc, word_order=rig.word_order)
    server = PlantServer(registers, wire, device_id=rig.device_id, host=host, port=port)
    try:
        await server.start()
    except RuntimeError as fault:
        raise _AddressTaken(f"{host}:{port}: {fault}") from fault
    return server


async def _start_opc_ua(plc: Plc, wire: WireFaults, options: argparse.Namespace, folder: Path) -> "OpcUaServer":
    # Imported here because asyncua takes a quarter of a second to load, and most plants don't need it.
    from simulator.opc_ua_security import access_from
    from simulator.opc_ua_server import OpcUaServer

    host, port = options.host, options.opc_ua
    try:
        access = access_from(options, options.opc_ua_pki or folder)
    except (OSError, ValueError) as fault:
        raise _BadOption(str(fault)) from fault
    server = OpcUaServer(plc, wire, access, host=host, port=port)
    try:
        await server.start()
    except OSError as fault:
        raise _AddressTaken(f"{host}:{port}: {fault}") from fault
    return server


async def _serve_panel(
    panel: Panel,
    follow_faults: Callable[[], Awaitable[None]],
    lines: "asyncio.Queue[str | None]",
    is_until_eof: bool,
    ended: asyncio.Event,
) -> None:
    while not panel.is_left and (line := await lines.get()) is not None:
        if line.strip():
            answer = panel.answer(line)
            await follow_faults()
            _say(answer)
    if not panel.is_left and not is_until_eof:
        await ended.wait()
    ended.set()


def _stdin_lines(loop: asyncio.AbstractEventLoop) -> "asyncio.Queue[str | None]":
    """Lines of stdin, then ``None``.  A thread, because stdin may be a file, a terminal or a pipe."""
    lines: asyncio.Queue[str | None] = asyncio.Queue()

    def read_lines() -> None:
        try:
            for line in sys.stdin:
                loop.call_soon_threadsafe(lines.put_nowait, line)
            loop.call_soon_threadsafe(lines.put_nowait, None)
        except RuntimeError:
            return  # the plant has ended before its panel

    threading.Thread(target=read_lines, name="panel lines", daemon=True).start()
    return lines


def _say(answer: Mapping[str, object]) -> None:
    print(json.dumps(answer, allow_nan=False), flush=True)


if __name__ == "__main__":
    sys.exit(main())
