"""The paper of a sheet, laid out in a process of its own: it takes a second of computing, and a scan must not wait."""

import asyncio
import multiprocessing
from concurrent.futures import ProcessPoolExecutor
from datetime import UTC, datetime

from autotune.paper.pdf import to_pdf
from autotune.sheet.store import StoredSheet


async def pdf_of(stored: StoredSheet, head_hash: str) -> bytes:
    """The sheet as a PDF file in local time; raises what the worker raised."""
    spawn = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(max_workers=1, mp_context=spawn) as pool:
        return await asyncio.get_running_loop().run_in_executor(pool, _print, stored, head_hash)


def _print(stored: StoredSheet, head_hash: str) -> bytes:
    return to_pdf([stored], head_hash, datetime.now().astimezone().tzinfo or UTC)
