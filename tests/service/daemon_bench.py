"""A daemon in this process on the soft plant's fast loop, with somebody in the book of persons, and its sockets."""

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from argon2 import PasswordHasher

from autotune.service.daemon import Daemon
from autotune.service.door import Door
from autotune.service.estimator import WorkerEstimator
from autotune.service.local_client import ask, listen
from autotune.service.local_server import local_server
from autotune.service.persons import PersonBook, Role
from autotune.service.sessions import Sessions
from tests.system.bench import Change, bench_workplace
from tests.system.plant import LOOP, SoftPlant, soft_plant

NAME = "R. Bench"
SECRET = "four unrelated words"
PERMISSION = {"loop_owner": "P. Owner", "protection": "the relief valve", "permit": "bench permit 1"}


def cheap_book(folder: Path, roles: frozenset[Role] = frozenset(Role)) -> PersonBook:
    """A book with one person in it, whose hashes take little time and memory: a test has to wait for each."""
    book = PersonBook(folder, PasswordHasher(time_cost=1, memory_cost=1024, parallelism=1))
    book.add(NAME, roles, SECRET, "2026-12-01T00:00:00+00:00")
    return book


@dataclass
class Served:
    """A daemon at work: its plant, and both its sockets."""

    plant: SoftPlant
    daemon: Daemon
    sessions: Sessions
    local: Path
    console: Path

    async def ask(self, act: str, **fields: object) -> dict[str, Any]:
        """One question at the local socket."""
        return await ask(self.local, {"act": act, **fields})

    async def ask_console(self, act: str, **fields: object) -> dict[str, Any]:
        """One question at the console's socket."""
        return await ask(self.console, {"act": act, **fields})

    async def sign_in(self) -> str:
        """A new session's token."""
        told = await self.ask_console("sign_in", name=NAME, secret=SECRET)
        token: str = told["answer"]["session"]
        return token

    async def start_test(self) -> dict[str, Any]:
        """Enable at the panel, look, accept what was shown, start."""
        await self.plant.press(f"enable {LOOP}")
        looked = (await self.ask("look", loop=LOOP))["answer"]
        return await self.ask("start_test", loop=LOOP, typed_loop=LOOP, accepted=looked["cautions"], **PERMISSION)

    async def until_live(self, holds: Any) -> dict[str, Any]:
        """The first live answer for which ``holds`` is true."""
        async for told in listen(self.local, {"act": "watch_loop", "loop": LOOP}):
            if holds(told["answer"]):
                answer: dict[str, Any] = told["answer"]
                return answer
        raise AssertionError("the stream ended")


@asynccontextmanager
async def served(
    folder: Path, changes: tuple[Change, ...] = (), *, is_watch_only: bool = False
) -> AsyncIterator[Served]:
    """A soft plant and a daemon that serves it."""
    async with soft_plant() as plant:
        workplace, _ = bench_workplace(folder, plant.port, changes, WorkerEstimator())
        async with serving(plant, folder, workplace, is_watch_only=is_watch_only) as at_work:
            yield at_work


@asynccontextmanager
async def serving(plant: SoftPlant, folder: Path, workplace: Any, *, is_watch_only: bool) -> AsyncIterator[Served]:
    """A daemon for a plant that runs already."""
    daemon = Daemon(workplace, is_watch_only=is_watch_only)
    book = cheap_book(folder / "book") if not (folder / "book").exists() else PersonBook(folder / "book")
    sessions = Sessions(book, workplace.in_thread)
    door = Door(daemon, sessions, book)
    await daemon.start("http://127.0.0.1:1/")
    local, console = folder / "a.sock", folder / "c.sock"
    try:
        async with (
            local_server(local, door, needs_session=False),
            local_server(console, door, needs_session=True),
        ):
            yield Served(plant, daemon, sessions, local, console)
    finally:
        await daemon.stop()
