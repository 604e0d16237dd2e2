"""The local API on Unix domain sockets: one JSON object a line, each way.

A request is answered by ``{"answer": ...}`` or ``{"refusal": ...}``; a stream by such lines until either side closes.
The socket's file has mode 0600, and the kernel's word for the peer's user is checked beside it.
"""

import asyncio
import os
import socket
import struct
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager, suppress
from pathlib import Path

import structlog

from autotune.errors import AutotuneError, Complaint, ConfigError
from autotune.loop.outcome import Refusal
from autotune.service.door import Door, Peer
from autotune.service.local_api import Answer, refusal_answer
from autotune.service.local_requests import Stream

_LOG = structlog.get_logger("autotune.local_server")
_REQUEST_BYTES_AT_MOST = 64 * 1024
_SLOW_LISTENER_S = 30.0


@asynccontextmanager
async def local_server(file: Path, door: Door, *, needs_session: bool) -> AsyncIterator[None]:
    """Serve ``door`` on the socket ``file`` within the block; connections end with it.

    The caller holds the locks of this data_dir, so a file that lies there is a dead daemon's.  Raises ``ConfigError``.
    """
    listening = _bind(file)
    connections: set[asyncio.Task[None]] = set()

    async def connected(reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        task = asyncio.current_task()
        if task is not None:
            connections.add(task)
            task.add_done_callback(connections.discard)
        with suppress(asyncio.CancelledError):  # only the end of the block below cancels
            await _converse(door, reader, writer, needs_session=needs_session)

    server = await asyncio.start_unix_server(connected, sock=listening, limit=_REQUEST_BYTES_AT_MOST)
    try:
        yield
    finally:
        server.close()
        for task in connections.copy():
            task.cancel()
        await asyncio.gather(*connections, return_exceptions=True)
        _remove(file)


def _bind(file: Path) -> socket.socket:
    """A socket that only this user can reach, whatever the umask."""
    _remove(file)
    listening = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
    mask = os.umask(0o177)
    try:
        listening.bind(str(file))
    except OSError as fault:
        listening.close()
        remedy = "choose a data_dir with a shorter path, on a disk of this machine"
        raise ConfigError((Complaint(str(file), "data_dir", f"no socket can lie there: {fault}", remedy),)) from fault
    finally:
        os.umask(mask)
    return listening


def _remove(file: Path) -> None:
    with suppress(FileNotFoundError):
        file.unlink()


async def _converse(
    door: Door, reader: asyncio.StreamReader, writer: asyncio.StreamWriter, *, needs_session: bool
) -> None:
    try:
        user_id = _peer_user_id(writer)
        if user_id != os.getuid():
            _LOG.warning("turned away", user_id=user_id)
            return
        peer = Peer(_user_name(user_id), needs_session)
        while line := await reader.readline():
            await _hear(door, line, peer, writer)
    except (ConnectionError, TimeoutError, ValueError):
        pass  # gone, too slow, or a line beyond all measure: nothing is owed to it
    finally:
        writer.close()
        with suppress(ConnectionError, TimeoutError):
            await writer.wait_closed()


async def _hear(door: Door, line: bytes, peer: Peer, writer: asyncio.StreamWriter) -> None:
    request = door.read(line)
    if isinstance(request, Refusal):
        await _say(writer, request)
    elif isinstance(request, Stream):
        admitted = await door.admits(request, peer)
        if isinstance(admitted, Refusal):
            await _say(writer, admitted)
            return
        try:
            async for answer in door.stream(request):
                await _say(writer, answer)
        except AutotuneError as fault:
            await _say(writer, Refusal("NO_STREAM", str(fault), ""))
    else:
        await _say(writer, await door.respond(request, peer))


async def _say(writer: asyncio.StreamWriter, answer: Answer | Refusal) -> None:
    told = refusal_answer(answer) if isinstance(answer, Refusal) else answer
    key = "refusal" if isinstance(answer, Refusal) else "answer"
    text = "{}" if told is None else told.model_dump_json()
    writer.write(f'{{"{key}":{text}}}\n'.encode())
    async with asyncio.timeout(_SLOW_LISTENER_S):
        await writer.drain()


def _peer_user_id(writer: asyncio.StreamWriter) -> int:
    """The user behind the connection, by SO_PEERCRED (pid, uid, gid)."""
    connection: socket.socket = writer.get_extra_info("socket")
    credentials = connection.getsockopt(socket.SOL_SOCKET, socket.SO_PEERCRED, struct.calcsize("3i"))
    _, user_id, _ = struct.unpack("3i", credentials)
    return int(user_id)


def _user_name(user_id: int) -> str:
    import pwd  # not on Windows, where the command line has to load all the same

    try:
        return pwd.getpwuid(user_id).pw_name
    except KeyError:
        return f"user {user_id}"
