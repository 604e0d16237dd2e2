"""The command line as a process of its own: fed by a pipe, or at a terminal with a person's fingers."""

import asyncio
import fcntl
import json
import os
import pty
import re
import signal
import sys
import termios
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tests.system.plant import ROOT

PATIENCE_S = 90.0
_COMMAND = (sys.executable, "-m", "autotune")


@dataclass(frozen=True, slots=True)
class Ran:
    """A command after its end."""

    code: int
    out: str
    err: str

    @property
    def answer(self) -> dict[str, Any]:
        """Its one JSON object; fails where standard output holds anything else."""
        told: dict[str, Any] = json.loads(self.out)
        return told


class Running:
    """A command at work behind pipes."""

    def __init__(self, process: asyncio.subprocess.Process) -> None:
        self._process = process

    def send(self, number: signal.Signals) -> None:
        """Send a signal to the command alone."""
        self._process.send_signal(number)

    async def ended(self, patience_s: float = PATIENCE_S) -> Ran:
        """Wait for its end."""
        async with asyncio.timeout(patience_s):
            out, err = await self._process.communicate()
        assert self._process.returncode is not None
        return Ran(self._process.returncode, out.decode(), err.decode())


async def start(*arguments: str | Path, typed: str = "") -> Running:
    """Start ``python -m autotune ARGUMENTS`` with ``typed`` waiting in its standard input."""
    process = await asyncio.create_subprocess_exec(
        *_COMMAND, *map(str, arguments), cwd=ROOT,
        stdin=asyncio.subprocess.PIPE, stdout=asyncio.subprocess.PIPE, stderr=asyncio.subprocess.PIPE,
    )  # fmt: skip
    assert process.stdin is not None
    process.stdin.write(typed.encode())
    return Running(process)


async def run(*arguments: str | Path, typed: str = "", patience_s: float = PATIENCE_S) -> Ran:
    """Run a command to its end."""
    return await (await start(*arguments, typed=typed)).ended(patience_s)


class Terminal:
    """A pseudo-terminal with one command in it; ``seen`` is all that it has shown."""

    def __init__(self, master: int, process: asyncio.subprocess.Process) -> None:
        self.seen = ""
        self._master = master
        self._process = process
        self._changed = asyncio.Event()
        self._told_until = 0
        asyncio.get_running_loop().add_reader(master, self._take)

    def _take(self) -> None:
        try:
            shown = os.read(self._master, 65536)
        except OSError:  # the other side has gone
            shown = b""
        if not shown:
            asyncio.get_running_loop().remove_reader(self._master)
        self.seen += shown.decode(errors="replace")
        self._changed.set()

    async def says(self, pattern: str) -> re.Match[str]:
        """Wait until the terminal shows ``pattern`` after what was waited for before."""
        async with asyncio.timeout(PATIENCE_S):
            while (found := re.compile(pattern).search(self.seen, self._told_until)) is None:
                self._changed.clear()
                await self._changed.wait()
        self._told_until = found.end()
        return found

    def types(self, text: str) -> None:
        """Type at the keyboard; a line ends with a new-line, Ctrl-C is ``\\x03``."""
        os.write(self._master, text.encode())

    async def ended(self) -> int:
        """Wait for the command's end; its exit code."""
        async with asyncio.timeout(PATIENCE_S):
            return await self._process.wait()


@asynccontextmanager
async def terminal(*arguments: str | Path) -> AsyncIterator[Terminal]:
    """``python -m autotune ARGUMENTS`` at a terminal of 200 columns."""
    master, slave = pty.openpty()
    termios.tcsetwinsize(slave, (50, 200))
    process = await asyncio.create_subprocess_exec(
        *_COMMAND, *map(str, arguments), cwd=ROOT, stdin=slave, stdout=slave, stderr=slave,
        env=os.environ | {"TERM": "xterm"}, start_new_session=True, preexec_fn=_take_the_terminal,
    )  # fmt: skip
    os.close(slave)
    shown = Terminal(master, process)
    try:
        yield shown
    finally:
        with suppress(ProcessLookupError):
            process.kill()
        await process.wait()
        asyncio.get_running_loop().remove_reader(master)
        os.close(master)


def _take_the_terminal() -> None:
    """Make standard input the controlling terminal, so that its Ctrl-C is a signal."""
    fcntl.ioctl(0, termios.TIOCSCTTY, 0)
