"""The soft plant as a process of its own, its panel a line each way."""

import asyncio
import json
import signal
import struct
import sys
from collections.abc import AsyncIterator, Callable, Mapping
from contextlib import asynccontextmanager, suppress
from pathlib import Path
from typing import Any

ROOT = Path(__file__).parents[2]
LOOP = "TIC-1"
PATIENCE_S = 90.0
_SCAN_S = 0.02

State = dict[str, Any]


class SoftPlant:
    """One running plant: what its panel shows, what is pressed there, and the life of its process."""

    def __init__(self, process: asyncio.subprocess.Process, port: int) -> None:
        self.port = port
        self._process = process
        self._turn = asyncio.Lock()

    async def press(self, line: str) -> State:
        """One line at the panel and its answer; what the panel doesn't take fails the test."""
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        async with self._turn:
            self._process.stdin.write(f"{line}\n".encode())
            answer: State = json.loads(await self._process.stdout.readline())
        assert answer.pop("ok"), f"{line}: {answer}"
        return answer

    async def state(self) -> State:
        """The loop as the panel shows it."""
        return await self.press(f"state {LOOP}")

    async def until(self, holds: Callable[[State], bool]) -> State:
        """The first state in which ``holds`` is true, looked at once a scan."""
        async with asyncio.timeout(PATIENCE_S):
            while not holds(state := await self.state()):
                await self._scans()
        return state

    async def scan_on(self, scans: int) -> State:
        """The state after at least so many more scans of the PLC."""
        first = (await self.press("state"))["scan_count"]
        async with asyncio.timeout(PATIENCE_S):
            while (await self.press("state"))["scan_count"] < first + scans:
                await self._scans()
        return await self.state()

    async def _scans(self) -> None:
        """Give the plant a scan's time, or less when it ends."""
        with suppress(TimeoutError):
            await asyncio.wait_for(self._process.wait(), _SCAN_S)

    def freeze(self) -> None:
        """The PLC stands still with its socket open."""
        self._process.send_signal(signal.SIGSTOP)

    def thaw(self) -> None:
        """The PLC goes on."""
        self._process.send_signal(signal.SIGCONT)

    async def kill(self) -> None:
        """The PLC is gone."""
        self._process.kill()
        await self._process.wait()


@asynccontextmanager
async def soft_plant(rig: str | Path = "fast-loop") -> AsyncIterator[SoftPlant]:
    """Start a plant on a free port; it ends with the block, or with this process."""
    process = await asyncio.create_subprocess_exec(
        sys.executable, "-m", "simulator", str(rig), "--modbus", "0", "--until-eof",
        cwd=ROOT, stdin=asyncio.subprocess.PIPE, stdout=asyncio.subprocess.PIPE,
    )  # fmt: skip
    try:
        assert process.stdout is not None
        ready = json.loads(await process.stdout.readline())
        yield SoftPlant(process, ready["modbus_port"])
    finally:
        with suppress(ProcessLookupError):
            process.kill()
        await process.wait()


def moved(before: Mapping[str, Any], after: Mapping[str, Any]) -> dict[str, tuple[Any, Any]]:
    """Everything that a client could have written and that differs: mailbox, mode, setpoint, settings, moves of OP."""
    names = (
        "holder_request", "heartbeat", "sequence", "op_request", "op_effect_count",
        "mode", "sp", "gain", "integral", "derivative",
    )  # fmt: skip
    return {name: (before[name], after[name]) for name in names if as_real(before[name]) != as_real(after[name])}


def as_real(shown: Any) -> Any:
    """A number as a REAL register holds it: the panel shows more digits than the wire carries."""
    return struct.unpack(">f", struct.pack(">f", shown))[0] if isinstance(shown, float) else shown
