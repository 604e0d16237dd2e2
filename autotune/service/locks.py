"""One master per loop and per endpoint on this machine.

A lock is held by the operating system for as long as its ``HeldLock`` is referenced; when our process
dies, however it dies, the lock is free.  The lock files are never deleted: two programs that each lock
their own copy of a deleted file would both be masters.  A lock sees no other machine; for that there is
the holder's token in the PLC.  A child process made by ``fork`` would inherit a lock: start them by spawn.
"""

import getpass
import json
import os
import socket
from collections.abc import Callable, Iterable
from contextlib import ExitStack, suppress
from dataclasses import asdict, dataclass
from datetime import UTC
from pathlib import Path
from types import TracebackType
from typing import Any, Literal, Self
from urllib.parse import quote

from filelock import FileLock, Timeout

from autotune.errors import LoopBusy
from autotune.service.clock import WallClock, utc_now

LockedThing = Literal["loop", "endpoint", "unit"]
Named = tuple[LockedThing, str]
"""Kind and name of what is locked, as ``("loop", "TIC-204")``."""

# Held by the process, not by the thread that happened to take it: any thread may release.
_AT_ONCE: dict[str, Any] = {"timeout": 0, "thread_local": False}


@dataclass(frozen=True, slots=True)
class Tenant:
    """Who holds a lock, for the next one to be told; ``doing`` says in words what for."""

    user: str
    pid: int
    host: str
    since_utc: str
    doing: str

    @classmethod
    def present(cls, doing: str, wall_clock: WallClock = utc_now) -> Self:
        """This process, now."""
        try:
            user = getpass.getuser()
        except (OSError, KeyError):  # no name for this user number
            user = "unknown user"
        since_utc = wall_clock().astimezone(UTC).isoformat(timespec="seconds")
        return cls(user, os.getpid(), socket.gethostname(), since_utc, doing)

    def __str__(self) -> str:
        return f"{self.user} on {self.host} (process {self.pid}) since {self.since_utc}: {self.doing}"


class HeldLock:
    """Holds its locks until ``release`` or the end of a ``with``; keep a reference to it."""

    def __init__(self, locks: ExitStack) -> None:
        self._locks = locks

    def release(self) -> None:
        """Let the locks go; may be called again."""
        self._locks.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.release()


Hold = Callable[[Path, Iterable[Named], Tenant], HeldLock]
"""Takes all the locks named or none, for a tenant; raises ``LoopBusy``."""


def hold(data_dir: Path, things: Iterable[Named], tenant: Tenant) -> HeldLock:
    """Take all the locks or none, at once and without waiting.  Raises ``LoopBusy``,
    which says who holds which of them and since when, or why the lock can't be taken.
    """
    folder = data_dir / "locks"
    with ExitStack() as taken:
        for kind, name in sorted(set(things)):  # one order for everybody
            _take(folder, kind, name, tenant, taken)
        return HeldLock(taken.pop_all())


class HouseLocks:
    """One master per thing within a process that already holds the locks of this machine for all of them."""

    def __init__(self) -> None:
        self._held: dict[Named, Tenant] = {}

    def hold(self, data_dir: Path, things: Iterable[Named], tenant: Tenant) -> HeldLock:
        """Take all of them or none, at once; raises ``LoopBusy``, which says who holds which of them."""
        with ExitStack() as taken:
            for thing in sorted(set(things)):
                if (other := self._held.get(thing)) is not None:
                    raise LoopBusy(f"{' '.join(thing)} is taken since {other.since_utc}: {other.doing}")
                self._held[thing] = tenant
                taken.callback(self._held.pop, thing)
            return HeldLock(taken.pop_all())


def _take(folder: Path, kind: LockedThing, name: str, tenant: Tenant, taken: ExitStack) -> None:
    stem = folder / f"{kind}-{quote(name, safe='')}"
    lock = FileLock(f"{stem}.lock", **_AT_ONCE)
    told = Path(f"{stem}.json")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        lock.acquire()
        taken.callback(lock.release)
        taken.callback(_forget, told)  # the word only: the lock's own file stays
        told.write_text(json.dumps(asdict(tenant)), encoding="utf-8")
    except Timeout:
        raise LoopBusy(f"{kind} {name} is held by {_tenant(told)}; finish there first") from None
    except OSError as fault:
        raise LoopBusy(f"{kind} {name}: {stem}.lock can't be taken: {fault.strerror}; mend its rights") from fault


def _forget(told: Path) -> None:
    with suppress(OSError):
        told.unlink()


def _tenant(told: Path) -> str:
    with suppress(OSError, ValueError, TypeError):
        return str(Tenant(**json.loads(told.read_text(encoding="utf-8"))))
    return "somebody who has not yet said who"
