"""The other end of the local API: who asks the daemon and listens to it."""

import asyncio
import json
from collections.abc import AsyncGenerator, Mapping
from contextlib import aclosing, suppress
from pathlib import Path
from typing import Any

from autotune.errors import LinkClosed

_LINE_BYTES_AT_MOST = 256 * 1024 * 1024  # a sheet of a long test in one line
Told = dict[str, Any]
"""``{"answer": ...}`` or ``{"refusal": ...}`` as it came."""


async def ask(file: Path, request: Mapping[str, object]) -> Told:
    """One question and its answer.  Raises ``LinkClosed`` when the daemon can't be reached or goes away."""
    async with aclosing(listen(file, request)) as answers:
        async for told in answers:
            return told
    raise LinkClosed(f"{file}: the daemon has closed the connection; see its log")


async def listen(file: Path, request: Mapping[str, object]) -> AsyncGenerator[Told, None]:
    """All answers to a stream, or the one to a question; ends when the daemon ends.  Raises ``LinkClosed``."""
    try:
        reader, writer = await asyncio.open_unix_connection(str(file), limit=_LINE_BYTES_AT_MOST)
    except OSError as fault:
        raise LinkClosed(f"{file}: no daemon answers there; 'autotune serve' starts it") from fault
    try:
        writer.write(json.dumps(dict(request)).encode() + b"\n")
        await writer.drain()
        while line := await reader.readline():
            yield json.loads(line)
    except ConnectionError as fault:
        raise LinkClosed(f"{file}: the daemon went away; see its log") from fault
    finally:
        writer.close()
        with suppress(ConnectionError):
            await writer.wait_closed()
