"""A transport in memory, so that a connection can be fed octet by octet in virtual time."""

import asyncio
from typing import Any


class Options:
    """Stands for the socket: keeps the options set on it."""

    def __init__(self) -> None:
        self.options: dict[tuple[int, int], int | bytes] = {}

    def setsockopt(self, level: int, option: int, setting: int | bytes) -> None:
        """Keep one option."""
        self.options[(level, option)] = setting


class MemoryTransport(asyncio.Transport):
    """Keeps what is written; an abort is told to the protocol in the loop's next pass."""

    def __init__(self, protocol: asyncio.Protocol) -> None:
        super().__init__()
        self.socket = Options()
        self.written: list[bytes] = []
        self._protocol = protocol
        self._is_closing = False

    def get_extra_info(self, name: str, default: Any = None) -> Any:
        """Only the socket is known."""
        return self.socket if name == "socket" else default

    def is_closing(self) -> bool:
        """Whether it was aborted."""
        return self._is_closing

    def write(self, data: Any) -> None:
        """Keep what would go out."""
        self.written.append(bytes(data))

    def abort(self) -> None:
        """End it."""
        self._is_closing = True
        asyncio.get_running_loop().call_soon(self._protocol.connection_lost, None)
