"""Telling the service manager that we are ready, and that we are alive: systemd's sd_notify(3) protocol."""

import asyncio
import os
import socket
from collections.abc import Callable
from contextlib import suppress

_EARLY = 3.0
"""Fed this many times within the manager's patience."""
_WITHOUT_S = 1.0


def notify(state: str) -> None:
    """Send one state, such as ``READY=1``; does nothing where no service manager listens."""
    address = os.environ.get("NOTIFY_SOCKET", "")
    if not address:
        return
    if address.startswith("@"):
        address = "\0" + address[1:]
    with suppress(OSError), socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as manager:
        manager.sendto(state.encode(), address)


async def feed_watchdog(is_in_time: Callable[[], bool]) -> None:
    """Feed the manager's watchdog until cancelled: only while every running test keeps its scan and we keep ours."""
    patience_us = os.environ.get("WATCHDOG_USEC", "")
    every_s = int(patience_us) / 1e6 / _EARLY if patience_us.isdigit() else _WITHOUT_S
    now_s = asyncio.get_running_loop().time
    while True:
        due_s = now_s() + every_s
        await asyncio.sleep(every_s)
        if is_in_time() and now_s() - due_s < every_s:
            notify("WATCHDOG=1")
