"""`autotune serve` as a process of its own, with a soft plant behind it and somebody in its book of persons."""

import asyncio
import json
import signal
import sys
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager, suppress
from pathlib import Path

from autotune.config.load import load
from autotune.service.persons import PersonBook, Role
from tests.system.plant import ROOT

NAME = "R. Bench"
SECRET = "four unrelated words"
PATIENCE_S = 40.0


class ServedPage:
    """One running service: where its page is, and the life of its process."""

    def __init__(self, process: asyncio.subprocess.Process, url: str) -> None:
        self.url = url
        self._process = process

    @property
    def process_id(self) -> int:
        """The daemon's."""
        return self._process.pid

    @property
    def console_process_id(self) -> int | None:
        """The console's, which is the daemon's child; ``None`` while there is none."""
        return next(iter(_children(self.process_id)), None)

    async def stop(self) -> int:
        """SIGTERM, and the exit code."""
        self._process.send_signal(signal.SIGTERM)
        async with asyncio.timeout(PATIENCE_S):
            return await self._process.wait()


@asynccontextmanager
async def served_page(config: Path, *options: str) -> AsyncIterator[ServedPage]:
    """Serve ``config`` on a free port; the service ends with the block."""
    process = await asyncio.create_subprocess_exec(
        sys.executable, "-m", "autotune", "serve", str(config), "--port", "0", "--json", *options,
        cwd=ROOT, stdout=asyncio.subprocess.PIPE,
    )  # fmt: skip
    try:
        assert process.stdout is not None
        async with asyncio.timeout(PATIENCE_S):
            told = json.loads(await process.stdout.readline())
        yield ServedPage(process, told["page"])
    finally:
        with suppress(ProcessLookupError):
            process.terminate()
        try:
            await asyncio.wait_for(process.wait(), PATIENCE_S)
        except TimeoutError:
            process.kill()
            await process.wait()


def add_person(config: Path, *roles: Role, name: str = NAME) -> None:
    """Put somebody into the book of persons of a configuration."""
    book = PersonBook(load(config).data_dir)
    book.add(name, roles, SECRET, "2026-12-01T00:00:00+00:00")


def _children(process_id: int) -> list[int]:
    tasks = Path(f"/proc/{process_id}/task")
    children = [int(child) for task in tasks.iterdir() for child in (task / "children").read_text().split()]
    return [child for child in children if b"autotune.console" in _command_line(child)]


def _command_line(process_id: int) -> bytes:
    try:
        return Path(f"/proc/{process_id}/cmdline").read_bytes()
    except OSError:
        return b""
