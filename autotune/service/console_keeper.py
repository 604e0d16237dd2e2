"""The console under the daemon's care: a process of its own, started again when it dies.

The daemon binds the page's address itself and hands the open socket down, so that the page keeps its address through
every restart, and an address that can't be had is said before anything else begins.
"""

import asyncio
import json
import socket
import sys
from contextlib import suppress
from dataclasses import dataclass
from ipaddress import ip_address
from pathlib import Path

import structlog

from autotune.errors import Complaint, ConfigError

_LOG = structlog.get_logger("autotune.console_keeper")
_FIRST_PAUSE_S = 0.2
_PAUSE_AT_MOST_S = 10.0
_LIVED_S = 30.0
_STOP_WITHIN_S = 5.0


@dataclass(frozen=True, slots=True)
class PageAddress:
    """Where the page is offered.  Without certificate and key it is plain HTTP, on loopback only."""

    host: str = "127.0.0.1"
    port: int = 8204
    certificate: Path | None = None
    key: Path | None = None
    names: tuple[str, ...] = ()

    @property
    def is_protected(self) -> bool:
        """Whether TLS protects it."""
        return self.certificate is not None and self.key is not None

    def url(self, port: int) -> str:
        """The page's address for a person; ``port`` is the one that was got."""
        host = self.names[0] if self.names else self.host
        return f"{'https' if self.is_protected else 'http'}://{f'[{host}]' if ':' in host else host}:{port}/"


def bind_page(address: PageAddress) -> socket.socket:
    """The listening socket of the page.  Raises ``ConfigError`` where the address can't be had or may not be."""
    if not address.is_protected and not is_loopback(address.host):
        raise _complaint(
            "--host",
            f"{address.host} can be reached from other machines, and plain HTTP would show secrets there",
            "give --certificate and --key, or stay on 127.0.0.1",
        )
    for option, file in (("--certificate", address.certificate), ("--key", address.key)):
        if file is not None and not file.is_file():
            raise _complaint(option, f"{file} is no file", "name a PEM file")
    family = socket.AF_INET6 if ":" in address.host else socket.AF_INET
    listening = socket.socket(family, socket.SOCK_STREAM)
    try:
        listening.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listening.bind((address.host, address.port))
        listening.listen(100)
    except OSError as fault:
        listening.close()
        raise _complaint(
            "--port", f"{address.host} port {address.port}: {fault.strerror}", "choose another port"
        ) from fault
    return listening


def is_loopback(host: str) -> bool:
    """Whether only this machine reaches ``host``."""
    if host == "localhost":
        return True
    with suppress(ValueError):
        return ip_address(host).is_loopback
    return False


class ConsoleKeeper:
    """Keeps one console process alive; ``restarts`` counts how often it had to be started again."""

    def __init__(self, local_socket: Path, listening: socket.socket, address: PageAddress) -> None:
        self.restarts = 0
        self.process_id: int | None = None
        self._local_socket = local_socket
        self._listening = listening
        self._address = address

    async def run(self) -> None:
        """Keep it alive until cancelled, then let it end."""
        pause_s = _FIRST_PAUSE_S
        now_s = asyncio.get_running_loop().time
        while True:
            begun_s = now_s()
            process = await self._start()
            try:
                code = await process.wait()
            finally:
                self.process_id = None
                await _end(process)
            pause_s = _FIRST_PAUSE_S if now_s() - begun_s > _LIVED_S else min(2.0 * pause_s, _PAUSE_AT_MOST_S)
            _LOG.warning("the console ended", code=code, starting_again_in_s=pause_s)
            await asyncio.sleep(pause_s)
            self.restarts += 1

    async def _start(self) -> asyncio.subprocess.Process:
        port = self._listening.getsockname()[1]
        orders = {
            "local_socket": str(self._local_socket),
            "descriptor": self._listening.fileno(),
            "port": port,
            "hosts": sorted({self._address.host, *self._address.names, "localhost", "127.0.0.1", "::1"}),
            "certificate": None if self._address.certificate is None else str(self._address.certificate),
            "key": None if self._address.key is None else str(self._address.key),
        }
        process = await asyncio.create_subprocess_exec(
            sys.executable, "-m", "autotune.console", json.dumps(orders),
            stdin=asyncio.subprocess.PIPE,  # its end tells the console that we are gone
            pass_fds=(self._listening.fileno(),), start_new_session=True,
        )  # fmt: skip
        self.process_id = process.pid
        return process


async def _end(process: asyncio.subprocess.Process) -> None:
    if process.returncode is not None:
        return
    with suppress(ProcessLookupError):
        process.terminate()
    try:
        await asyncio.wait_for(process.wait(), _STOP_WITHIN_S)
    except TimeoutError:
        with suppress(ProcessLookupError):
            process.kill()
        await process.wait()


def _complaint(key: str, fault: str, remedy: str) -> ConfigError:
    return ConfigError((Complaint("command line", key, fault, remedy),))
