"""``python -m simulator RIG``: the soft plant as a process of its own.

Prints one JSON line when it is ready, then answers each line of its panel by one JSON line.
"""

import argparse
import asyncio
import json
import logging
import os
import signal
import sys
import threading
from collections.abc import Sequence

from simulator.faults import WireFaults
from simulator.modbus_server import PlantServer
from simulator.panel import Panel
from simulator.registers import Registers, map_lines
from simulator.rig import Rig, RigError, load_rig

EXIT_USAGE = 2
EXIT_ADDRESS = 3


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the plant named on the command line; returns the exit code."""
    parser = argparse.ArgumentParser(
        prog="python -m simulator", description="A soft plant that answers Modbus/TCP and a panel on stdin."
    )
    parser.add_argument("rig", metavar="RIG", help="a rig file, or the name of a bundled rig such as juice-skid")
    parser.add_argument("--modbus", metavar="PORT", type=_port, default=0, help="Modbus/TCP port; 0 takes a free one")
    parser.add_argument("--host", default="127.0.0.1", help="address to listen on (default %(default)s)")
    parser.add_argument("--map", action="store_true", help="print the register map of the rig and end")
    parser.add_argument("--until-eof", action="store_true", help="end when stdin ends")
    options = parser.parse_args(arguments)
    try:
        rig = load_rig(options.rig)
    except RigError as fault:
        print(f"python -m simulator: {fault}", file=sys.stderr)
        return EXIT_USAGE
    if options.map:
        print("\n".join(map_lines(rig.build())))
        return 0
    logging.getLogger("pymodbus.logging").setLevel(logging.CRITICAL)
    try:
        asyncio.run(_run(rig, options.host, options.modbus, options.until_eof))
    except RuntimeError as fault:
        print(f"python -m simulator: {options.host}:{options.modbus}: {fault}", file=sys.stderr)
        return EXIT_ADDRESS
    return 0


def _port(word: str) -> int:
    if not word.isdecimal() or int(word) > 65535:
        raise argparse.ArgumentTypeError(f"{word!r} is no port; write 0 to 65535")
    return int(word)


async def _run(rig: Rig, host: str, port: int, is_until_eof: bool) -> None:
    plc, wire = rig.build(), WireFaults()
    panel = Panel(plc, wire)
    server = PlantServer(Registers(plc, word_order=rig.word_order), wire, device_id=rig.device_id, host=host, port=port)
    await server.start()
    scanning = asyncio.create_task(plc.run(), name="plc scans")
    lines = _stdin_lines(asyncio.get_running_loop())
    ended = asyncio.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        asyncio.get_running_loop().add_signal_handler(number, ended.set)
    _say({"ready": True, "modbus_port": server.port, "rig": rig.file.stem, "pid": os.getpid()})
    listening = asyncio.create_task(_serve_panel(panel, server, lines, is_until_eof, ended), name="panel")
    await asyncio.wait({scanning, listening, asyncio.ensure_future(ended.wait())}, return_when=asyncio.FIRST_COMPLETED)
    for task in (scanning, listening):
        task.cancel()
    outcomes = await asyncio.gather(scanning, listening, return_exceptions=True)
    await server.stop()
    for outcome in outcomes:
        if isinstance(outcome, Exception):
            raise outcome


async def _serve_panel(
    panel: Panel, server: PlantServer, lines: "asyncio.Queue[str | None]", is_until_eof: bool, ended: asyncio.Event
) -> None:
    while not panel.is_left and (line := await lines.get()) is not None:
        if line.strip():
            _say(panel.answer(line))
            server.follow_closings()
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


def _say(answer: dict[str, object]) -> None:
    print(json.dumps(answer, allow_nan=False), flush=True)


if __name__ == "__main__":
    sys.exit(main())
