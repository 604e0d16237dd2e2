"""Where one configuration does its work: its store of sheets, its locks, how it reaches controllers."""

import asyncio
import secrets
from collections.abc import Awaitable, Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol, TypeVar

from autotune.config.types import Configuration, Endpoint, LoopConfig, ModbusEndpoint
from autotune.errors import Complaint, ConfigError, SheetError
from autotune.field import open_link
from autotune.field.link import LoopLink
from autotune.service.clock import WallClock, utc_now
from autotune.service.estimator import Estimator, WorkerEstimator
from autotune.service.locks import HeldLock, Hold, Named, Tenant, hold
from autotune.sheet.sqlite_store import SqliteStore
from autotune.sheet.store import SheetStore

T = TypeVar("T")
NewToken = Callable[[], int]


class InThread(Protocol):
    """Runs what blocks without holding up the event loop."""

    def __call__(self, work: Callable[..., T], /, *args: Any) -> Awaitable[T]:
        """Run ``work(*args)`` and wait for what it returns."""
        ...


def new_token() -> int:
    """A holder's token that no other master is likely to have: 1 .. 2^32 - 1."""
    return secrets.randbelow(2**32 - 1) + 1


@dataclass(frozen=True, slots=True)
class Workplace:
    """All that a supervised act needs besides the loop itself; each part can be another one in tests."""

    configuration: Configuration
    store: SheetStore
    open_link: Callable[[LoopConfig], LoopLink] = field(default=open_link)
    estimator: Estimator = field(default_factory=WorkerEstimator)
    wall_clock: WallClock = field(default=utc_now)
    new_token: NewToken = field(default=new_token)
    in_thread: InThread = field(default=asyncio.to_thread)
    take: Hold = field(default=hold)

    @property
    def data_dir(self) -> Path:
        """Where journals, locks and sheets lie."""
        return self.configuration.data_dir

    def loop(self, name: str) -> LoopConfig:
        """The loop called ``name``; raises ``ConfigError`` naming those there are."""
        loop = self.configuration.loop(name)
        if loop is None:
            known = ", ".join(loop.name for loop in self.configuration.loops)
            raise ConfigError(
                (Complaint(str(self.configuration.file), "loop", f"no loop is called {name!r}", f"use one of {known}"),)
            )
        return loop

    def hold(self, loop: LoopConfig, doing: str) -> HeldLock:
        """Become the one master of a loop, its plant unit and its endpoint on this machine; raises ``LoopBusy``."""
        return self.take(self.data_dir, things_of(loop), Tenant.present(doing, self.wall_clock))


def things_of(loop: LoopConfig) -> tuple[Named, ...]:
    """What has one master at a time, for this loop: itself, its endpoint and its plant unit."""
    endpoint = endpoint_line(loop.controller.endpoint)
    return ("loop", loop.name), ("endpoint", endpoint), ("unit", loop.unit)


def open_workplace(configuration: Configuration, *, may_create: bool) -> Workplace:
    """The workplace of a configuration on this machine's disk.

    ``may_create`` lets a first run begin a store of sheets; otherwise a missing store is an error, so that an
    unmounted disk never looks like an empty archive.  Raises ``SheetError``.
    """
    file = configuration.data_dir / "sheets.sqlite"
    if file.exists() or not may_create:
        return Workplace(configuration, SqliteStore(file))
    try:
        configuration.data_dir.mkdir(parents=True, exist_ok=True)
    except OSError as fault:
        raise SheetError(f"{configuration.data_dir}: {fault.strerror}; choose another data_dir") from fault
    return Workplace(configuration, SqliteStore.create(file))


def endpoint_line(endpoint: Endpoint) -> str:
    """The address of a controller, as its lock is called."""
    return f"{endpoint.host}:{endpoint.port}" if isinstance(endpoint, ModbusEndpoint) else endpoint.url
