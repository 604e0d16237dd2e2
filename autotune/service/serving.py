"""Serving one configuration from start to stop: locks, recovery, sockets, console, readiness, and back again."""

import asyncio
import signal
import socket
from collections.abc import Callable
from contextlib import AsyncExitStack, suppress

import structlog

from autotune.errors import Complaint, ConfigError
from autotune.service.console_keeper import ConsoleKeeper, PageAddress, bind_page
from autotune.service.daemon import Daemon
from autotune.service.door import Door
from autotune.service.local_server import local_server
from autotune.service.persons import PersonBook
from autotune.service.service_notice import feed_watchdog, notify
from autotune.service.sessions import LOCK_AFTER_S, Sessions
from autotune.service.workplace import Workplace

_LOG = structlog.get_logger("autotune.serving")
LOCAL_SOCKET = "autotune.sock"
CONSOLE_SOCKET = "console.sock"


async def serve(
    workplace: Workplace,
    address: PageAddress | None,
    *,
    is_watch_only: bool = False,
    lock_after_s: float = LOCK_AFTER_S,
    on_ready: Callable[[str], None] = lambda _: None,
) -> None:
    """Serve until SIGTERM or SIGINT; every loop is handed back before this returns.

    ``address`` is the page's, ``None`` serves without a page; ``on_ready`` hears the page's URL once everything
    answers.  Raises ``ConfigError`` and ``LoopBusy`` before anything has begun.
    """
    if not hasattr(socket, "SO_PEERCRED"):
        remedy = "serve on Linux; every other command works here"
        raise ConfigError((Complaint("this machine", "serve", "its kernel doesn't name the peer of a socket", remedy),))
    stopping = asyncio.Event()
    running = asyncio.get_running_loop()
    for number in (signal.SIGTERM, signal.SIGINT, signal.SIGHUP):
        running.add_signal_handler(number, stopping.set)
    daemon = Daemon(workplace, is_watch_only=is_watch_only)
    book = PersonBook(workplace.data_dir)
    sessions = Sessions(book, workplace.in_thread, lock_after_s=lock_after_s)
    door = Door(daemon, sessions, book)
    async with AsyncExitStack() as open_things:
        listening = None if address is None else open_things.enter_context(bind_page(address))
        url = "" if address is None or listening is None else address.url(listening.getsockname()[1])
        await daemon.start(url)
        open_things.push_async_callback(daemon.stop)
        local, console = (workplace.data_dir / name for name in _sockets(is_watch_only=is_watch_only))
        await open_things.enter_async_context(local_server(local, door, needs_session=False))
        await open_things.enter_async_context(local_server(console, door, needs_session=True))
        tasks = [asyncio.ensure_future(feed_watchdog(lambda: daemon.is_in_time))]
        if address is not None and listening is not None:
            tasks.append(asyncio.ensure_future(ConsoleKeeper(console, listening, address).run()))
        open_things.push_async_callback(_cancel, tasks)
        notify("READY=1")
        _LOG.info("ready", page=url, socket=str(local), loops=sorted(daemon.desks), watch_only=is_watch_only)
        on_ready(url)
        await stopping.wait()
        notify("STOPPING=1")
        _LOG.info("stopping; every loop is handed back first")
        await daemon.stop()  # while the screens still show it


def _sockets(*, is_watch_only: bool) -> tuple[str, str]:
    """One that only watches may serve beside the one that acts, so its sockets have other names."""
    return (f"watch-{LOCAL_SOCKET}", f"watch-{CONSOLE_SOCKET}") if is_watch_only else (LOCAL_SOCKET, CONSOLE_SOCKET)


async def _cancel(tasks: list["asyncio.Task[None]"]) -> None:
    for task in tasks:
        task.cancel()
    for task in tasks:
        with suppress(asyncio.CancelledError):
            await task
