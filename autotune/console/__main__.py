"""The console as the daemon starts it: orders as one JSON argument, an open socket, and standard input as lifeline."""

import asyncio
import contextlib
import json
import socket
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import uvicorn

from autotune.console.page import Console

_CLOSE_WITHIN_S = 1


class _Server(uvicorn.Server):
    """Signals end it as they end any process; nothing here has to be put in order first."""

    @contextlib.contextmanager
    def capture_signals(self) -> Iterator[None]:
        yield


async def _until_the_daemon_ends(server: _Server) -> None:
    running = asyncio.get_running_loop()
    lifeline = asyncio.StreamReader()
    await running.connect_read_pipe(lambda: asyncio.StreamReaderProtocol(lifeline), sys.stdin)
    await lifeline.read()
    server.should_exit = True


async def _serve(orders: dict[str, Any]) -> None:
    console = Console(
        Path(orders["local_socket"]), hosts=frozenset(orders["hosts"]), is_protected=orders["certificate"] is not None
    )
    config = uvicorn.Config(
        console.app,
        log_level="warning",
        access_log=False,
        server_header=False,
        lifespan="off",
        ssl_certfile=orders["certificate"],
        ssl_keyfile=orders["key"],
        timeout_graceful_shutdown=_CLOSE_WITHIN_S,
        h11_max_incomplete_event_size=64 * 1024,
    )
    server = _Server(config)
    lifeline = asyncio.ensure_future(_until_the_daemon_ends(server))
    await server.serve(sockets=[socket.socket(fileno=orders["descriptor"])])
    lifeline.cancel()


if __name__ == "__main__":
    asyncio.run(_serve(json.loads(sys.argv[1])))
